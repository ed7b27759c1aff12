"""Points of the frequency response from whole cycles of both signals.

Owns the Fourier coefficients over whole cycles at the record's real time stamps: exact for the output, which is
piecewise constant, by the trapezoidal rule for the process variable. ``G(j k w) = Y_k/U_k`` holds for any linear
process in periodic operation, whatever made it oscillate.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from gainwright.cycles import Cycles
from gainwright.record import Record
from gainwright.results import ResponsePoint

FloatArray = npt.NDArray[np.float64]


def response_points(
    record: Record, cycles: Cycles, *, noise: float, latency: float, harmonics: tuple[int, ...] = (1, 3)
) -> tuple[ResponsePoint, ...]:
    """Response points at the oscillation's harmonics.

    Parameters
    ----------
    record : Record
    cycles : Cycles
        With at least one scored cycle.
    noise : float, PV units
        Standard deviation of the process variable's noise.
    latency : float, seconds
        Time from a reading to the output that answers it, removed from the phase.
    harmonics : tuple of int

    Returns
    -------
    tuple of ResponsePoint
        Over the later half of the scored cycles, in which the start has died away; a harmonic that the output does
        not carry is left out.

    Notes
    -----
    Source: whole-period Fourier analysis of relay records, Wang, Hang & Zou 1997 (from memory; verified to machine
    precision in the tests).
    """
    settled = max(1, (cycles.count + 1) // 2)
    start, end = int(cycles.switches[cycles.scored[-1 - settled]]), int(cycles.switches[cycles.scored[-1]])
    time = record.time[start : end + 1]
    span = float(time[-1] - time[0])
    found = []
    for harmonic in harmonics:
        omega = 2 * np.pi * settled * harmonic / span
        turning = np.exp(-1j * omega * (time - time[0]))
        edges = turning[1:] - turning[:-1]
        output = np.sum(record.controller_output[start:end] * edges) / (-1j * omega)
        middles = np.diff(time) / 2
        weighted = (record.process_variable[start : end + 1] - np.mean(record.process_variable[start:end])) * turning
        value = np.sum((weighted[1:] + weighted[:-1]) * middles)
        if abs(output) < 0.05 * cycles.amplitude * span / harmonic:
            continue
        response = complex(value / output * np.exp(1j * omega * latency))
        # White noise in the sum over n samples spaced span/n, both parts alike.
        scatter = noise * span / np.sqrt(2 * max(time.size - 1, 1)) / abs(output)
        found.append(ResponsePoint(float(omega), response, (float(scatter**2), 0.0, float(scatter**2)), harmonic))
    return tuple(found)


def phasor(time: FloatArray, value: FloatArray, omega: float) -> complex:
    """Phasor of a signal at one frequency, by least squares beside its mean: ``value ~ mean + Re(X exp(j omega t))``.

    Parameters
    ----------
    time, value : ndarray, shape (n,), n >= 3
        Evenly spaced or not; time counts from its first sample.
    omega : float, rad/s

    Returns
    -------
    complex
    """
    turned = omega * (time - time[0])
    columns = np.stack([np.cos(turned), -np.sin(turned), np.ones_like(turned)], axis=1)
    sizes, *_ = np.linalg.lstsq(columns, value, rcond=None)
    return complex(sizes[0], sizes[1])
