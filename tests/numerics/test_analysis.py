"""The analysis of simulated relay tests against the exact ultimate points of published processes.

Processes and exact values as in the published batch of `data/benchmark_plants.csv` (Astrom & Hagglund 2004/2006, values
recomputed; see `published_plants`).
"""

from __future__ import annotations

import math
import warnings

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from gainwright import Record, analyse
from gainwright.errors import MalformedRecord, OutOfDomain
from gainwright.margins import ultimate_point
from gainwright.models import TransferFunction
from gainwright.relay import RelayLaw
from gainwright.results import Grade
from gainwright.simulation import Disturbances, simulate_relay_test

PROCESSES = {
    "first order": TransferFunction((1.0,), (3.0, 1.0), 0.9),
    "two lags": TransferFunction((2.0,), (50.0, 15.0, 1.0), 1.0),
    "underdamped": TransferFunction((1.0,), (1.0, 0.8, 1.0), 0.5),
    "integrating": TransferFunction((0.5,), (1.0, 0.0), 2.0),
    "integrating with lag": TransferFunction((0.35,), (0.3, 1.0, 0.0), 0.7),
    "negative": TransferFunction((-1.1,), (2.8, 4.7, 1.0), 0.5),
}


def a_test(process: TransferFunction, *, noise_share: float = 0.03, seed: int = 1, cycles: int = 4) -> Record:
    """A relay test of 50 samples per period with noise as a share of the swing."""
    gain, period = ultimate_point(process)
    swing = 4 / (math.pi * gain)
    effect = 1 if process.numerator[-1] > 0 else -1
    law = RelayLaw(0.0, max(3 * noise_share, 0.05) * swing, effect)
    return simulate_relay_test(
        process,
        law,
        amplitude=1.0,
        sample_interval_s=period / 50,
        cycles=cycles,
        baseline_s=period,
        disturbances=Disturbances(noise=noise_share * swing),
        generator=np.random.default_rng(seed),
    )


@pytest.mark.parametrize("name", PROCESSES)
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_ultimate_point_is_within_five_per_cent_and_its_interval_within_ten(name: str, seed: int) -> None:
    process = PROCESSES[name]
    gain, period = ultimate_point(process)
    analysis = analyse(a_test(process, seed=seed))
    assert analysis.ultimate_gain is not None
    assert analysis.ultimate_period is not None
    assert analysis.ultimate_gain.value == pytest.approx(gain, rel=0.05)
    assert analysis.ultimate_period.value == pytest.approx(period, rel=0.03)
    assert (analysis.ultimate_gain.high - analysis.ultimate_gain.low) / gain <= 0.10
    assert analysis.model is not None
    assert analysis.grade is not Grade.UNUSABLE


def test_a_record_without_a_whole_cycle_is_unusable_and_says_so() -> None:
    time = np.arange(100.0)
    analysis = analyse(Record(time, np.sin(time / 10), np.where(time < 50, 1.0, 2.0)))
    assert analysis.grade is Grade.UNUSABLE
    assert analysis.ultimate_gain is None
    assert analysis.reasons


def test_scaling_the_process_variable_scales_the_gain_inversely() -> None:
    record = a_test(PROCESSES["two lags"])
    first = analyse(record)
    second = analyse(Record(record.time, 7.0 * record.process_variable, record.controller_output))
    assert first.ultimate_gain is not None
    assert second.ultimate_gain is not None
    assert second.ultimate_gain.value == pytest.approx(first.ultimate_gain.value / 7.0, rel=1e-3)


def test_stretching_time_stretches_the_period() -> None:
    record = a_test(PROCESSES["two lags"])
    first = analyse(record)
    second = analyse(Record(3.0 * record.time, record.process_variable, record.controller_output))
    assert first.ultimate_period is not None
    assert second.ultimate_period is not None
    assert second.ultimate_period.value == pytest.approx(3.0 * first.ultimate_period.value, rel=1e-3)


@pytest.mark.parametrize(
    ("columns", "field"),
    [
        (([0, 1, 2], [1, 2, 3], [1, 2, 3]), "time"),
        ((np.arange(10.0), np.full(10, np.nan), np.ones(10)), "process_variable"),
        ((np.arange(10.0), np.ones(10), np.full(10, np.inf)), "controller_output"),
        ((np.arange(10.0)[::-1], np.ones(10), np.ones(10)), "time"),
        ((np.arange(10.0), np.ones(9), np.ones(10)), "process_variable"),
        (([], [], []), "time"),
    ],
)
def test_a_malformed_record_is_one_error_that_names_the_column(columns: tuple, field: str) -> None:
    with pytest.raises(MalformedRecord) as caught:
        Record(*columns)
    assert caught.value.field == field


@pytest.mark.parametrize(
    "options", [{"hysteresis": -1.0}, {"latency_s": math.nan}, {"confidence": 1.0}, {"output_is": "x"}]
)
def test_an_option_outside_its_domain_is_named(options: dict) -> None:
    with pytest.raises(OutOfDomain):
        analyse(a_test(PROCESSES["two lags"]), **options)


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.integers(0, 2**31), st.integers(8, 300), st.sampled_from([1e-6, 1.0, 1e6]))
def test_random_records_get_an_answer_without_a_warning(seed: int, samples: int, size: float) -> None:
    random = np.random.default_rng(seed)
    time = np.cumsum(random.uniform(0.01, 2.0, samples))
    value = size * np.cumsum(random.standard_normal(samples))
    output = np.where(random.uniform(size=samples) < 0.5, 1.0, -1.0)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        analysis = analyse(Record(time, value, output))
    if analysis.ultimate_gain is not None:
        assert 0 < analysis.ultimate_gain.low <= analysis.ultimate_gain.value <= analysis.ultimate_gain.high < math.inf
