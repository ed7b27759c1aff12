"""Loops and requests on the wire for the service's tests."""

from __future__ import annotations

import copy
from typing import Any

from gainwright_wire.loops import Loop
from gainwright_wire.tasks import StartExperiment

BENCH: dict[str, Any] = {
    "tag": "TIC-201",
    "description": "dye-bath temperature",
    "site": "local",
    "class": "bench",
    "adapter": {
        "kind": "modbus",
        "host": "127.0.0.1",
        "port": 5020,
        "device_id": 1,
        "process_variable": {"table": "input", "address": 0},
        "controller_output": {"table": "holding", "address": 0},
        "mode": {"address": 10},
        "heartbeat": {"address": 20, "watchdog": "resting", "timeout_s": 3},
    },
    "process_variable": {"unit": "degC", "low": 0, "high": 120},
    "controller_output": {"unit": "%", "low": 0, "high": 100},
    "output_effect": "raises",
    "sample_interval_s": 0.1,
    "limits": {
        "process_variable_low": 20,
        "process_variable_high": 95,
        "deviation_up": 3,
        "deviation_down": 3,
        "output_low": 10,
        "output_high": 90,
        "max_amplitude": 5,
        "max_output_change": 10,
    },
    "exit_action": {"kind": "as_found"},
    "interaction_groups": ["steam-main"],
    "controller": {
        "form": "ideal",
        "gain": "percent_per_percent",
        "input_low": 0,
        "input_high": 120,
        "output_low": 0,
        "output_high": 100,
        "sample_interval_s": 0.1,
    },
}


def loop_document(**changes: Any) -> dict[str, Any]:
    """The bench loop's document with fields changed; a dotted path is written with two underscores."""
    document = copy.deepcopy(BENCH)
    for path, value in changes.items():
        owner = document
        *parents, name = path.split("__")
        for parent in parents:
            owner = owner[parent]
        owner["class" if name == "loop_class" else name] = value
    return document


def a_loop(**changes: Any) -> Loop:
    """The bench loop with fields changed."""
    return Loop.model_validate(loop_document(**changes))


def a_start(**changes: Any) -> StartExperiment:
    """What a person at the bench says."""
    return StartExperiment.model_validate({"attended": True, "bench_sentence_signed": True, **changes})
