"""What symptoms are read from: the record, its cycles, its explanation, and what was declared of the loop."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from gainwright.combination import Candidate
from gainwright.cycles import Cycles
from gainwright.fitting import Fit
from gainwright.record import Record
from gainwright.selection import Explanation

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Declared:
    """What is known of a loop besides its record; None where it is not.

    Parameters
    ----------
    effect : int or None
        +1 where a rising output raises the process variable, -1 where it lowers it.
    commanded_amplitude : float or None, output units
        The relay amplitude that was asked for.
    output_resolution : float or None, output units
        Smallest step of the output.
    filter_time_s : float or None, seconds
        Time constant of a filter on the process variable.
    clock_error : float or None
        Share by which the record's clock differs from another.
    latency, latency_jitter : float, seconds
    """

    effect: int | None = None
    commanded_amplitude: float | None = None
    output_resolution: float | None = None
    filter_time_s: float | None = None
    clock_error: float | None = None
    latency: float = 0.0
    latency_jitter: float = 0.0


@dataclass(frozen=True)
class Evidence:
    """A record with everything that was found in it.

    Parameters
    ----------
    record : Record
    cycles : Cycles
        With at least one scored cycle.
    explanation : Explanation
    candidates : list of Candidate
        May be empty.
    declared : Declared
    swing, noise, quantum, hysteresis : float, PV units
    """

    record: Record
    cycles: Cycles
    explanation: Explanation
    candidates: list[Candidate]
    declared: Declared
    swing: float
    noise: float
    quantum: float
    hysteresis: float

    @property
    def lead(self) -> Fit | None:
        """The best fit, if there is one."""
        return self.explanation.fits[0] if self.explanation.fits else None

    @property
    def nominal(self) -> float:
        """Median interval between samples, seconds."""
        return float(np.median(np.diff(self.record.time)))

    @cached_property
    def quiet_swing(self) -> float:
        """The swing without its noise: of the fitted answer over the last scored cycle; as seen without a fit."""
        if self.lead is None:
            return self.swing
        problem = self.lead.problem
        edges = self.record.time[self.cycles.switches[self.cycles.scored[-2:]]]
        inside = (problem.time >= edges[0]) & (problem.time <= edges[1])
        fitted = (problem.value - self.lead.residual)[inside]
        return float(np.ptp(fitted)) / 2 if fitted.size > 1 else self.swing

    @cached_property
    def misfit_share(self) -> float:
        """Fit error beyond the noise, as a share of the swing."""
        if self.lead is None:
            return 0.0
        excess = float(np.mean(self.lead.residual**2)) - self.noise**2
        return float(np.sqrt(max(excess, 0.0))) / self.swing
