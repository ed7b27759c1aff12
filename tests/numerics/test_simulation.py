"""The simulator against closed-form responses and exact limit cycles."""

from __future__ import annotations

import math
import time

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gainwright.errors import NoLimitCycle, OutOfDomain
from gainwright.models import TransferFunction
from gainwright.relay import RelayLaw
from gainwright.simulation import Disturbances, PlantSimulation, respond, simulate, simulate_relay_test

FIRST_ORDER = TransferFunction((2.0,), (5.0, 1.0), 1.3)


def _poles(*lags: float) -> tuple[float, ...]:
    polynomial = np.array([1.0])
    for lag in lags:
        polynomial = np.polymul(polynomial, [lag, 1.0])
    return tuple(float(c) for c in polynomial)


def _erlang(t: npt.NDArray[np.float64], n: int) -> npt.NDArray[np.float64]:
    """Step response of 1/(s+1)^n: the distribution of a sum of n exponential times."""
    below = sum(t**k / math.factorial(k) for k in range(n))
    return np.asarray(1.0 - np.exp(-t) * below)


GRID = np.linspace(0.0, 30.0, 301)

STEP_RESPONSES = {
    "first order with dead time": (
        TransferFunction((2.0,), (5.0, 1.0), 1.37),
        lambda t: np.where(t > 1.37, 2.0 * (1.0 - np.exp(-(t - 1.37) / 5.0)), 0.0),
    ),
    "eight equal lags": (TransferFunction((1.0,), _poles(*[1.0] * 8)), lambda t: _erlang(t, 8)),
    "integrator with dead time": (
        TransferFunction((0.5,), (1.0, 0.0), 2.05),
        lambda t: np.maximum(0.5 * (t - 2.05), 0.0),
    ),
    "double integrator": (TransferFunction((1.0,), (1.0, 0.0, 0.0)), lambda t: 0.5 * t**2),
    "integrator with lag": (
        TransferFunction((1.0,), (1.0, 1.0, 0.0)),
        lambda t: t - 1.0 + np.exp(-t),
    ),
    "complex poles": (
        TransferFunction((1.0,), (1.0, 0.4, 1.04)),
        lambda t: (1.0 - np.exp(-0.2 * t) * (np.cos(t) + 0.2 * np.sin(t))) / 1.04,
    ),
    "inverse response": (
        TransferFunction((-0.5, 1.0), _poles(1.0, 1.0, 1.0)),
        lambda t: _erlang(t, 3) - 0.5 * np.exp(-t) * t**2 / 2.0,
    ),
    "lags from 1 to 0.001": (
        TransferFunction((1.0,), _poles(1.0, 0.001)),
        lambda t: 1.0 - (np.exp(-t) - 0.001 * np.exp(-t / 0.001)) / 0.999,
    ),
}


@pytest.mark.parametrize(("plant", "exact"), STEP_RESPONSES.values(), ids=STEP_RESPONSES)
def test_a_step_gives_the_closed_form_response(plant, exact) -> None:
    values = respond(plant, [0.0], [1.0], GRID)
    expected = exact(GRID)
    assert values == pytest.approx(expected, abs=1e-9 * max(1.0, float(np.max(np.abs(expected)))))


@settings(max_examples=40, deadline=None)
@given(
    steps=st.lists(st.floats(0.001, 2.0), min_size=3, max_size=25),
    levels=st.lists(st.floats(-5.0, 5.0), min_size=3, max_size=25),
    dead_time=st.floats(0.0, 6.0),
)
def test_irregular_steps_superpose_delayed_step_responses(
    steps: list[float], levels: list[float], dead_time: float
) -> None:
    plant = PlantSimulation(TransferFunction((2.0,), (5.0, 1.0), dead_time), resting_output=1.0, resting_value=7.0)
    now, last, changes = 0.0, 1.0, []
    for duration, level in zip(steps, levels, strict=False):
        changes.append((now, level - last))
        now, last = now + duration, level
        value = plant.step(duration, level)
        ages = [(now - at - dead_time, change) for at, change in changes]
        exact = 7.0 + sum(2.0 * change * -math.expm1(-age / 5.0) for age, change in ages if age > 0)
        assert value == pytest.approx(exact, abs=1e-9)


def test_a_long_run_of_regular_steps_keeps_its_few_matrix_exponentials() -> None:
    plant = PlantSimulation(FIRST_ORDER)
    for k in range(5000):
        plant.step(0.1, float(k % 7))
    assert len(plant._realisation._steps) <= 6


def test_the_process_rests_at_its_operating_point_until_the_output_moves() -> None:
    plant = PlantSimulation(FIRST_ORDER, resting_output=40.0, resting_value=55.0)
    assert {plant.step(0.7, 40.0) for _ in range(20)} == {55.0}
    assert plant.step(1.3, 41.0) == 55.0
    assert plant.step(0.1, 41.0) > 55.0


def test_a_constant_load_acts_like_a_higher_output() -> None:
    loaded = PlantSimulation(FIRST_ORDER, load=0.5)
    moved = PlantSimulation(FIRST_ORDER)
    for level in (0.0, 1.0, 1.0, -1.0, -1.0):
        assert loaded.step(0.9, level) == pytest.approx(moved.step(0.9, level + 0.5), abs=1e-14)


def test_a_biproper_process_follows_its_input_at_once() -> None:
    plant = PlantSimulation(TransferFunction((2.0, 1.0), (1.0, 1.0)))
    assert plant.step(1e-9, 1.0) == pytest.approx(2.0, abs=1e-8)


def test_the_zero_order_hold_and_the_switch_list_agree() -> None:
    generator = np.random.default_rng(5)
    times = np.cumsum(generator.uniform(0.05, 0.4, 60))
    outputs = np.repeat(generator.normal(size=12), 5)
    held = simulate(FIRST_ORDER, times, outputs, resting_value=3.0)
    switched = respond(FIRST_ORDER, times[::5], outputs[::5], times, resting_value=3.0)
    assert held == pytest.approx(switched, abs=1e-12)


@pytest.mark.parametrize(
    ("plant", "law", "amplitude", "bias", "swing", "period"),
    [
        # Exact limit cycles of the first-order process with dead time: Wang, Hang and Zou, Ind. Eng. Chem. Res.
        # 36(2):375-381, 1997 (equations from memory, recomputed).
        (TransferFunction((1.0,), (10.0, 1.0), 2.0), RelayLaw(0.0, 0.0), 1.0, 0.0, 0.18126925, 2 * 3.66589493),
        (
            TransferFunction((1.0,), (10.0, 1.0), 2.0),
            RelayLaw(0.0, 0.1),
            1.0,
            0.2,
            (0.29939617 + 0.22688847) / 2,
            4.60186001 + 6.51436038,
        ),
        # Integrating process with dead time, asymmetric levels +1.5 / -1 (derived, recomputed).
        (TransferFunction((0.5,), (1.0, 0.0), 2.0), RelayLaw(0.0, 0.1), 1.25, 0.25, 1.35, 3.6 + 5.4),
        # 1/(s+1)^3 (Tsypkin's half-period condition, recomputed).
        (TransferFunction((1.0,), _poles(1, 1, 1)), RelayLaw(0.0, 0.0), 1.0, 0.0, 0.16306148, 3.6797507),
    ],
)
def test_a_finely_sampled_relay_test_settles_on_the_exact_limit_cycle(
    plant: TransferFunction, law: RelayLaw, amplitude: float, bias: float, swing: float, period: float
) -> None:
    interval = period / 2000
    record = simulate_relay_test(plant, law, amplitude=amplitude, bias=bias, sample_interval_s=interval, cycles=9)
    rises = record.time[1:][np.diff(record.controller_output) > 0]
    last = record.process_variable[record.time >= rises[-2]]
    # Each decision comes up to one interval late, like so much more dead time; a period holds at most four of it.
    assert rises[-1] - rises[-2] == pytest.approx(period, abs=5 * interval)
    assert np.ptp(last) / 2 == pytest.approx(swing, rel=4e-3)


def test_a_lowering_effect_mirrors_the_output() -> None:
    raising = simulate_relay_test(
        FIRST_ORDER, RelayLaw(5.0, 0.1), amplitude=1.0, sample_interval_s=0.1, resting_value=5.0
    )
    lowered = TransferFunction((-2.0,), (5.0, 1.0), 1.3)
    lowering = simulate_relay_test(
        lowered, RelayLaw(5.0, 0.1, effect=-1), amplitude=1.0, sample_interval_s=0.1, resting_value=5.0
    )
    assert lowering.controller_output == pytest.approx(-raising.controller_output)
    assert lowering.process_variable == pytest.approx(raising.process_variable)


def test_the_record_holds_the_baseline_then_whole_cycles() -> None:
    record = simulate_relay_test(
        FIRST_ORDER,
        RelayLaw(20.0, 0.1),
        amplitude=2.0,
        sample_interval_s=0.1,
        cycles=3,
        baseline_s=4.0,
        resting_output=30.0,
        resting_value=20.0,
    )
    resting = record.time < 4.0 - 1e-9
    assert np.all(record.controller_output[resting] == 30.0)
    assert np.all(record.process_variable[resting] == 20.0)
    assert set(record.controller_output[~resting]) == {28.0, 32.0}
    assert np.count_nonzero(np.diff(record.controller_output)) == 1 + 2 * 3


def test_disturbances_do_what_their_names_say() -> None:
    settings_ = {"amplitude": 1.0, "sample_interval_s": 0.05, "cycles": 12, "baseline_s": 200.0}
    law = RelayLaw(0.0, 0.5)
    wanted = Disturbances(noise=0.1, noise_correlation=0.8, quantum=0.01, jitter=0.1, missing=0.1)
    record = simulate_relay_test(FIRST_ORDER, law, **settings_, disturbances=wanted, generator=np.random.default_rng(3))
    whole = simulate_relay_test(
        FIRST_ORDER,
        law,
        **settings_,
        disturbances=Disturbances(noise=0.1, noise_correlation=0.8),
        generator=np.random.default_rng(3),
    )
    quiet = whole.process_variable[whole.time < 199.0]
    assert np.std(quiet) == pytest.approx(0.1, rel=0.1)
    assert np.corrcoef(quiet[1:], quiet[:-1])[0, 1] == pytest.approx(0.8, abs=0.05)
    assert record.process_variable / 0.01 == pytest.approx(np.round(record.process_variable / 0.01), abs=1e-6)
    assert len(record) == pytest.approx(0.9 * (record.time[-1] / 0.05), rel=0.03)
    assert np.max(np.abs(record.time / 0.05 - np.round(record.time / 0.05))) == pytest.approx(0.1, abs=0.01)


def test_a_load_step_makes_the_half_periods_unequal_from_its_time_on() -> None:
    # On an integrating process the load follows from the half-periods: load = d (Toff - Ton)/(Ton + Toff).
    record = simulate_relay_test(
        TransferFunction((1.0,), (1.0, 0.0), 1.0),
        RelayLaw(0.0, 0.1),
        amplitude=1.0,
        sample_interval_s=0.005,
        cycles=10,
        disturbances=Disturbances(load_step=0.2, load_time_s=12.3456),
    )
    switches = record.time[1:][np.diff(record.controller_output) != 0]
    halves = np.diff(switches)
    assert abs(halves[0] - halves[1]) < 0.01
    long, short = max(halves[-2:]), min(halves[-2:])
    assert (long - short) / (long + short) == pytest.approx(0.2, abs=0.003)


def test_the_same_seed_gives_the_same_record() -> None:
    records = [
        simulate_relay_test(
            FIRST_ORDER,
            RelayLaw(0.0, 0.3),
            amplitude=1.0,
            sample_interval_s=0.1,
            disturbances=Disturbances(noise=0.05),
            generator=np.random.default_rng(11),
        )
        for _ in range(2)
    ]
    assert np.array_equal(records[0].process_variable, records[1].process_variable)


def test_a_relay_that_never_switches_is_named() -> None:
    with pytest.raises(NoLimitCycle, match="cycles"):
        simulate_relay_test(FIRST_ORDER, RelayLaw(0.0, 3.0), amplitude=1.0, sample_interval_s=0.1, max_samples=2000)


@pytest.mark.parametrize(
    ("call", "field"),
    [
        (lambda: PlantSimulation(TransferFunction((1.0, 0.0), (1.0,))), "numerator"),
        (lambda: PlantSimulation(TransferFunction((1.0,), (1.0, 1.0), -1.0)), "dead_time"),
        (lambda: PlantSimulation(FIRST_ORDER).step(-0.1, 0.0), "duration"),
        (lambda: PlantSimulation(FIRST_ORDER).step(math.nan, 0.0), "duration"),
        (lambda: respond(FIRST_ORDER, [1.0, 0.0], [1.0, 1.0], [0.0]), "switch_time"),
        (lambda: respond(FIRST_ORDER, [0.0, 1.0], [1.0], [0.0]), "level"),
        (
            lambda: simulate_relay_test(
                FIRST_ORDER,
                RelayLaw(0.0, 0.1),
                amplitude=1.0,
                sample_interval_s=0.1,
                disturbances=Disturbances(noise=1.0),
            ),
            "generator",
        ),
    ],
)
def test_bad_arguments_are_named(call, field: str) -> None:
    with pytest.raises(OutOfDomain) as caught:
        call()
    assert field in caught.value.field


def test_a_short_record_is_simulated_in_a_few_milliseconds() -> None:
    start = time.perf_counter()
    record = simulate_relay_test(FIRST_ORDER, RelayLaw(0.0, 0.1), amplitude=1.0, sample_interval_s=0.1, cycles=5)
    assert time.perf_counter() - start < 0.001 * len(record)
