"""Bad input names the field, says what is wrong and what is allowed."""

from __future__ import annotations

import math
from typing import Any

import pytest
from pydantic import ValidationError

from gainwright_service.api.fields import field_problems
from gainwright_wire.loops import Loop
from gainwright_wire.problems import FieldProblem
from gainwright_wire.tasks import StartExperiment
from service_loops import loop_document


def _problems(**changes: Any) -> tuple[FieldProblem, ...]:
    with pytest.raises(ValidationError) as caught:
        Loop.model_validate(loop_document(**changes))
    return field_problems([{**e, "loc": ("body", *e["loc"])} for e in caught.value.errors()])


@pytest.mark.parametrize(
    ("changes", "field", "allowed"),
    [
        ({"limits__process_variable_low": math.nan}, "limits.process_variable_low", "a finite number"),
        ({"limits__process_variable_high": math.inf}, "limits.process_variable_high", "a finite number"),
        ({"limits__output_low": 95}, "limits.output_low", "output_low must be below output_high"),
        ({"limits__process_variable_low": -5}, "limits.process_variable_low/high", "must lie inside"),
        ({"limits__max_amplitude": -1}, "limits.max_amplitude", "at least 1e-09"),
        ({"limits__max_amplitude": 50}, "limits.max_amplitude", "at most half of the output band"),
        ({"adapter": {"kind": "telegraph"}}, "adapter.kind", "'modbus'"),
        ({"adapter": {"host": "127.0.0.1"}}, "adapter.kind", ""),
        ({"adapter__port": 70000}, "adapter.port", "at most 65535"),
        ({"adapter__surprise": 1}, "adapter.surprise", "only the documented fields"),
        ({"exit_action": {"kind": "fixed"}}, "exit_action.value", "value is given"),
        ({"tag": "no spaces allowed"}, "tag", "text that matches"),
        ({"sample_interval_s": 0}, "sample_interval_s", "at least 0.01"),
        ({"output_effect": "wobbles"}, "output_effect", "'raises' or 'lowers'"),
        (
            {"process_variable": {"unit": "degC", "low": 5, "high": 5}},
            "process_variable.low",
            "low must be below high",
        ),
        ({"controller__input_high": None}, "controller.input_low", "both or none"),
    ],
)
def test_the_field_and_what_is_allowed_are_named(changes: dict[str, Any], field: str, allowed: str) -> None:
    found = _problems(**changes)
    assert any(p.field == field and allowed in p.allowed for p in found), found


def test_a_plant_loop_without_a_mode_register_is_a_named_contradiction() -> None:
    (found,) = _problems(loop_class="plant", adapter__mode=None)
    assert found.field == "adapter.mode"
    assert "bench" in found.allowed


def test_a_safety_function_is_named() -> None:
    (found,) = _problems(safety_function=True)
    assert found.field == "safety_function"


def test_a_missing_field_is_named() -> None:
    document = loop_document()
    del document["limits"]["output_high"]
    with pytest.raises(ValidationError) as caught:
        Loop.model_validate(document)
    (found,) = field_problems(caught.value.errors())
    assert (found.field, found.allowed) == ("limits.output_high", "a value")


def test_an_answer_to_an_item_is_named_by_its_item() -> None:
    with pytest.raises(ValidationError) as caught:
        StartExperiment.model_validate({"attended": True, "answers": {"B7": {"verdict": "maybe"}}})
    (found,) = field_problems(caught.value.errors())
    assert found.field == "answers.B7.verdict"
