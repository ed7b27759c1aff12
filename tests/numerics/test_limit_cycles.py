"""Exact limit cycles against published vectors, the table of exact cycles, and simulation."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from gainwright.describing import ultimate_gain_from_swing
from gainwright.errors import NoLimitCycle, OutOfDomain
from gainwright.limit_cycles import (
    LimitCycle,
    first_order_from_limit_cycle,
    first_order_limit_cycle,
    integrating_from_limit_cycle,
    integrating_limit_cycle,
    symmetric_limit_cycle,
)
from gainwright.margins import ultimate_point
from gainwright.models import TransferFunction
from gainwright.relay import RelayLaw
from gainwright.simulation import simulate_relay_test
from published_plants import lags

# Wang, Hang & Zou, Ind. Eng. Chem. Res. 36(2):375-381, 1997 (equations from memory; vectors recomputed by an
# event-driven simulation): K, T, L, d, eps, mu0 -> y_max, y_min, T_high, T_low.
FIRST_ORDER = [
    ((1, 10, 2, 1, 0, 0), (0.18126925, -0.18126925, 3.66589493, 3.66589493)),
    ((1, 10, 2, 1, 0.1, 0), (0.26314232, -0.26314232, 5.38963039, 5.38963039)),
    ((1, 10, 2, 1, 0.1, 0.2), (0.29939617, -0.22688847, 4.60186001, 6.51436038)),
    ((12.8, 16.8, 1, 1, 0, 0), (0.73967232, -0.73967232, 1.94380545, 1.94380545)),
    ((1, 1, 1, 1, 0, 0), (0.63212056, -0.63212056, 1.48988013, 1.48988013)),
    ((1, 1, 1, 1, 0.05, 0.3), (0.84015070, -0.46087836, 1.34266920, 1.86266318)),
    ((2, 5, 10, 0.5, 0.1, -0.1), (0.70526530, -1.05113119, 14.86235925, 12.74655543)),
    ((1, 1, 5, 1, 0, 0.25), (1.24157757, -0.74494654, 5.46747370, 5.97660914)),
    ((2, 8, 3, 1.5, 0.1, 0.3), (1.194488, -0.819235, 4.865628, 6.571938)),
]


@pytest.mark.parametrize(("given_", "published"), FIRST_ORDER)
def test_the_first_order_cycle_meets_its_vector(given_: tuple[float, ...], published: tuple[float, ...]) -> None:
    k, t, lag, d, eps, bias = given_
    cycle = first_order_limit_cycle(k, t, lag, d, hysteresis=eps, bias=bias)
    digits = 6e-7 if given_[0] == 2 and t == 8 else 6e-9
    assert (cycle.highest, cycle.lowest, cycle.time_up, cycle.time_down) == pytest.approx(published, abs=digits)


@pytest.mark.parametrize(("given_", "published"), FIRST_ORDER)
def test_the_inverse_recovers_the_first_order_process(given_: tuple[float, ...], published: tuple[float, ...]) -> None:
    k, t, lag, d, eps, bias = given_
    cycle = first_order_limit_cycle(k, t, lag, d, hysteresis=eps, bias=bias)
    assert first_order_from_limit_cycle(cycle, k, d, hysteresis=eps, bias=bias) == pytest.approx((t, lag), rel=1e-9)


# Integrating process with dead time (derived; recomputed by simulation): Kv, L, d1, d2, eps.
INTEGRATING = [
    ((1, 1, 1, 1, 0), (1, -1, 2, 2)),
    ((0.5, 2, 1, 1, 0.1), (1.1, -1.1, 4.4, 4.4)),
    ((0.5, 2, 1.5, 1, 0.1), (1.6, -1.1, 3.6, 5.4)),
]


@pytest.mark.parametrize(("given_", "published"), INTEGRATING)
def test_the_integrating_cycle_meets_its_vector_and_inverts(
    given_: tuple[float, ...], published: tuple[float, ...]
) -> None:
    kv, lag, up, down, eps = given_
    cycle = integrating_limit_cycle(kv, lag, up, down, hysteresis=eps)
    assert (cycle.highest, cycle.lowest, cycle.time_up, cycle.time_down) == pytest.approx(published, abs=1e-12)
    assert up * cycle.time_up == pytest.approx(down * cycle.time_down)
    assert integrating_from_limit_cycle(cycle, up, down, hysteresis=eps) == pytest.approx((kv, lag), rel=1e-12)


@settings(max_examples=100, deadline=None)
@given(
    k=st.floats(0.01, 100),
    t=st.floats(0.1, 100),
    ratio=st.floats(0.02, 8),
    d=st.floats(0.1, 10),
    eps_share=st.floats(0, 0.5),
    bias_share=st.floats(-0.4, 0.4),
)
def test_first_order_cycles_scale_and_round_trip(
    k: float, t: float, ratio: float, d: float, eps_share: float, bias_share: float
) -> None:
    arguments = {"hysteresis": eps_share * k * d, "bias": bias_share * d}
    cycle = first_order_limit_cycle(k, t, ratio * t, d, **arguments)
    assume(cycle.highest < (1 + bias_share) * k * d * (1 - 1e-6))
    assert first_order_from_limit_cycle(cycle, k, d, **arguments) == pytest.approx((t, ratio * t), rel=1e-6)
    slower = first_order_limit_cycle(k, 3 * t, 3 * ratio * t, d, **arguments)
    assert slower.period == pytest.approx(3 * cycle.period)
    assert slower.swing == pytest.approx(cycle.swing)


def test_a_first_order_cycle_is_what_the_relay_settles_in() -> None:
    exact = first_order_limit_cycle(1.0, 10.0, 2.0, 1.0, hysteresis=0.1, bias=0.2)
    record = simulate_relay_test(
        TransferFunction((1.0,), lags(10), 2.0),
        RelayLaw(0.0, 0.1),
        amplitude=1.0,
        bias=0.2,
        sample_interval_s=0.002,
        cycles=3,
    )
    switches = record.time[1:][np.diff(record.controller_output) != 0]
    assert np.diff(switches)[-2:] == pytest.approx([exact.time_up, exact.time_down], abs=0.008)
    last = record.process_variable[record.time > switches[-3]]
    assert (np.max(last), np.min(last)) == pytest.approx((exact.highest, exact.lowest), abs=4e-4)


# The classical band of the textbook gain's error for first order with dead time: Li, Eskinat & Luyben, Ind. Eng.
# Chem. Res. 30(7):1530-1541, 1991 (-18 % to +27 %, from memory); limits 8/pi^2 - 1 and 4/pi - 1.
BAND = [
    (0.01, 157.716855, 127.961635, 3.983919, 3.980198),
    (0.1, 16.350554, 13.379624, 3.850004, 3.818057),
    (0.2, 8.502425, 7.024024, 3.720761, 3.665895),
    (0.5, 3.806883, 3.235931, 3.421101, 3.327186),
    (1, 2.261826, 2.014235, 3.097060, 2.979760),
    (2, 1.519803, 1.472524, 2.745032, 2.623081),
    (5, 1.132112, 1.281877, 2.367741, 2.275909),
    (10, 1.040170, 1.273297, 2.194790, 2.138625),
]


@pytest.mark.parametrize(("ratio", "exact_gain", "relay_gain", "exact_period", "relay_period"), BAND)
def test_the_textbook_error_on_first_order_processes_is_as_tabulated(
    ratio: float, exact_gain: float, relay_gain: float, exact_period: float, relay_period: float
) -> None:
    process = TransferFunction((1.0,), lags(1.0), ratio)
    gain, period = ultimate_point(process)
    cycle = first_order_limit_cycle(1.0, 1.0, ratio, 1.0)
    assert (gain, period / ratio) == pytest.approx((exact_gain, exact_period), rel=5e-7)
    assert ultimate_gain_from_swing(cycle.swing, 1.0) == pytest.approx(relay_gain, rel=5e-7)
    assert cycle.period / ratio == pytest.approx(relay_period, rel=5e-7)


@pytest.mark.parametrize(("ratio", "limit"), [(1e-4, 8 / math.pi**2 - 1), (1e3, 4 / math.pi - 1)])
def test_the_textbook_error_runs_from_minus_19_to_plus_27_percent(ratio: float, limit: float) -> None:
    gain, _ = ultimate_point(TransferFunction((1.0,), lags(1.0), ratio))
    cycle = first_order_limit_cycle(1.0, 1.0, ratio, 1.0)
    assert ultimate_gain_from_swing(cycle.swing, 1.0) / gain - 1 == pytest.approx(limit, abs=1e-4)
    assert round(100 * (8 / math.pi**2 - 1), 2) == -18.94
    assert round(100 * (4 / math.pi - 1), 2) == 27.32


PLANTS = {
    "1/(s+1)^3": TransferFunction((1.0,), lags(1, 1, 1)),
    "1/(s+1)^4": TransferFunction((1.0,), lags(1, 1, 1, 1)),
    "1/(s+1)^8": TransferFunction((1.0,), lags(*[1] * 8)),
    "e^-s/(s+1)": TransferFunction((1.0,), lags(1), 1.0),
    "e^-s/(0.05s+1)^2": TransferFunction((1.0,), lags(0.05, 0.05), 1.0),
    "e^-s/(s+1)^2": TransferFunction((1.0,), lags(1, 1), 1.0),
    "2e^-s/((10s+1)(5s+1))": TransferFunction((2.0,), lags(10, 5), 1.0),
    "4e^-3.5s/(7s+1)": TransferFunction((4.0,), lags(7), 3.5),
    "1/((5s+1)(2s+1)(s+1))": TransferFunction((1.0,), lags(5, 2, 1)),
    "0.039/(5s+1)^3": TransferFunction((0.039,), lags(5, 5, 5)),
    "1/(s(s+1)^2)": TransferFunction((1.0,), (*lags(1, 1), 0.0)),
    "e^-0.5s/(s(s+1))": TransferFunction((1.0,), (*lags(1), 0.0), 0.5),
    "(1-s)/(s+1)^3": TransferFunction((-1.0, 1.0), lags(1, 1, 1)),
    "12.8e^-s/(16.8s+1)": TransferFunction((12.8,), lags(16.8), 1.0),
    "19.4e^-3s/(14.4s+1)": TransferFunction((19.4,), lags(14.4), 3.0),
    "1/((s+1)(.1s+1)(.01s+1)(.001s+1))": TransferFunction((1.0,), lags(1, 0.1, 0.01, 0.001)),
    "1/((s^2+1.4s+1)(s+1)) [P9 T=1]": TransferFunction((1.0,), tuple(np.polymul([1, 1.4, 1], [1, 1]).tolist())),
    "e^-s/s": TransferFunction((1.0,), (1.0, 0.0), 1.0),
}
SHORTER_SOLUTION = ("e^-s/(0.05s+1)^2", "0.7224680562")
"""The row of a dead-time-dominant process's second solution, which a test from rest does not reach."""

TABLE = Path(__file__).resolve().parents[1] / "data" / "relay_limit_cycles.csv"


def _rows() -> list[dict[str, str]]:
    with TABLE.open(encoding="utf-8", newline="") as file:
        return [r for r in csv.DictReader(file) if (r["plant"], r["P_exact_limit_cycle"]) != SHORTER_SOLUTION]


@pytest.mark.parametrize("row", _rows(), ids=lambda row: f"{row['plant']} eps {row['eps']}")
def test_the_half_period_condition_meets_the_table_of_exact_cycles(row: dict[str, str]) -> None:
    process, eps = PLANTS[row["plant"]], float(row["eps"])
    cycle = symmetric_limit_cycle(process, float(row["d"]), hysteresis=eps)
    assert cycle.period == pytest.approx(float(row["P_exact_limit_cycle"]), rel=3e-8)
    assert cycle.swing == pytest.approx(float(row["a_exact_limit_cycle"]), rel=3e-8)
    textbook = ultimate_gain_from_swing(cycle.swing, 1.0)
    assert textbook == pytest.approx(float(row["KuDF=4d/(pi a)"]), rel=3e-8) or eps > 0
    assert ultimate_point(process) == pytest.approx((float(row["Ku_exact"]), float(row["Tu_exact"])), rel=3e-9)


def test_every_row_of_the_table_but_one_is_checked() -> None:
    assert len(_rows()) == 23


@pytest.mark.parametrize(
    ("plant", "eps", "textbook"),
    [
        ("1/(s+1)^3", 0.02, 6.599),
        ("1/(s+1)^3", 0.05, 5.616),
        ("1/(s+1)^4", 0.1, 3.174),
        ("2e^-s/((10s+1)(5s+1))", 0.05, 5.188),
    ],
)
def test_hysteresis_makes_the_textbook_gain_too_small_by_the_published_amount(
    plant: str, eps: float, textbook: float
) -> None:
    # Recomputed from exact limit cycles; the error easily exceeds that of the describing function itself.
    cycle = symmetric_limit_cycle(PLANTS[plant], 1.0, hysteresis=eps)
    assert ultimate_gain_from_swing(cycle.swing, 1.0, eps) == pytest.approx(textbook, abs=6e-4)
    assert ultimate_gain_from_swing(cycle.swing, 1.0, eps) < ultimate_point(PLANTS[plant])[0]


@settings(max_examples=40, deadline=None)
@given(
    k=st.floats(0.1, 10),
    t=st.floats(0.1, 10),
    ratio=st.floats(0.01, 5),
    eps_share=st.floats(0, 0.95),
)
def test_the_half_period_condition_agrees_with_the_closed_form(
    k: float, t: float, ratio: float, eps_share: float
) -> None:
    closed = first_order_limit_cycle(k, t, ratio * t, 2.0, hysteresis=eps_share * k * 2.0)
    process = TransferFunction((-k,), lags(t), ratio * t)
    found = symmetric_limit_cycle(process, 2.0, hysteresis=eps_share * k * 2.0)
    assert (found.period, found.swing) == pytest.approx((closed.period, closed.swing), rel=1e-7)


@pytest.mark.parametrize("plant", ["1/(s+1)^8", "1/(s(s+1)^2)", "(1-s)/(s+1)^3"])
def test_the_response_at_the_oscillation_meets_the_ratio_of_fundamentals(plant: str) -> None:
    # G(j w1) = Y1/U1 exactly: the fundamental of the simulated cycle over that of the square wave, 4 d/pi.
    process = PLANTS[plant]
    period = symmetric_limit_cycle(process, 1.0).period
    record = simulate_relay_test(
        process, RelayLaw(0.0, 0.0), amplitude=1.0, sample_interval_s=period / 800, cycles=25, resting_value=0.0
    )
    rises = np.flatnonzero(np.diff(record.controller_output) > 0) + 1
    window = slice(int(rises[-2]), int(rises[-1]))
    y, u, t = record.process_variable[window], record.controller_output[window], record.time[window]
    omega = 2 * math.pi / (record.time[rises[-1]] - record.time[rises[-2]])
    measured = np.sum(y * np.exp(-1j * omega * t)) / np.sum(u * np.exp(-1j * omega * t))
    # The hold of the samples delays by half an interval.
    held = process.response(omega) * np.exp(-0.5j * omega * period / 800)
    assert complex(measured) == pytest.approx(complex(held), rel=2e-3)


def test_a_square_answer_with_a_resonance_is_still_one_switch_per_half_period() -> None:
    process = TransferFunction((4.0,), tuple(np.polymul([1.0, 0.4, 4.0], [1.0, 1.0]).tolist()))
    cycle = symmetric_limit_cycle(process, 1.0, hysteresis=0.05)
    record = simulate_relay_test(
        process, RelayLaw(0.0, 0.05), amplitude=1.0, sample_interval_s=cycle.period / 1000, cycles=15
    )
    switches = record.time[1:][np.diff(record.controller_output) != 0]
    assert switches[-1] - switches[-3] == pytest.approx(cycle.period, rel=5e-3)


@pytest.mark.parametrize(
    ("process", "eps"),
    [
        (TransferFunction((1.0,), lags(1)), 0.0),
        (TransferFunction((1.0,), lags(1, 1)), 0.0),
        (TransferFunction((1.0,), lags(1, 1, 1)), 1.0),
        (TransferFunction((1.0,), lags(1), 1.0), 1.5),
    ],
)
def test_a_process_that_cannot_oscillate_is_named(process: TransferFunction, eps: float) -> None:
    with pytest.raises(NoLimitCycle):
        symmetric_limit_cycle(process, 1.0, hysteresis=eps)


@pytest.mark.parametrize(("bias", "eps"), [(0.9, 0.1), (-1.2, 0.0), (0.0, 1.0)])
def test_a_relay_that_cannot_carry_the_process_through_is_named(bias: float, eps: float) -> None:
    with pytest.raises(NoLimitCycle):
        first_order_limit_cycle(1.0, 1.0, 1.0, 1.0, hysteresis=eps, bias=bias)


CYCLE = LimitCycle(0.5, -0.5, 2.0, 2.0)


@pytest.mark.parametrize(
    ("call", "field"),
    [
        (lambda: first_order_limit_cycle(-1.0, 1.0, 1.0, 1.0), "static_gain"),
        (lambda: first_order_limit_cycle(1.0, 0.0, 1.0, 1.0), "time_constant"),
        (lambda: first_order_limit_cycle(1.0, 1.0, -1.0, 1.0), "dead_time"),
        (lambda: first_order_limit_cycle(1.0, 1.0, 1.0, 1.0, hysteresis=-0.1), "hysteresis"),
        (lambda: first_order_limit_cycle(1.0, 1.0, 1.0, 1.0, bias=math.nan), "bias"),
        (lambda: integrating_limit_cycle(1.0, 1.0, 1.0, 0.0), "down"),
        (lambda: first_order_from_limit_cycle(CYCLE, 0.4, 1.0), "cycle.highest"),
        (lambda: first_order_from_limit_cycle(CYCLE, 1.0, 1.0, hysteresis=0.6), "cycle.highest"),
        (lambda: integrating_from_limit_cycle(CYCLE, 1.0, 1.0, hysteresis=0.6), "hysteresis"),
        (lambda: symmetric_limit_cycle(TransferFunction((1.0,), lags(1), 1.0), -1.0), "amplitude"),
        (lambda: symmetric_limit_cycle(TransferFunction((1.0, 1.0), lags(1)), 1.0), "process"),
        (lambda: symmetric_limit_cycle(TransferFunction((1.0,), (1.0, 0.0, -1.0)), 1.0), "process"),
    ],
)
def test_an_argument_outside_the_domain_is_named(call, field: str) -> None:
    with pytest.raises(OutOfDomain) as caught:
        call()
    assert caught.value.field == field
