"""What every router is handed: the store's engine, the clock, the analysis pool, the live follower. Frozen."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated, Any, Protocol

from fastapi import Depends, Request
from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.api.following import Follower
from gainwright_service.clock import Clock
from gainwright_service.store import people


class Analyses(Protocol):
    """Where analyses run: never in the process that serves."""

    async def run(self, function: Callable[..., Any], *arguments: Any) -> Any:
        """The function's result; its errors are raised."""
        ...


@dataclass(frozen=True, slots=True)
class Context:
    """One API process's parts.

    Parameters
    ----------
    engine : AsyncEngine
    clock : Clock
    analyses : Analyses
        Analyses of uploaded records run here.
    follower : Follower
        The one reader of new samples.
    """

    engine: AsyncEngine
    clock: Clock
    analyses: Analyses
    follower: Follower

    async def knows(self, token: str) -> bool:
        """Whether a token is a person's."""
        async with self.engine.connect() as connection:
            return await people.person_of(connection, token) is not None

    def now(self) -> str:
        """The civil time as people read it, ISO 8601 in UTC."""
        return self.clock.wall_time().isoformat(timespec="milliseconds")

    def now_s(self) -> float:
        """The civil time in seconds since the epoch, as sites are confirmed by."""
        return self.clock.wall_time().timestamp()


async def context_of(request: Request) -> Context:
    """The context of the app that serves the request. Async, or each request would take a turn in a thread."""
    context = request.app.state.context
    assert isinstance(context, Context)
    return context


InContext = Annotated[Context, Depends(context_of)]
