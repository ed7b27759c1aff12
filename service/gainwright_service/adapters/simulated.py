"""A simulated loop on the injected clock: a process, a PI controller behind automatic, a mode, a watchdog.

For rehearsals and tests; stands in for the plant only, obeying the port's contract like any device.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from gainwright.models import TransferFunction
from gainwright.simulation import PlantSimulation
from gainwright_service.adapters.port import (
    Capabilities,
    ControllerGains,
    Identity,
    Mode,
    Quality,
    Reading,
    Watchdog,
)
from gainwright_service.clock import Clock

LONGEST_STEP_S = 0.05
"""The controller behind automatic acts at least this often while nobody reads."""
MODEST_GAINS = ControllerGains(gain=0.5, integral=20.0, derivative=None)


@dataclass(frozen=True, slots=True)
class SimulatedDevice:
    """What the simulated device is.

    Parameters
    ----------
    transfer_function : TransferFunction
    output_low, output_high : float
    resting_output, resting_value : float
    noise, quantum : float
        Of the process variable.
    seed : int
    mode : Mode
        At the start.
    effect : int
        +1 where a rising output raises the process variable; decides the controller's action.
    gains : ControllerGains
        Proportional gain (output units per PV unit) and integral time (seconds) of the PI controller.
    watchdog : Watchdog
    watchdog_timeout_s, watchdog_value : float or None
    """

    transfer_function: TransferFunction
    output_low: float = 0.0
    output_high: float = 100.0
    resting_output: float = 50.0
    resting_value: float = 50.0
    noise: float = 0.0
    quantum: float = 0.0
    seed: int = 0
    mode: Mode = Mode.MANUAL
    effect: int = 1
    gains: ControllerGains = MODEST_GAINS
    watchdog: Watchdog = Watchdog.NONE
    watchdog_timeout_s: float | None = None
    watchdog_value: float | None = None


class SimulatedAdapter:
    """The port's implementation over a simulated device."""

    def __init__(self, device: SimulatedDevice, clock: Clock) -> None:
        self._device = device
        self._clock = clock
        self._plant = PlantSimulation(
            device.transfer_function,
            resting_output=device.resting_output,
            resting_value=device.resting_value,
        )
        self._noise = np.random.default_rng(device.seed)
        self._at = clock.monotonic_s()
        self._output = device.resting_output
        self._integral = device.resting_output
        self._mode = device.mode
        self._setpoint = device.resting_value
        self._gains = device.gains
        self._beaten_at: float | None = None
        self._resting_output = device.resting_output

    @property
    def capabilities(self) -> Capabilities:
        """Everything is readable and writable, and the integral follows."""
        device = self._device
        return Capabilities(
            reads_output=True,
            reads_mode=True,
            reads_setpoint=True,
            changes_mode=True,
            watchdog=device.watchdog,
            watchdog_timeout_s=device.watchdog_timeout_s,
            watchdog_value=device.watchdog_value,
            gains_readable=True,
            gains_writable=True,
            permission_bit=False,
            setpoint_follows_in_manual=False,
            integral_follows_in_manual=True,
            output_quantum=0.0,
            link_time_s=0.0,
        )

    async def identify(self) -> Identity:
        """The simulator."""
        return Identity("Gainwright", "simulated loop", "1")

    async def read(self, *, urgent: bool = False) -> Reading:
        """The state now, with noise and quantum."""
        self._advance()
        value = self._plant.value()
        if self._device.noise > 0:
            value += self._device.noise * float(self._noise.standard_normal())
        if self._device.quantum > 0:
            value = round(value / self._device.quantum) * self._device.quantum
        return Reading(
            process_variable=value,
            controller_output=self._output,
            setpoint=self._setpoint,
            mode=self._mode,
            output_limited=not self._device.output_low < self._output < self._device.output_high,
            quality=Quality.GOOD,
            taken_at=self._clock.monotonic_s(),
        )

    async def write(self, output: float, *, urgent: bool = False) -> None:
        """Taken at once in manual; ignored in automatic, as devices do."""
        self._advance()
        if self._mode is Mode.MANUAL:
            self._output = max(self._device.output_low, min(self._device.output_high, output))

    async def take_over(self) -> None:
        """Manual, without a bump."""
        self._advance()
        self._mode = Mode.MANUAL

    async def hand_back(self, mode: Mode, *, urgent: bool = False) -> None:
        """The mode asked for; the integral has followed, so that the output does not jump."""
        self._advance()
        if mode is Mode.AUTOMATIC and self._mode is Mode.MANUAL:
            error = (self._setpoint - self._plant.value()) * self._device.effect
            self._integral = self._output - self._gains.gain * error
        self._mode = mode
        self._beaten_at = None

    async def heartbeat(self, *, armed: bool, resting_output: float | None = None) -> None:
        """Beat or disarm the watchdog."""
        self._advance()
        self._beaten_at = self._clock.monotonic_s() if armed else None
        if resting_output is not None:
            self._resting_output = resting_output

    async def read_gains(self) -> ControllerGains:
        """The PI controller's gains."""
        return self._gains

    async def write_gains(self, gains: ControllerGains) -> None:
        """Take new gains."""
        self._gains = gains

    async def close(self) -> None:
        """Nothing to release."""

    def operate(
        self,
        *,
        output: float | None = None,
        mode: Mode | None = None,
        setpoint: float | None = None,
        load: float | None = None,
    ) -> None:
        """Act as a person at the device; a local change disarms the watchdog."""
        self._advance()
        if output is not None:
            self._output = output
            self._beaten_at = None
        if mode is not None:
            self._mode = mode
            self._beaten_at = None
        if setpoint is not None:
            self._setpoint = setpoint
        if load is not None:
            self._plant.load = load

    @property
    def output(self) -> float:
        """The output in force, for a look from outside."""
        self._advance()
        return self._output

    @property
    def mode(self) -> Mode:
        """The mode in force, for a look from outside."""
        return self._mode

    def _advance(self) -> None:
        now = self._clock.monotonic_s()
        while self._at < now:
            step = now - self._at if self._mode is Mode.MANUAL else min(now - self._at, LONGEST_STEP_S)
            timeout = self._device.watchdog_timeout_s
            if self._beaten_at is not None and timeout is not None:
                due = self._beaten_at + timeout
                if due <= self._at:
                    self._fire()
                else:
                    step = min(step, due - self._at)
            self._plant.step(step, self._output)
            self._at += step
            if self._mode is not Mode.MANUAL:
                self._control(step)

    def _control(self, step: float) -> None:
        error = (self._setpoint - self._plant.value()) * self._device.effect
        self._integral += self._gains.gain * step / self._gains.integral * error
        low, high = self._device.output_low, self._device.output_high
        self._integral = max(low, min(high, self._integral))
        self._output = max(low, min(high, self._integral + self._gains.gain * error))

    def _fire(self) -> None:
        self._beaten_at = None
        if self._mode is not Mode.MANUAL:
            return
        if self._device.watchdog is Watchdog.RESTING:
            self._output = self._resting_output
        elif self._device.watchdog is Watchdog.FIXED and self._device.watchdog_value is not None:
            self._output = self._device.watchdog_value
