"""A small fixed part of the accuracy benchmark: fails when the estimates or their intervals fall back.

Plants and exact ultimate points: the published batch, see `published_plants`. The whole batch on fresh seeds is
`make bench`.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchmarks.accuracy import SCENARIOS, record_of
from gainwright import analyse
from gainwright.results import Grade
from published_plants import crossing_plants

PLANTS = {plant.name: plant for plant in crossing_plants()}
NAMES = (
    "P1_T0.1", "P1_T1", "P1_T10", "P2_T0.5", "P2_T4", "P3_T2", "P4_n4", "P5_a0.5", "P7_T5_L10.5", "P8_a0.5", "P9_T0.5",
    "TB_IPDT",
)  # fmt: skip
SEEDS = {"clean": 1, "noisy": 3, "short": 3, "rough": 3, "plant": 3}
REACHED = {
    "clean": (0.02, 0.4),
    "noisy": (0.8, 4.0),
    "short": (0.9, 5.0),
    "rough": (0.7, 3.5),
    "plant": (1.4, 6.0),
}
"""Median and largest-but-one error of the ultimate gain, per cent, above what these very records give."""


@pytest.mark.parametrize("name", SCENARIOS)
def test_accuracy_and_coverage_hold(name: str) -> None:
    errors, held, usable = [], 0, 0
    for plant in NAMES:
        for seed in range(SEEDS[name]):
            true = PLANTS[plant].ultimate_gain
            found = analyse(record_of(PLANTS[plant], SCENARIOS[name], seed))
            if found.grade is Grade.UNUSABLE or found.ultimate_gain is None:
                continue
            usable += 1
            errors.append(100 * abs(math.log(found.ultimate_gain.value / true)))
            held += found.ultimate_gain.low <= true <= found.ultimate_gain.high
    assert usable == len(NAMES) * SEEDS[name]
    median, tail = REACHED[name]
    assert float(np.median(errors)) <= median
    assert sorted(errors)[-2] <= tail
    assert held / usable >= 0.85
