"""A finished test as people read it: how it ended, what was found, what is proposed, the checklist."""

from __future__ import annotations

from rich.console import Group, RenderableType
from rich.padding import Padding
from rich.text import Text

from gainwright_client.display.analysis import (
    Truth,
    Units,
    findings_view,
    grade_text,
    model_in_words,
    proposals_view,
    routes_view,
    ultimate_view,
)
from gainwright_client.display.checklist import checklist_view, counts
from gainwright_wire.analyses import AnalysisReply
from gainwright_wire.loops import Loop
from gainwright_wire.tasks import Exit, Experiment, Outcome

SAID = {
    Outcome.COMPLETED: "bold green",
    Outcome.STOPPED: "bold yellow",
    Outcome.YIELDED: "bold yellow",
    Outcome.LIMITED: "bold yellow",
    Outcome.LOST: "bold red",
    Outcome.INTERRUPTED: "bold red",
}


def outcome_view(experiment: Experiment, loop: Loop, truth: Truth | None = None) -> RenderableType:
    """Everything of a finished test."""
    units = Units(loop.process_variable.unit, loop.controller_output.unit)
    parts: list[RenderableType] = [_ended(experiment)]
    if experiment.limit is not None:
        parts.append(Text(f"limit {experiment.limit.item}: {experiment.limit.sentence}", style="yellow"))
    if experiment.analysis is not None:
        parts.append(analysis_view(experiment.analysis, units, truth))
    if experiment.checklist is not None:
        parts += [section("Checklist", counts(experiment.checklist)), _indented(checklist_view(experiment.checklist))]
    return Group(*parts)


def analysis_view(analysis: AnalysisReply, units: Units, truth: Truth | None = None) -> RenderableType:
    """Everything of one analysis."""
    parts: list[RenderableType] = [
        section("Ultimate point", grade_text(analysis.grade)),
        _indented(ultimate_view(analysis, units, truth)),
        _indented(routes_view(analysis, units)),
    ]
    if analysis.dominant_uncertainty:
        remedy = f"; {analysis.remedy}" if analysis.remedy else ""
        parts.append(_indented(Text(f"the interval's largest part: {analysis.dominant_uncertainty}{remedy}", "dim")))
    if analysis.model is not None:
        parts += [section("Model"), _indented(Text(model_in_words(analysis.model, units)))]
    if analysis.findings:
        parts += [section("Findings"), _indented(findings_view(analysis.findings))]
    if analysis.proposals or analysis.refused_rules:
        parts += [section("Proposals"), _indented(proposals_view(analysis.proposals, analysis.refused_rules, units))]
    return Group(*parts)


def section(name: str, beside: Text | None = None) -> RenderableType:
    """A heading, with a word beside it."""
    return Text.assemble("\n", (name, "bold cyan"), "  ", beside or "")


def notice_view(notice: str) -> RenderableType:
    """The cautions that go with every result."""
    return Padding(Text(notice, style="dim italic"), (1, 0, 0, 0))


def _ended(experiment: Experiment) -> Text:
    outcome = experiment.outcome
    exit_style = "green" if experiment.exit is Exit.VERIFIED else "bold red"
    detail = f" ({experiment.exit_detail.rstrip('.')})" if experiment.exit_detail else ""
    return Text.assemble(
        "\n",
        (outcome.value if outcome else "not finished", SAID[outcome] if outcome else ""),
        " · exit ",
        (experiment.exit.value.replace("_", " "), exit_style),
        (detail, "dim"),
    )


def _indented(view: RenderableType) -> RenderableType:
    return Padding(view, (0, 0, 0, 2))
