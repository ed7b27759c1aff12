"""A finished experiment becomes an analysis and a checklist; one that never swung becomes an honest pair as well."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from gainwright_service.planning import plan_experiment
from gainwright_service.proposals import conclude_experiment
from gainwright_wire.analyses import AnalysisReply, Checklist, ChecklistItem
from relay_records import relay_record
from service_loops import a_loop, a_start, loop_document

NOISE = 0.01


def _facts(**changes: Any) -> dict[str, Any]:
    """Ten seconds of listening, then the exact relay test of `relay_record`, handed back at its end."""
    record = relay_record(cycles=6)
    quiet = np.arange(200) * 0.05
    time = np.concatenate([quiet, 10.0 + np.array(record["time_s"])])
    rng = np.random.default_rng(7)
    value = np.concatenate([np.full(200, 60.0), record["process_variable"]]) + NOISE * rng.standard_normal(time.size)
    commanded = np.concatenate([np.full(200, 50.0), record["controller_output"]])
    phase = ["listening"] * 200 + ["swinging"] * (time.size - 200)
    phase[-1] = "returning"
    value[-1] = 60.3
    return {
        "loop": loop_document(),
        "request": a_start().model_dump(mode="json"),
        "plan": plan_experiment(a_loop(), a_start()).document(),
        "as_found": {
            "mode": "manual",
            "setpoint": 60.0,
            "controller_output": 50.0,
            "process_variable": 60.0,
            "resting_output": 50.0,
            "reference": 60.0,
            "gains": {"gain": 2.0, "integral": 20.0, "derivative": None},
        },
        "ended": {"outcome": "completed", "exit": "verified", "exit_detail": "output 50, echoed", "limit": None},
        "progress": {"elapsed_s": 60.0, "switches": 12, "hysteresis": 0.0},
        "columns": {
            "time_s": time,
            "process_variable": value,
            "controller_output": commanded,
            "commanded_output": commanded,
            "phase": phase,
        },
        "latency_s": 0.0,
        "requested_by": "Ada",
        "sign_offs": {},
        **changes,
    }


@pytest.fixture(scope="module")
def concluded() -> tuple[AnalysisReply, Checklist]:
    result = conclude_experiment(_facts())
    return AnalysisReply.model_validate(result["analysis"]), Checklist.model_validate(result["checklist"])


def _item(sheet: Checklist, item_id: str) -> ChecklistItem:
    return next(item for item in sheet.items if item.id == item_id)


def test_the_ultimate_point_is_that_of_the_process(concluded: tuple[AnalysisReply, Checklist]) -> None:
    """Exact values for L/T = 0.2: K Ku 8.502425, Tu 3.720761 L (Astrom & Hagglund 1984's definition, recomputed)."""
    analysis, _ = concluded
    assert analysis.ultimate_gain is not None
    assert analysis.ultimate_period_s is not None
    assert analysis.ultimate_gain.value == pytest.approx(8.502425, rel=0.05)
    assert analysis.ultimate_period_s.value == pytest.approx(7.441522, rel=0.05)


def test_gains_are_proposed_in_the_loops_own_form(concluded: tuple[AnalysisReply, Checklist]) -> None:
    analysis, _ = concluded
    (recommended,) = [p for p in analysis.proposals if p.recommended]
    assert recommended.action == "reverse"
    assert [s.unit for s in recommended.settings][:2] == ["%/%", "s"]
    # 120 degC over 100 %.
    assert recommended.settings[0].value == pytest.approx(1.2 * recommended.proportional_gain)


@pytest.mark.parametrize(
    ("item", "verdict"),
    [
        ("B8", "pass"),
        ("B10", "pass"),
        ("B12", "pass"),
        ("B14", "pass"),
        ("B20", "pass"),
        ("B21", "pass"),
        ("D1", "pass"),
        ("D5", "pass"),
        ("A1", "pass"),
        ("A2", "pass"),
    ],
)
def test_what_the_record_decides_is_measured(
    concluded: tuple[AnalysisReply, Checklist], item: str, verdict: str
) -> None:
    _, sheet = concluded
    found = _item(sheet, item)
    assert (found.verdict, found.basis) == (verdict, "measured"), found


def test_the_recommended_gains_are_compared_with_those_found(concluded: tuple[AnalysisReply, Checklist]) -> None:
    analysis, sheet = concluded
    (recommended,) = [p for p in analysis.proposals if p.recommended]
    ratio = recommended.settings[0].value / 2.0
    assert _item(sheet, "A6").measured == pytest.approx(max(ratio, 1 / ratio))


def test_everything_carried_is_measured_on_bench(concluded: tuple[AnalysisReply, Checklist]) -> None:
    _, sheet = concluded
    assert [i.id for i in sheet.items if i.basis == "unanswered"] == []


def test_an_unverified_exit_fails_its_starred_items() -> None:
    ended = {"outcome": "lost", "exit": "unverified", "exit_detail": "link lost", "limit": None}
    sheet = Checklist.model_validate(conclude_experiment(_facts(ended=ended))["checklist"])
    assert {i: _item(sheet, i).verdict for i in ("A1", "A2", "D7")} == dict.fromkeys(("A1", "A2", "D7"), "fail")


@pytest.mark.parametrize(("outcome", "verdict"), [("stopped", "pass"), ("yielded", "fail"), ("lost", "fail")])
def test_an_exit_that_was_not_written_passes_only_where_nothing_was_moved(outcome: str, verdict: str) -> None:
    ended = {"outcome": outcome, "exit": "not_written", "exit_detail": "", "limit": None}
    sheet = Checklist.model_validate(conclude_experiment(_facts(ended=ended))["checklist"])
    assert {i: _item(sheet, i).verdict for i in ("A1", "A2")} == dict.fromkeys(("A1", "A2"), verdict)


def test_a_limit_names_its_item_number_and_bound() -> None:
    limit = {"item": "D1", "number": 3.7, "bound": 3.0, "unit": "degC", "sentence": "beyond the allowed deviation"}
    ended = {"outcome": "limited", "exit": "verified", "exit_detail": "", "limit": limit}
    sheet = Checklist.model_validate(conclude_experiment(_facts(ended=ended))["checklist"])
    found = _item(sheet, "D1")
    assert (found.verdict, found.measured, found.limit) == ("fail", 3.7, 3.0)


def test_a_test_stopped_before_it_swung_has_no_gains_and_says_why() -> None:
    facts = _facts()
    columns = {name: column[:4] for name, column in facts["columns"].items()}
    ended = {"outcome": "stopped", "exit": "not_written", "exit_detail": "nothing was moved", "limit": None}
    result = conclude_experiment({**facts, "columns": columns, "ended": ended, "as_found": None, "progress": {}})
    analysis = AnalysisReply.model_validate(result["analysis"])
    assert (analysis.grade, analysis.ultimate_gain, analysis.proposals) == ("unusable", None, ())
    assert "4 samples" in analysis.reasons[0]
    assert _item(Checklist.model_validate(result["checklist"]), "A3").verdict == "fail"


def test_listening_alone_is_unusable() -> None:
    facts = _facts()
    columns = {name: column[:200] for name, column in facts["columns"].items()}
    result = conclude_experiment({**facts, "columns": columns})
    assert result["analysis"]["grade"] == "unusable"
    assert result["analysis"]["reasons"]


def test_a_missing_reading_does_not_spoil_the_rest() -> None:
    facts = _facts()
    facts["columns"]["process_variable"][[5, 400]] = np.nan
    facts["columns"]["commanded_output"][:3] = np.nan
    result = conclude_experiment(facts)
    assert result["analysis"]["ultimate_gain"]["value"] == pytest.approx(8.5, rel=0.05)


def test_sign_offs_given_during_the_test_are_on_the_sheet() -> None:
    signed = {"B3": {"verdict": "caution", "person": "Grace", "reason": "attended throughout"}}
    sheet = Checklist.model_validate(conclude_experiment(_facts(sign_offs=signed))["checklist"])
    assert (_item(sheet, "B3").answered_by, _item(sheet, "B3").reason) == ("Grace", "attended throughout")
