"""What the baseline of a record says about the loop before the test: noise, drift, regular oscillation, timing.

Plain numerics on the columns of the listening phase; judges nothing.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from gainwright_service.checklist import Listening
from gainwright_wire.loops import Range

FloatArray = npt.NDArray[np.float64]

LEAST_SAMPLES = 10
HEALTHY_LOW, HEALTHY_HIGH = -0.0125, 1.03125
"""A healthy 4-20 mA signal, 3.8 to 20.5 mA, as shares of its span (NAMUR NE 43)."""


def listened(
    time_s: FloatArray, process_variable: FloatArray, *, nominal_interval_s: float, signal: Range
) -> Listening | None:
    """Measure the baseline; None where it is too short to say anything.

    Parameters
    ----------
    time_s : array, shape (n,), seconds
    process_variable : array, shape (n,), PV units
    nominal_interval_s : float, seconds
    signal : Range
        The process variable's range.
    """
    if time_s.size < LEAST_SAMPLES:
        return None
    slope, residual, slope_error = _line(time_s, process_variable)
    share = (process_variable - signal.low) / signal.span
    return Listening(
        noise=float(np.std(residual)),
        drift_per_s=float(np.sign(slope) * max(0.0, abs(slope) - 2 * slope_error)),
        regularity=_regularity(residual),
        late_ratio=float(np.percentile(np.diff(time_s), 95) / nominal_interval_s),
        in_range=bool(np.all((share >= HEALTHY_LOW) & (share <= HEALTHY_HIGH))),
    )


def quantum_of(values: FloatArray) -> float:
    """Smallest step of a quantised signal; 0 where the signal shows no step of its own.

    A signal is taken as quantised when at least half of its changes are whole multiples of the smallest one.
    """
    if values.size <= LEAST_SAMPLES:
        return 0.0
    changes = np.abs(np.diff(values))
    changes = changes[changes > 1e-12 * max(1.0, float(np.max(np.abs(values))))]
    if changes.size < LEAST_SAMPLES:
        return 0.0
    smallest = float(np.min(changes))
    multiples = changes / smallest
    whole = np.abs(multiples - np.round(multiples)) < 0.02
    return smallest if np.mean(whole) >= 0.5 and float(np.median(multiples)) < 1000 else 0.0


def _line(time_s: FloatArray, values: FloatArray) -> tuple[float, FloatArray, float]:
    """Least-squares slope, the residual about the line, and the slope's standard error."""
    centred = time_s - np.mean(time_s)
    spread = float(np.sum(centred**2))
    about_mean = values - values[0] - np.mean(values - values[0])
    slope = float(np.sum(centred * about_mean) / spread)
    residual = about_mean - slope * centred
    error = float(np.sqrt(np.sum(residual**2) / max(1, values.size - 2) / spread))
    return slope, residual, error


def _regularity(residual: FloatArray) -> float:
    """Highest autocorrelation beyond its first zero: near 0 for noise, near 1 for a regular oscillation."""
    power = float(np.sum(residual**2))
    if power <= 0:
        return 0.0
    size = residual.size
    spectrum = np.fft.rfft(residual, 2 * size)
    correlation = np.fft.irfft(np.abs(spectrum) ** 2)[: size // 2] / power
    negative = np.flatnonzero(correlation < 0)
    if negative.size == 0:
        return 0.0
    return float(np.clip(np.max(correlation[negative[0] :]), 0.0, 1.0))
