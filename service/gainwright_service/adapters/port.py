"""The port between the service and a loop's device: what every adapter promises.

Owns the verbs, the reading and the errors that may escape. Knows no protocol, no limits and no experiment.
Only `gainwright_service.drive` may call the changing verbs (`write`, `take_over`, `hand_back`, `heartbeat`,
`write_gains`); a test reads the source to prove it.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum
from typing import Protocol

from gainwright_service.errors import AdapterError
from gainwright_service.experiment.readings import Mode, Quality, Reading


class Watchdog(StrEnum):
    """What the device does with its output when an armed watchdog misses its beats."""

    NONE = "none"
    HOLD_LAST = "hold_last"
    RESTING = "resting"
    FIXED = "fixed"


@dataclass(frozen=True, slots=True)
class Capabilities:
    """Declared facts of one loop's adapter.

    Parameters
    ----------
    reads_output : bool
        The reading's ``controller_output`` echoes what is in force in the device.
    reads_mode, reads_setpoint : bool
    changes_mode : bool
        `take_over` and `hand_back` act; otherwise the loop must be in manual already.
    watchdog : Watchdog
    watchdog_timeout_s : float or None
    watchdog_value : float or None
        The value of watchdog ``fixed``, output units.
    gains_readable, gains_writable : bool
    permission_bit : bool
    setpoint_follows_in_manual, integral_follows_in_manual : bool or None
        None: unknown, so a return to automatic is refused until it is proven.
    output_quantum : float
        Smallest step of the output register, output units; 0 where there is none to speak of.
    link_time_s : float
        Bound on one round trip, seconds.
    """

    reads_output: bool
    reads_mode: bool
    reads_setpoint: bool
    changes_mode: bool
    watchdog: Watchdog
    watchdog_timeout_s: float | None
    watchdog_value: float | None
    gains_readable: bool
    gains_writable: bool
    permission_bit: bool
    setpoint_follows_in_manual: bool | None
    integral_follows_in_manual: bool | None
    output_quantum: float
    link_time_s: float


@dataclass(frozen=True, slots=True)
class Identity:
    """What the device says it is; empty strings where it says nothing."""

    vendor: str
    product: str
    revision: str


@dataclass(frozen=True, slots=True)
class ControllerGains:
    """Gains as they stand in the device, in the controller's own form and units."""

    gain: float
    integral: float
    derivative: float | None


class LoopAdapter(Protocol):
    """One loop's device.

    Every verb is async, blocks for at most the link's timeout (never above 1 s) and raises only `AdapterError`:
    `DeviceUnreachable`, `DeviceRefused`, `DeviceTimedOut`, `DeviceNonsensical`. Cancellation leaves the device
    as if the exchange had either happened whole or not at all, and the caller does not know which. All verbs
    may be repeated. `urgent=True` (exit writes) goes before everything queued on a shared link.
    """

    @property
    def capabilities(self) -> Capabilities:
        """Declared facts, constant over the adapter's life."""
        ...

    async def identify(self) -> Identity:
        """Ask the device what it is; moves nothing."""
        ...

    async def read(self, *, urgent: bool = False) -> Reading:
        """Read all the loop's variables in as few exchanges as possible; moves nothing."""
        ...

    async def write(self, output: float, *, urgent: bool = False) -> None:
        """Write the controller output, output units. Returns when the device has answered; proves nothing of
        the echo."""
        ...

    async def take_over(self) -> None:
        """Put the loop into manual. The output does not move by it. Does nothing where it is manual already."""
        ...

    async def hand_back(self, mode: Mode, *, urgent: bool = False) -> None:
        """Put the loop into ``mode`` (manual, automatic or cascade)."""
        ...

    async def heartbeat(self, *, armed: bool, resting_output: float | None = None) -> None:
        """Beat (arming the device's watchdog) or disarm it. ``resting_output`` is handed to devices that take
        it from us. Does nothing where the device has no watchdog."""
        ...

    async def read_gains(self) -> ControllerGains:
        """The gains as they stand in the device."""
        ...

    async def write_gains(self, gains: ControllerGains) -> None:
        """Write the gains, register by register, in the order given by the caller's drive."""
        ...

    async def close(self) -> None:
        """Release the link. Writes nothing."""
        ...


__all__ = [
    "AdapterError",
    "Capabilities",
    "ControllerGains",
    "Identity",
    "LoopAdapter",
    "Mode",
    "Quality",
    "Reading",
    "Watchdog",
]
