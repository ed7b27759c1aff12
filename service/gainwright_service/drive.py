"""The drive: guard and adapter joined. The only caller of an adapter's changing verbs.

Every output passes the guard on its way to the device, every reading passes it on its way to the machine. Measures
what the link adds: the time between a reading and the write that answers it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from gainwright_service.adapters.port import LoopAdapter
from gainwright_service.clock import Clock
from gainwright_service.errors import AdapterError, WriteWithheld
from gainwright_service.experiment.commands import Facts
from gainwright_service.experiment.events import Trip
from gainwright_service.experiment.guard import Guard
from gainwright_service.experiment.readings import Mode, Reading


@dataclass(frozen=True, slots=True)
class Seen:
    """A reading and what the guard says of it."""

    reading: Reading
    trip: Trip | None
    disobeyed: bool
    strange: bool


class Drive:
    """One loop's guard and adapter, for one experiment.

    Parameters
    ----------
    adapter : LoopAdapter
    guard : Guard
    clock : Clock
    permitted : callable
        Whether anything may be written at all; asked before each write, the exit's included. False once the site's
        lock is too old to trust: another worker may be at the device.
    """

    def __init__(
        self, adapter: LoopAdapter, guard: Guard, clock: Clock, *, permitted: Callable[[], bool] = lambda: True
    ) -> None:
        self._adapter = adapter
        self._guard = guard
        self._clock = clock
        self._permitted = permitted
        self._newest_taken_at: float | None = None
        self._latencies_s = 0.0
        self._writes = 0
        self._beaten_at: float | None = None
        self._resting_output = 0.0
        self.commanded: float | None = None

    @property
    def latency_s(self) -> float:
        """Mean time from a reading to the middle of the write that answered it."""
        return self._latencies_s / self._writes if self._writes else 0.0

    async def read(self, *, urgent: bool = False) -> Seen:
        """Read the loop and let the guard judge it. Raises `AdapterError`."""
        reading = await self._adapter.read(urgent=urgent)
        self._newest_taken_at = reading.taken_at
        inspection = self._guard.inspect(reading, self._clock.monotonic_s())
        self._guard = inspection.guard
        return Seen(reading, inspection.trip, inspection.disobeyed, inspection.strange)

    def overdue(self) -> Trip | None:
        """What time alone has broken."""
        return self._guard.overdue(self._clock.monotonic_s())

    async def take_over(self, facts: Facts) -> None:
        """Put the loop into manual and arm guard and watchdog. Raises `AdapterError`."""
        self._check_permission()
        if facts.mode is not Mode.MANUAL:
            await self._adapter.take_over()
        self.resume(facts)
        self._guard = self._guard.armed(facts, self._clock.monotonic_s())
        await self.beat()

    def resume(self, facts: Facts) -> None:
        """Know what the watchdog is to be armed with, as of a take-over that happened before."""
        self._resting_output = facts.resting_output

    async def write_test(self, output: float) -> Trip | None:
        """Write a test output that the guard allows; the item it would break otherwise, and nothing is written."""
        refused = self._guard.allow(output, self._clock.monotonic_s())
        if refused is not None:
            return refused
        await self._write(output, urgent=False)
        return None

    async def write_exit(self, output: float) -> None:
        """Write an exit output, before everything queued; exempt from the test's limits. Raises `AdapterError`."""
        await self._write(output, urgent=True)

    async def repeat_write(self) -> None:
        """Write once more what the device has not taken. Raises `AdapterError`."""
        if self.commanded is not None:
            await self._write(self.commanded, urgent=False)

    async def hand_back(self, mode: Mode) -> None:
        """Ask for the mode as found. Raises `AdapterError`."""
        self._check_permission()
        self._guard = self._guard.released(mode)
        await self._adapter.hand_back(mode, urgent=True)

    async def beat(self) -> None:
        """Beat the device's watchdog. Raises `AdapterError`."""
        self._check_permission()
        await self._adapter.heartbeat(armed=True, resting_output=self._resting_output)
        self._beaten_at = self._clock.monotonic_s()

    def beat_due(self, interval_s: float) -> bool:
        """Whether the last beat is older than the interval."""
        return self._beaten_at is None or self._clock.monotonic_s() - self._beaten_at >= interval_s

    async def disarm(self) -> bool:
        """Disarm the device's watchdog; whether the device took it. Moves no output."""
        try:
            self._check_permission()
            await self._adapter.heartbeat(armed=False)
        except AdapterError:
            return False
        return True

    def switched(self, half_limit_s: float | None) -> None:
        """Tell the guard of a switch of the relay."""
        self._guard = self._guard.switched(self._clock.monotonic_s(), half_limit_s)

    def returning(self) -> None:
        """Tell the guard that the test has ended and the return begun."""
        self._guard = self._guard.returning()

    async def _write(self, output: float, *, urgent: bool) -> None:
        self._check_permission()
        started = self._clock.monotonic_s()
        self.commanded = output
        # Before the exchange too: a write that fails may have been taken, and its echo is nobody else's doing.
        self._guard = self._guard.wrote(output, started)
        try:
            await self._adapter.write(output, urgent=urgent)
        except AdapterError:
            self._guard = self._guard.unanswered(output)
            raise
        ended = self._clock.monotonic_s()
        # The guard compares echoes only from readings taken after the write was answered.
        self._guard = self._guard.wrote(output, ended)
        if not urgent and self._newest_taken_at is not None:
            self._latencies_s += max((started + ended) / 2 - self._newest_taken_at, 0.0)
            self._writes += 1

    def _check_permission(self) -> None:
        if not self._permitted():
            raise WriteWithheld("the site's lock was not confirmed for too long: another worker may hold the loop")
