"""What the baseline shows: noise, drift, regular oscillation, timing, quantum."""

from __future__ import annotations

import numpy as np
import pytest

from gainwright_service.listened import Listening, listened, quantum_of
from gainwright_wire.loops import Range

TIME = np.arange(200) * 0.1
SIGNAL = Range(unit="degC", low=0, high=120)


def _heard(values: np.ndarray, time: np.ndarray = TIME) -> Listening:
    heard = listened(time, values, nominal_interval_s=0.1, signal=SIGNAL)
    assert heard is not None
    return heard


def _noise(seed: int = 1) -> np.ndarray:
    return 60 + 0.2 * np.random.default_rng(seed).standard_normal(TIME.size)


def test_white_noise_is_measured_and_is_no_oscillation() -> None:
    heard = [_heard(_noise(seed)) for seed in range(40)]
    assert np.mean([h.noise for h in heard]) == pytest.approx(0.2, rel=0.02)
    assert max(h.regularity for h in heard) < 0.4
    assert all(h.in_range for h in heard)


def test_noise_alone_is_rarely_taken_for_drift() -> None:
    drifting = [_heard(_noise(seed)).drift_per_s != 0 for seed in range(40)]
    assert sum(drifting) <= 6


def test_a_drift_is_measured_less_its_own_uncertainty() -> None:
    assert _heard(_noise() + 0.1 * TIME).drift_per_s == pytest.approx(0.1, rel=0.1)


def test_a_regular_oscillation_stands_out_of_the_noise() -> None:
    assert _heard(_noise() + 0.6 * np.sin(2 * np.pi * TIME / 3)).regularity > 0.6


def test_a_constant_signal_has_neither() -> None:
    heard = _heard(np.full(TIME.size, 60.0))
    assert (heard.noise, heard.drift_per_s, heard.regularity) == (0.0, 0.0, 0.0)


def test_late_samples_show() -> None:
    late = np.cumsum(np.where(np.arange(200) % 10 == 0, 0.3, 0.1))
    assert _heard(_noise(), late).late_ratio == pytest.approx(3.0)


def test_a_signal_beyond_a_healthy_transmitter_is_out_of_range() -> None:
    assert not _heard(np.full(TIME.size, 124.0)).in_range


def test_too_short_a_baseline_says_nothing() -> None:
    assert listened(TIME[:5], _noise()[:5], nominal_interval_s=0.1, signal=SIGNAL) is None


def test_the_quantum_of_a_quantised_signal_is_found_and_none_is_invented() -> None:
    assert quantum_of(np.round(_noise() / 0.05) * 0.05) == pytest.approx(0.05)
    assert quantum_of(_noise()) == 0.0
    assert quantum_of(np.full(50, 3.0)) == 0.0
