"""The child's side of the parent's watch: a beat each second from the event loop itself, and the end when the parent
is gone."""

from __future__ import annotations

import asyncio
import os

from gainwright_service.clock import Clock

BEAT_S = 1.0


async def beat(fd: int, clock: Clock, parent_lost: asyncio.Event) -> None:
    """Write a beat each second until the parent is lost; at once return where there is no parent."""
    if fd < 0:
        return
    os.set_blocking(fd, False)
    while not parent_lost.is_set():
        try:
            os.write(fd, b".")
        except BlockingIOError:
            # The parent reads too slowly; a full pipe says that enough beats lie there.
            pass
        except OSError:
            parent_lost.set()
            return
        await clock.sleep_until(clock.monotonic_s() + BEAT_S)
