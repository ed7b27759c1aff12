"""What every router is handed: the store's engine, the clock, the analysis pool, the live follower. Frozen."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated

from fastapi import Depends, Request
from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.analysis_pool import AnalysisPool
from gainwright_service.api.following import Follower
from gainwright_service.clock import Clock


@dataclass(frozen=True, slots=True)
class Context:
    """One API process's parts.

    Parameters
    ----------
    engine : AsyncEngine
    clock : Clock
    pool : AnalysisPool
        Analyses of uploaded records run here, never in the process that serves.
    follower : Follower
        The one reader of new samples.
    """

    engine: AsyncEngine
    clock: Clock
    pool: AnalysisPool
    follower: Follower

    def now(self) -> str:
        """The civil time as people read it, ISO 8601 in UTC."""
        return self.clock.wall_time().isoformat(timespec="milliseconds")


def context_of(request: Request) -> Context:
    """The context of the app that serves the request."""
    context = request.app.state.context
    assert isinstance(context, Context)
    return context


InContext = Annotated[Context, Depends(context_of)]
