"""The sheet: items with their measurements and a person's answers become verdicts, counted in three.

Owns how a measured verdict and an answer combine, and what blocks a start. Measures nothing.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from gainwright_service.checklist.item import Item, Stage
from gainwright_service.checklist.items import ITEMS, NOTICE, asked_of
from gainwright_wire.analyses import Checklist, ChecklistCounts, ChecklistItem, ItemAnswer, Verdict
from gainwright_wire.loops import LoopClass

_RANK = {Verdict.PASS: 0, Verdict.CAUTION: 1, Verdict.FAIL: 2}
_BY_ID = {item.id: item for item in ITEMS}


@dataclass(frozen=True, slots=True)
class Measurement:
    """What was measured of one item."""

    verdict: Verdict
    value: float | None = None
    limit: float | None = None
    detail: str = ""


@dataclass(frozen=True, slots=True)
class SignedAnswer:
    """A named person's verdict on one item."""

    verdict: Verdict
    person: str
    reason: str = ""


def worst(verdicts: Iterable[Verdict]) -> Verdict:
    """The worst of some verdicts; pass when there are none."""
    return max(verdicts, key=_RANK.__getitem__, default=Verdict.PASS)


def judge(item_id: str, value: float, detail: str = "") -> Measurement:
    """Judge a measured number by the item's own bounds."""
    item = _BY_ID[item_id]
    if item.pass_to is None or item.caution_to is None:
        raise ValueError(f"{item_id} has no bounds")
    more_is_better = item.pass_to > item.caution_to
    sign = -1.0 if more_is_better else 1.0
    if sign * value <= sign * item.pass_to:
        return Measurement(Verdict.PASS, value, item.pass_to, detail)
    if sign * value <= sign * item.caution_to:
        return Measurement(Verdict.CAUTION, value, item.pass_to, detail)
    return Measurement(Verdict.FAIL, value, item.caution_to, detail)


def assemble(
    loop_class: LoopClass,
    stages: tuple[Stage, ...],
    measurements: Mapping[str, Measurement],
    answers: Mapping[str, SignedAnswer],
) -> Checklist:
    """All items of a class in the given stages. What is neither measured nor answered counts as fail."""
    unanswered = [_as_measured(item, measurements.get(item.id)) for item in asked_of(loop_class, *stages)]
    sheet = _sheet(loop_class, unanswered)
    return with_answers(sheet, answers)


def with_answers(sheet: Checklist, answers: Mapping[str, SignedAnswer]) -> Checklist:
    """The sheet with people's answers applied; answers to items that it does not carry change nothing."""
    loop_class = LoopClass(sheet.loop_class)
    return _sheet(loop_class, [_answered(loop_class, item, answers.get(item.id)) for item in sheet.items])


def blocking(sheet: Checklist) -> tuple[ChecklistItem, ...]:
    """The items that forbid the start.

    On `plant` every before-item that fails, and every caution for which nobody has signed a reason. On `bench`
    only the few of the table marked so, and whatever a person answered with fail.
    """
    if sheet.loop_class == LoopClass.BENCH.value:
        failed = [i for i in sheet.items if i.verdict is Verdict.FAIL]
        return tuple(i for i in failed if _BY_ID[i.id].gates_bench or i.basis is ItemAnswer.ANSWERED)
    return tuple(
        i
        for i in sheet.items
        if i.stage == "before"
        and (i.verdict is Verdict.FAIL or (i.verdict is Verdict.CAUTION and not (i.answered_by and i.reason)))
    )


def _as_measured(item: Item, measured: Measurement | None) -> ChecklistItem:
    if measured is None:
        return ChecklistItem(
            id=item.id,
            stage=item.stage,
            question=item.question,
            starred=item.starred,
            verdict=Verdict.FAIL,
            basis=ItemAnswer.UNANSWERED,
            limit=item.pass_to,
            unit=item.unit,
            detail="neither measured nor answered",
            remedy=item.remedy,
        )
    return ChecklistItem(
        id=item.id,
        stage=item.stage,
        question=item.question,
        starred=item.starred,
        verdict=measured.verdict,
        basis=ItemAnswer.MEASURED,
        measured=measured.value,
        limit=measured.limit,
        unit=item.unit if measured.value is not None else "",
        detail=measured.detail,
        remedy="" if measured.verdict is Verdict.PASS else item.remedy,
    )


def _answered(loop_class: LoopClass, item: ChecklistItem, answer: SignedAnswer | None) -> ChecklistItem:
    """A person may worsen a measured verdict, and may override a fail by a caution with a reason, except a starred
    one on `plant`."""
    if answer is None:
        return item
    signed = {"answered_by": answer.person, "reason": answer.reason or None}
    if answer.verdict is Verdict.CAUTION and not answer.reason.strip():
        return item.model_copy(update={"detail": "a caution needs a reason", **signed, "verdict": Verdict.FAIL})
    if item.basis is not ItemAnswer.MEASURED:
        may = not (item.starred and loop_class is LoopClass.PLANT and answer.verdict is Verdict.CAUTION)
        verdict = answer.verdict if may else Verdict.FAIL
        detail = "" if may else "a starred item cannot be overridden on plant"
        return item.model_copy(
            update={
                "verdict": verdict,
                "basis": ItemAnswer.ANSWERED,
                "detail": detail,
                **signed,
                **_mended(verdict),
            }
        )
    overridable = not (item.starred and loop_class is LoopClass.PLANT)
    if item.verdict is Verdict.FAIL and answer.verdict is Verdict.CAUTION and overridable:
        return item.model_copy(update={"verdict": Verdict.CAUTION, **signed})
    verdict = worst((item.verdict, answer.verdict))
    return item.model_copy(update={"verdict": verdict, **signed})


def _mended(verdict: Verdict) -> dict[str, str]:
    return {"remedy": ""} if verdict is Verdict.PASS else {}


def _sheet(loop_class: LoopClass, items: Iterable[ChecklistItem]) -> Checklist:
    rows = tuple(items)
    tally = {v: sum(1 for i in rows if i.verdict is v) for v in Verdict}
    counts = ChecklistCounts(passed=tally[Verdict.PASS], caution=tally[Verdict.CAUTION], failed=tally[Verdict.FAIL])
    return Checklist(loop_class=loop_class.value, items=rows, counts=counts, notice=NOTICE)
