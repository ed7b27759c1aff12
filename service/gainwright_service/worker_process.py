"""The worker as a process: its settings, signals, beats and end."""

from __future__ import annotations

import argparse
import asyncio
import gc
import os
import signal
import socket
import uuid

from gainwright_service.analysis_pool import AnalysisPool
from gainwright_service.beating import beat
from gainwright_service.clock import SystemClock
from gainwright_service.fence import fence_of
from gainwright_service.logs import set_up
from gainwright_service.settings import Settings
from gainwright_service.store.connect import migrate, open_engine
from gainwright_service.worker import Worker


async def serve_site(settings: Settings, site: str) -> None:
    """Run a site's worker in this process until SIGTERM, Ctrl-C or the loss of the parent."""
    clock = SystemClock()
    log = set_up("worker", settings.log_level)
    settings.data_dir.mkdir(parents=True, exist_ok=True)
    engine = open_engine(settings.database)
    pool = AnalysisPool()
    host = socket.gethostname()[:24]
    name = f"{host}-{os.getpid()}-{uuid.uuid4().hex[:8]}"
    parent_lost = asyncio.Event()
    beating = asyncio.create_task(beat(settings.beat_fd, clock, parent_lost), name="beat")
    try:
        await migrate(engine)
        fence = fence_of(engine, settings.data_dir, site)
        ended_worker = f"{host}-{settings.ended_worker}" if settings.ended_worker else ""
        worker = Worker(engine, fence, clock, pool, site=site, name=name, log=log, ended_worker=ended_worker)
        event_loop = asyncio.get_running_loop()
        for number in (signal.SIGTERM, signal.SIGINT):
            event_loop.add_signal_handler(number, worker.end)
        watching = asyncio.create_task(_end_with_parent(parent_lost, worker), name="parent")
        gc.collect()
        gc.freeze()
        gc.set_threshold(50_000, 50, 50)
        await worker.run()
        watching.cancel()
    finally:
        beating.cancel()
        pool.close()
        await engine.dispose()


async def _end_with_parent(parent_lost: asyncio.Event, worker: Worker) -> None:
    await parent_lost.wait()
    worker.end()


def main(argv: list[str] | None = None) -> int:
    """The worker as a process; its exit status."""
    parser = argparse.ArgumentParser(prog="gainwright worker", description="Serves one site's devices.")
    parser.add_argument("--site", default="local")
    options = parser.parse_args(argv)
    asyncio.run(serve_site(Settings(), options.site))
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
