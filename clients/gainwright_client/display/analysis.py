"""An analysis as people read it: the ultimate point with its interval, the model, the findings, the proposals."""

from __future__ import annotations

from dataclasses import dataclass

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from gainwright_client.display.numbers import figure, half_width_percent, interval, with_unit
from gainwright_wire.analyses import AnalysisReply, Finding, GainSetting, Grade, Model, Proposal, RefusedRule, Verdict
from gainwright_wire.base import Interval

GRADES = {Grade.GOOD: "bold green", Grade.FAIR: "bold yellow", Grade.UNUSABLE: "bold red"}


@dataclass(frozen=True, slots=True)
class Units:
    """What the analysis's numbers are measured in."""

    process_variable: str = "PV unit"
    controller_output: str = "output unit"

    @property
    def gain(self) -> str:
        """Of the ultimate gain."""
        return f"{self.controller_output}/{self.process_variable}"

    @property
    def static_gain(self) -> str:
        """Of the process's gain."""
        return f"{self.process_variable}/{self.controller_output}"


@dataclass(frozen=True, slots=True)
class Truth:
    """What a rig knows of its own process."""

    ultimate_gain: float
    ultimate_period_s: float


def ultimate_view(analysis: AnalysisReply, units: Units, truth: Truth | None = None) -> RenderableType:
    """The ultimate point with its interval, beside the truth where it is known."""
    if analysis.ultimate_gain is None or analysis.ultimate_period_s is None:
        return Group(*(Text(reason, style="red") for reason in analysis.reasons))
    table = Table(box=None, padding=(0, 2), show_edge=False, pad_edge=False, header_style="dim")
    table.add_column("")
    table.add_column(f"estimate  [{100 * analysis.confidence:.0f} % interval]", no_wrap=True)
    table.add_column("±", justify="right")
    if truth is not None:
        table.add_column("true value of the rig", justify="right")
        table.add_column("error", justify="right")
    rows = (
        ("ultimate gain", analysis.ultimate_gain, units.gain, truth.ultimate_gain if truth else None),
        ("ultimate period", analysis.ultimate_period_s, "s", truth.ultimate_period_s if truth else None),
    )
    for name, estimate, unit, true in rows:
        cells: list[RenderableType] = [
            name,
            Text(f"{interval(estimate)} {unit}", style="bold"),
            f"{half_width_percent(estimate):.1f} %",
        ]
        if true is not None:
            cells += [with_unit(true, unit, 4), _error(estimate, true)]
        table.add_row(*cells)
    return table


def routes_view(analysis: AnalysisReply, units: Units) -> RenderableType:
    """The three estimates beside one another, as people check them by hand."""
    routes = (
        ("textbook, 4d/(πa)", analysis.describing_function),
        ("measured response", analysis.fourier),
        ("fitted model", analysis.model_crossover),
    )
    parts = [
        f"{name} {figure(point.gain.value, 3)} {units.gain}, {figure(point.period_s.value, 3)} s"
        for name, point in routes
        if point is not None
    ]
    return Text("three routes: " + " · ".join(parts), style="dim") if parts else Text("")


def model_in_words(model: Model, units: Units) -> str:
    """The model's structure and numbers in one line."""
    name = model.structure.replace("_", " ")
    parts = []
    if model.static_gain is not None:
        parts.append(f"static gain {with_unit(model.static_gain, units.static_gain)}")
    if model.integrating_gain is not None:
        parts.append(f"integrating gain {with_unit(model.integrating_gain, units.static_gain + '/s')}")
    if model.time_constants_s:
        constants = ", ".join(figure(t, 3) for t in model.time_constants_s)
        parts.append(f"time constant{'s' if len(model.time_constants_s) > 1 else ''} {constants} s")
    if model.natural_frequency_rad_s is not None:
        parts.append(f"natural frequency {figure(model.natural_frequency_rad_s, 3)} rad/s")
    if model.damping is not None:
        parts.append(f"damping {figure(model.damping, 3)}")
    if model.zero_time_s:
        parts.append(f"zero {figure(model.zero_time_s, 3)} s")
    parts.append(f"dead time {figure(model.dead_time_s, 3)} s")
    return f"{name}: {', '.join(parts)}"


def findings_view(findings: tuple[Finding, ...]) -> RenderableType:
    """What is wrong in a line each; what is right in one line together."""
    passed = [f.name.replace("_", " ") for f in findings if f.verdict is Verdict.PASS]
    grid = Table.grid(padding=(0, 2))
    grid.add_column(no_wrap=True, justify="right", width=7)
    grid.add_column()
    for finding in findings:
        if finding.verdict is not Verdict.PASS:
            style = "red" if finding.verdict is Verdict.FAIL else "yellow"
            name = finding.name.replace("_", " ")
            number = with_unit(finding.value, finding.unit)
            grid.add_row(
                Text(finding.verdict.value, style=style),
                Text.assemble((name, "bold"), f" {number}: {finding.sentence}"),
            )
    if passed:
        grid.add_row(Text("pass", style="green"), Text(", ".join(passed), style="dim"))
    return grid


def proposals_view(proposals: tuple[Proposal, ...], refused: tuple[RefusedRule, ...], units: Units) -> RenderableType:
    """The proposals in the controller's own form, with the margins they leave on the fitted model."""
    names = list(dict.fromkeys((s.name, s.unit) for p in proposals for s in shown(p, units)))
    table = Table(box=None, padding=(0, 2), show_edge=False, pad_edge=False, header_style="dim")
    table.add_column("")
    table.add_column("\nrule", no_wrap=True)
    table.add_column("")
    for name, unit in names:
        table.add_column(f"{name}\n{unit}", justify="right")
    for name in ("gain\nmargin", "phase\nmargin", "peak\nsensitivity"):
        table.add_column(name, justify="right")
    for proposal in proposals:
        table.add_row(*_row(proposal, names, units), style="bold" if proposal.recommended else "")
    chosen = next((p for p in proposals if p.recommended), None)
    parts: list[RenderableType] = [table]
    if chosen is not None:
        parts.append(_chosen(chosen, units))
    if refused:
        listed = ", ".join(f"{title(r.rule)} {r.controller_kind}" for r in refused)
        parts.append(Text(f"{len(refused)} rules do not apply here, with their reasons in the record: {listed}", "dim"))
    return Group(*parts)


def title(rule: str) -> str:
    """A rule's label as people write its authors: `ziegler_nichols_1942` is Ziegler Nichols 1942."""
    return rule.replace("_", " ").title()


def grade_text(grade: Grade) -> Text:
    """The grade in its colour."""
    return Text(f"grade {grade.value}", style=GRADES[grade])


def shown(proposal: Proposal, units: Units) -> tuple[GainSetting, ...]:
    """The controller's own settings; the canonical numbers of the ideal form where its form is undeclared."""
    if proposal.settings:
        return proposal.settings
    found = [GainSetting(name="K", value=proposal.proportional_gain, unit=units.gain)]
    if proposal.integral_time_s is not None:
        found.append(GainSetting(name="Ti", value=proposal.integral_time_s, unit="s"))
    if proposal.derivative_time_s:
        found.append(GainSetting(name="Td", value=proposal.derivative_time_s, unit="s"))
    return tuple(found)


def _row(proposal: Proposal, names: list[tuple[str, str]], units: Units) -> list[RenderableType]:
    values = {(s.name, s.unit): figure(s.value, 4) for s in shown(proposal, units)}
    margins = proposal.margins
    cells: list[RenderableType] = [
        Text("▶", style="green") if proposal.recommended else "",
        title(proposal.rule),
        proposal.controller_kind,
        *(values.get(name, "") for name in names),
    ]
    if margins is None:
        return [*cells, "–", "–", "–"]
    sensitivity = margins.peak_sensitivity
    style = "green" if sensitivity <= 1.7 else "yellow" if sensitivity <= 2.5 else "red"
    phase = "–" if margins.phase_margin_deg is None else f"{margins.phase_margin_deg:.0f}°"
    return [*cells, figure(margins.gain_margin, 3), phase, Text(f"{sensitivity:.2f}", style=style)]


def _chosen(proposal: Proposal, units: Units) -> RenderableType:
    settings = ", ".join(f"{s.name} {with_unit(s.value, s.unit, 4)}" for s in shown(proposal, units))
    name = f"{title(proposal.rule)} {proposal.controller_kind}"
    lines = [
        Text.assemble(("▶ ", "green"), (f"{name}: {settings}", "bold"), f", {proposal.action} acting"),
        Text(f"  {proposal.equation}"),
        Text(f"  hand check: {proposal.hand_check}"),
        *(Text(f"  ! {caution}", style="yellow") for caution in proposal.cautions),
    ]
    return Group(*lines)


def _error(estimate: Interval, true: float) -> Text:
    error = 100.0 * (estimate.value / true - 1.0)
    inside = estimate.low <= true <= estimate.high
    return Text(f"{error:+.1f} %", style="green" if inside else "yellow" if abs(error) <= 5 else "red")
