"""The structures that are fitted: nonlinear parameters to poles and back to a process model.

Owns, for each structure, its parameters, its poles with their slopes, its starts and its prior. A pair of poles is
given by its frequency and damping, so that real and complex pairs are one structure with one boundary less; poles
are kept a little apart, so that every process is a plain sum of modes.
"""

from __future__ import annotations

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


@dataclass(frozen=True, slots=True, eq=False)
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
        parameters : ndarray, shape (..., k)
            Dead time over period; then the logarithm of the lag over period; then of the pair's frequency times
            period, and of its damping. Only what the structure has.
        period : float, seconds

        Returns
        -------
        tuple
            Poles, shape (..., p), and slopes, shape (..., p, k - 1), 1/s.
        """
        place, free = 1, parameters.shape[-1] - 1
        columns: list[ComplexArray] = []
        slopes: list[ComplexArray] = []
        lag = None
        if self.lag:
            lag = -np.exp(-parameters[..., 1]) / period
            place = 2
        if self.pair:
            omega = np.exp(parameters[..., place]) / period
            damping = np.exp(parameters[..., place + 1])
            split = damping**2 - 1.0
            apart = np.where(np.abs(split) < APART, np.where(split < 0, -APART, APART), split)
            root = np.sqrt(apart.astype(np.complex128))
            for sign in (1.0, -1.0):
                pole = omega * (-damping + sign * root)
                slope = np.zeros((*pole.shape, free), dtype=np.complex128)
                slope[..., place - 1] = pole
                slope[..., place] = omega * (-damping + sign * damping**2 / root)
                columns.append(np.asarray(pole, dtype=np.complex128))
                slopes.append(slope)
            if lag is not None:
                lag = _kept_away(lag, columns)
        if lag is not None:
            slope = np.zeros((*np.shape(lag), free), dtype=np.complex128)
            slope[..., 0] = -lag
            columns.append(lag.astype(np.complex128))
            slopes.append(slope)
        if self.integrator:
            shape = np.shape(parameters[..., 0])
            columns.append(np.full(shape, -AT_ORIGIN / period, dtype=np.complex128))
            slopes.append(np.zeros((*shape, free), dtype=np.complex128))
        return np.stack(columns, axis=-1), np.stack(slopes, axis=-2)

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


def _kept_away(lag: FloatArray, others: list[ComplexArray]) -> FloatArray:
    """A real pole moved off any other that it would coincide with."""
    for other in others:
        gap = np.abs(lag - other) / np.abs(lag)
        lag = np.where(gap < NEAR, lag * (1.0 + 2.0 * NEAR), lag)
    return lag
