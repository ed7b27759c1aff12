"""The real app over a real store, in process, for the service's tests."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator, Callable
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx
from fastapi import FastAPI
from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.api.app import create_app
from gainwright_service.api.context import Context
from gainwright_service.api.following import Follower
from gainwright_service.store import people, sites
from gainwright_service.store.connect import migrate, open_engine, writing

START = datetime(2026, 3, 1, 8, 0, tzinfo=UTC)


@dataclass
class SteppingClock:
    """A clock whose sleeps jump to their deadline after one turn of the loop."""

    now_s: float = 0.0
    start: datetime = field(default=START)

    def monotonic_s(self) -> float:
        return self.now_s

    def wall_time(self) -> datetime:
        return datetime.fromtimestamp(self.start.timestamp() + self.now_s, UTC)

    async def sleep_until(self, deadline_s: float) -> None:
        await asyncio.sleep(0)
        self.now_s = max(self.now_s, deadline_s)


class InlinePool:
    """An analysis pool without processes."""

    async def run(self, function: Callable[..., Any], *arguments: Any) -> Any:
        return function(*arguments)


@dataclass(frozen=True)
class Site:
    """The app, its store, and clients of two persons."""

    app: FastAPI
    engine: AsyncEngine
    clock: SteppingClock
    ada: httpx.AsyncClient
    grace: httpx.AsyncClient
    nobody: httpx.AsyncClient

    async def worker_confirms(self) -> None:
        """A worker of the site says that it is there."""
        async with writing(self.engine) as connection:
            await sites.confirm(connection, "local", "worker-1", self.clock.wall_time().timestamp())


@asynccontextmanager
async def a_site(url: str) -> AsyncIterator[Site]:
    """A site with two people, Ada and Grace."""
    engine = open_engine(url)
    await migrate(engine)
    clock = SteppingClock()
    tokens = {}
    for name in ("Ada", "Grace"):
        async with writing(engine) as connection:
            tokens[name] = await people.create_token(connection, person=name, label="test", at="2026-03-01T08:00:00Z")
    follower = Follower(engine, clock)
    app = create_app(Context(engine, clock, InlinePool(), follower))

    def client(name: str | None) -> httpx.AsyncClient:
        headers = {"Authorization": f"Bearer {tokens[name]}"} if name else {}
        transport = httpx.ASGITransport(app, raise_app_exceptions=False)
        return httpx.AsyncClient(transport=transport, base_url="http://service", headers=headers)

    async with client("Ada") as ada, client("Grace") as grace, client(None) as nobody:
        yield Site(app, engine, clock, ada, grace, nobody)
    await follower.close()
    await engine.dispose()


def sqlite_url(folder: Path) -> str:
    """The address of an embedded store in a folder."""
    return f"sqlite+aiosqlite:///{folder / 'gainwright.db'}"
