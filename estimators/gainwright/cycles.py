"""Cycles of a relay test: the output's levels and switches, whole cycles, and what they have in common.

Owns the segmentation of a record by its output. Knows no model and judges nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from gainwright.record import Record

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.intp]

SAME_LEVEL = 0.02
"""Levels within this share of the step between them are the same level."""


@dataclass(frozen=True, slots=True, eq=False)
class Cycles:
    """Whole cycles of a record.

    Parameters
    ----------
    switches : ndarray of int, shape (m,)
        Samples at which the output took a new level.
    levels : ndarray, shape (m,), output units
        The level from each switch on.
    scored : ndarray of int, shape (c + 1,)
        Switches (places in ``switches``) that bound the scored cycles, all of equal levels; empty without one.
    baseline : int
        Samples before the first switch.
    amplitude, bias : float, output units
        Half the step between the scored levels and their middle.
    periods, swings, duties : ndarray, shape (c,)
        Seconds, PV units, share of the cycle on the higher level.
    """

    switches: IntArray
    levels: FloatArray
    scored: IntArray
    baseline: int
    amplitude: float
    bias: float
    periods: FloatArray
    swings: FloatArray
    duties: FloatArray

    @property
    def count(self) -> int:
        """How many cycles are scored."""
        return int(self.periods.size)

    @property
    def period(self) -> float:
        """Mean period of the scored cycles, seconds."""
        return float(np.mean(self.periods))


def find_cycles(record: Record) -> Cycles:
    """Segment a record by its output; the last run of cycles with equal levels is scored.

    Parameters
    ----------
    record : Record

    Returns
    -------
    Cycles
        With no scored cycle where there is none.
    """
    output, time, value = record.controller_output, record.time, record.process_variable
    switches = np.flatnonzero(np.diff(output) != 0) + 1
    levels = output[switches]
    nothing = np.empty(0)
    empty = np.empty(0, dtype=np.intp)
    bounds = _scored_bounds(levels)
    if bounds.size < 2:
        baseline = int(switches[0]) if switches.size else len(record)
        return Cycles(switches, levels, empty, baseline, 0.0, 0.0, nothing, nothing, nothing)
    first = int(bounds[0])
    high, low = max(levels[first], levels[first + 1]), min(levels[first], levels[first + 1])
    starts, ends = switches[bounds[:-1]], switches[bounds[1:]]
    middles = switches[bounds[:-1] + 1]
    periods = time[ends] - time[starts]
    swings = np.array([np.ptp(value[a:b]) / 2 for a, b in zip(starts, ends, strict=True)])
    first_part = (time[middles] - time[starts]) / periods
    duties = first_part if levels[first] > levels[first + 1] else 1.0 - first_part
    return Cycles(
        switches=switches,
        levels=levels,
        scored=bounds,
        baseline=int(switches[0]),
        amplitude=float(high - low) / 2,
        bias=float(high + low) / 2,
        periods=periods,
        swings=swings,
        duties=duties,
    )


def _scored_bounds(levels: FloatArray) -> IntArray:
    """Places of every second switch in the longest run of two alternating levels; the later of equal runs."""
    best: tuple[int, int] = (0, 0)
    start = 0
    for k in range(2, levels.size + 1):
        if k < levels.size:
            step = abs(levels[start] - levels[start + 1]) if start + 1 < levels.size else 0.0
            if step > 0 and abs(levels[k] - levels[k - 2]) <= SAME_LEVEL * step:
                continue
        if k - start >= best[1] - best[0]:
            best = (start, k)
        start = k - 1
    first, last = best
    if last - first < 3:
        return np.empty(0, dtype=np.intp)
    return np.arange(first, last, 2, dtype=np.intp)
