"""One device of the rig: process, final element, PI controller, watchdog, and a log of every write.

Owns the device's behaviour, told the time by its caller. Knows no protocol: the server turns registers into these
verbs.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np

from gainwright.simulation import PlantSimulation
from gainwright_service.practice_rig.dye_house import AUTOMATIC, MANUAL, RigLoop

LogWrite = Callable[[str, str, float, str], None]
"""Loop, what, value, by whom."""

GRID_S = 0.001
"""A device lives on this grid of time: few step lengths, so that their matrix exponentials are kept for reuse."""
CONTROL_S = 0.02
LOG_STEP = 0.25
"""The PI controller's outputs are logged when they have moved by this much, percent."""


class Device:
    """A loop's device, advanced to the time of each access.

    Parameters
    ----------
    loop : RigLoop
    log : callable
    now : float
        Monotonic seconds.
    seed : int
    """

    def __init__(self, loop: RigLoop, log: LogWrite, now: float, seed: int) -> None:
        self.loop = loop
        self.output = loop.resting_output
        self.setpoint = loop.resting_value
        self.mode = loop.mode
        self.heartbeat = 0
        self.resting_output = loop.resting_output
        self.fired = False
        self.gain = loop.gain
        self.integral_s = loop.integral_s
        self.faults: dict[str, Any] = {}
        self._log = log
        self._at = math.floor(now / GRID_S) * GRID_S
        self._beaten_at: float | None = None
        self._integral = loop.resting_output
        self._logged_output = loop.resting_output
        self._stem = loop.resting_output
        self._noise = np.random.default_rng(seed)
        self._plant = PlantSimulation(
            loop.transfer_function,
            resting_output=loop.resting_output,
            resting_value=loop.resting_value,
        )

    def advance(self, now: float) -> None:
        """Bring process, controller and watchdog to ``now``, on the grid."""
        now = math.floor(now / GRID_S) * GRID_S
        while now - self._at > GRID_S / 2:
            step = now - self._at
            if self.mode == AUTOMATIC:
                step = min(step, CONTROL_S)
            if self._beaten_at is not None:
                due = self._beaten_at + self.loop.watchdog_s
                if due <= self._at:
                    self._fire()
                else:
                    step = min(step, due - self._at)
            step = max(round(step / GRID_S), 1) * GRID_S
            self._plant.step(step, self._moved())
            self._at += step
            if self.mode == AUTOMATIC:
                self._control(step)

    def measured(self) -> float:
        """The transmitter's value: noise, then its quantum, inside its range."""
        value = self._plant.value() + self.loop.noise * float(self._noise.standard_normal())
        if self.loop.quantum > 0:
            value = round(value / self.loop.quantum) * self.loop.quantum
        return min(max(value, self.loop.low), self.loop.high)

    def write_output(self, value: float, by: str) -> None:
        """A new output: taken in manual; in automatic the controller keeps it, as controllers do."""
        self._log(self.loop.tag, "output" if self.mode == MANUAL else "output_ignored", value, by)
        if self.mode != MANUAL:
            return
        self.output = min(max(value, 0.0), 100.0)
        if by == "operator":
            self._disarm()

    def write_mode(self, mode: int, by: str) -> None:
        """Manual or automatic; bumpless, since the integral follows the output in manual."""
        self._log(self.loop.tag, "mode", mode, by)
        if mode not in (MANUAL, AUTOMATIC):
            return
        if mode == AUTOMATIC and self.mode == MANUAL:
            self._integral = self.output - self._proportional()
        if by == "operator" and mode != self.mode:
            self._disarm()
        if mode == AUTOMATIC:
            self._disarm()
        self.mode = mode

    def write_setpoint(self, value: float, by: str) -> None:
        """A new setpoint."""
        self._log(self.loop.tag, "setpoint", value, by)
        self.setpoint = value

    def write_resting(self, value: float, by: str) -> None:
        """The output that the watchdog goes to."""
        self._log(self.loop.tag, "resting", value, by)
        self.resting_output = value

    def write_heartbeat(self, count: int, by: str) -> None:
        """Any count but zero beats and arms; zero disarms."""
        if (count == 0) != (self.heartbeat == 0):
            self._log(self.loop.tag, "heartbeat", count, by)
        self.heartbeat = count
        self.fired = False
        self._beaten_at = self._at if count else None

    def write_gain(self, index: int, value: float, by: str) -> None:
        """Gain (percent per percent) or integral time (seconds)."""
        self._log(self.loop.tag, ("gain", "integral")[index], value, by)
        if index == 0:
            self.gain = value
        else:
            self.integral_s = value

    def operate(self, document: dict[str, Any]) -> None:
        """Act as the person at the device."""
        if "output" in document:
            self.write_output(float(document["output"]), "operator")
        if "mode" in document:
            self.write_mode({"manual": MANUAL, "automatic": AUTOMATIC}[document["mode"]], "operator")
        if "setpoint" in document:
            self.write_setpoint(float(document["setpoint"]), "operator")
        if "load" in document:
            self._plant.load = float(document["load"])
            self._log(self.loop.tag, "load", self._plant.load, "operator")

    def _moved(self) -> float:
        """The final element's position: it sticks until the output has gone far enough from where it stands."""
        if abs(self.output - self._stem) > self.loop.stick or self.loop.stick == 0.0:
            self._stem = self.output
        return self._stem

    def _proportional(self) -> float:
        sign = 1.0 if self.loop.effect == "raises" else -1.0
        error = sign * (self.setpoint - self._plant.value()) / self.loop.span * 100.0
        return self.gain * error

    def _control(self, step: float) -> None:
        proportional = self._proportional()
        self._integral += proportional * step / max(self.integral_s, 1e-3)
        self._integral = min(max(self._integral, 0.0), 100.0)
        self.output = min(max(self._integral + proportional, 0.0), 100.0)
        if abs(self.output - self._logged_output) >= LOG_STEP:
            self._logged_output = self.output
            self._log(self.loop.tag, "output", self.output, "pi")

    def _fire(self) -> None:
        """The beats have stopped: act if still armed and still in the mode that the test set."""
        self._beaten_at = None
        if self.mode != MANUAL:
            return
        self.fired = True
        self._log(self.loop.tag, "watchdog", 1.0, "watchdog")
        if self.loop.watchdog == "resting":
            self.output = self.resting_output
        elif self.loop.watchdog == "fixed" and self.loop.fixed_value is not None:
            self.output = self.loop.fixed_value
        self._log(self.loop.tag, "output", self.output, "watchdog")

    def _disarm(self) -> None:
        self._beaten_at = None
        self.heartbeat = 0
