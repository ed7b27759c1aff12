"""One follower per API process reads what workers add and feeds every live listener; it rests while none is there.

A listener first catches up from the store, then takes what the follower brings, by sample number, so that nothing
is missed or told twice wherever it resumes. A listener that cannot keep up is dropped and may resume by number.
"""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator, Mapping
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.clock import Clock
from gainwright_service.errors import StoreError
from gainwright_service.store import samples, tasks
from gainwright_wire.tasks import TaskState

PERIOD_S = 0.25
BEHIND = 240
"""Batches a listener may fall behind: a minute."""

Columns = Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class News:
    """What one look at the store brought of one task: new samples from a number on, and the task's row."""

    first_number: int
    columns: Columns
    row: Mapping[str, Any]

    @property
    def count(self) -> int:
        """How many samples are new."""
        return len(self.columns["time_s"])

    @property
    def over(self) -> bool:
        """Whether the task has finished and all its samples are here."""
        return bool(self.row["state"] == TaskState.FINISHED)


@dataclass(slots=True)
class _Topic:
    next_number: int
    listeners: list[asyncio.Queue[News | None]] = field(default_factory=list)


class Follower:
    """Reads new chunks of every followed task each 250 ms while there are listeners."""

    def __init__(self, engine: AsyncEngine, clock: Clock) -> None:
        self._engine = engine
        self._clock = clock
        self._topics: dict[str, _Topic] = {}
        self._looking: asyncio.Task[None] | None = None

    @property
    def listeners(self) -> int:
        """How many live streams are open."""
        return sum(len(topic.listeners) for topic in self._topics.values())

    async def follow(self, task_id: str, from_number: int) -> AsyncIterator[News]:
        """Yield news of a task, samples from ``from_number`` on, until it is over or the listener falls behind."""
        queue: asyncio.Queue[News | None] = asyncio.Queue(BEHIND)
        news = await self._look(task_id, from_number)
        topic = self._topics.setdefault(task_id, _Topic(from_number + news.count))
        topic.listeners.append(queue)
        if self._looking is None or self._looking.done():
            self._looking = asyncio.create_task(self._keep_looking(), name="live follower")
        try:
            yield news
            told = from_number + news.count
            while not news.over:
                brought = await queue.get()
                if brought is None:
                    return
                if brought.first_number > told:
                    brought = await self._look(task_id, told)
                news = _from(brought, told)
                told += news.count
                yield news
        finally:
            topic.listeners.remove(queue)
            if not topic.listeners and self._topics.get(task_id) is topic:
                del self._topics[task_id]

    async def close(self) -> None:
        """End every stream."""
        for topic in self._topics.values():
            for queue in topic.listeners:
                _tell(queue, None)
        if self._looking is not None:
            self._looking.cancel()
            await asyncio.gather(self._looking, return_exceptions=True)

    async def _keep_looking(self) -> None:
        while self._topics:
            due = self._clock.monotonic_s() + PERIOD_S
            for task_id, topic in list(self._topics.items()):
                try:
                    news = await self._look(task_id, topic.next_number)
                except StoreError:
                    continue
                topic.next_number += news.count
                for queue in list(topic.listeners):
                    _tell(queue, news)
            await self._clock.sleep_until(due)

    async def _look(self, task_id: str, from_number: int) -> News:
        """The row is read before the samples: a row that says finished promises that no sample follows."""
        async with self._engine.connect() as connection:
            row = await tasks.get(connection, task_id)
            columns = await samples.columns(connection, task_id, from_number)
        return News(from_number, columns, row)


def _from(news: News, number: int) -> News:
    """The same news without the samples before ``number``."""
    skip = number - news.first_number
    if skip <= 0:
        return news
    return News(number, {name: column[skip:] for name, column in news.columns.items()}, news.row)


def _tell(queue: asyncio.Queue[News | None], news: News | None) -> None:
    """Give a listener the news; one that is full is emptied and ended."""
    try:
        queue.put_nowait(news)
    except asyncio.QueueFull:
        while not queue.empty():
            queue.get_nowait()
        queue.put_nowait(None)
