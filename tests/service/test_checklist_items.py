"""The checklist's table against the safety list's identifiers and stars, and how verdicts and answers combine."""

from __future__ import annotations

import pytest

from gainwright_service.checklist import ITEMS, SignedAnswer, asked_of, assemble, blocking
from gainwright_service.checklist.sheet import Measurement, judge
from gainwright_wire.analyses import ItemAnswer, Verdict
from gainwright_wire.loops import LoopClass

# The identifiers and stars of the safety list, sections 3 and 6.
BEFORE = [f"B{n}" for n in range(1, 28)]
AFTER = [f"A{n}" for n in range(1, 14)]
STARRED = {"B1", "B2", "B4", "A1", "A2", "D1", "D2", "D5", "D6"}
WAIVED_ON_BENCH = {"B5", "B6", "B7", "B15", "B17", "B18", "B19", "B22", "B24", "B25", "B26", "B27"}


def test_the_table_holds_every_item_before_and_after_once_and_in_order() -> None:
    assert [i.id for i in ITEMS if i.stage == "before"] == BEFORE
    assert [i.id for i in ITEMS if i.stage == "after"] == AFTER


def test_the_stars_are_those_of_the_safety_list() -> None:
    assert {i.id for i in ITEMS if i.starred} == STARRED


def test_plant_carries_every_item() -> None:
    assert asked_of(LoopClass.PLANT, "before", "during", "after") == ITEMS


def test_bench_drops_what_its_signed_sentence_replaces() -> None:
    carried = {i.id for i in asked_of(LoopClass.BENCH, "before")}
    assert set(BEFORE) - carried == WAIVED_ON_BENCH


def test_every_item_says_what_removes_it() -> None:
    assert all(i.question.endswith(("?", ".")) and i.remedy for i in ITEMS)


def test_what_is_neither_measured_nor_answered_counts_as_fail() -> None:
    sheet = assemble(LoopClass.PLANT, ("before",), {}, {})
    assert sheet.counts.failed == len(BEFORE)
    assert {i.basis for i in sheet.items} == {ItemAnswer.UNANSWERED}


def test_the_three_counts_add_up_to_the_items() -> None:
    sheet = assemble(LoopClass.BENCH, ("before", "during", "after"), {"B9": judge("B9", 7.0)}, {})
    assert sheet.counts.passed + sheet.counts.caution + sheet.counts.failed == len(sheet.items)


@pytest.mark.parametrize(
    ("item", "value", "verdict"),
    [
        ("B7", 50.0, Verdict.PASS),
        ("B7", 80.0, Verdict.CAUTION),
        ("B7", 80.1, Verdict.FAIL),
        ("B8", 0.5, Verdict.PASS),
        ("B8", 0.81, Verdict.FAIL),
        ("B9", 10.0, Verdict.CAUTION),
        ("B10", 100.1, Verdict.FAIL),
        ("B11", 0.3, Verdict.CAUTION),
        ("B12", 10.0, Verdict.PASS),
        ("B12", 5.0, Verdict.CAUTION),
        ("B12", 4.9, Verdict.FAIL),
        ("B15", 3.1, Verdict.FAIL),
        ("B21", 51.0, Verdict.CAUTION),
        ("A4", 1.0, Verdict.FAIL),
        ("A5", 15.0, Verdict.CAUTION),
        ("A6", 5.1, Verdict.FAIL),
        ("A8", 2.0, Verdict.CAUTION),
    ],
)
def test_bounds_are_those_of_the_safety_list(item: str, value: float, verdict: Verdict) -> None:
    assert judge(item, value).verdict is verdict


def _sheet(item: str, measured: Verdict | None, answer: SignedAnswer, loop_class: LoopClass) -> Verdict:
    measurements = {} if measured is None else {item: Measurement(measured)}
    sheet = assemble(loop_class, ("before",), measurements, {item: answer})
    return next(i.verdict for i in sheet.items if i.id == item)


def test_a_caution_without_a_reason_stays_a_fail() -> None:
    assert _sheet("B9", None, SignedAnswer(Verdict.CAUTION, "Ada"), LoopClass.PLANT) is Verdict.FAIL


def test_a_named_reason_turns_a_measured_fail_into_a_caution() -> None:
    answer = SignedAnswer(Verdict.CAUTION, "Ada", "agreed with the shift")
    assert _sheet("B9", Verdict.FAIL, answer, LoopClass.PLANT) is Verdict.CAUTION


def test_nobody_overrides_a_starred_fail_on_plant() -> None:
    answer = SignedAnswer(Verdict.CAUTION, "Ada", "agreed with the shift")
    assert _sheet("B2", Verdict.FAIL, answer, LoopClass.PLANT) is Verdict.FAIL
    assert _sheet("B2", None, answer, LoopClass.PLANT) is Verdict.FAIL


def test_a_pass_cannot_talk_a_measured_fail_away() -> None:
    assert _sheet("B9", Verdict.FAIL, SignedAnswer(Verdict.PASS, "Ada"), LoopClass.PLANT) is Verdict.FAIL


def test_a_person_may_fail_what_was_measured_as_pass() -> None:
    assert _sheet("B9", Verdict.PASS, SignedAnswer(Verdict.FAIL, "Ada"), LoopClass.BENCH) is Verdict.FAIL


def test_plant_is_blocked_by_every_fail_and_by_an_unsigned_caution() -> None:
    measurements = {i: Measurement(Verdict.PASS) for i in BEFORE} | {"B10": Measurement(Verdict.CAUTION)}
    sheet = assemble(LoopClass.PLANT, ("before",), measurements, {})
    assert [i.id for i in blocking(sheet)] == ["B10"]
    signed = {"B10": SignedAnswer(Verdict.CAUTION, "Ada", "a long test on purpose")}
    assert blocking(assemble(LoopClass.PLANT, ("before",), measurements, signed)) == ()


def test_bench_is_blocked_by_its_few_gates_only() -> None:
    sheet = assemble(LoopClass.BENCH, ("before",), {}, {})
    assert [i.id for i in blocking(sheet)] == ["B1", "B2", "B4", "B9", "B23"]


def test_the_notice_defers_to_local_rules_and_claims_nothing() -> None:
    notice = assemble(LoopClass.BENCH, ("before",), {}, {}).notice
    for words in ("Local codes", "permits", "licensed", "no risk reduction", "not an emergency stop"):
        assert words in notice
