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
    travel : float, seconds
        Median time that the output takes from one level to the other; 0 where it steps.
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
    travel: float = 0.0

    @property
    def count(self) -> int:
        """How many cycles are scored."""
        return int(self.periods.size)

    @property
    def period(self) -> float:
        """Mean period of the scored cycles, seconds."""
        return float(np.mean(self.periods))

    def runs(self, record: Record) -> list[Run]:
        """Every run of two alternating levels that holds a whole cycle, in order, measured by its last cycle."""
        found = []
        for first, last in _alternating(self.levels):
            if last - first < 3:
                continue
            pair = self.levels[first : first + 2]
            begin, end = self.switches[last - 3], self.switches[last - 1]
            found.append(
                Run(
                    amplitude=float(abs(pair[1] - pair[0])) / 2,
                    bias=float(np.mean(pair)),
                    swing=float(np.ptp(record.process_variable[begin:end])) / 2,
                    cycles=(last - first - 1) // 2,
                )
            )
        return found


@dataclass(frozen=True, slots=True)
class Run:
    """Cycles of two levels: half their step, their middle (output units), the swing (PV units), how many are whole."""

    amplitude: float
    bias: float
    swing: float
    cycles: int


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
    switches, arrived = _switches(output)
    levels = output[arrived]
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
        travel=float(np.median(time[arrived] - time[switches])),
    )


def _switches(output: FloatArray) -> tuple[IntArray, IntArray]:
    """Samples at which a switch begins and at which it has arrived: a ramp of steps to one side is one switch."""
    change = np.diff(output)
    places = np.flatnonzero(change != 0)
    if not places.size:
        return places, places
    onward = (np.diff(places) == 1) & (np.sign(change[places[1:]]) == np.sign(change[places[:-1]]))
    begins = places[np.concatenate([[True], ~onward])]
    ends = places[np.concatenate([~onward, [True]])]
    return begins + 1, ends + 1


def _scored_bounds(levels: FloatArray) -> IntArray:
    """Places of every second switch in the longest run of two alternating levels; the later of equal runs."""
    first, last = max(_alternating(levels), key=lambda run: (run[1] - run[0], run[0]), default=(0, 0))
    if last - first < 3:
        return np.empty(0, dtype=np.intp)
    return np.arange(first, last, 2, dtype=np.intp)


def _alternating(levels: FloatArray) -> list[tuple[int, int]]:
    """Runs of two alternating levels, as the places of their first switch and after their last."""
    runs = []
    start = 0
    for k in range(2, levels.size + 1):
        if k < levels.size:
            step = abs(levels[start] - levels[start + 1])
            if step > 0 and abs(levels[k] - levels[k - 2]) <= SAME_LEVEL * step:
                continue
        runs.append((start, k))
        start = k - 1
    return runs
