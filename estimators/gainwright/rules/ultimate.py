"""Functions of the rules that start from the ultimate point.

Owns their coefficients' form; the coefficients themselves stand in the table's rows.
"""

from __future__ import annotations

import math
from collections.abc import Callable

from gainwright.errors import RuleNotApplicable
from gainwright.gains import Gains
from gainwright.rules.rule import Kind, Knowledge

Function = Callable[[Knowledge], Gains]
Coefficients = tuple[float, float, float]

TIME_RATIO = 4.0
"""Ti/Td of the rules that place a point, symbol alpha; Astrom & Hagglund 1984 (from memory)."""


def fractions(gain: float, integral: float = math.inf, derivative: float = 0.0) -> Function:
    """The rule ``K = gain Ku, Ti = integral Tu, Td = derivative Tu``.

    Parameters
    ----------
    gain, integral, derivative : float

    Returns
    -------
    callable
        From `Knowledge` to `Gains`.
    """

    def function(knowledge: Knowledge) -> Gains:
        ultimate_gain, period = knowledge.ultimate_point
        return Gains(gain * ultimate_gain, integral * period, derivative * period)

    return function


def moved_point(radius: float, angle_deg: float) -> Function:
    """The rule that moves the ultimate point to ``radius exp(j (180 + angle))`` of the Nyquist plane.

    ``K = Ku r cos(angle)``, ``Td = (tan(angle) + sqrt(4/alpha + tan(angle)^2))/(2 wu)``, ``Ti = alpha Td``.

    Parameters
    ----------
    radius : float, > 0
        1 for a phase margin of ``angle``; 1/Am with angle 0 for an amplitude margin Am.
    angle_deg : float, degrees

    Returns
    -------
    callable
        From `Knowledge` to `Gains`.
    """
    tangent = math.tan(math.radians(angle_deg))
    derivative = (tangent + math.sqrt(4.0 / TIME_RATIO + tangent**2)) / (4.0 * math.pi)
    return fractions(radius * math.cos(math.radians(angle_deg)), TIME_RATIO * derivative, derivative)


def amigo_frequency(kind: Kind) -> Function:
    """The frequency-domain rule of Astrom & Hagglund 2006 in ``kappa = 1/(K Ku)``.

    Parameters
    ----------
    kind : Kind
        PI or PID.

    Returns
    -------
    callable
        From `Knowledge` to `Gains`.
    """

    def function(knowledge: Knowledge) -> Gains:
        gain, period = knowledge.ultimate_point
        kappa = _kappa(knowledge)
        if kind is Kind.PI:
            return Gains(0.16 * gain, period / (1 + 4.5 * kappa))
        derivative = max(0.15 * (1 - kappa) / (1 - 0.95 * kappa), 0.0)
        return Gains((0.3 - 0.1 * kappa**4) * gain, 0.6 * period / (1 + 2 * kappa), derivative * period)

    return function


def kappa_fit(gain: Coefficients, integral: Coefficients, derivative: Coefficients | None = None) -> Function:
    """The rule with ``K/Ku``, ``Ti/Tu``, ``Td/Tu`` each ``a0 exp(a1 kappa + a2 kappa^2)``.

    Parameters
    ----------
    gain, integral, derivative : tuple of float
        Coefficients (a0, a1, a2); no derivative for a PI controller.

    Returns
    -------
    callable
        From `Knowledge` to `Gains`.
    """

    def function(knowledge: Knowledge) -> Gains:
        ultimate_gain, period = knowledge.ultimate_point
        kappa = _kappa(knowledge)
        derivative_time = 0.0 if derivative is None else _fit(derivative, kappa) * period
        return Gains(_fit(gain, kappa) * ultimate_gain, _fit(integral, kappa) * period, derivative_time)

    return function


def _fit(coefficients: Coefficients, kappa: float) -> float:
    scale, linear, square = coefficients
    return scale * math.exp(linear * kappa + square * kappa**2)


def _kappa(knowledge: Knowledge) -> float:
    ratio = knowledge.gain_ratio
    if ratio is None:
        raise RuleNotApplicable("static_gain", "is not known", "a model with its static gain")
    return ratio
