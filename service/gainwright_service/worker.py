"""A site's worker: the only process that opens its devices.

Takes the site's lock, gives back what a dead worker left driven, then claims tasks and runs each experiment as a task
of one event loop. Knows no web framework. Analyses go to processes of their own, after the exit is stored.
"""

from __future__ import annotations

import asyncio
from dataclasses import replace
from datetime import datetime
from typing import Any

from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.adapters.build import open_adapter
from gainwright_service.adapters.links import Links
from gainwright_service.analysis_pool import AnalysisPool
from gainwright_service.clock import Clock
from gainwright_service.drive import Drive
from gainwright_service.errors import ChecklistFailed, LockLost, ServiceError, StoreError
from gainwright_service.experiment.guard import new_guard
from gainwright_service.fence import PATIENCE_S, Fence
from gainwright_service.gains_found import gains_found
from gainwright_service.planning import plan_experiment
from gainwright_service.proposals import conclude_experiment
from gainwright_service.recovery import recover
from gainwright_service.runner import Ended, Signals, run_experiment
from gainwright_service.site_lock import SiteLock, longest_exit_s
from gainwright_service.store import samples, sign_offs, tasks, work
from gainwright_service.store.connect import writing
from gainwright_service.writer import Writer
from gainwright_wire.loops import Loop
from gainwright_wire.tasks import StartExperiment

POLL_S = 0.25
STALE_START_S = 30.0
"""A start that waited longer for its worker is not run."""
FENCE_S = 1.0


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
    ended_worker : str
        Host and process of a worker that is known to have ended; empty where none is.
    log : structlog logger
    """

    def __init__(
        self,
        engine: AsyncEngine,
        fence: Fence,
        clock: Clock,
        pool: AnalysisPool,
        *,
        site: str,
        name: str,
        log: Any,
        ended_worker: str = "",
    ) -> None:
        self._engine = engine
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
        self._lock = SiteLock(
            engine,
            fence,
            clock,
            site=site,
            name=name,
            ending=self._ending,
            log=log,
            ended_worker=ended_worker,
        )

    def end(self) -> None:
        """Begin the end: every experiment takes its exit path."""
        self._ending.set()
        for _, signals in self._running.values():
            signals.shutdown()

    async def run(self) -> None:
        """Serve the site until the end is asked for or its lock is lost."""
        if not await self._lock.take():
            return
        writing_task = asyncio.create_task(self._writer.run(), name="writer")
        fence_task = asyncio.create_task(self._lock.keep(), name="fence")
        try:
            await self._recover_all()
            while not self._ending.is_set():
                if writing_task.done() or fence_task.done():
                    self._unguarded()
                await self._look()
                await self._clock.sleep_until(self._clock.monotonic_s() + POLL_S, self._ending)
            await asyncio.gather(*(task for task, _ in self._running.values()), return_exceptions=True)
        finally:
            for task in (writing_task, fence_task):
                task.cancel()
            await asyncio.gather(writing_task, fence_task, return_exceptions=True)
            self._links.close()
            await self._lock.let_go()

    def _unguarded(self) -> None:
        """Whoever kept the lock or wrote to the store is gone: nothing may be driven without them."""
        self._log.error("the site's lock is lost, or its writer has ended", site=self._site)
        self._lock.lost = True
        self._lost()
        self._ending.set()

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
        task = asyncio.create_task(self._experiment_or_told(row, signals), name=f"experiment {row['tag']}")
        self._running[row["id"]] = (task, signals)
        task.add_done_callback(lambda _: self._running.pop(row["id"], None))

    async def _experiment_or_told(self, row: dict[str, Any], signals: Signals) -> None:
        """One experiment; an error of our own outside its runner does not leave its task running for ever."""
        try:
            await self._experiment(row, signals)
        except Exception as error:  # noqa: BLE001 - the runner has its own last resort; this one closes the task
            self._log.error("the experiment's task failed", task=row["id"], detail=f"{type(error).__name__}: {error}")
            await self._ended_unverified(row, f"{type(error).__name__}: {error}: look at the loop")

    async def _experiment(self, row: dict[str, Any], signals: Signals) -> None:
        loop = Loop.model_validate(row["loop"])
        request = StartExperiment.model_validate(row["request"])
        self._log.info("experiment claimed", task=row["id"], tag=row["tag"])
        waited_s = (self._clock.wall_time() - datetime.fromisoformat(row["created_at"])).total_seconds()
        if waited_s > STALE_START_S:
            # Whoever asked may have gone home: attendance and answers are of their own time.
            await self._refused(row, ChecklistFailed(f"the start waited {waited_s:.0f} s for a worker: ask again"))
            return
        try:
            plan = plan_experiment(loop, request)
        except ServiceError as error:
            await self._refused(row, error)
            return
        adapter = open_adapter(loop, self._links, self._clock)
        log = self._writer.log_of(row["id"])
        log.notes["plan"] = plan.document()
        gains = await gains_found(adapter)
        permitted = self._lock.permission(plan.longest_exit_s)
        drive = Drive(adapter, new_guard(plan, self._clock.monotonic_s()), self._clock, permitted=permitted)
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
        kept: dict[str, Any] = {}

        async def load() -> None:
            async with self._engine.connect() as connection:
                kept["whole"] = await samples.columns(connection, row["id"])
                kept["signed"] = await sign_offs.of_tasks(connection, [row["id"]])

        await self._until_stored(load)
        if not kept:
            return None
        whole, signed = kept["whole"], kept["signed"]
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
        await asyncio.gather(*(self._recovered_or_told(dict(row)) for row in rows))

    async def _recovered_or_told(self, row: dict[str, Any]) -> None:
        """One task's recovery; an error of our own ends it unverified and leaves the others alone."""
        try:
            await self._recover(row)
        except Exception as error:  # noqa: BLE001 - the last resort of a task that would block its site for ever
            self._log.error("recovery failed", task=row["id"], detail=f"{type(error).__name__}: {error}")
            detail = f"recovery failed ({type(error).__name__}: {error}): look at the loop"
            await self._ended_unverified(row, detail)

    async def _ended_unverified(self, row: dict[str, Any], detail: str) -> None:
        async def store() -> None:
            async with writing(self._engine) as connection:
                await work.end(
                    connection,
                    row,
                    worker=self._name,
                    at=self._at(),
                    outcome="interrupted",
                    exit="unverified",
                    exit_detail=detail,
                )
                await work.finish(connection, row["id"], worker=self._name, at=self._at(), result=None)

        await self._until_stored(store)

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
                permitted=self._lock.permission(longest_exit_s(row["ownership"])),
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
