"""Describing functions against published check numbers, Fourier coefficients and the python-control library."""

from __future__ import annotations

import math
import warnings
from collections.abc import Callable

import numpy as np
import pytest

from gainwright.describing import (
    ideal_relay,
    relay_with_dead_zone,
    relay_with_hysteresis,
    saturation_relay,
    two_channel_relay,
    ultimate_gain_from_swing,
)
from gainwright.errors import OutOfDomain

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import control

# Check numbers at a = 2, d = 1; formulas of Atherton, Nonlinear Control Engineering, 1975 (from memory), numbers
# recomputed as numeric first Fourier coefficients.
CHECKED = {
    "ideal": (ideal_relay(2, 1), 0.636620),
    "hysteresis": (relay_with_hysteresis(2, 1, 0.5), 0.616404 - 0.159155j),
    "dead zone": (relay_with_dead_zone(2, 1, 0.5), 0.616404),
    "saturation": (saturation_relay(2, 1, 0.8), 0.619211),
    "two channels": (two_channel_relay(2, 1, 0.5), 0.636620 - 0.318310j),
}


@pytest.mark.parametrize(("found", "published"), CHECKED.values(), ids=CHECKED)
def test_each_describing_function_meets_its_check_number(found: complex, published: complex) -> None:
    assert complex(found) == pytest.approx(published, abs=5e-7)


def _first_coefficient(element: Callable[[np.ndarray, np.ndarray], np.ndarray], swing: float) -> complex:
    """First Fourier coefficient of the element's answer to ``a sin(t)``, over a; t sampled between switches."""
    t = (np.arange(400_000) + 0.5) * 2 * np.pi / 400_000
    answer = element(swing * np.sin(t), np.cos(t))
    return complex(np.sum(answer * np.exp(-1j * t)) * 2 / 400_000 * 1j / swing)


def _with_hysteresis(e: np.ndarray, slope: np.ndarray) -> np.ndarray:
    return np.where(np.where(slope > 0, e > 0.5, e > -0.5), 1.0, -1.0)


ELEMENTS = {
    "ideal": (lambda e, _: np.sign(e), CHECKED["ideal"][0]),
    "hysteresis": (_with_hysteresis, CHECKED["hysteresis"][0]),
    "dead zone": (lambda e, _: np.where(np.abs(e) > 0.5, np.sign(e), 0.0), CHECKED["dead zone"][0]),
    "saturation": (lambda e, _: np.clip(e / 0.8, -1.0, 1.0), CHECKED["saturation"][0]),
    "two channels": (lambda e, slope: np.sign(e) - 0.5 * np.sign(slope), CHECKED["two channels"][0]),
}


@pytest.mark.parametrize(("element", "found"), ELEMENTS.values(), ids=ELEMENTS)
def test_each_describing_function_is_the_first_fourier_coefficient(
    element: Callable[[np.ndarray, np.ndarray], np.ndarray], found: complex
) -> None:
    assert complex(found) == pytest.approx(_first_coefficient(element, 2.0), abs=1e-5)


@pytest.mark.parametrize("swing", [0.6, 1.0, 7.0])
def test_the_hysteresis_relay_agrees_with_the_control_library(swing: float) -> None:
    # Astrom & Murray, Feedback Systems, 2nd ed., example 10.12; its width is the half width too.
    relay = control.relay_hysteresis_nonlinearity(3.0, 0.5)
    assert relay_with_hysteresis(swing, 3.0, 0.5) == pytest.approx(complex(relay.describing_function(swing)), rel=1e-12)


@pytest.mark.parametrize("swing", [0.51, 2.0, 9.0])
def test_the_negative_inverse_with_hysteresis_lies_on_a_horizontal_line(swing: float) -> None:
    # -1/N = -(pi/(4 d)) sqrt(a^2 - eps^2) - j pi eps/(4 d).
    inverse = -1 / relay_with_hysteresis(swing, 1.5, 0.5)
    assert inverse.imag == pytest.approx(-math.pi * 0.5 / (4 * 1.5))
    assert inverse.real == pytest.approx(-math.pi / (4 * 1.5) * math.sqrt(swing**2 - 0.25))


def test_the_size_of_the_hysteresis_relay_is_that_of_the_ideal_one() -> None:
    assert abs(relay_with_hysteresis(0.7, 2.0, 0.3)) == pytest.approx(ideal_relay(0.7, 2.0), rel=1e-15)


def test_the_saturation_relay_is_its_slope_until_it_saturates_and_ideal_far_beyond() -> None:
    assert saturation_relay(0.5, 1.0, 0.8) == 1.25
    assert saturation_relay(0.8, 1.0, 0.8) == pytest.approx(1.25)
    assert saturation_relay(800.0, 1.0, 0.8) == pytest.approx(ideal_relay(800.0, 1.0), rel=1e-6)


@pytest.mark.parametrize("ratio", [0.2, 1.0, 3.0])
def test_two_channels_find_the_point_of_friman_and_waller(ratio: float) -> None:
    # Friman & Waller, Ind. Eng. Chem. Res. 36(7):2662-2671, 1997 (from memory): tan phi = hi/hp,
    # abs(G) = pi a/(4 sqrt(hp^2 + hi^2)) at phase -180 deg + phi.
    point = -1 / two_channel_relay(1.3, 2.0, 2.0 * ratio)
    assert math.tan(math.pi + math.atan2(point.imag, point.real)) == pytest.approx(ratio)
    assert abs(point) == pytest.approx(math.pi * 1.3 / (4 * math.hypot(2.0, 2.0 * ratio)))


def test_the_textbook_gain_meets_the_notre_dame_example() -> None:
    # Kantor, CBE 30338, notebook 04.06: relay +-20 %, swing 1.5 degC, pi taken as 3.14 gives 16.985; exact 16.9765.
    assert ultimate_gain_from_swing(1.5, 20.0) == pytest.approx(16.9765, abs=5e-5)
    assert ultimate_gain_from_swing(1.5, 20.0) * math.pi / 3.14 == pytest.approx(16.985, abs=5e-4)


def test_the_printed_formula_without_its_square_root_is_not_ours() -> None:
    # Class notes print 4 d/(pi (A^2 - eps^2)), which has the wrong unit; it gives 4.0420 here.
    found = ultimate_gain_from_swing(0.4, 0.5, 0.05)
    assert found == pytest.approx(1.6041, abs=5e-5)
    assert found != pytest.approx(4.0420, rel=0.1)
    in_millis = ultimate_gain_from_swing(400.0, 0.5, 50.0)
    assert in_millis == pytest.approx(found / 1000)


@pytest.mark.parametrize(
    ("call", "field"),
    [
        (lambda: ideal_relay(0.0, 1.0), "swing"),
        (lambda: ideal_relay(1.0, -1.0), "amplitude"),
        (lambda: ideal_relay(math.nan, 1.0), "swing"),
        (lambda: ideal_relay(math.inf, 1.0), "swing"),
        (lambda: relay_with_hysteresis(1.0, 1.0, 1.0), "hysteresis"),
        (lambda: relay_with_hysteresis(1.0, 1.0, -0.1), "hysteresis"),
        (lambda: relay_with_dead_zone(1.0, 1.0, 2.0), "dead_zone"),
        (lambda: saturation_relay(1.0, 1.0, 0.0), "linear_range"),
        (lambda: two_channel_relay(1.0, -1.0, 1.0), "proportional_amplitude"),
        (lambda: two_channel_relay(1.0, 1.0, math.nan), "integral_amplitude"),
        (lambda: ultimate_gain_from_swing(0.1, 1.0, 0.2), "hysteresis"),
    ],
)
def test_an_argument_outside_the_domain_is_named(call: Callable[[], object], field: str) -> None:
    with pytest.raises(OutOfDomain) as caught:
        call()
    assert caught.value.field == field
