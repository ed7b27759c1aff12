"""Each failure mode of a record: found at twice its bound in nine of ten seeds, and not found on a healthy record.

Bounds are the project's own (common practice and simulation, no other source); records are simulated.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from gainwright import Record, analyse
from gainwright.findings import BOUNDS
from gainwright.results import Analysis, Verdict
from relay_bench import PERIOD, SWING, Backlash, Fault, Slewing, Sticking, relay_run

SEEDS = 10
OFTEN = 9

Case = tuple[Callable[[np.random.Generator], Fault], dict[str, Any]]


def frozen(time: np.ndarray, value: np.ndarray) -> np.ndarray:
    stuck = value.copy()
    begin = int(0.6 * value.size)
    length = int(0.35 * PERIOD / float(time[1] - time[0]))
    stuck[begin : begin + length] = stuck[begin]
    return stuck


def spiking(generator: np.random.Generator) -> Callable[[np.ndarray, np.ndarray], np.ndarray]:
    def sensor(_: np.ndarray, value: np.ndarray) -> np.ndarray:
        leaping = value.copy()
        places = generator.choice(np.arange(60, value.size - 2, 3), 6, replace=False)
        leaping[places] += 1.5 * SWING * generator.choice([-1, 1], 6)
        return leaping

    return sensor


def beating(_: np.ndarray, value: np.ndarray) -> np.ndarray:
    time = np.arange(value.size) * PERIOD / 50
    return np.asarray(value * (1 + 0.5 * np.cos(2 * math.pi * time / (2.6 * PERIOD))))


def growing(_: np.ndarray, value: np.ndarray) -> np.ndarray:
    return np.asarray(value * np.exp(0.16 * np.arange(value.size) / 50))


def bumped(_: np.ndarray, value: np.ndarray) -> np.ndarray:
    upset = value.copy()
    for cycle in (11.2, 12.6):
        begin = int(cycle * 50)
        upset[begin : begin + 20] += 1.8 * SWING
    return upset


CASES: dict[str, Case] = {
    "chatter": (lambda _: Fault(noise=0.09, hysteresis=0.015, cycles=12), {}),
    "hysteresis_wide": (lambda _: Fault(), {"hysteresis": 3 * SWING}),
    "swing_over_noise": (lambda _: Fault(noise=0.6, hysteresis=0.3), {}),
    "quantised": (lambda _: Fault(quantum=0.6, hysteresis=0.4), {}),
    "few_samples": (lambda _: Fault(samples_per_period=4), {}),
    "sampling_sets_period": (lambda _: Fault(samples_per_period=1.5), {}),
    "off_centre": (lambda _: Fault(bias=lambda _: 0.93), {}),
    "drift": (lambda _: Fault(load_per_s=0.1 / PERIOD, cycles=6), {}),
    "swing_trend": (lambda _: Fault(sensor=growing), {}),
    "upset": (lambda _: Fault(sensor=bumped, cycles=11), {}),
    "coupled_loop": (lambda _: Fault(sensor=beating, cycles=9), {}),
    "backlash": (
        lambda _: Fault(actuator=Backlash(1.6), amplitude=lambda k: 1.4 if k < 8 else 2.0, noise=0.01, cycles=8),
        {},
    ),
    "unequal_gain": (
        lambda _: Fault(
            gain=lambda u: 1.0 if u > 0.2 else 0.15, bias=lambda k: 0.0 if k < 8 else 0.45, noise=0.01, cycles=9
        ),
        {},
    ),
    "slew_limited": (lambda _: Fault(actuator=Slewing(2.0 / (0.25 * PERIOD)), shown_by_actuator=True), {}),
    "coarse_output": (lambda _: Fault(), {"output_resolution": 0.8}),
    "output_limited": (lambda _: Fault(), {"commanded_amplitude": 1.3}),
    "sticking": (lambda g: Fault(actuator=Sticking(g, 0.25 * PERIOD)), {}),
    "frozen": (lambda _: Fault(sensor=frozen), {}),
    "spikes": (lambda g: Fault(sensor=spiking(g)), {}),
    "outside_oscillation": (
        lambda _: Fault(outside=lambda t: SWING * math.sin(2 * math.pi * 0.42 * t / PERIOD), hysteresis=0.3, cycles=8),
        {},
    ),
    "hidden_filter": (lambda _: Fault(), {"filter_time_s": PERIOD / 5}),
    "clock": (lambda _: Fault(), {"clock_error": 0.02}),
    "wrong_sign": (lambda _: Fault(), {"effect": -1}),
}


def verdict(analysis: Analysis, name: str) -> Verdict | None:
    return next((f.verdict for f in analysis.findings if f.name == name), None)


@pytest.mark.parametrize("name", CASES)
def test_a_failure_mode_at_twice_its_bound_is_found(name: str) -> None:
    make, options = CASES[name]
    found = 0
    for seed in range(SEEDS):
        generator = np.random.default_rng(seed)
        found += verdict(analyse(relay_run(make(generator), generator), **options), name) is Verdict.FAIL
    assert found >= OFTEN


def test_a_healthy_record_fails_no_finding() -> None:
    fails: dict[str, int] = {}
    for seed in range(SEEDS):
        generator = np.random.default_rng(100 + seed)
        healthy = analyse(
            relay_run(Fault(), generator),
            effect=1,
            commanded_amplitude=1.0,
            output_resolution=0.05,
            filter_time_s=PERIOD / 40,
            clock_error=1e-4,
        )
        for finding in healthy.findings:
            if finding.verdict is Verdict.FAIL:
                fails[finding.name] = fails.get(finding.name, 0) + 1
    assert fails == {}


def test_a_process_that_does_not_answer_is_said_so() -> None:
    generator = np.random.default_rng(1)
    time = np.arange(300.0)
    silent = analyse(Record(time, generator.standard_normal(300), np.where(time < 100, 0.0, 5.0)))
    assert verdict(silent, "no_response") is Verdict.FAIL


def test_gaps_and_uneven_samples_are_found() -> None:
    generator = np.random.default_rng(2)
    record = relay_run(Fault(), generator)
    kept = np.ones(len(record), dtype=bool)
    kept[200:206] = False
    holed = analyse(Record(record.time[kept], record.process_variable[kept], record.controller_output[kept]))
    assert verdict(holed, "gaps") is Verdict.FAIL
    thinned = np.sort(generator.choice(len(record), len(record) // 3, replace=False))
    uneven = analyse(Record(record.time[thinned], record.process_variable[thinned], record.controller_output[thinned]))
    assert verdict(uneven, "jitter") is not Verdict.PASS


def test_every_finding_has_a_case_here_or_beside() -> None:
    beside = {
        "gaps", "jitter", "no_response", "columns_misaligned", "link_latency", "unlike_model", "inverse_response",
        "integrating", "estimates_apart", "interval_wide", "not_settled", "few_cycles",
    }  # fmt: skip
    assert set(CASES) | beside == set(BOUNDS)
