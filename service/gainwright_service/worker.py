"""A site's worker: the only process that opens its devices.

Takes the site's lock, gives back what a dead worker left driven, then claims tasks and runs each experiment as a task
of one event loop. Knows no web framework. Analyses go to processes of their own, after the exit is stored.
"""

from __future__ import annotations

import argparse
import asyncio
import gc
import os
import signal
import socket
import uuid
from dataclasses import replace
from typing import Any

from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.adapters.build import open_adapter
from gainwright_service.adapters.links import Links
from gainwright_service.analysis_pool import AnalysisPool
from gainwright_service.beating import beat
from gainwright_service.clock import Clock, SystemClock
from gainwright_service.drive import Drive
from gainwright_service.errors import LockLost, ServiceError, StoreError
from gainwright_service.experiment.guard import new_guard
from gainwright_service.fence import Fence, fence_of
from gainwright_service.gains_found import gains_found
from gainwright_service.logs import set_up
from gainwright_service.planning import plan_experiment
from gainwright_service.proposals import conclude_experiment
from gainwright_service.recovery import recover
from gainwright_service.runner import Ended, Signals, run_experiment
from gainwright_service.settings import Settings
from gainwright_service.store import samples, sign_offs, sites, tasks, work
from gainwright_service.store.connect import migrate, open_engine, writing
from gainwright_service.writer import Writer
from gainwright_wire.loops import Loop
from gainwright_wire.tasks import StartExperiment

POLL_S = 0.25
FENCE_S = 1.0
PATIENCE_S = 5.0
"""A lock that cannot be confirmed for this long is lost."""


class Worker:
    """One site's worker.

    Parameters
    ----------
    engine : AsyncEngine
    fence : Fence
    clock : Clock
    pool : AnalysisPool
    site : str
    name : str
        Unique to this process.
    log : structlog logger
    """

    def __init__(
        self, engine: AsyncEngine, fence: Fence, clock: Clock, pool: AnalysisPool, *, site: str, name: str, log: Any
    ) -> None:
        self._engine = engine
        self._fence = fence
        self._clock = clock
        self._pool = pool
        self._site = site
        self._name = name
        self._log = log
        self._links = Links()
        self._writer = Writer(engine, clock, site=site, worker=name, on_lost=self._lost)
        self._running: dict[str, tuple[asyncio.Task[None], Signals]] = {}
        self._stopped: set[str] = set()
        self._ending = asyncio.Event()
        self._lost_lock = False

    def end(self) -> None:
        """Begin the end: every experiment takes its exit path."""
        self._ending.set()
        for _, signals in self._running.values():
            signals.shutdown()

    async def run(self) -> None:
        """Serve the site until the end is asked for or its lock is lost."""
        if not await self._take_site():
            return
        writing_task = asyncio.create_task(self._writer.run(), name="writer")
        fence_task = asyncio.create_task(self._keep_fence(), name="fence")
        try:
            await self._recover_all()
            while not self._ending.is_set():
                await self._look()
                await self._clock.sleep_until(self._clock.monotonic_s() + POLL_S, self._ending)
            await asyncio.gather(*(task for task, _ in self._running.values()), return_exceptions=True)
        finally:
            for task in (writing_task, fence_task):
                task.cancel()
            await asyncio.gather(writing_task, fence_task, return_exceptions=True)
            self._links.close()
            await self._let_go()

    async def _take_site(self) -> bool:
        """Wait for the site's lock, then wait out a holder that may still be writing (design, section 7)."""
        while not await self._fence.take():
            if self._ending.is_set():
                return False
            await self._clock.sleep_until(self._clock.monotonic_s() + FENCE_S, self._ending)
        async with self._engine.connect() as connection:
            last = await sites.last_holder(connection, self._site)
        if last is not None and not last[2] and self._engine.dialect.name != "sqlite":
            # A database lock can be freed by a broken connection while its holder lives; a file lock cannot.
            left = PATIENCE_S - (self._clock.wall_time().timestamp() - last[1])
            if left > 0:
                await self._clock.sleep_until(self._clock.monotonic_s() + left, self._ending)
        async with writing(self._engine) as connection:
            await sites.confirm(connection, self._site, self._name, self._clock.wall_time().timestamp())
        self._log.info("site taken", site=self._site, worker=self._name)
        return True

    async def _let_go(self) -> None:
        try:
            if not self._lost_lock:
                async with writing(self._engine) as connection:
                    await sites.release(connection, self._site, self._name)
        except StoreError as error:
            self._log.warning("the site's release could not be stored", detail=error.detail)
        await self._fence.release()

    async def _keep_fence(self) -> None:
        """Confirm the lock each second; beyond patience every experiment takes its exit path."""
        confirmed_at = self._clock.monotonic_s()
        while True:
            await self._clock.sleep_until(self._clock.monotonic_s() + FENCE_S)
            if await self._fence.held():
                confirmed_at = self._clock.monotonic_s()
            elif self._clock.monotonic_s() - confirmed_at > PATIENCE_S:
                self._log.error("the site's lock is lost", site=self._site)
                self._lost_lock = True
                self._lost()
                self._ending.set()
                return

    def _lost(self) -> None:
        for _, signals in self._running.values():
            signals.store_lost()

    async def _look(self) -> None:
        """Stops first, then new tasks; a store that does not answer is asked again at the next look."""
        try:
            async with self._engine.connect() as connection:
                stops = await work.stops(connection, self._site)
            for task_id, by in stops.items():
                if task_id in self._running and task_id not in self._stopped:
                    self._stopped.add(task_id)
                    self._running[task_id][1].request_stop(by)
            while (row := await self._claim()) is not None:
                self._start(row)
        except StoreError as error:
            self._log.warning("the store does not answer", detail=error.detail)

    async def _claim(self) -> dict[str, Any] | None:
        async with self._engine.connect() as connection:
            waiting, _ = await tasks.page(connection, state="queued", limit=1)
        if not waiting:
            return None
        async with writing(self._engine) as connection:
            row = await work.claim(connection, site=self._site, worker=self._name, at=self._at())
        return None if row is None else dict(row)

    def _start(self, row: dict[str, Any]) -> None:
        signals = Signals()
        if row["stop_requested_by"]:
            self._stopped.add(row["id"])
            signals.request_stop(row["stop_requested_by"])
        task = asyncio.create_task(self._experiment(row, signals), name=f"experiment {row['tag']}")
        self._running[row["id"]] = (task, signals)
        task.add_done_callback(lambda _: self._running.pop(row["id"], None))

    async def _experiment(self, row: dict[str, Any], signals: Signals) -> None:
        loop = Loop.model_validate(row["loop"])
        request = StartExperiment.model_validate(row["request"])
        self._log.info("experiment claimed", task=row["id"], tag=row["tag"])
        try:
            plan = plan_experiment(loop, request)
        except ServiceError as error:
            await self._refused(row, error)
            return
        adapter = open_adapter(loop, self._links, self._clock)
        log = self._writer.log_of(row["id"])
        log.notes["plan"] = plan.document()
        gains = await gains_found(adapter)
        drive = Drive(adapter, new_guard(plan, self._clock.monotonic_s()), self._clock)
        ended = await run_experiment(plan=plan, drive=drive, log=log, signals=signals, clock=self._clock)
        if ended.as_found is not None:
            ended = replace(ended, as_found={**ended.as_found, "gains": gains})
        self._log.info("experiment ended", task=row["id"], outcome=ended.outcome, exit=ended.exit)
        await self._until_stored(self._store_end, row, ended)
        await self._until_stored(self._writer.close, log)
        result = await self._concluded(row, ended, plan.document())
        await self._until_stored(self._store_result, row, result)

    async def _store_end(self, row: dict[str, Any], ended: Ended) -> None:
        values = {"limit": ended.limit, "as_found": ended.as_found, "progress": ended.progress}
        async with writing(self._engine) as connection:
            await work.end(
                connection,
                row,
                worker=self._name,
                at=self._at(),
                outcome=ended.outcome.value,
                exit=ended.exit.value,
                exit_detail=ended.exit_detail,
                values=values,
            )

    async def _store_result(self, row: dict[str, Any], result: dict[str, Any] | None) -> None:
        async with writing(self._engine) as connection:
            await work.finish(connection, row["id"], worker=self._name, at=self._at(), result=result)

    async def _concluded(self, row: dict[str, Any], ended: Ended, plan: dict[str, Any]) -> dict[str, Any] | None:
        """The analysis and the checklist, from a process of their own."""
        async with self._engine.connect() as connection:
            whole = await samples.columns(connection, row["id"])
            signed = await sign_offs.of_tasks(connection, [row["id"]])
        facts = {
            "loop": row["loop"],
            "request": row["request"],
            "plan": plan,
            "as_found": ended.as_found,
            "progress": ended.progress,
            "ended": {
                "outcome": ended.outcome.value,
                "exit": ended.exit.value,
                "exit_detail": ended.exit_detail,
                "limit": ended.limit,
            },
            "columns": {**{name: whole[name] for name in samples.COLUMNS[:-1]}, "phase": samples.named(whole)},
            "latency_s": ended.latency_s,
            "requested_by": row["requested_by"],
            "sign_offs": {s["item"]: {k: s[k] for k in ("verdict", "person", "reason")} for s in signed},
        }
        # Whatever an analysis trips over, the record and its exit are kept and the task is closed.
        analysis = asyncio.ensure_future(self._pool.run(conclude_experiment, facts))
        await asyncio.wait([analysis])
        error = analysis.exception()
        if error is not None:
            self._log.error("the analysis failed", task=row["id"], detail=f"{type(error).__name__}: {error}")
            return {"problem": f"the analysis failed: {type(error).__name__}: {error}"}
        return analysis.result()

    async def _refused(self, row: dict[str, Any], error: ServiceError) -> None:
        """A task that ends before anything was written."""

        async def store() -> None:
            problem = {"code": error.code.value, "detail": error.detail}
            async with writing(self._engine) as connection:
                await work.end(
                    connection,
                    row,
                    worker=self._name,
                    at=self._at(),
                    outcome="limited",
                    exit="not_written",
                    exit_detail=f"nothing was moved: {error.detail}",
                    values={"problem": problem},
                )
                await work.finish(connection, row["id"], worker=self._name, at=self._at(), result=None)

        await self._until_stored(store)

    async def _recover_all(self) -> None:
        """Give back what a worker that is no more left driven, before anything new is claimed."""
        async with writing(self._engine) as connection:
            rows = await work.adopt(connection, site=self._site, worker=self._name)
        await asyncio.gather(*(self._recover(dict(row)) for row in rows))

    async def _recover(self, row: dict[str, Any]) -> None:
        loop = Loop.model_validate(row["loop"])
        outcome, exit, detail = "interrupted", "not_written", "nothing was moved before the worker died"
        if row["exit"] != "pending":
            outcome, exit, detail = row["outcome"], row["exit"], row["exit_detail"]
        elif row["ownership"]:
            levels = tuple((row["last_command"] or {}).get("levels", ()))
            age_s = self._clock.wall_time().timestamp() - (row["last_command_at"] or 0.0)
            found = await recover(
                ownership=row["ownership"],
                last_levels=levels,
                last_command_age_s=age_s,
                adapter=open_adapter(loop, self._links, self._clock),
                clock=self._clock,
            )
            outcome, exit, detail = found.outcome.value, found.exit.value, found.exit_detail
        self._log.info("experiment recovered", task=row["id"], exit=exit, detail=detail)

        async def store() -> None:
            async with writing(self._engine) as connection:
                await work.end(
                    connection, row, worker=self._name, at=self._at(), outcome=outcome, exit=exit, exit_detail=detail
                )
                await work.finish(connection, row["id"], worker=self._name, at=self._at(), result=None)

        await self._until_stored(store)

    async def _until_stored(self, store: Any, *arguments: Any) -> None:
        """Store something whose loss would leave a loop in doubt, however long the store needs."""
        while True:
            try:
                await store(*arguments)
                return
            except LockLost as error:
                self._log.error("the task is no longer ours", detail=error.detail)
                return
            except StoreError as error:
                self._log.warning("waiting for the store", detail=error.detail)
                if self._ending.is_set() and self._clock.monotonic_s() - self._writer.written_at > 10 * PATIENCE_S:
                    return
                await self._clock.sleep_until(self._clock.monotonic_s() + FENCE_S)

    def _at(self) -> str:
        return self._clock.wall_time().isoformat(timespec="milliseconds")


async def serve_site(settings: Settings, site: str) -> None:
    """Run a site's worker in this process until SIGTERM, Ctrl-C or the loss of the parent."""
    clock = SystemClock()
    log = set_up("worker", settings.log_level)
    settings.data_dir.mkdir(parents=True, exist_ok=True)
    engine = open_engine(settings.database)
    pool = AnalysisPool()
    name = f"{socket.gethostname()[:24]}-{os.getpid()}-{uuid.uuid4().hex[:8]}"
    parent_lost = asyncio.Event()
    beating = asyncio.create_task(beat(settings.beat_fd, clock, parent_lost), name="beat")
    try:
        await migrate(engine)
        worker = Worker(engine, fence_of(engine, settings.data_dir, site), clock, pool, site=site, name=name, log=log)
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
