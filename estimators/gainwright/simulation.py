"""Exact simulation of a process under a piecewise-constant output, and of a whole sampled relay test.

Owns the state of a rational process with dead time and its exact advance over any step. Knows nothing of devices or
clocks. Strategy: matrix exponentials kept per step length, and a queue of the input's changes from which the dead
time is served to a fraction of any step.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from gainwright.errors import NoLimitCycle, OutOfDomain
from gainwright.models import TransferFunction
from gainwright.realisation import Realisation
from gainwright.record import Record
from gainwright.relay import RelayLaw, Side

FloatArray = npt.NDArray[np.float64]

SAME_INSTANT_S = 5e-13
"""A change due within this of a step's end has arrived: below the rounding of the steps, above floating point's."""


class PlantSimulation:
    """A process advanced step by step under a piecewise-constant output.

    At ``resting_output`` the process rests (self-regulating) or stands still (integrating) at ``resting_value``.
    Exact for any sequence of step lengths.

    Parameters
    ----------
    transfer_function : TransferFunction
        Output units to PV units.
    resting_output : float, output units
    resting_value : float, PV units
    load : float, output units
        Added to the output at the process's input, and delayed with it, from the first step on; may be set
        between steps.

    Raises
    ------
    OutOfDomain
        For an improper transfer function or a negative dead time.
    """

    def __init__(
        self,
        transfer_function: TransferFunction,
        *,
        resting_output: float = 0.0,
        resting_value: float = 0.0,
        load: float = 0.0,
    ) -> None:
        if transfer_function.dead_time < 0:
            raise OutOfDomain("dead_time", "is negative", "0 or more seconds")
        self._realisation = Realisation(transfer_function)
        self._dead_time = float(transfer_function.dead_time)
        self._resting_output = resting_output
        self._resting_value = resting_value
        self.load = load
        self._state = np.zeros(self._realisation.order)
        self._now = 0.0
        self._in_force = 0.0
        self._commanded = 0.0
        # Changes on their way, as (seconds after the change before, or from now for the first; new input).
        self._arriving: deque[tuple[float, float]] = deque()
        self._until_last = 0.0

    @property
    def now(self) -> float:
        """Simulated seconds since the start."""
        return self._now

    def value(self) -> float:
        """The process variable now, without noise, PV units."""
        deviation = float(self._realisation.output_vector @ self._state)
        return self._resting_value + deviation + self._realisation.feedthrough * self._in_force

    def step(self, duration: float, output: float) -> float:
        """Advance ``duration`` (seconds, >= 0) under ``output`` (output units); the new process variable."""
        if not duration >= 0:
            raise OutOfDomain("duration", f"is {duration}", "0 or more seconds")
        self._command(output - self._resting_output + self.load)
        remaining = duration
        while self._arriving and self._arriving[0][0] <= remaining + SAME_INSTANT_S:
            gap, drive = self._arriving.popleft()
            self._advance(gap)
            remaining -= gap
            self._in_force = drive
        self._advance(remaining)
        if self._arriving:
            gap, drive = self._arriving[0]
            self._arriving[0] = (gap - max(remaining, 0.0), drive)
        self._until_last = max(self._until_last - duration, 0.0)
        self._now += duration
        return self.value()

    def _command(self, drive: float) -> None:
        if drive != self._commanded:
            self._arriving.append((self._dead_time - self._until_last, drive))
            self._until_last = self._dead_time
            self._commanded = drive

    def _advance(self, duration: float) -> None:
        if duration > SAME_INSTANT_S and self._realisation.order:
            transition, gain = self._realisation.step(duration)
            self._state = transition @ self._state + gain * self._in_force


def respond(
    transfer_function: TransferFunction,
    switch_time: npt.ArrayLike,
    level: npt.ArrayLike,
    time: npt.ArrayLike,
    *,
    resting_output: float = 0.0,
    resting_value: float = 0.0,
) -> FloatArray:
    """The process variable at given times under an output that switches at given times.

    Parameters
    ----------
    transfer_function : TransferFunction
    switch_time : array_like, shape (m,), seconds, increasing
    level : array_like, shape (m,), output units
        ``level[k]`` is in force from ``switch_time[k]`` to the next switch; before the first the process rests.
    time : array_like, shape (n,), seconds, increasing
    resting_output, resting_value : float
        Operating point (output units, PV units).

    Returns
    -------
    numpy.ndarray, shape (n,), PV units

    Raises
    ------
    OutOfDomain
        Where the shapes differ or a time does not increase.
    """
    switches = _increasing("switch_time", switch_time)
    times = _increasing("time", time)
    levels = np.asarray(level, dtype=np.float64)
    if levels.shape != switches.shape:
        raise OutOfDomain("level", f"has shape {levels.shape}", f"the shape {switches.shape} of switch_time")
    plant = PlantSimulation(transfer_function, resting_output=resting_output, resting_value=resting_value)
    values = np.full(times.size, plant.value())
    if not switches.size:
        return values
    now, output, following = min(float(switches[0]), float(times[0])), resting_output, 0
    for k, at in enumerate(times.tolist()):
        while following < switches.size and switches[following] <= at:
            plant.step(float(switches[following]) - now, output)
            now, output = float(switches[following]), float(levels[following])
            following += 1
        values[k] = plant.step(at - now, output)
        now = at
    return values


def simulate(
    transfer_function: TransferFunction,
    time: npt.ArrayLike,
    output: npt.ArrayLike,
    *,
    resting_output: float = 0.0,
    resting_value: float = 0.0,
) -> FloatArray:
    """The process variable at the sample times of a zero-order-held output.

    Parameters
    ----------
    transfer_function : TransferFunction
    time : array_like, shape (n,), seconds, increasing
    output : array_like, shape (n,), output units
        ``output[k]`` is in force on ``[time[k], time[k+1])``; before ``time[0]`` the process rests.
    resting_output, resting_value : float
        Operating point (output units, PV units).

    Returns
    -------
    numpy.ndarray, shape (n,), PV units

    Raises
    ------
    OutOfDomain
        Where the shapes differ or time does not increase.
    """
    return respond(transfer_function, time, output, time, resting_output=resting_output, resting_value=resting_value)


@dataclass(frozen=True, slots=True)
class Disturbances:
    """What a real test adds to the exact response; all off by default.

    Parameters
    ----------
    noise : float, PV units
        Standard deviation of the measurement noise.
    noise_correlation : float, 0 <= . < 1
        Lag-one correlation of the noise.
    quantum : float, PV units
        Resolution of the measurement, applied after the noise; 0 for none.
    load_step, load_time_s : float, output units and seconds
        A constant load at the process's input from ``load_time_s`` on.
    drift_per_s : float, PV units per second
        Ramp added to the process variable from time 0 on.
    jitter : float, 0 <= . < 0.5
        Each sample is taken up to this fraction of the sample interval early or late; its stamp tells the truth.
    missing : float, 0 <= . < 1
        Fraction of the samples left out of the record, switches among them; the relay saw them.
    """

    noise: float = 0.0
    noise_correlation: float = 0.0
    quantum: float = 0.0
    load_step: float = 0.0
    load_time_s: float = 0.0
    drift_per_s: float = 0.0
    jitter: float = 0.0
    missing: float = 0.0


QUIET = Disturbances()


def simulate_relay_test(
    transfer_function: TransferFunction,
    law: RelayLaw,
    *,
    amplitude: float,
    sample_interval_s: float,
    bias: float | None = None,
    cycles: int = 4,
    baseline_s: float = 0.0,
    resting_output: float = 0.0,
    resting_value: float = 0.0,
    disturbances: Disturbances = QUIET,
    generator: np.random.Generator | None = None,
    max_samples: int = 20_000,
) -> Record:
    """The record of a sampled relay test: decisions at the samples, output held between them.

    Parameters
    ----------
    transfer_function : TransferFunction
    law : RelayLaw
        Its reference is absolute, in PV units.
    amplitude : float, output units, > 0
        Half of the step between the two levels.
    sample_interval_s : float, seconds, > 0
    bias : float, output units
        Middle of the two levels; the resting output when not given. Asymmetric levels +d1, -d2 about the resting
        output have amplitude (d1 + d2)/2 and bias (d1 - d2)/2.
    cycles : int, >= 1
        The record ends with the switch that completes this many cycles, the start-up counted as the first.
    baseline_s : float, seconds
        Time at the resting output before the relay starts, on the up side.
    resting_output, resting_value : float
        Operating point (output units, PV units).
    disturbances : Disturbances
    generator : numpy.random.Generator
        Source of noise, jitter and missing samples; needed when any is asked for.
    max_samples : int
        Bound on the simulated samples.

    Returns
    -------
    Record
        ``controller_output[k]`` is in force on ``[time[k], time[k+1])``.

    Raises
    ------
    NoLimitCycle
        Where the cycles are not completed within ``max_samples``.
    OutOfDomain
        Where a number is outside its domain or a generator is missing.
    """
    if not (amplitude > 0 and sample_interval_s > 0 and cycles >= 1):
        raise OutOfDomain("amplitude, sample_interval_s, cycles", "must be positive", "numbers above 0")
    scatter = _Scatter(disturbances, generator, sample_interval_s)
    plant = PlantSimulation(transfer_function, resting_output=resting_output, resting_value=resting_value)
    middle = resting_output if bias is None else bias
    side, started, switches = Side.UP, False, 0
    rows: list[tuple[float, float, float]] = []
    output = resting_output
    for k in range(max_samples):
        at = scatter.instant(k)
        _advance_to(plant, at, output, disturbances)
        measured = scatter.measured(plant.value(), at)
        if not started and at >= baseline_s - SAME_INSTANT_S:
            started, output = True, law.level(side, middle, amplitude)
        elif started and (following := law.next_side(side, measured)) is not side:
            side, switches = following, switches + 1
            output = law.level(side, middle, amplitude)
        rows.append((at, measured, output))
        if switches == 2 * cycles:
            return scatter.record(rows)
    raise NoLimitCycle("cycles", f"{switches} switches in {max_samples} samples", f"{2 * cycles} switches")


class _Scatter:
    """Noise, quantum, jitter and missing samples of one simulated test."""

    def __init__(self, wanted: Disturbances, generator: np.random.Generator | None, interval_s: float) -> None:
        if generator is None and (wanted.noise or wanted.jitter or wanted.missing):
            raise OutOfDomain("generator", "is missing", "a numpy Generator where noise, jitter or gaps are asked")
        self._wanted = wanted
        self._generator = np.random.default_rng(0) if generator is None else generator
        self._interval_s = interval_s
        self._colour = 0.0 if not wanted.noise else float(self._generator.standard_normal())

    def instant(self, k: int) -> float:
        """Time of sample ``k``."""
        jitter = self._wanted.jitter
        early = float(self._generator.uniform(-jitter, jitter)) if jitter and k else 0.0
        return (k + early) * self._interval_s

    def measured(self, value: float, at: float) -> float:
        """What the transmitter shows of ``value``."""
        wanted = self._wanted
        value += wanted.drift_per_s * at
        if wanted.noise:
            value += wanted.noise * self._colour
            correlation = wanted.noise_correlation
            innovation = float(self._generator.standard_normal())
            self._colour = correlation * self._colour + float(np.sqrt(1 - correlation**2)) * innovation
        return float(wanted.quantum * np.round(value / wanted.quantum)) if wanted.quantum else value

    def record(self, rows: list[tuple[float, float, float]]) -> Record:
        """The rows as a record, less the missing ones; the first and the last are always kept."""
        table = np.array(rows)
        if self._wanted.missing:
            kept = self._generator.random(len(rows)) >= self._wanted.missing
            kept[[0, -1]] = True
            table = table[kept]
        return Record(table[:, 0], table[:, 1], table[:, 2])


def _advance_to(plant: PlantSimulation, at: float, output: float, disturbances: Disturbances) -> None:
    if disturbances.load_step and not plant.load and disturbances.load_time_s <= at:
        plant.step(max(disturbances.load_time_s - plant.now, 0.0), output)
        plant.load = disturbances.load_step
    plant.step(max(at - plant.now, 0.0), output)


def _increasing(name: str, values: npt.ArrayLike) -> FloatArray:
    column = np.asarray(values, dtype=np.float64)
    if column.ndim != 1 or not np.all(np.diff(column) > 0):
        raise OutOfDomain(name, "is not a column of increasing times", "one dimension, strictly increasing seconds")
    return column
