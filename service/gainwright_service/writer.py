"""The worker's one writer: samples, progress and commands of all its experiments, committed every 250 ms.

Owns the buffers between the ticking experiments and the store. An experiment never waits for it, except to secure what
recovery needs. Where nothing can be written for five seconds, every experiment is told.
"""

from __future__ import annotations

import asyncio
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.clock import Clock
from gainwright_service.errors import LockLost, StoreError
from gainwright_service.fence import PATIENCE_S
from gainwright_service.runner import RunSample
from gainwright_service.store import samples, sites, work
from gainwright_service.store.connect import appending, writing

PERIOD_S = 0.25
CONFIRM_S = 1.0
MOST_BUFFERED = 200_000
"""Samples of one experiment that wait for a store that does not answer; beyond, the oldest are given up."""

Row5 = tuple[float, float, float, float, float]


@dataclass(slots=True)
class TaskLog:
    """One experiment's buffers; the runner's log (`runner.ExperimentLog`)."""

    task_id: str
    writer: Writer
    rows: list[Row5] = field(default_factory=list)
    first_number: int = 0
    notes: dict[str, Any] = field(default_factory=dict)

    async def secure(self, ownership: dict[str, Any]) -> None:
        """Store durably what recovery needs. Raises `StoreError`."""
        await self.writer.secure(self.task_id, ownership)

    def as_found(self, document: dict[str, Any]) -> None:
        """Kept with the next commit."""
        self.notes["as_found"] = document

    def sample(self, sample: RunSample) -> None:
        """Kept with the next commit."""
        self.rows.append(
            (
                sample.time_s,
                _number(sample.process_variable),
                _number(sample.controller_output),
                _number(sample.commanded_output),
                float(samples.PHASES.index(sample.phase)),
            )
        )

    def command(self, levels: tuple[float, ...]) -> None:
        """Kept with the next commit, and at once: recovery judges by it whose the output is."""
        self.notes["last_command"] = {"levels": list(levels)}
        self.notes["last_command_at"] = self.writer.wall_s()
        self.writer.hurry()

    def progress(self, phase: str, document: dict[str, Any]) -> None:
        """Kept with the next commit."""
        self.notes["phase"] = phase
        self.notes["progress"] = document


class Writer:
    """Drains every experiment's buffers in one transaction at a time.

    Parameters
    ----------
    engine : AsyncEngine
    clock : Clock
    site, worker : str
    on_lost : callable
        Told once the store could not be written for five seconds, or the tasks are no longer ours.
    """

    def __init__(
        self, engine: AsyncEngine, clock: Clock, *, site: str, worker: str, on_lost: Callable[[], None]
    ) -> None:
        self._engine = engine
        self._clock = clock
        self._site = site
        self._worker = worker
        self._on_lost = on_lost
        self._logs: dict[str, TaskLog] = {}
        self._hurry = asyncio.Event()
        self._draining = asyncio.Lock()
        self._written_at = clock.monotonic_s()
        self._confirmed_at = -math.inf

    @property
    def written_at(self) -> float:
        """When the store last took something, monotonic seconds."""
        return self._written_at

    def wall_s(self) -> float:
        """Civil time, seconds since the epoch: ages of commands outlive the process."""
        return self._clock.wall_time().timestamp()

    def hurry(self) -> None:
        """Commit now rather than at the end of the period."""
        self._hurry.set()

    def log_of(self, task_id: str) -> TaskLog:
        """The log of an experiment that begins."""
        log = TaskLog(task_id, self)
        self._logs[task_id] = log
        return log

    async def close(self, log: TaskLog) -> None:
        """Write what is left of an experiment and forget it. Raises `StoreError`."""
        await self.drain()
        self._logs.pop(log.task_id, None)

    async def secure(self, task_id: str, ownership: dict[str, Any]) -> None:
        """One durable transaction. Raises `StoreError`."""
        async with writing(self._engine, durable=True) as connection:
            await work.secure(connection, task_id, worker=self._worker, ownership=ownership, commanded_at=self.wall_s())

    async def run(self) -> None:
        """Drain until cancelled."""
        while True:
            await self._clock.sleep_until(self._clock.monotonic_s() + PERIOD_S, self._hurry)
            self._hurry.clear()
            try:
                # A database that hangs is one that does not answer.
                async with asyncio.timeout(PATIENCE_S):
                    await self.drain()
            except LockLost:
                self._on_lost()
            except (StoreError, TimeoutError):
                if self._clock.monotonic_s() - self._written_at > PATIENCE_S:
                    self._on_lost()

    async def drain(self) -> None:
        """Commit all that waits. Raises `StoreError`; what could not be written waits on."""
        async with self._draining:
            taken = [(log, len(log.rows), log.notes) for log in self._logs.values() if log.rows or log.notes]
            confirm = self._clock.monotonic_s() - self._confirmed_at >= CONFIRM_S
            if not taken and not confirm:
                return
            for log, _, _ in taken:
                log.notes = {}
            try:
                async with appending(self._engine) as connection:
                    for log, count, notes in taken:
                        if count:
                            await samples.append_chunk(
                                connection, log.task_id, first_number=log.first_number, rows=log.rows[:count]
                            )
                        if notes:
                            await work.note(connection, log.task_id, worker=self._worker, values=notes)
                    await sites.confirm(connection, self._site, self._worker, self.wall_s())
            except StoreError:
                for log, _, notes in taken:
                    log.notes = {**notes, **log.notes}
                    del log.rows[: max(0, len(log.rows) - MOST_BUFFERED)]
                raise
            self._written_at = self._confirmed_at = self._clock.monotonic_s()
            for log, count, _ in taken:
                del log.rows[:count]
                log.first_number += count


def _number(value: float | None) -> float:
    return math.nan if value is None else value
