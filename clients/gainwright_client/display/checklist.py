"""The checklist as people read it: three counts, and every item that is not a pass in a line of its own."""

from __future__ import annotations

from collections.abc import Iterable

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from gainwright_client.display.numbers import with_unit
from gainwright_wire.analyses import Checklist, ChecklistItem, ItemAnswer, Verdict

STYLES = {Verdict.PASS: "green", Verdict.CAUTION: "yellow", Verdict.FAIL: "red"}


def counts(checklist: Checklist) -> Text:
    """The three counts; never one tick."""
    found = checklist.counts
    return Text.assemble(
        (f"{found.passed} pass", "green"),
        " · ",
        (f"{found.caution} caution", "yellow" if found.caution else "dim"),
        " · ",
        (f"{found.failed} fail", "red" if found.failed else "dim"),
    )


def checklist_view(checklist: Checklist) -> RenderableType:
    """What passed in one line per stage, the rest item by item with the thing that removes it."""
    parts: list[RenderableType] = []
    for stage in ("before", "during", "after"):
        items = [item for item in checklist.items if item.stage == stage]
        if items:
            parts.append(_passed(stage, items))
    rest = [item for item in checklist.items if item.verdict is not Verdict.PASS]
    open_items = [item for item in rest if item.basis is ItemAnswer.UNANSWERED]
    if len(open_items) < len(rest):
        parts.append(_table(item for item in rest if item not in open_items))
    if open_items:
        names = " ".join(f"{item.id}{_star(item)}" for item in open_items)
        parts.append(Text.assemble("         ", ("fail  ", "red"), f"neither measured nor answered: {names}"))
    return Group(*parts)


def _passed(stage: str, items: Iterable[ChecklistItem]) -> Text:
    names = [item.id for item in items if item.verdict is Verdict.PASS]
    return Text.assemble((f"{stage:>7}  ", "dim"), ("pass  ", "green"), " ".join(names) or "–")


def _table(items: Iterable[ChecklistItem]) -> Table:
    table = Table.grid(padding=(0, 2))
    table.add_column(no_wrap=True, justify="right", width=7)
    table.add_column(no_wrap=True)
    table.add_column()
    for item in items:
        said = item.reason or item.detail or item.question
        number = f" ({with_unit(item.measured, item.unit)})" if item.measured is not None else ""
        text = Text.assemble(said.rstrip("."), number, (f"  {item.remedy}" if item.remedy else "", "dim"))
        table.add_row(f"{item.id}{_star(item)}", Text(item.verdict.value, style=STYLES[item.verdict]), text)
    return table


def _star(item: ChecklistItem) -> str:
    return "*" if item.starred else ""
