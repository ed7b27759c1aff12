"""Margins and ultimate points against published tables, closed forms, and the python-control library."""

from __future__ import annotations

import math
import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gainwright.errors import NoCrossover, OutOfDomain
from gainwright.gains import Gains
from gainwright.margins import LoopMargins, loop_margins, ultimate_point
from gainwright.models import TransferFunction
from published_plants import PublishedPlant, crossing_plants, lags, published_plants

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import control

PLANTS = crossing_plants()


@pytest.mark.parametrize("plant", PLANTS, ids=lambda p: p.name)
def test_the_ultimate_point_of_every_published_plant_is_found(plant: PublishedPlant) -> None:
    gain, period = ultimate_point(plant.process)
    assert gain == pytest.approx(plant.ultimate_gain, rel=1e-9)
    assert period == pytest.approx(plant.ultimate_period, rel=1e-9)


@pytest.mark.parametrize(
    ("process", "gain", "period"),
    [
        # Closed forms (Astrom & Hagglund 2006; from memory): 1/(s+1)^n has wu = tan(pi/n), Ku = 1/cos^n(pi/n).
        *[
            (
                TransferFunction((1.0,), lags(*[1.0] * n)),
                1 / math.cos(math.pi / n) ** n,
                2 * math.pi / math.tan(math.pi / n),
            )
            for n in range(3, 13)
        ],
        # (1 - a s)/(s+1)^3: Ku = 8/(1 + 3a), wu^2 = (3 + a)/(1 + 3a).
        *[
            (
                TransferFunction((-a, 1.0), lags(1, 1, 1)),
                8 / (1 + 3 * a),
                2 * math.pi / math.sqrt((3 + a) / (1 + 3 * a)),
            )
            for a in (0.1, 0.5, 1.0, 20.0)
        ],
        # Integrating process with dead time: pi/(2 Kv L), 4 L.
        (TransferFunction((0.02,), (1.0, 0.0), 30.0), math.pi / (2 * 0.02 * 30), 120.0),
        # Pure dead time.
        (TransferFunction((2.0,), (1.0,), 3.0), 0.5, 6.0),
        # A negative static gain has the same ultimate point.
        (TransferFunction((-1.0,), lags(1, 1, 1)), 8.0, 2 * math.pi / math.sqrt(3)),
    ],
)
def test_the_ultimate_point_meets_its_closed_form(process: TransferFunction, gain: float, period: float) -> None:
    assert ultimate_point(process) == pytest.approx((gain, period), rel=1e-11)


def test_of_two_crossings_the_first_is_taken() -> None:
    # (s+6)^2/(s (s+1)^2 (s+36)), Astrom & Hagglund, IFAC PID'00, no. 7 (from memory): the other is K = 52.263.
    plant = next(p for p in PLANTS if p.name == "B7_condstable")
    assert ultimate_point(plant.process)[0] == pytest.approx(6.04489402185, rel=1e-9)


@pytest.mark.parametrize(
    "process",
    [
        TransferFunction((1.0,), lags(1)),
        TransferFunction((1.0,), lags(1, 1)),
        TransferFunction((1.0,), (1.0, 1.0, 0.0)),
        TransferFunction((3.0,), (1.0,)),
        TransferFunction((1.0,), (1.0, 0.0, 0.0), 1.0),
    ],
)
def test_a_process_without_crossover_is_named(process: TransferFunction) -> None:
    with pytest.raises(NoCrossover):
        ultimate_point(process)


def test_the_table_holds_one_plant_without_crossover() -> None:
    without = [plant for plant in published_plants() if not math.isfinite(plant.ultimate_gain)]
    assert [plant.name for plant in without] == ["P6_T11"]
    with pytest.raises(NoCrossover):
        ultimate_point(without[0].process)


@settings(max_examples=60, deadline=None)
@given(
    times=st.lists(st.floats(1e-3, 1e3), min_size=1, max_size=4),
    dead_time=st.floats(1e-3, 1e3),
    gain=st.floats(1e-3, 1e3),
    stretch=st.floats(1e-2, 1e2),
)
def test_stretching_time_stretches_the_period_and_keeps_the_gain(
    times: list[float], dead_time: float, gain: float, stretch: float
) -> None:
    first = ultimate_point(TransferFunction((gain,), lags(*times), dead_time))
    slower = TransferFunction((gain,), lags(*[t * stretch for t in times]), dead_time * stretch)
    assert ultimate_point(slower) == pytest.approx((first[0], first[1] * stretch), rel=1e-8)
    response = TransferFunction((gain,), lags(*times), dead_time).response(2 * math.pi / first[1])
    assert complex(response) == pytest.approx(-1 / first[0], rel=1e-8)


# Margins of the first-order and the integrating process under the settings of Skogestad, J. Process Control
# 13:291-309, 2003, tables 1 and 3 (printed figures from memory): GM, PM, Ms, Mt, delay margin in dead times.
PUBLISHED_MARGINS = {
    "first order, any lag": (
        TransferFunction((2.0,), lags(50), 3.0),
        Gains(50 / (2 * 6), 50.0),
        (3.14, 61.4, 1.59, 1.00, 2.14),
        3.0,
    ),
    "integrating": (
        TransferFunction((0.5,), (1.0, 0.0), 2.0),
        Gains(0.5 / (0.5 * 2), 16.0),
        (2.96, 46.9, 1.70, 1.30, 1.59),
        2.0,
    ),
}


@pytest.mark.parametrize(
    ("process", "gains", "printed", "dead_time"), PUBLISHED_MARGINS.values(), ids=PUBLISHED_MARGINS
)
def test_the_margins_of_skogestad_2003_are_met(
    process: TransferFunction, gains: Gains, printed: tuple[float, ...], dead_time: float
) -> None:
    found = loop_margins(process, gains)
    assert found.stable
    assert found.gain_margin == pytest.approx(printed[0], abs=0.005)
    assert found.phase_margin_deg == pytest.approx(printed[1], abs=0.06)
    assert found.peak_sensitivity == pytest.approx(printed[2], abs=0.005)
    assert found.peak_complementary_sensitivity == pytest.approx(printed[3], abs=0.005)
    assert found.delay_margin / dead_time == pytest.approx(printed[4], abs=0.005)


def test_crossovers_of_the_integrating_loop_are_those_of_skogestad_2003() -> None:
    # w180 theta = 1.49, wc theta = 0.51 (from memory).
    found = loop_margins(TransferFunction((1.0,), (1.0, 0.0), 1.0), Gains(0.5, 8.0))
    assert found.phase_crossover_rad_s == pytest.approx(1.487, abs=5e-4)
    assert found.gain_crossover_rad_s == pytest.approx(0.5145, abs=5e-5)


def _control_loop(process: TransferFunction, gains: Gains) -> control.FRD:
    """The same loop as frequency-response data on a grid, dead time exact; the library interpolates."""
    omega = np.geomspace(1e-3, 30.0, 1500)
    s = 1j * omega
    controller = gains.proportional_gain * (
        1 + 1 / (gains.integral_time * s) + gains.derivative_time * s / (1 + gains.derivative_time * s / 10)
    )
    plant = np.polyval(process.numerator, s) / np.polyval(process.denominator, s) * np.exp(-process.dead_time * s)
    return control.FRD(plant * controller, omega, smooth=True)


COMPARED = [
    (TransferFunction((1.0,), lags(10), 2.0), Gains(2.5, 10.0)),
    (TransferFunction((1.0,), lags(10), 2.0), Gains(6.0, 4.0, 1.0)),
    (TransferFunction((1.0,), lags(1, 1, 1)), Gains(4.8, 1.8138, 0.45345)),
    (TransferFunction((1.0,), lags(0.05, 0.05), 1.0), Gains(0.2, 0.4)),
    (TransferFunction((2.0,), lags(10, 5), 1.0), Gains(2.4, 25.0, 1.8)),
    (TransferFunction((0.1,), (1.0, 0.0), 3.0), Gains(1.2, 40.0)),
    (TransferFunction((1.0,), (0.3, 1.0, 0.0), 0.7), Gains(0.5, 12.0, 0.3)),
    (TransferFunction((-0.5, 1.0), lags(1, 1, 1)), Gains(0.8, 2.0)),
    (TransferFunction((4.0,), (1.0, 0.8, 4.0)), Gains(0.2, 0.6)),
]


@pytest.mark.parametrize(("process", "gains"), COMPARED)
def test_margins_agree_with_the_control_library(process: TransferFunction, gains: Gains) -> None:
    loop = _control_loop(process, gains)
    gain_margin, phase_margin, stability_margin, *_ = control.stability_margins(loop)
    found = loop_margins(process, gains)
    assert found.stable
    if math.isfinite(gain_margin):
        assert found.gain_margin == pytest.approx(gain_margin, rel=1e-3)
    assert found.phase_margin_deg == pytest.approx(phase_margin, abs=0.05)
    assert 1 / found.peak_sensitivity == pytest.approx(stability_margin, rel=1e-3)
    complementary = np.abs(loop.frdata[0, 0] / (1 + loop.frdata[0, 0]))
    assert found.peak_complementary_sensitivity == pytest.approx(float(np.max(complementary)), rel=1e-3)


@pytest.mark.parametrize("plant", PLANTS[::4], ids=lambda p: p.name)
def test_the_ultimate_gain_is_the_border_of_stability(plant: PublishedPlant) -> None:
    inside = loop_margins(plant.process, Gains(0.99 * plant.ultimate_gain))
    beyond = loop_margins(plant.process, Gains(1.01 * plant.ultimate_gain))
    if plant.name.startswith("B8"):
        # With gain above 1 only about the resonance the same border holds.
        assert inside.gain_crossover_rad_s > 0
    assert inside.stable
    assert inside.gain_margin == pytest.approx(1 / 0.99, rel=1e-6)
    assert not beyond.stable


def test_an_unstable_loop_reports_no_margin_at_all() -> None:
    found = loop_margins(TransferFunction((1.0,), lags(10), 2.0), Gains(20.0, 10.0))
    assert (found.gain_margin, found.phase_margin_deg, found.delay_margin) == (0.0, 0.0, 0.0)
    assert found.peak_sensitivity == math.inf
    assert found.peak_complementary_sensitivity == math.inf


def _closed_loop_is_stable(process: TransferFunction, gains: Gains) -> bool:
    """By the roots of the characteristic polynomial; no dead time."""
    integral, derivative, n = gains.integral_time, gains.derivative_time, gains.derivative_filter_n
    filtered = np.array([derivative / n, 1.0])
    upper = np.polyadd(np.polymul([integral, 0.0], np.polyadd(filtered, [derivative, 0.0])), filtered)
    lower = np.polymul([integral, 0.0], filtered)
    closed = np.polyadd(
        gains.proportional_gain * np.polymul(process.numerator, upper), np.polymul(process.denominator, lower)
    )
    return bool(np.all(np.roots(closed).real < 0))


@settings(max_examples=200, deadline=None)
@given(
    times=st.lists(st.floats(0.1, 10.0), min_size=1, max_size=4),
    damping=st.floats(0.05, 2.0),
    zero=st.sampled_from([-1, 0, 1]).flatmap(lambda side: st.floats(1e-3, 3.0).map(lambda z: side * z)),
    integrating=st.booleans(),
    gain=st.floats(0.01, 100.0),
    integral=st.floats(0.1, 100.0),
    derivative=st.just(0.0) | st.floats(1e-3, 5.0),
)
def test_the_nyquist_count_agrees_with_the_roots_of_the_closed_loop(
    times: list[float],
    damping: float,
    zero: float,
    integrating: bool,
    gain: float,
    integral: float,
    derivative: float,
) -> None:
    denominator = np.polymul(lags(*times), [1.0, 2 * damping, 1.0])
    denominator = np.polymul(denominator, [1.0, 0.0]) if integrating else denominator
    process = TransferFunction((zero, 1.0), tuple(denominator.tolist()))
    gains = Gains(gain, integral, derivative)
    found = loop_margins(process, gains)
    near_the_border = found.stable and found.peak_sensitivity > 1e4
    assert near_the_border or found.stable == _closed_loop_is_stable(process, gains)


@settings(max_examples=60, deadline=None)
@given(
    time_constant=st.floats(0.01, 100.0),
    dead_time=st.floats(0.01, 100.0),
    gain=st.floats(0.01, 10.0),
    integral=st.floats(0.1, 100.0),
)
def test_the_margins_of_a_stable_loop_bound_each_other(
    time_constant: float, dead_time: float, gain: float, integral: float
) -> None:
    # GM >= Ms/(Ms - 1), PM >= 2 asin(1/(2 Ms)): Astrom & Hagglund 1995 (from memory).
    found = loop_margins(TransferFunction((1.0,), lags(time_constant), dead_time), Gains(gain, integral))
    if found.stable:
        ms = found.peak_sensitivity
        assert ms >= 1.0
        assert found.gain_margin >= ms / (ms - 1) * (1 - 1e-3)
        assert math.radians(found.phase_margin_deg) >= 2 * math.asin(1 / (2 * ms)) * (1 - 1e-3)


@pytest.mark.parametrize(("process", "gains"), COMPARED[:6])
def test_each_margin_is_where_the_loop_becomes_unstable(process: TransferFunction, gains: Gains) -> None:
    found = loop_margins(process, gains)

    def with_gain(factor: float) -> LoopMargins:
        louder = Gains(gains.proportional_gain * factor, gains.integral_time, gains.derivative_time)
        return loop_margins(process, louder)

    assert with_gain(found.gain_margin * 0.999).stable
    assert not with_gain(found.gain_margin * 1.001).stable
    assert loop_margins(process, gains, extra_delay=found.delay_margin * 0.999).stable
    assert not loop_margins(process, gains, extra_delay=found.delay_margin * 1.001).stable


def test_a_conditionally_stable_loop_is_told_from_an_unstable_one() -> None:
    # (s+6)^2/(s (s+1)^2 (s+36)) under proportional control is unstable between 6.0449 and 52.263 only.
    plant = next(p for p in PLANTS if p.name == "B7_condstable")
    verdicts = [loop_margins(plant.process, Gains(k)).stable for k in (6.0, 6.1, 52.0, 52.5)]
    assert verdicts == [True, False, False, True]


def test_a_very_weak_integral_controller_has_margins_too() -> None:
    found = loop_margins(TransferFunction((1.0,), lags(1), 1.0), Gains(1e-6, 1.0))
    assert found.stable
    assert found.gain_crossover_rad_s == pytest.approx(1e-6, rel=1e-3)
    assert found.gain_margin > 1e5
    assert found.peak_sensitivity == pytest.approx(1.0, abs=1e-4)


def test_lags_and_derivatives_too_short_to_matter_change_nothing() -> None:
    plain = loop_margins(TransferFunction((1.0,), lags(10), 2.0), Gains(2.5, 10.0))
    cluttered = TransferFunction((1e-110, 1.0), (1e-60, 10.0, 1.0), 2.0)
    found = loop_margins(cluttered, Gains(2.5, 10.0, 1e-33))
    assert found.stable
    assert found.gain_margin == pytest.approx(plain.gain_margin, rel=1e-9)
    assert found.peak_sensitivity == pytest.approx(plain.peak_sensitivity, rel=1e-6)
    assert ultimate_point(cluttered) == pytest.approx(ultimate_point(TransferFunction((1.0,), lags(10), 2.0)))


def test_the_sign_of_the_process_is_left_to_the_controllers_action() -> None:
    up = loop_margins(TransferFunction((1.0,), lags(10), 2.0), Gains(2.5, 10.0))
    down = loop_margins(TransferFunction((-1.0,), lags(10), 2.0), Gains(2.5, 10.0))
    assert up == down


def test_an_unfiltered_derivative_on_a_first_order_process_with_dead_time_is_judged() -> None:
    process = TransferFunction((1.0,), lags(1), 0.1)
    calm = Gains(0.5, 1.0, 1.0, derivative_filter_n=math.inf)
    assert loop_margins(process, calm).stable
    endless = Gains(5.0, 1.0, 1.0, derivative_filter_n=math.inf)
    assert not loop_margins(process, endless).stable


@pytest.mark.parametrize(
    ("process", "delay", "field"),
    [
        (TransferFunction((1.0,), (1.0, 0.0, -1.0)), 0.0, "process"),
        (TransferFunction((1.0,), lags(1)), -1.0, "extra_delay"),
        (TransferFunction((1.0,), lags(1)), math.nan, "extra_delay"),
        (TransferFunction((0.0,), lags(1)), 0.0, "numerator"),
        (TransferFunction((1.0,), (0.0, 0.0)), 0.0, "denominator"),
        (TransferFunction((math.nan,), lags(1)), 0.0, "numerator"),
    ],
)
def test_a_process_outside_the_domain_is_named(process: TransferFunction, delay: float, field: str) -> None:
    with pytest.raises(OutOfDomain) as caught:
        loop_margins(process, Gains(1.0), extra_delay=delay)
    assert caught.value.field == field
