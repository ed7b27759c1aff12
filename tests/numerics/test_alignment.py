"""The output column's reading judged by the relay's law (common practice, no source; records are simulated)."""

from __future__ import annotations

import math

import numpy as np
import pytest

from gainwright import Record, analyse
from gainwright.margins import ultimate_point
from gainwright.models import TransferFunction
from gainwright.relay import RelayLaw
from gainwright.results import Grade, Verdict
from gainwright.simulation import Disturbances, simulate_relay_test

PROCESS = TransferFunction((2.0,), (50.0, 15.0, 1.0), 1.0)
GAIN, PERIOD = ultimate_point(PROCESS)
SWING = 4 / (math.pi * GAIN)
HYSTERESIS = 0.15 * SWING


def a_test(seed: int) -> Record:
    return simulate_relay_test(
        PROCESS,
        RelayLaw(0.0, HYSTERESIS),
        amplitude=1.0,
        sample_interval_s=PERIOD / 50,
        cycles=4,
        baseline_s=PERIOD,
        disturbances=Disturbances(noise=0.05 * SWING),
        generator=np.random.default_rng(seed),
    )


def late(record: Record) -> Record:
    """The record with its output read back before each sample, so that each change shows one sample late."""
    output = record.controller_output
    return Record(record.time, record.process_variable, np.append(output[0], output[:-1]))


@pytest.mark.parametrize("known", [True, False])
@pytest.mark.parametrize("seed", range(5))
def test_a_column_one_sample_late_is_found_and_the_interval_holds_the_truth(seed: int, known: bool) -> None:
    relay = {"reference": 0.0, "hysteresis": HYSTERESIS} if known else {}
    found = analyse(late(a_test(seed)), **relay)
    finding = next(f for f in found.findings if f.name == "columns_misaligned")
    assert finding.verdict is not Verdict.PASS
    assert found.grade is not Grade.GOOD
    assert found.ultimate_gain is not None
    assert found.ultimate_gain.low <= GAIN <= found.ultimate_gain.high


@pytest.mark.parametrize("seed", range(5))
def test_a_column_as_stated_passes_in_either_reading(seed: int) -> None:
    record = a_test(seed)
    for stated in (analyse(record), analyse(late(record), output_is="read_back_before")):
        finding = next(f for f in stated.findings if f.name == "columns_misaligned")
        assert (finding.verdict, finding.value) == (Verdict.PASS, 0.0)
