"""Relay tests of loops with faults: actuators, sensors and disturbances that the numerics themselves leave out."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from gainwright import Record
from gainwright.margins import ultimate_point
from gainwright.models import TransferFunction
from gainwright.relay import RelayLaw, Side
from gainwright.simulation import PlantSimulation

PROCESS = TransferFunction((2.0,), (50.0, 15.0, 1.0), 1.0)
GAIN, PERIOD = ultimate_point(PROCESS)
SWING = 4 / (math.pi * GAIN)


@dataclass
class Backlash:
    """A final element that follows only after ``width`` (output units) of lost motion."""

    width: float
    at: float = 0.0

    def __call__(self, output: float, _: float) -> float:
        self.at = min(max(self.at, output - self.width / 2), output + self.width / 2)
        return self.at


@dataclass
class Sticking:
    """A final element that stays for a random time after each change before it follows."""

    generator: np.random.Generator
    longest_s: float
    at: float = 0.0
    wanted: float = 0.0
    free_at: float = 0.0

    def __call__(self, output: float, now: float) -> float:
        if output != self.wanted:
            self.wanted, self.free_at = output, now + float(self.generator.uniform(0, self.longest_s))
        if now >= self.free_at:
            self.at = self.wanted
        return self.at


@dataclass
class Slewing:
    """An output that travels at a bounded rate, and shows it."""

    rate_per_s: float
    at: float = 0.0
    last: float = 0.0

    def __call__(self, output: float, now: float) -> float:
        most = self.rate_per_s * (now - self.last)
        self.at += max(-most, min(most, output - self.at))
        self.last = now
        return self.at


@dataclass
class Fault:
    """What is wrong with a loop; nothing by default."""

    noise: float = 0.02
    hysteresis: float = 0.06
    samples_per_period: float = 50.0
    cycles: int = 7
    amplitude: Callable[[int], float] = field(default=lambda _: 1.0)
    bias: Callable[[int], float] = field(default=lambda _: 0.0)
    actuator: Callable[[float, float], float] | None = None
    shown_by_actuator: bool = False
    gain: Callable[[float], float] = field(default=lambda _: 1.0)
    outside: Callable[[float], float] = field(default=lambda _: 0.0)
    sensor: Callable[[np.ndarray, np.ndarray], np.ndarray] = field(default=lambda _, value: value)
    quantum: float = 0.0
    load_per_s: float = 0.0


def relay_run(fault: Fault, generator: np.random.Generator) -> Record:
    """The record of a test on `PROCESS` with a fault; noise, hysteresis and quantum in shares of the textbook swing.

    ``amplitude`` and ``bias`` are told the number of switches so far; ``gain`` the output that is in force.
    """
    interval = PERIOD / fault.samples_per_period
    law = RelayLaw(0.0, fault.hysteresis * SWING)
    plant = PlantSimulation(PROCESS)
    side, switches, started = Side.UP, 0, False
    rows: list[tuple[float, float, float]] = []
    output = real = 0.0
    for k in range(4000):
        now = k * interval
        plant.load = fault.load_per_s * now
        plant.step(max(now - plant.now, 0.0), fault.gain(real) * real)
        value = plant.value() + fault.outside(now) + SWING * fault.noise * float(generator.standard_normal())
        if fault.quantum:
            value = fault.quantum * SWING * round(value / (fault.quantum * SWING))
        if not started and now >= PERIOD:
            started = True
        elif started and (following := law.next_side(side, value)) is not side:
            side, switches = following, switches + 1
        if started:
            output = law.level(side, fault.bias(switches), fault.amplitude(switches))
        real = output if fault.actuator is None else fault.actuator(output, now)
        rows.append((now, value, real if fault.shown_by_actuator else output))
        if switches >= 2 * fault.cycles:
            break
    time, values, outputs = np.array(rows).T
    return Record(time, fault.sensor(time, values), outputs)
