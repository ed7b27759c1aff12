"""The structures that are fitted: nonlinear parameters to poles and back to a process model.

Owns, for each structure, its parameters, its poles with their slopes, its starts and its prior. A pair of poles is
given by its frequency and damping, so that real and complex pairs are one structure with one boundary less; poles
are kept a little apart, so that every process is a plain sum of modes.
"""

from __future__ import annotations

import cmath
import functools
import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from gainwright.models import ProcessModel, Structure

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]

APART = 1e-4
"""Least ``abs(damping**2 - 1)`` of a pair: 0.005 % in the damping, far below what a record can tell."""
NEAR = 5e-3
"""Least relative distance of a single pole from the nearest of a pair."""
AT_ORIGIN = 1e-8
"""The integrator's pole, in reciprocal periods: flat over any record."""


@dataclass(frozen=True, slots=True)
class Shape:
    """What a structure is made of, besides dead time and gain.

    Parameters
    ----------
    name : str
    lag, pair, zero, integrator : bool
        Whether it has a single real pole, a pair of poles, a zero, a pole at the origin.
    """

    name: str
    lag: bool = False
    pair: bool = False
    zero: bool = False
    integrator: bool = False

    @property
    def parameters(self) -> int:
        """How many nonlinear parameters: the dead time and one for each pole that is free."""
        return 1 + int(self.lag) + 2 * int(self.pair)

    def poles(self, parameters: FloatArray, period: float) -> tuple[ComplexArray, ComplexArray]:
        """Poles and their slopes by the parameters after the dead time.

        Parameters
        ----------
        parameters : ndarray, shape (k,)
            Dead time over period; then the logarithm of the lag over period; then of the pair's frequency times
            period, and of its damping. Only what the structure has.
        period : float, seconds

        Returns
        -------
        tuple
            Poles, shape (p,), the pair first, and slopes, shape (p, k - 1), 1/s.
        """
        found: list[complex] = []
        slopes: list[list[complex]] = []
        place = 2 if self.lag else 1
        leading = [0.0] * (place - 1)
        if self.pair:
            omega, damping = math.exp(parameters[place]) / period, math.exp(parameters[place + 1])
            split = damping**2 - 1.0
            if abs(split) < APART:
                split = math.copysign(APART, split)
            root = cmath.sqrt(split)
            for signed in (root, -root):
                pole = omega * (-damping + signed)
                found.append(pole)
                slopes.append([*leading, pole, omega * (-damping + damping**2 / signed)])
        if self.lag:
            lag = -math.exp(-parameters[1]) / period
            if any(abs(lag - other) < NEAR * abs(lag) for other in found):
                lag *= 1.0 + 2.0 * NEAR
            found.append(lag)
            slopes.append([-lag + 0j] + [0j] * (2 if self.pair else 0))
        if self.integrator:
            found.append(-AT_ORIGIN / period)
            slopes.append([0j] * (self.parameters - 1))
        return np.array(found, dtype=np.complex128), np.array(slopes, dtype=np.complex128).reshape(len(found), -1)

    def starts(self) -> FloatArray:
        """A small grid of parameters, shape (g, k), from which the best are refined."""
        axes: list[tuple[float, ...]] = [(0.02, 0.12, 0.25, 0.4)] if not self.pair else [(0.01, 0.1, 0.25, 0.4)]
        if self.lag:
            lags = (0.05, 0.3, 2.0) if self.pair else (0.03, 0.1, 0.3, 1.0, 5.0)
            axes.append(tuple(math.log(v) for v in lags))
        if self.pair:
            axes.append(tuple(math.log(v) for v in ((3.0, 7.0, 16.0) if self.lag else (1.5, 4.0, 8.0, 20.0))))
            axes.append(tuple(math.log(v) for v in ((0.4, 1.2) if self.lag else (0.25, 0.8, 2.5))))
        return np.array(np.meshgrid(*axes, indexing="ij")).reshape(len(axes), -1).T

    def prior(self) -> tuple[FloatArray, FloatArray]:
        """Middle and spread of a weak prior: it bounds what a record cannot tell and decides nothing else."""
        middle, spread = [0.15], [1.0]
        if self.lag:
            middle.append(math.log(0.3))
            spread.append(3.0)
        if self.pair:
            middle.extend([math.log(6.0), 0.0])
            spread.extend([2.5, 2.0])
        return np.array(middle), np.array(spread)

    def model(self, parameters: FloatArray, gains: FloatArray, period: float, *, latency: float = 0.0) -> ProcessModel:
        """The process model of a fit.

        Parameters
        ----------
        parameters : ndarray, shape (k,)
        gains : ndarray, shape (1,) or (2,)
            Gain; with a zero, gain times the zero's time over the period.
        period : float, seconds
        latency : float, seconds
            Taken out of the dead time.

        Returns
        -------
        ProcessModel
        """
        gain = float(gains[0])
        zero_time = float(gains[1]) / gain * period if self.zero and gain else 0.0
        dead_time = max(float(parameters[0]) * period - latency, 0.0)
        poles, _ = self.poles(parameters, period)
        real = sorted((-1.0 / p.real for p in poles[: 2 if self.pair else 0] if p.imag == 0), reverse=True)
        frequency = damping = None
        if self.pair and not real:
            frequency = float(np.abs(poles[0]))
            damping = float(-poles[0].real / np.abs(poles[0]))
        lags = [float(v) for v in real]
        if self.lag:
            lags = sorted([*lags, float(-1.0 / poles[2 if self.pair else 0].real)], reverse=True)
        return ProcessModel(
            self._structure(complex_pair=frequency is not None),
            gain,
            tuple(lags),
            dead_time,
            zero_time,
            frequency,
            damping,
        )

    def _structure(self, *, complex_pair: bool) -> Structure:
        if self.integrator:
            return Structure.INTEGRATING_LAG if self.lag else Structure.INTEGRATING
        if self.zero:
            return Structure.THIRD_ORDER_ZERO
        if self.pair and self.lag:
            return Structure.THIRD_ORDER
        if self.pair:
            return Structure.SECOND_ORDER_COMPLEX if complex_pair else Structure.SECOND_ORDER
        return Structure.FIRST_ORDER


FAMILY = (
    Shape("first", lag=True),
    Shape("second", pair=True),
    Shape("integrating", integrator=True),
    Shape("integrating_lag", lag=True, integrator=True),
    Shape("third", lag=True, pair=True),
    Shape("third_zero", lag=True, pair=True, zero=True),
)


@functools.cache
def start_poles(shape: Shape) -> ComplexArray:
    """Poles of a shape's starts for a period of one second, shape (g, p).

    Parameters
    ----------
    shape : Shape

    Returns
    -------
    ndarray of complex
    """
    return np.stack([shape.poles(start, 1.0)[0] for start in shape.starts()])
