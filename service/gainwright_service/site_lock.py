"""The site's lock in a worker's hands: taken, confirmed each second, asked before each write, let go.

Owns who may write at a site's devices and until when. A worker whose lock is lost, or too old, writes nothing.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from typing import Any

from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.clock import Clock
from gainwright_service.errors import StoreError
from gainwright_service.experiment.ownership import Ownership
from gainwright_service.experiment.plan import PlanRefusedByGuard
from gainwright_service.fence import PATIENCE_S, Fence, silent_from
from gainwright_service.planning import LONGEST_RETURN_S
from gainwright_service.store import sites, work
from gainwright_service.store.connect import writing

CONFIRM_S = 1.0


class SiteLock:
    """One worker's hold on its site.

    Parameters
    ----------
    engine : AsyncEngine
    fence : Fence
    clock : Clock
    site, name : str
        The site and the worker.
    ending : asyncio.Event
        Ends every wait.
    log : structlog logger
    ended_worker : str
        Host and process of a worker that is known to have ended; empty where none is.
    """

    def __init__(
        self,
        engine: AsyncEngine,
        fence: Fence,
        clock: Clock,
        *,
        site: str,
        name: str,
        ending: asyncio.Event,
        log: Any,
        ended_worker: str,
    ) -> None:
        self._engine = engine
        self._fence = fence
        self._clock = clock
        self._site = site
        self._name = name
        self._ending = ending
        self._log = log
        self._ended_worker = ended_worker
        self._confirmed_at = clock.monotonic_s()
        self.lost = False

    async def take(self) -> bool:
        """Wait for the site's lock, then wait out a holder that may still be writing (design, section 7)."""
        while not await self._fence.take():
            if self._ending.is_set():
                return False
            await self._clock.sleep_until(self._clock.monotonic_s() + CONFIRM_S, self._ending)
        await self._wait_out_the_last_holder()
        self._confirmed_at = self._clock.monotonic_s()
        async with writing(self._engine) as connection:
            await sites.confirm(connection, self._site, self._name, self._clock.wall_time().timestamp())
        self._log.info("site taken", site=self._site, worker=self._name)
        return True

    async def _wait_out_the_last_holder(self) -> None:
        """Until a worker that may live on without its lock writes nothing any more (design, section 7)."""
        if self._engine.dialect.name == "sqlite":
            return
        async with self._engine.connect() as connection:
            last = await sites.last_holder(connection, self._site)
            left_driven = await work.left_running(connection, self._site)
        longest = max((longest_exit_s(row["ownership"]) for row in left_driven), default=0.0)
        over_at = silent_from(last, longest_exit_s=longest, ended_worker=self._ended_worker)
        while (left := over_at - self._clock.wall_time().timestamp()) > 0 and not self._ending.is_set():
            self._log.info("waiting out the last holder", site=self._site, seconds=round(left, 1))
            await self._clock.sleep_until(self._clock.monotonic_s() + left, self._ending)

    def permission(self, longest_exit_s: float) -> Callable[[], bool]:
        """Whether the last confirmation of the site's lock still covers a way out of this length."""
        return lambda: self._clock.monotonic_s() - self._confirmed_at <= PATIENCE_S + longest_exit_s

    async def _held(self) -> bool:
        """Whether the lock is confirmed in time; one that does not answer is not."""
        try:
            async with asyncio.timeout(PATIENCE_S):
                return await self._fence.held()
        except TimeoutError:
            return False

    async def keep(self) -> None:
        """Confirm the lock each second; beyond patience every experiment takes its exit path."""
        while True:
            await self._clock.sleep_until(self._clock.monotonic_s() + CONFIRM_S)
            if await self._held():
                self._confirmed_at = self._clock.monotonic_s()
            elif self._clock.monotonic_s() - self._confirmed_at > PATIENCE_S:
                self._log.error("the site's lock is lost", site=self._site)
                self.lost = True
                return

    async def let_go(self) -> None:
        """Release the lock, told to the store where it still is ours."""
        try:
            if not self.lost:
                async with writing(self._engine) as connection:
                    await sites.release(connection, self._site, self._name)
        except StoreError as error:
            self._log.warning("the site's release could not be stored", detail=error.detail)
        await self._fence.release()


def longest_exit_s(ownership: dict[str, Any] | None) -> float:
    """The longest exit of a stored task; the longest that any plan has where the document cannot be read."""
    try:
        return Ownership.from_document(ownership).plan.longest_exit_s if ownership else 0.0
    except (KeyError, TypeError, ValueError, PlanRefusedByGuard):
        return LONGEST_RETURN_S
