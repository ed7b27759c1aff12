"""Plans take the defaults of the loop's class and refuse, by field, what cannot stay inside the limits."""

from __future__ import annotations

import dataclasses
from typing import Any

import pytest

from gainwright_service.errors import PlanRefused
from gainwright_service.experiment.plan import Plan
from gainwright_service.planning import check_start, plan_experiment, plan_with_defaults
from gainwright_wire.tasks import Plan as WirePlan
from service_loops import a_loop, a_start

PLANT = {"loop_class": "plant", "exit_action": {"kind": "resting"}}
PLANT_START = {"approver": "Grace", "acknowledged_by": "Olu", "work_order": "WO-17"}


def _refused(loop_changes: dict[str, Any], **start: Any) -> dict[str, str]:
    with pytest.raises(PlanRefused) as caught:
        plan_experiment(a_loop(**loop_changes), a_start(**start))
    assert all(e.allowed for e in caught.value.errors)
    return {e.field: e.problem for e in caught.value.errors}


def test_the_plan_arrives_in_the_experiment_under_the_names_of_the_wire() -> None:
    wire = plan_with_defaults(a_loop(), a_start())
    plan = plan_experiment(a_loop(), a_start())
    names = {f.name for f in dataclasses.fields(Plan)}
    assert set(WirePlan.model_fields) <= names
    assert {name: getattr(plan, name) for name in WirePlan.model_fields} == wire.model_dump()


def test_bench_defaults_are_those_of_the_safety_list() -> None:
    plan = plan_with_defaults(a_loop(limits__max_amplitude=None, limits__max_output_change=None), a_start())
    assert (plan.start_amplitude, plan.max_amplitude, plan.growth) == (5.0, 5.0, 2.0)
    assert (plan.listening_s, plan.max_duration_s, plan.precision_percent) == (10.0, 600.0, 10.0)
    assert plan.exit_valid_s == 600.0


def test_plant_defaults_are_those_of_the_safety_list() -> None:
    loop = a_loop(**PLANT, limits__max_amplitude=None, limits__max_output_change=None)
    plan = plan_with_defaults(loop, a_start())
    assert (plan.start_amplitude, plan.max_amplitude, plan.growth) == (2.0, 5.0, 1.5)
    assert (plan.max_duration_s, plan.precision_percent) == (3600.0, 5.0)


@pytest.mark.parametrize(
    ("interval_s", "listening_s"), [(0.01, 5.0), (0.1, 10.0), (0.2, 20.0), (1.0, 30.0), (5.0, 100.0)]
)
def test_bench_listens_a_hundred_samples_within_bounds(interval_s: float, listening_s: float) -> None:
    assert (
        plan_with_defaults(a_loop(sample_interval_s=interval_s, adapter__heartbeat=None), a_start()).listening_s
        == listening_s
    )


def test_a_declared_amplitude_beyond_the_default_stands() -> None:
    assert plan_with_defaults(a_loop(limits__max_amplitude=10), a_start()).max_amplitude == 10.0


def test_the_amplitude_shrinks_to_the_room_around_the_resting_output() -> None:
    plan = plan_with_defaults(a_loop(), a_start(resting_output=13.0))
    assert plan.max_amplitude == 3.0
    assert plan.start_amplitude == 3.0


def test_a_band_without_room_for_the_smallest_amplitude_is_refused() -> None:
    assert "resting_output" in _refused({}, resting_output=10.5)


def test_a_resting_output_outside_the_band_is_refused() -> None:
    assert "outside the output band" in _refused({}, resting_output=95.0)["resting_output"]


def test_a_reference_outside_the_limits_is_refused() -> None:
    assert "outside the limits" in _refused({}, reference=99.0)["reference"]


def test_plant_needs_its_deviation_declared() -> None:
    assert "limits.deviation_up" in _refused({**PLANT, "limits__deviation_up": None})


def test_bench_deviation_defaults_to_a_tenth_of_the_range() -> None:
    loop = a_loop(limits__deviation_up=None, limits__deviation_down=None)
    assert plan_with_defaults(loop, a_start()).deviation_up == 12.0


def test_a_test_shorter_than_its_listening_is_refused() -> None:
    assert "limits.max_duration_s" in _refused({"limits__max_duration_s": 8})


def test_everything_wrong_is_said_at_once() -> None:
    assert set(_refused({}, resting_output=95.0, reference=99.0)) == {"resting_output", "reference"}


def _start_refused(loop_changes: dict[str, Any], **start: Any) -> set[str]:
    with pytest.raises(PlanRefused) as caught:
        check_start(a_loop(**loop_changes), a_start(**start), requested_by="Ada")
    return {e.field for e in caught.value.errors}


def test_bench_starts_attended_and_signed_only() -> None:
    assert _start_refused({}, attended=False, bench_sentence_signed=False) == {"attended", "bench_sentence_signed"}
    check_start(a_loop(), a_start(), requested_by="Ada")


def test_plant_starts_with_another_approver_an_acknowledgement_and_a_work_order_only() -> None:
    assert _start_refused(PLANT) == {"approver", "acknowledged_by", "work_order"}
    assert _start_refused(PLANT, **{**PLANT_START, "approver": " ada "}) == {"approver"}
    check_start(a_loop(**PLANT), a_start(**PLANT_START), requested_by="Ada")


def test_unattended_needs_a_proven_watchdog() -> None:
    unattended = {**PLANT_START, "attended": False}
    assert _start_refused({**PLANT, "adapter__heartbeat": None}, **unattended) == {"attended"}
    assert _start_refused(PLANT, **unattended) == {"answers.B3"}
    proven = {"B3": {"verdict": "pass", "reason": "proven on 2026-11-20"}}
    check_start(a_loop(**PLANT), a_start(**unattended, answers=proven), requested_by="Ada")


def test_unattended_is_refused_where_the_device_holds_its_last_output() -> None:
    hold = {"address": 20, "watchdog": "hold_last", "timeout_s": 3}
    proven = {"B3": {"verdict": "pass", "reason": "proven on 2026-11-20"}}
    unattended = {**PLANT_START, "attended": False, "answers": proven}
    assert _start_refused({**PLANT, "adapter__heartbeat": hold}, **unattended) == {"attended"}
