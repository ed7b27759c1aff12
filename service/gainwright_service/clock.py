"""Time: the one file that reads the clocks, and the clock port that everything else is given.

`monotonic_s` orders and measures (it counts through a suspended machine where the system offers that);
`wall_time` is for people and stored rows. `ManualClock` is the real clock's sibling for rehearsals and tests: time
stands still until everything waits, then jumps to the next deadline.
"""

from __future__ import annotations

import asyncio
import heapq
import itertools
import time
from datetime import UTC, datetime, timedelta
from typing import Protocol


class Clock(Protocol):
    """Where time comes from."""

    def monotonic_s(self) -> float:
        """Seconds that never run backwards."""
        ...

    def wall_time(self) -> datetime:
        """The civil time, in UTC."""
        ...

    async def sleep_until(self, deadline_s: float, wake: asyncio.Event | None = None) -> None:
        """Return when `monotonic_s` has reached ``deadline_s``, or ``wake`` is set; always after one turn of the
        event loop."""
        ...


class SystemClock:
    """The machine's own clocks."""

    def __init__(self) -> None:
        self._source = getattr(time, "CLOCK_BOOTTIME", time.CLOCK_MONOTONIC)

    def monotonic_s(self) -> float:
        """Seconds since the machine started, counted while it is suspended where the system offers that."""
        return time.clock_gettime(self._source)

    def wall_time(self) -> datetime:
        """The civil time, in UTC."""
        return datetime.now(UTC)

    async def sleep_until(self, deadline_s: float, wake: asyncio.Event | None = None) -> None:
        """Sleep on the event loop."""
        left = max(0.0, deadline_s - self.monotonic_s())
        if wake is None or left == 0.0:
            await asyncio.sleep(left)
            return
        try:
            async with asyncio.timeout(left):
                await wake.wait()
        except TimeoutError:
            return


class ManualClock:
    """Time that jumps to the next deadline once every task of the event loop waits.

    Parameters
    ----------
    start_s : float
        First value of `monotonic_s`.
    wall_start : datetime
        First value of `wall_time`; both advance together.
    """

    IDLE_TURNS = 25
    """Turns of the event loop without a new sleeper after which everything is taken to wait."""

    def __init__(self, start_s: float = 1000.0, wall_start: datetime = datetime(2026, 1, 1, tzinfo=UTC)) -> None:
        self._now = start_s
        self._wall_start = wall_start - timedelta(seconds=start_s)
        self._sleepers: list[tuple[float, int, asyncio.Event]] = []
        self._order = itertools.count()
        self._watching = False
        self._quiet_turns = 0

    def monotonic_s(self) -> float:
        """The time that this clock says it is."""
        return self._now

    def wall_time(self) -> datetime:
        """The civil time that belongs to it."""
        return self._wall_start + timedelta(seconds=self._now)

    def advance(self, seconds: float) -> None:
        """Move time on by hand, waking whoever is due."""
        self._now += seconds
        self._wake_due()

    async def sleep_until(self, deadline_s: float, wake: asyncio.Event | None = None) -> None:
        """Wait for the jump that reaches the deadline."""
        if deadline_s <= self._now or (wake is not None and wake.is_set()):
            await asyncio.sleep(0)
            return
        due = asyncio.Event() if wake is None else wake
        entry = (deadline_s, next(self._order), due)
        heapq.heappush(self._sleepers, entry)
        self._quiet_turns = 0
        if not self._watching:
            self._watching = True
            asyncio.get_running_loop().call_soon(self._watch)
        try:
            if wake is None:
                await due.wait()
            else:
                await self._wait_for_either(deadline_s, wake)
        finally:
            if entry in self._sleepers:
                self._sleepers.remove(entry)
                heapq.heapify(self._sleepers)

    async def _wait_for_either(self, deadline_s: float, wake: asyncio.Event) -> None:
        await wake.wait()
        if self._now >= deadline_s:
            # Woken by the jump, not by the owner of the event: the event is not a message.
            wake.clear()

    def _watch(self) -> None:
        if not self._sleepers:
            self._watching = False
            return
        self._quiet_turns += 1
        if self._quiet_turns >= self.IDLE_TURNS:
            self._quiet_turns = 0
            self._now = max(self._now, self._sleepers[0][0])
            self._wake_due()
        asyncio.get_running_loop().call_soon(self._watch)

    def _wake_due(self) -> None:
        for deadline, _, due in self._sleepers:
            if deadline <= self._now:
                due.set()
