"""The forecast's numbers against the exact limit cycle of a first-order process with dead time.

Wang, Hang and Zou, "Low-order modeling from relay feedback", Ind. Eng. Chem. Res. 36(2):375-381, 1997 (equations
from memory; values recomputed by event-driven simulation).
"""

from __future__ import annotations

import pytest

from gainwright_service.prediction import Guess, History, from_guess, from_history, from_limits, planned_switches
from gainwright_wire.tasks import Plan


def _plan(**changes: float | int) -> Plan:
    values = {
        "sample_interval_s": 0.1,
        "listening_s": 10.0,
        "start_amplitude": 1.0,
        "max_amplitude": 1.0,
        "growth": 2.0,
        "output_low": 10.0,
        "output_high": 90.0,
        "max_output_change": 10.0,
        "output_rate_per_s": None,
        "deviation_up": 3.0,
        "deviation_down": 3.0,
        "process_variable_low": 20.0,
        "process_variable_high": 95.0,
        "max_duration_s": 600.0,
        "max_switches": 40,
        "min_dwell_s": 0.0,
        "scored_cycles": 3,
        "precision_percent": 10.0,
        "exit_action": "as_found",
        "exit_value": None,
        "exit_valid_s": 600.0,
        **changes,
    }
    return Plan.model_validate(values)


@pytest.mark.parametrize(
    ("gain", "lag", "dead_time", "hysteresis", "swing", "half_period"),
    [
        (1.0, 10.0, 2.0, 0.0, 0.18126925, 3.66589493),
        (1.0, 10.0, 2.0, 0.1, 0.26314232, 5.38963039),
        (12.8, 16.8, 1.0, 0.0, 0.73967232, 1.94380545),
        (1.0, 1.0, 1.0, 0.0, 0.63212056, 1.48988013),
    ],
)
def test_a_guess_gives_the_exact_swing_and_period(
    gain: float, lag: float, dead_time: float, hysteresis: float, swing: float, half_period: float
) -> None:
    # So narrow a deviation that the experiment would neither grow the relay nor widen the hysteresis beyond the noise.
    plan = _plan(deviation_up=1e-6, deviation_down=1e-6)
    predicted = from_guess(plan, Guess(gain, lag, dead_time, noise=hysteresis / 3.0))
    assert predicted.worst_swing == pytest.approx(swing, rel=1e-6)
    assert predicted.period_s == pytest.approx(2 * half_period, rel=1e-6)


def test_a_long_dead_time_does_not_overflow() -> None:
    predicted = from_guess(_plan(), Guess(1.0, 0.001, 100.0))
    assert predicted.period_s == pytest.approx(200.0, rel=1e-3)


def test_noise_beyond_the_largest_amplitude_is_said_with_what_it_needs() -> None:
    predicted = from_guess(_plan(), Guess(1.0, 10.0, 2.0, noise=0.5))
    assert predicted.no_crossing
    assert predicted.amplitude_needed is not None
    assert predicted.amplitude_needed > 1.0


def test_history_scales_the_swing_with_the_amplitude() -> None:
    predicted = from_history(_plan(start_amplitude=2.0, max_amplitude=4.0), History(0.1, 12.0))
    assert predicted.worst_swing == pytest.approx(0.4)
    assert predicted.period_s == 12.0


def test_limits_alone_promise_the_worst_that_the_guard_lets_happen() -> None:
    predicted = from_limits(_plan(deviation_up=2.0, deviation_down=5.0))
    assert predicted.worst_deviation == pytest.approx(6.0)
    assert predicted.time_to_finish_s == 600.0
    assert predicted.worst_swing is None


def test_growth_from_small_costs_switches() -> None:
    assert planned_switches(_plan()) == 10
    assert planned_switches(_plan(max_amplitude=4.0)) == 12
