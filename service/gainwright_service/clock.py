"""Time: the one file that reads the clocks, and the clock port that everything else is given.

`monotonic_s` orders and measures (it counts through a suspended machine where the system offers that);
`wall_time` is for people and stored rows.
"""

from __future__ import annotations

import asyncio
import time
from datetime import UTC, datetime
from typing import Protocol


class Clock(Protocol):
    """Where time comes from."""

    def monotonic_s(self) -> float:
        """Seconds that never run backwards."""
        ...

    def wall_time(self) -> datetime:
        """The civil time, in UTC."""
        ...

    async def sleep_until(self, deadline_s: float) -> None:
        """Return when `monotonic_s` has reached ``deadline_s``; at once, after one turn of the loop, if it has."""
        ...


class SystemClock:
    """The machine's own clocks."""

    def __init__(self) -> None:
        self._source = getattr(time, "CLOCK_BOOTTIME", time.CLOCK_MONOTONIC)

    def monotonic_s(self) -> float:
        return time.clock_gettime(self._source)

    def wall_time(self) -> datetime:
        return datetime.now(UTC)

    async def sleep_until(self, deadline_s: float) -> None:
        await asyncio.sleep(max(0.0, deadline_s - self.monotonic_s()))
