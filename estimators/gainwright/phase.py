"""The phase of a rational transfer function with dead time, unwrapped from zero frequency without a grid.

Owns the sum over poles and zeros, and grids that miss no resonance. Knows nothing of margins or controllers. Each
root contributes an arc tangent that is continuous in frequency, and the dead time a straight line, so that no jump
of a whole turn can be missed however far apart two frequencies lie.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from gainwright.errors import OutOfDomain
from gainwright.models import TransferFunction

FloatArray = npt.NDArray[np.float64]

SMALLEST_DAMPING = 1e-12
"""Relative distance from the imaginary axis below which a root counts as lying just left of it."""

BEYOND = 1e15
"""Roots this many times faster than all others turn nothing that can be measured."""

RESONANCE_OFFSETS = (-16.0, -8.0, -4.0, -2.0, -1.0, -0.5, -0.25, 0.0, 0.25, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0)
"""Grid points about a resonance, in units of its half-width."""


class UnwrappedPhase:
    """Phase of ``sign N(s)/D(s) exp(-L s)``, continuous from zero frequency.

    Parameters
    ----------
    transfer_function : TransferFunction

    Attributes
    ----------
    sign : float
        Sign of the low-frequency gain; taken out of the phase.
    origin_poles : int
        Poles at the origin less zeros there: the phase starts at -90 degrees times this number.
    dead_time : float, seconds
    unstable : bool
        Whether a pole lies in the open right half-plane.
    rates : numpy.ndarray, rad/s
        Sizes of the other roots.

    Raises
    ------
    OutOfDomain
        Where the numerator or the denominator is zero or not finite.
    """

    def __init__(self, transfer_function: TransferFunction) -> None:
        numerator, origin_zeros = _without_origin("numerator", transfer_function.numerator)
        denominator, origin_poles = _without_origin("denominator", transfer_function.denominator)
        zeros, poles = np.roots(numerator), np.roots(denominator)
        self.sign = math.copysign(1.0, numerator[-1]) * math.copysign(1.0, denominator[-1])
        self.origin_poles = origin_poles - origin_zeros
        self.dead_time = float(transfer_function.dead_time)
        self.unstable = bool(np.any(poles.real > 1e-9 * np.abs(poles)))
        roots = np.concatenate([zeros, poles])
        self.rates: FloatArray = np.abs(roots)
        width = np.maximum(np.abs(roots.real), SMALLEST_DAMPING * self.rates)
        side = np.where(roots.real > SMALLEST_DAMPING * self.rates, -1.0, 1.0)
        self._weight = side * np.concatenate([np.ones(zeros.size), -np.ones(poles.size)])
        self._width: FloatArray = width
        self._centre: FloatArray = roots.imag
        self._offset: FloatArray = np.arctan(self._centre / width)
        self._start = -0.5 * math.pi * self.origin_poles
        self._most_lead = 0.5 * math.pi * float(np.sum(self._weight > 0)) + max(0.0, self._start)

    def at(self, omega_rad_s: float) -> float:
        """Phase in radians at one frequency (rad/s, > 0)."""
        return float(self.over(np.array([omega_rad_s]))[0])

    def over(self, omega_rad_s: FloatArray) -> FloatArray:
        """Phase in radians, shape (n,), at frequencies of shape (n,), rad/s, > 0."""
        about = (omega_rad_s[:, np.newaxis] - self._centre) / self._width
        turned = (np.arctan(about) + self._offset) @ self._weight
        return np.asarray(self._start + turned - self.dead_time * omega_rad_s, dtype=np.float64)

    def slowest_crossing(self) -> float:
        """A frequency (rad/s) below which the phase has turned only little from its start."""
        lag = float(np.sum(1.0 / self.rates)) + self.dead_time
        return 0.02 / lag if lag > 0 else 1e-303

    def fastest_crossing(self, decades: float = 4.0) -> float:
        """A frequency (rad/s) above which the phase has passed -180 degrees or stays where it is for good."""
        if self.dead_time > 0:
            return (2 * math.pi + self._most_lead) / self.dead_time
        return float(np.max(self.rates, initial=1e-300)) * math.pow(10.0, decades)

    def grid(self, low: float, high: float, points_per_decade: int) -> FloatArray:
        """Frequencies from ``low`` to ``high`` (rad/s), even on a logarithmic scale, denser about resonances.

        Parameters
        ----------
        low, high : float, rad/s, > 0
        points_per_decade : int

        Returns
        -------
        numpy.ndarray, increasing, rad/s
        """
        points = max(16, math.ceil(math.log10(high / low) * points_per_decade))
        even = np.geomspace(low, high, points)
        sharp = self._centre > self._width
        about = self._centre[sharp, np.newaxis] + np.outer(self._width[sharp], RESONANCE_OFFSETS)
        inside = about[(about > low) & (about < high)]
        return np.unique(np.concatenate([even, inside]))


def _without_origin(name: str, coefficients: tuple[float, ...]) -> tuple[FloatArray, int]:
    """Coefficients without roots at the origin or beyond all that matters, and the number of those at the origin."""
    whole = np.trim_zeros(np.asarray(coefficients, dtype=np.float64), "f")
    if whole.size == 0 or not np.all(np.isfinite(whole)):
        raise OutOfDomain(name, "is zero or not finite", "finite coefficients, not all zero")
    rest = np.trim_zeros(whole, "b")
    at_origin = whole.size - rest.size
    while rest.size > 1 and abs(rest[1]) > BEYOND * _scale(rest[1:]) * abs(rest[0]):
        rest = rest[1:]
    return rest, at_origin


def _scale(coefficients: FloatArray) -> float:
    """A rate (rad/s) no root of the polynomial lies far above; at least 1."""
    return float(np.max(np.abs(coefficients[1:]) / abs(coefficients[0]), initial=1.0)) if coefficients[0] else 1.0
