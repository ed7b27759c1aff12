"""What can be measured of the during- and after-items once a test is over. Knows no database and no device."""

from __future__ import annotations

from dataclasses import dataclass

from gainwright_service.checklist.sheet import Measurement, judge, worst
from gainwright_wire.analyses import AnalysisReply, Grade, Proposal, Verdict
from gainwright_wire.loops import Loop
from gainwright_wire.tasks import Exit, LimitMet, Outcome, Plan

_OUTCOME_ITEMS = {Outcome.YIELDED: "D6", Outcome.LOST: "D7", Outcome.INTERRUPTED: "D10"}


@dataclass(frozen=True, slots=True)
class Conclusion:
    """How a test ended and what its samples show.

    Parameters
    ----------
    outcome, exit, exit_detail : how it ended
    limit : LimitMet or None
    differences : tuple of str
        What differs from as found, in words.
    lowest, highest : float, PV units
    worst_deviation, last_deviation : float, PV units
        About the reference, over the test and at its last sample.
    lowest_command, highest_command : float or None, output units
    resting_output : float or None, output units
    elapsed_s : float
    switches : int
    scan_s, latency_s : float
        The target controller's scan and the measured latency of the link.
    gain_found : float or None
        The controller's proportional gain as found, canonical (output units per PV unit).
    """

    outcome: Outcome
    exit: Exit
    exit_detail: str
    limit: LimitMet | None
    differences: tuple[str, ...]
    lowest: float
    highest: float
    worst_deviation: float
    last_deviation: float
    lowest_command: float | None
    highest_command: float | None
    resting_output: float | None
    elapsed_s: float
    switches: int
    scan_s: float
    latency_s: float
    gain_found: float | None = None


def measure_during(plan: Plan, end: Conclusion) -> dict[str, Measurement]:
    """The limits of the test, as they were kept."""
    allowed = min(plan.deviation_up, plan.deviation_down)
    inside = plan.process_variable_low <= end.lowest and end.highest <= plan.process_variable_high
    found = {
        "D1": judge("D1", end.worst_deviation / allowed),
        "D2": Measurement(Verdict.PASS if inside else Verdict.FAIL, detail=f"{end.lowest:.4g} to {end.highest:.4g}"),
        "D5": _commands(plan, end),
        "D6": Measurement(Verdict.PASS),
        "D7": Measurement(Verdict.PASS),
        "D8": Measurement(Verdict.PASS),
        "D9": Measurement(Verdict.PASS, detail=f"{end.elapsed_s:.3g} s, {end.switches} switches"),
        "D10": Measurement(Verdict.PASS),
    }
    ended_by = _OUTCOME_ITEMS.get(end.outcome)
    if ended_by is not None:
        found[ended_by] = Measurement(Verdict.FAIL, detail=end.exit_detail)
    met = end.limit
    if met is not None:
        # Listening may end a test by a before-item as well: the loop was not fit to be tested.
        found[met.item] = Measurement(Verdict.FAIL, met.number, met.bound, met.sentence or "ended the test")
    return found


def measure_after(loop: Loop, plan: Plan, end: Conclusion, analysis: AnalysisReply) -> dict[str, Measurement]:
    """Every after-item that the conclusion and the analysis decide."""
    found = {
        "A1": _exit(plan, end),
        "A2": _as_found(end),
        "A3": _grade(analysis),
        "A4": _precision(plan, analysis),
    }
    agreement = _agreement(analysis)
    if agreement is not None:
        found["A5"] = agreement
    recommended = next((p for p in analysis.proposals if p.recommended), None)
    if recommended is None:
        return found
    if end.gain_found:
        ratio = recommended.proportional_gain / end.gain_found
        found["A6"] = judge("A6", max(ratio, 1 / ratio), f"{recommended.rule}: {ratio:.3g} times as found")
    if recommended.margins is not None:
        found["A7"] = _margins(recommended, end)
    found["A8"] = judge("A8", 100.0 * _noise_gain(recommended) * analysis.noise / loop.controller_output.span)
    return found


def _commands(plan: Plan, end: Conclusion) -> Measurement:
    low, high, resting = end.lowest_command, end.highest_command, end.resting_output
    if low is None or high is None or resting is None:
        return Measurement(Verdict.PASS, detail="nothing was commanded")
    slack = 1e-6 * (plan.output_high - plan.output_low)
    banded = plan.output_low - slack <= low and high <= plan.output_high + slack
    change = max(resting - low, high - resting)
    kept = banded and change <= plan.max_output_change + slack
    return Measurement(
        Verdict.PASS if kept else Verdict.FAIL,
        change,
        plan.max_output_change,
        f"commanded {low:.4g} to {high:.4g} about {resting:.4g}",
    )


def _exit(plan: Plan, end: Conclusion) -> Measurement:
    allowed = min(plan.deviation_up, plan.deviation_down)
    back = judge("A1", end.last_deviation / allowed, end.exit_detail)
    if end.exit is Exit.VERIFIED:
        return back
    if _untouched(end):
        return Measurement(back.verdict, back.value, back.limit, "nothing was moved, so nothing is to be handed back")
    detail = f"exit {end.exit.value}: {end.exit_detail}".rstrip(": ")
    return Measurement(Verdict.FAIL, back.value, back.limit, detail)


def _untouched(end: Conclusion) -> bool:
    """Whether the test ended before it had moved anything. After a yield or a lost link an exit is left out as well."""
    return end.exit is Exit.NOT_WRITTEN and end.outcome not in (Outcome.YIELDED, Outcome.LOST)


def _as_found(end: Conclusion) -> Measurement:
    if _untouched(end):
        return Measurement(Verdict.PASS, detail="nothing was written")
    if end.exit is not Exit.VERIFIED:
        return Measurement(Verdict.FAIL, detail="; ".join(end.differences) or "not verified")
    if end.differences:
        return Measurement(Verdict.CAUTION, detail="; ".join(end.differences))
    return Measurement(Verdict.PASS, detail="mode, setpoint and output read back as found")


def _grade(analysis: AnalysisReply) -> Measurement:
    verdict = {Grade.GOOD: Verdict.PASS, Grade.FAIR: Verdict.CAUTION, Grade.UNUSABLE: Verdict.FAIL}[analysis.grade]
    because = "; ".join(reason.rstrip(".") for reason in analysis.reasons)
    words = {
        Grade.GOOD: "good",
        Grade.FAIR: f"fair: a conservative rule and a second reader. {because}",
        Grade.UNUSABLE: f"unusable: no gains. {because}",
    }
    return Measurement(verdict, detail=words[analysis.grade].strip())


def _precision(plan: Plan, analysis: AnalysisReply) -> Measurement:
    cycles = judge("A4", float(analysis.scored_cycles))
    gain = analysis.ultimate_gain
    if gain is None:
        return Measurement(Verdict.FAIL, cycles.value, cycles.limit, "no ultimate gain")
    width = 100.0 * (gain.high - gain.low) / gain.value
    detail = f"interval {width:.3g} % wide, {plan.precision_percent:g} % asked for"
    reached = Verdict.PASS if width <= plan.precision_percent else Verdict.CAUTION
    return Measurement(worst((cycles.verdict, reached)), cycles.value, cycles.limit, detail)


def _agreement(analysis: AnalysisReply) -> Measurement | None:
    measured, modelled, textbook = analysis.fourier, analysis.model_crossover, analysis.describing_function
    if measured is None or modelled is None:
        return None
    apart = 100.0 * abs(measured.gain.value / modelled.gain.value - 1.0)
    detail = ""
    if textbook is not None:
        off = 100.0 * (textbook.gain.value / modelled.gain.value - 1.0)
        detail = f"the textbook value lies {off:+.3g} % off the model"
    return judge("A5", apart, detail)


def _margins(recommended: Proposal, end: Conclusion) -> Measurement:
    margins = recommended.margins
    assert margins is not None
    result = judge("A7", margins.peak_sensitivity)
    notes = [f"{recommended.rule} {recommended.controller_kind}"]
    verdicts = [result.verdict]
    if margins.gain_margin is not None and margins.gain_margin < 2.0:
        verdicts.append(Verdict.CAUTION)
        notes.append(f"gain margin {margins.gain_margin:.2f} below 2")
    if margins.phase_margin_deg is not None and margins.phase_margin_deg < 30.0:
        verdicts.append(Verdict.CAUTION)
        notes.append(f"phase margin {margins.phase_margin_deg:.0f} deg below 30")
    least = 2.0 * end.scan_s + end.latency_s
    if margins.delay_margin_s is not None and margins.delay_margin_s < least:
        verdicts.append(Verdict.FAIL)
        notes.append(f"delay margin {margins.delay_margin_s:.3g} s below two scans, {least:.3g} s")
    return Measurement(worst(verdicts), result.value, result.limit, "; ".join(notes))


def _noise_gain(proposal: Proposal) -> float:
    """High-frequency gain from the process variable to the output, output units per PV unit."""
    derivative = proposal.derivative_filter_n if proposal.derivative_time_s > 0 else 0.0
    return proposal.proportional_gain * (1.0 + derivative)
