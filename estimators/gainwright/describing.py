"""Describing functions of relay elements, and the ultimate gain that the textbook reads from an amplitude.

Owns the formulas and their domains. Source of all: Atherton, *Nonlinear Control Engineering*, 1975; Astrom &
Hagglund, Automatica 20(5):645-651, 1984 (values from memory, checked against numeric Fourier coefficients in the
tests).
"""

from __future__ import annotations

import math

from gainwright.errors import OutOfDomain


def ideal_relay(swing: float, amplitude: float) -> float:
    """``N(a) = 4 d/(pi a)``.

    Parameters
    ----------
    swing : float, PV units, > 0
        Symbol a.
    amplitude : float, output units, > 0
        Symbol d.

    Returns
    -------
    float, output units per PV unit

    Raises
    ------
    OutOfDomain

    Examples
    --------
    >>> round(ideal_relay(2.0, 1.0), 6)
    0.63662
    """
    _positive("swing", swing)
    _positive("amplitude", amplitude)
    return 4.0 * amplitude / (math.pi * swing)


def relay_with_hysteresis(swing: float, amplitude: float, hysteresis: float) -> complex:
    """``N(a) = 4 d/(pi a) (sqrt(1 - (eps/a)^2) - j eps/a)``.

    Parameters
    ----------
    swing : float, PV units, > hysteresis
    amplitude : float, output units, > 0
    hysteresis : float, PV units, >= 0
        Half-width, symbol eps.

    Returns
    -------
    complex, output units per PV unit

    Raises
    ------
    OutOfDomain
    """
    ratio = _ratio("hysteresis", hysteresis, swing)
    return ideal_relay(swing, amplitude) * complex(math.sqrt(1.0 - ratio**2), -ratio)


def relay_with_dead_zone(swing: float, amplitude: float, dead_zone: float) -> float:
    """``N(a) = 4 d/(pi a) sqrt(1 - (delta/a)^2)``.

    Parameters
    ----------
    swing : float, PV units, > dead_zone
    amplitude : float, output units, > 0
    dead_zone : float, PV units, >= 0
        Half-width, symbol delta.

    Returns
    -------
    float, output units per PV unit

    Raises
    ------
    OutOfDomain
    """
    ratio = _ratio("dead_zone", dead_zone, swing)
    return ideal_relay(swing, amplitude) * math.sqrt(1.0 - ratio**2)


def saturation_relay(swing: float, amplitude: float, linear_range: float) -> float:
    """``N(a) = (2 k/pi) (asin(b/a) + (b/a) sqrt(1 - (b/a)^2))`` with slope ``k = d/b``; k itself while ``a < b``.

    Parameters
    ----------
    swing : float, PV units, > 0
    amplitude : float, output units, > 0
    linear_range : float, PV units, > 0
        Deviation at which the relay saturates, symbol b.

    Returns
    -------
    float, output units per PV unit

    Raises
    ------
    OutOfDomain
    """
    _positive("swing", swing)
    _positive("amplitude", amplitude)
    _positive("linear_range", linear_range)
    slope = amplitude / linear_range
    if swing <= linear_range:
        return slope
    ratio = linear_range / swing
    return 2.0 * slope / math.pi * (math.asin(ratio) + ratio * math.sqrt(1.0 - ratio**2))


def two_channel_relay(swing: float, proportional_amplitude: float, integral_amplitude: float) -> complex:
    """``N(a) = 4/(pi a) (hp - j hi)`` for ``hp sign(e) + hi sign(integral of e)``.

    Parameters
    ----------
    swing : float, PV units, > 0
    proportional_amplitude, integral_amplitude : float, output units, >= 0
        Symbols hp, hi.

    Returns
    -------
    complex, output units per PV unit

    Raises
    ------
    OutOfDomain
    """
    _positive("swing", swing)
    for name, value in (
        ("proportional_amplitude", proportional_amplitude),
        ("integral_amplitude", integral_amplitude),
    ):
        if not value >= 0:
            raise OutOfDomain(name, f"is {value}", "0 or more")
    return 4.0 / (math.pi * swing) * complex(proportional_amplitude, -integral_amplitude)


def ultimate_gain_from_swing(swing: float, amplitude: float, hysteresis: float = 0.0) -> float:
    """The textbook's ultimate gain, ``4 d/(pi sqrt(a^2 - eps^2))``.

    With hysteresis the point found is not the phase crossover but lies ``asin(eps/a)`` short of it, so that the
    value underestimates the ultimate gain; kept because people check it by hand.

    Parameters
    ----------
    swing : float, PV units, > hysteresis
    amplitude : float, output units, > 0
    hysteresis : float, PV units, >= 0
        Half-width.

    Returns
    -------
    float, output units per PV unit

    Raises
    ------
    OutOfDomain

    Examples
    --------
    >>> round(ultimate_gain_from_swing(0.4, 0.5, 0.05), 4)
    1.6041
    """
    _ratio("hysteresis", hysteresis, swing)
    return ideal_relay(math.sqrt(swing**2 - hysteresis**2), amplitude)


def _positive(name: str, value: float) -> None:
    if not (value > 0 and math.isfinite(value)):
        raise OutOfDomain(name, f"is {value}", "a finite number above 0")


def _ratio(name: str, width: float, swing: float) -> float:
    _positive("swing", swing)
    if not 0 <= width < swing:
        raise OutOfDomain(name, f"is {width}", f"0 or more and below the swing {swing:g}")
    return width / swing
