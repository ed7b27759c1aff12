"""The API as a process: opens the parts, serves until asked to end or the parent is lost."""

from __future__ import annotations

import asyncio

import uvicorn

from gainwright_service.analysis_pool import AnalysisPool
from gainwright_service.api.app import create_app
from gainwright_service.api.context import Context
from gainwright_service.api.following import Follower
from gainwright_service.beating import beat
from gainwright_service.clock import SystemClock
from gainwright_service.first_start import prepare
from gainwright_service.logs import set_up
from gainwright_service.settings import Settings
from gainwright_service.store.connect import open_engine


async def serve(settings: Settings) -> None:
    """Serve the API in this process."""
    clock = SystemClock()
    log = set_up("api", settings.log_level)
    settings.data_dir.mkdir(parents=True, exist_ok=True)
    engine = open_engine(settings.database)
    pool = AnalysisPool()
    parent_lost = asyncio.Event()
    beating = asyncio.create_task(beat(settings.beat_fd, clock, parent_lost), name="beat")
    try:
        await prepare(engine, settings, clock)
        app = create_app(Context(engine, clock, pool, Follower(engine, clock)))
        config = uvicorn.Config(
            app,
            host=settings.host,
            port=settings.port,
            http="httptools",
            log_level="warning",
            access_log=False,
            timeout_graceful_shutdown=2,
        )
        server = uvicorn.Server(config)
        watching = asyncio.create_task(_end_with_parent(parent_lost, server), name="parent")
        log.info("listening", host=settings.host, port=settings.port)
        await server.serve()
        watching.cancel()
    finally:
        beating.cancel()
        pool.close()
        await engine.dispose()


async def _end_with_parent(parent_lost: asyncio.Event, server: uvicorn.Server) -> None:
    await parent_lost.wait()
    server.should_exit = True


def main() -> int:
    """The API's process; its exit status."""
    asyncio.run(serve(Settings()))
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
