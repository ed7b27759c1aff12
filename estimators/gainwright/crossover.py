"""The ultimate point of a fitted process, with the uncertainty that its fit gives it.

Owns the way from a fit's parameters to logarithms of ultimate gain and period and their slopes. The crossing of
-180 degrees nearest to the oscillation is taken, where the record's information lies; a measured latency is taken out
of the dead time, even where the estimate then falls below zero, so that no bias comes from the bound.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from gainwright.fitting import Fit

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]

REACH = 12.0
"""The crossing is looked for up to this factor from the oscillation's frequency, either way."""
POINTS = 400
POLISHED = 12


@dataclass(frozen=True, slots=True, eq=False)
class Crossing:
    """Logarithms of a fit's ultimate gain and period, and what moves them.

    Parameters
    ----------
    log_gain, log_period : float
        Of output units per PV unit, and of seconds.
    covariance : ndarray, shape (2, 2)
        Of the two, from the fit's covariance.
    by_dead_time : ndarray, shape (2,)
        Slopes by the dead time, per second: what an error of the latency does.
    omega_slope : complex
        Slope of the log response by the logarithm of the frequency, at the crossing.
    """

    log_gain: float
    log_period: float
    covariance: FloatArray
    by_dead_time: FloatArray
    omega_slope: complex

    def corrected(self, log_ratio: complex, scatter: float) -> Crossing:
        """The crossing of the response times ``exp(log_ratio)``, of independent scatter in either part.

        Parameters
        ----------
        log_ratio : complex
            What the measured response is over the fitted one, near the crossing.
        scatter : float
            Standard deviation of either part.
        """
        by_log_frequency = self.omega_slope
        gain = np.array([1.0, -by_log_frequency.real / by_log_frequency.imag])
        period = np.array([0.0, 1.0 / by_log_frequency.imag])
        moved = np.array([log_ratio.real, log_ratio.imag])
        slopes = np.stack([-gain, period])
        shift = slopes @ moved
        return replace(
            self,
            log_gain=self.log_gain + float(shift[0]),
            log_period=self.log_period + float(shift[1]),
            covariance=self.covariance + scatter**2 * slopes @ slopes.T,
        )


def log_response(fit: Fit, omega: FloatArray, latency: float) -> ComplexArray:
    """Logarithm of a fit's response, the gain's sign taken out and the phase continuous from zero frequency.

    Parameters
    ----------
    fit : Fit
    omega : ndarray, any shape, rad/s
    latency : float, seconds
        Taken out of the dead time.

    Returns
    -------
    ndarray of complex, the shape of ``omega``
    """
    s = 1j * np.asarray(omega, dtype=np.float64)
    period = fit.problem.period
    poles, _ = fit.shape.poles(fit.parameters[: fit.shape.parameters], period)
    lagging = poles[: poles.size - int(fit.shape.integrator)]
    share = float(fit.linear[1] / fit.linear[0]) if fit.shape.zero else 0.0
    found = math.log(abs(float(fit.linear[0]))) + np.log(1.0 + share * s * period)
    found = found - np.sum(np.log(1.0 - s[..., None] / lagging), axis=-1)
    if fit.shape.integrator:
        found = found - np.log(s)
    return np.asarray(found - s * (fit.parameters[0] * period - latency))


def crossing_of(fit: Fit, latency: float, *, near: float | None = None) -> Crossing | None:
    """The crossing of a fit nearest to the oscillation.

    Parameters
    ----------
    fit : Fit
    latency : float, seconds
    near : float or None, rad/s
        Where to look from; the oscillation's frequency where it is not given.

    Returns
    -------
    Crossing or None
        None where the phase does not cross within reach.
    """
    middle = near if near is not None else 2.0 * math.pi / fit.problem.period
    omega = middle * np.geomspace(1.0 / REACH, REACH, POINTS)
    phase = np.unwrap(log_response(fit, omega, latency).imag)
    # The logarithms are continuous term by term: the phase starts from its true value, not from one modulo a turn.
    beyond = phase + math.pi
    places = np.flatnonzero((beyond[:-1] > 0) & (beyond[1:] <= 0))
    if not places.size:
        return None
    place = int(places[np.argmin(np.abs(np.log(omega[places] / middle)))])
    at = _polished(fit, latency, float(omega[place]), float(omega[place + 1]))
    here = log_response(fit, np.array([at]), latency)[0]
    slopes, by_frequency = _slopes(fit, at, latency)
    turned = by_frequency.imag
    if turned >= 0:
        return None
    moved = -slopes.imag / turned
    by_parameters = np.stack([-slopes.real - by_frequency.real * moved, -moved / at])
    size = by_parameters.shape[1]
    own = fit.shape.parameters
    kept = np.concatenate([np.arange(own), fit.parameters.size + np.arange(size - own)])
    covariance = by_parameters @ fit.covariance[np.ix_(kept, kept)] @ by_parameters.T
    return Crossing(
        -float(here.real),
        math.log(2.0 * math.pi / at),
        covariance,
        by_parameters[:, 0] / fit.problem.period,
        by_frequency * at,
    )


def _polished(fit: Fit, latency: float, low: float, high: float) -> float:
    """The frequency of -180 degrees in a bracket, by the secant kept inside it."""
    ends = np.array([low, high])
    values = log_response(fit, ends, latency).imag + math.pi
    values -= 2 * math.pi * np.round(values / (2 * math.pi))
    at = low
    for _ in range(POLISHED):
        span = float(values[0] - values[1])
        share = 0.5 if span <= 0 else min(max(float(values[0]) / span, 0.02), 0.98)
        at = float(ends[0] + share * (ends[1] - ends[0]))
        value = float(log_response(fit, np.array([at]), latency)[0].imag) + math.pi
        value -= 2 * math.pi * round(value / (2 * math.pi))
        if abs(value) < 1e-12:
            break
        side = 0 if value > 0 else 1
        ends[side], values[side] = at, value
    return at


def _slopes(fit: Fit, at: float, latency: float) -> tuple[ComplexArray, complex]:
    """Slopes of the log response by each parameter and path gain, and by the frequency."""
    period, own = fit.problem.period, fit.shape.parameters
    s = 1j * at
    poles, by = fit.shape.poles(fit.parameters[:own], period)
    count = poles.size - int(fit.shape.integrator)
    lagging, by = poles[:count], by[:count]
    # d/dp of -log(1 - s/p), then along the parameters.
    found = [np.array([-s * period]), (-(s / lagging**2) / (1.0 - s / lagging)) @ by]
    share = float(fit.linear[1] / fit.linear[0]) if fit.shape.zero else 0.0
    path = 1.0 + share * s * period
    found.append(np.array([1.0 / (float(fit.linear[0]) * path)]))
    if fit.shape.zero:
        found.append(np.array([s * period / (float(fit.linear[0]) * path)]))
    by_s = share * period / path + np.sum(1.0 / (lagging - s)) - (fit.parameters[0] * period - latency)
    if fit.shape.integrator:
        by_s = by_s - 1.0 / s
    return np.concatenate(found), complex(1j * by_s)
