"""From an analysis to proposals: published rules in the controller's own form, with the margins they leave.

Owns what is refused, what is cautioned against and what is recommended. The rules' numbers, the forms and the
margins are `gainwright`'s. Settings are printed only for a declared form; otherwise the canonical numbers stand
alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from gainwright.errors import ConversionImpossible, GainwrightError, RuleNotApplicable
from gainwright.forms import EQUATIONS, ControllerForm, Setting, gains_of, hand_check, settings_of
from gainwright.gains import Gains
from gainwright.margins import LoopMargins, loop_margins
from gainwright.models import ProcessModel
from gainwright.results import Analysis, Grade, Verdict
from gainwright.rules import RULES, Kind, Knowledge, Needs, Rule
from gainwright_service.rendering import render
from gainwright_wire.analyses import GainSetting, Proposal, RefusedRule
from gainwright_wire.analyses import LoopMargins as WireMargins
from gainwright_wire.loops import Controller
from gainwright_wire.tasks import GainsFound

LARGEST_SENSITIVITY = 2.0
SMALLEST_GAIN_MARGIN = 2.0
SMALLEST_PHASE_MARGIN_DEG = 30.0
LARGEST_NOISE_SHARE = 0.01
"""Share of the output's span that the noise may take through a recommended derivative."""

UNDECLARED = (
    "Not settings to enter: the controller's form, units or ranges are undeclared. These are canonical numbers, "
    "ideal form, output units per PV unit and seconds. Declare `controller` to get its own."
)


@dataclass(frozen=True, slots=True)
class Target:
    """Where the gains are to go.

    Parameters
    ----------
    controller : Controller or None
    output_effect : "raises", "lowers" or None
        What a rising output does to the process variable; None: taken from the measured sign.
    input_unit, output_unit : str
    output_span : float or None, output units
    """

    controller: Controller | None
    output_effect: Literal["raises", "lowers"] | None
    input_unit: str = "PV unit"
    output_unit: str = "output unit"
    output_span: float | None = None


def propose(analysis: Analysis, target: Target) -> tuple[tuple[Proposal, ...], tuple[RefusedRule, ...]]:
    """Every rule, either as a proposal or as refused with its reason; at most one proposal is recommended.

    Parameters
    ----------
    analysis : Analysis
    target : Target

    Returns
    -------
    tuple
        Proposals, then refused rules, each in the order of the rules' table.
    """
    knowledge = _knowledge(analysis)
    proposals: list[Proposal] = []
    refused: list[RefusedRule] = []
    for rule in RULES:
        try:
            proposals.append(_proposal(rule, analysis, knowledge, target))
        except (RuleNotApplicable, _Refused) as error:
            refused.append(RefusedRule(rule=rule.name, controller_kind=rule.kind.value, reason=_reason(error)))
    chosen = _recommended(proposals, analysis, target)
    return tuple(p.model_copy(update={"recommended": p is chosen}) for p in proposals), tuple(refused)


class _Refused(Exception):
    """A rule that applies by its own range, and is refused for another reason."""


def _reason(error: Exception) -> str:
    if isinstance(error, GainwrightError):
        return f"{error.problem}; needs {error.allowed}" if error.allowed else error.problem
    return str(error)


def _knowledge(analysis: Analysis) -> Knowledge:
    if analysis.grade is Grade.UNUSABLE or analysis.ultimate_gain is None or analysis.ultimate_period is None:
        return Knowledge()
    unlike = any(f.name == "unlike_model" and f.verdict is Verdict.FAIL for f in analysis.findings)
    model = None if unlike else analysis.model
    return Knowledge(analysis.ultimate_gain.value, analysis.ultimate_period.value, model)


def _proposal(rule: Rule, analysis: Analysis, knowledge: Knowledge, target: Target) -> Proposal:
    if analysis.grade is Grade.UNUSABLE:
        raise _Refused("the record is unusable: no gains")
    if rule.needs is Needs.MODEL and analysis.model is not None and knowledge.model is None:
        raise _Refused("the process is unlike the fitted model: measured points only")
    filter_n = target.controller.derivative_filter_n if target.controller is not None else 10.0
    gains = rule.gains(knowledge, derivative_filter_n=filter_n)
    margins = None if knowledge.model is None else _margins(knowledge.model, gains, target)
    if margins is not None and not margins.stable:
        raise _Refused("the loop would be unstable with the fitted model")
    form = _form(target)
    cautions = [*_caution_on(margins)]
    settings: tuple[GainSetting, ...] = ()
    try:
        if target.controller is None:
            raise ConversionImpossible("controller", "is undeclared", "its form and units")
        settings = tuple(render(GainSetting, s) for s in settings_of(gains, form))
        check, equation = hand_check(gains, form), EQUATIONS[form.form]
    except ConversionImpossible:
        canonical = ControllerForm("ideal", "engineering", input_unit=form.input_unit, output_unit=form.output_unit)
        check, equation = hand_check(gains, canonical), EQUATIONS["ideal"]
        cautions.append(UNDECLARED)
    return render(
        Proposal,
        gains,
        rule=rule.name,
        controller_kind=rule.kind.value,
        source=rule.source,
        settings=settings,
        action=_action(analysis, target),
        equation=equation,
        hand_check=check,
        margins=None if margins is None else render(WireMargins, margins),
        recommended=False,
        cautions=tuple(cautions),
    )


def _margins(model: ProcessModel, gains: Gains, target: Target) -> LoopMargins:
    """Margins with the hold of the installed controller put back: half its scan."""
    scan_s = target.controller.sample_interval_s if target.controller is not None else None
    return loop_margins(model.transfer_function(), gains, extra_delay=0.5 * (scan_s or 0.0))


def proportional_gain_of(gains: GainsFound, target: Target) -> float | None:
    """Canonical proportional gain of gains as found; None where the controller is undeclared or they make no sense."""
    if target.controller is None:
        return None
    form = _form(target)
    try:
        # The names in the form's own order are those of any gains with all three actions.
        names = [s.name for s in settings_of(Gains(1.0, 4.0, 1.0), form)]
        numbers = (gains.gain, gains.integral, gains.derivative)
        found = [Setting(n, v, "") for n, v in zip(names, numbers, strict=True) if v is not None]
        return gains_of(tuple(found), form).proportional_gain
    except ConversionImpossible:
        return None


def _form(target: Target) -> ControllerForm:
    controller = target.controller
    if controller is None:
        return ControllerForm("ideal", "engineering", input_unit=target.input_unit, output_unit=target.output_unit)
    return ControllerForm(
        form=controller.form,
        gain=controller.gain,
        integral_unit=controller.integral_unit,
        derivative_unit=controller.derivative_unit,
        input_low=controller.input_low,
        input_high=controller.input_high,
        output_low=controller.output_low,
        output_high=controller.output_high,
        input_unit=target.input_unit,
        output_unit=target.output_unit,
    )


def _action(analysis: Analysis, target: Target) -> Literal["direct", "reverse"]:
    """Reverse where a rising output raises the process variable: the controller must then lower its output."""
    if target.output_effect is not None:
        return "reverse" if target.output_effect == "raises" else "direct"
    if analysis.model is not None:
        return "reverse" if analysis.model.gain > 0 else "direct"
    # Near the crossover a process that the output raises answers in opposite phase.
    first = next((p for p in analysis.response_points if p.harmonic == 1), None)
    return "direct" if first is not None and first.response.real > 0 else "reverse"


def _caution_on(margins: LoopMargins | None) -> list[str]:
    if margins is None:
        return ["No model: the margins of this rule are unknown here."]
    found = []
    if margins.peak_sensitivity > LARGEST_SENSITIVITY:
        found.append(f"Peak sensitivity {margins.peak_sensitivity:.2f} is above {LARGEST_SENSITIVITY:g}.")
    if margins.gain_margin < SMALLEST_GAIN_MARGIN:
        found.append(f"Gain margin {margins.gain_margin:.2f} is below {SMALLEST_GAIN_MARGIN:g}.")
    if margins.phase_margin_deg < SMALLEST_PHASE_MARGIN_DEG:
        found.append(f"Phase margin {margins.phase_margin_deg:.0f} deg is below {SMALLEST_PHASE_MARGIN_DEG:g}.")
    return found


def _recommended(proposals: list[Proposal], analysis: Analysis, target: Target) -> Proposal | None:
    """The first acceptable proposal in order of preference; failing that, the one of least peak sensitivity."""
    by_rule = {(p.rule, p.controller_kind): p for p in proposals}
    order = [("skogestad_2003", Kind.PI), ("tyreus_luyben_1992", Kind.PI)]
    if analysis.model is not None and analysis.model.integrating:
        order.reverse()
    elif analysis.grade is Grade.GOOD:
        order.insert(0, ("skogestad_2003", Kind.PID))
    preferred = [by_rule[rule, kind.value] for rule, kind in order if (rule, kind.value) in by_rule]
    for proposal in preferred:
        if _acceptable(proposal, analysis, target):
            return proposal
    with_margins = [p for p in proposals if p.margins is not None]
    if not with_margins:
        return None
    return min(with_margins, key=lambda p: p.margins.peak_sensitivity if p.margins is not None else 0.0)


def _acceptable(proposal: Proposal, analysis: Analysis, target: Target) -> bool:
    margins = proposal.margins
    if margins is not None and (
        margins.peak_sensitivity > LARGEST_SENSITIVITY
        or (margins.gain_margin is not None and margins.gain_margin < SMALLEST_GAIN_MARGIN)
        or (margins.phase_margin_deg is not None and margins.phase_margin_deg < SMALLEST_PHASE_MARGIN_DEG)
    ):
        return False
    if proposal.derivative_time_s > 0 and target.output_span is not None:
        noise = proposal.proportional_gain * (1.0 + proposal.derivative_filter_n) * analysis.noise
        return noise <= LARGEST_NOISE_SHARE * target.output_span
    return True
