"""Answers of exponential modes to a piecewise-constant output, with their derivatives.

Owns the modal arithmetic of fits: a process of distinct poles is a sum of modes ``1/(s - p)``; under an output that
only changes at known times, each mode is one exponential per sample from its state at the last change, and a change
of the pole is another such mode. Knows no structures, gains or noise.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from gainwright.record import Record

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]
AnyArray = npt.NDArray[np.float64] | npt.NDArray[np.complex128]

UNDERFLOW = -700.0
SMALL = 1e-3


@dataclass(frozen=True, slots=True, eq=False)
class Drive:
    """An output as its changes from the level at which the record begins.

    Parameters
    ----------
    times : ndarray, shape (m,), seconds, increasing
        Instants of the changes; at least one.
    levels : ndarray, shape (m,), output units
        Deviation from the first level from each change on.
    """

    times: FloatArray
    levels: FloatArray

    @classmethod
    def of(cls, record: Record) -> Drive:
        """The drive of a record's output column."""
        output = record.controller_output
        places = np.flatnonzero(np.diff(output) != 0) + 1
        return cls(record.time[places], output[places] - output[0])

    def level(self, time: FloatArray) -> FloatArray:
        """Deviation in force at ``time`` (seconds), shape of ``time``."""
        place = np.searchsorted(self.times, time, side="right") - 1
        return np.where(place >= 0, self.levels[np.maximum(place, 0)], 0.0)


def mode_answers(drive: Drive, poles: ComplexArray, time: FloatArray) -> tuple[AnyArray, AnyArray]:
    """Answers of the modes ``1/(s - p)`` to a drive, from rest, and their derivatives by the pole.

    With ``m' = p m + u`` and ``q = dm/dp``, so that ``q' = p q + m``.

    Parameters
    ----------
    drive : Drive
    poles : ndarray of complex, shape (..., k), 1/s, not zero
    time : ndarray, shape (n,) or (..., n), seconds
        Already less the dead time.

    Returns
    -------
    tuple of two ndarray, shape (..., k, n)
        Real where all poles are.
    """
    if poles.ndim == 1 and poles.size > 1 and poles[0].imag != 0.0:
        # The second of a complex pair answers as the conjugate of the first.
        own, own_slopes = _answered(drive, np.delete(poles, 1), time)
        order = np.maximum(np.arange(poles.size) - 1, 0)
        answers, derivatives = own[order], own_slopes[order]
        answers[1], derivatives[1] = own[0].conj(), own_slopes[0].conj()
        return answers, derivatives
    return _answered(drive, poles, time)


def _answered(drive: Drive, poles: ComplexArray, time: FloatArray) -> tuple[AnyArray, AnyArray]:
    pole: AnyArray = poles if np.any(poles.imag) else poles.real
    states, slopes = _at_changes(drive, pole)
    place = np.searchsorted(drive.times, time, side="right") - 1
    seen = place >= 0
    place = np.maximum(place, 0)
    since = ((time - drive.times[place]) * seen)[..., None, :]
    level = (drive.levels[place] * seen)[..., None, :]
    if place.ndim == 1:
        state, slope = np.take(states, place, axis=-1), np.take(slopes, place, axis=-1)
    else:
        at = np.broadcast_to(place[..., None, :], (*states.shape[:-1], time.shape[-1]))
        state, slope = np.take_along_axis(states, at, axis=-1), np.take_along_axis(slopes, at, axis=-1)
    decay, filled, filled_slope = _advance(pole[..., None], since)
    return decay * state + filled * level, decay * (slope + since * state) + filled_slope * level


def _at_changes(drive: Drive, poles: AnyArray) -> tuple[AnyArray, AnyArray]:
    """Modes and derivatives at each change, shape (..., k, m)."""
    states = np.zeros((*poles.shape, drive.times.size), dtype=poles.dtype)
    slopes = np.zeros_like(states)
    lengths = np.diff(drive.times)
    decay, filled, filled_slope = _advance(poles[..., None], lengths)
    forced, forced_slope = filled * drive.levels[:-1], filled_slope * drive.levels[:-1]
    if poles.ndim == 1:
        _recur(states, slopes, decay.tolist(), forced.tolist(), forced_slope.tolist(), lengths.tolist())
        return states, slopes
    state = np.zeros(poles.shape, dtype=poles.dtype)
    slope = np.zeros(poles.shape, dtype=poles.dtype)
    for k in range(lengths.size):
        slope = decay[..., k] * (slope + lengths[k] * state) + forced_slope[..., k]
        state = decay[..., k] * state + forced[..., k]
        states[..., k + 1], slopes[..., k + 1] = state, slope
    return states, slopes


def _recur(states: AnyArray, slopes: AnyArray, decay: Any, forced: Any, forced_slope: Any, lengths: Any) -> None:
    """The recursion of a few modes in plain numbers: arrays of three would cost ten times as much."""
    for mode in range(len(decay)):
        state = slope = 0.0
        held, held_slope = [state], [slope]
        for d, f, g, h in zip(decay[mode], forced[mode], forced_slope[mode], lengths, strict=True):
            slope = d * (slope + h * state) + g
            state = d * state + f
            held.append(state)
            held_slope.append(slope)
        states[mode], slopes[mode] = held, held_slope


def _advance(pole: AnyArray, length: FloatArray) -> tuple[AnyArray, AnyArray, AnyArray]:
    """``exp(p h)``, ``(exp(p h) - 1)/p`` and the derivative of the latter by p."""
    exponent = pole * length
    if exponent.dtype.kind == "c" and np.min(exponent.real, initial=0.0) < UNDERFLOW:
        decay = np.exp(np.maximum(exponent.real, UNDERFLOW) + 1j * exponent.imag)
    else:
        decay = np.exp(exponent)
    reciprocal = 1.0 / pole
    filled = (decay - 1.0) * reciprocal
    slope = (length * decay - filled) * reciprocal
    small = np.abs(pole) * length < SMALL
    if np.any(small):
        # Below a thousandth the differences lose digits; four terms of the series are exact there.
        x = exponent[small]
        h = np.broadcast_to(length, exponent.shape)[small]
        filled[small] = h * (1.0 + x / 2.0 * (1.0 + x / 3.0 * (1.0 + x / 4.0)))
        slope[small] = h**2 * (0.5 + x / 3.0 * (1.0 + x * 0.375 * (1.0 + x * 4.0 / 15.0)))
    return decay, filled, slope
