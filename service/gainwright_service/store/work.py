"""The worker's side of tasks: claiming, securing, noting, ending, finishing.

Every change names the worker that holds the task, so that one that has lost it changes nothing.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from sqlalchemy import delete, select, update
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.errors import LockLost
from gainwright_service.store import journal
from gainwright_service.store.tables import group_claims, tasks
from gainwright_service.store.tasks import FINISHED, Row


async def claim(connection: AsyncConnection, *, site: str, worker: str, at: str) -> Row | None:
    """Take the oldest queued task of a site; None where there is none. One statement, the same on both databases."""
    oldest = (
        select(tasks.c.id)
        .where(tasks.c.site == site, tasks.c.state == "queued")
        .order_by(tasks.c.number)
        .limit(1)
        .scalar_subquery()
    )
    statement = (
        update(tasks)
        .where(tasks.c.id == oldest, tasks.c.state == "queued")
        .values(state="running", worker=worker, started_at=at)
        .returning(tasks)
    )
    row = (await connection.execute(statement)).mappings().first()
    return None if row is None else dict(row)


async def left_running(connection: AsyncConnection, site: str) -> list[Row]:
    """Every running task of a site, whoever holds it."""
    query = select(tasks).where(tasks.c.site == site, tasks.c.state == "running")
    return [dict(row) for row in (await connection.execute(query)).mappings()]


async def adopt(connection: AsyncConnection, *, site: str, worker: str) -> list[Row]:
    """Take over every running task of a site from a worker that is no more, for recovery only."""
    statement = (
        update(tasks).where(tasks.c.site == site, tasks.c.state == "running").values(worker=worker).returning(tasks)
    )
    return [dict(row) for row in (await connection.execute(statement)).mappings()]


async def stops(connection: AsyncConnection, site: str) -> dict[str, str]:
    """Running or queued tasks of a site whose stop was asked for: identifier to person."""
    query = select(tasks.c.id, tasks.c.stop_requested_by).where(
        tasks.c.site == site, tasks.c.state != FINISHED, tasks.c.stop_requested_at.is_not(None)
    )
    return {task_id: by for task_id, by in (await connection.execute(query)).all()}


async def secure(
    connection: AsyncConnection, task_id: str, *, worker: str, ownership: Mapping[str, Any], commanded_at: float
) -> None:
    """Keep what recovery needs, on a durable connection. Raises `LockLost`."""
    values = {"ownership": dict(ownership), "last_command_at": commanded_at}
    await _change(connection, task_id, worker, values)


async def note(connection: AsyncConnection, task_id: str, *, worker: str, values: Mapping[str, Any]) -> None:
    """Keep columns of a running task: phase, progress, plan, as_found, last_command. Raises `LockLost`."""
    await _change(connection, task_id, worker, dict(values))


async def end(
    connection: AsyncConnection,
    row: Row,
    *,
    worker: str,
    at: str,
    outcome: str | None,
    exit: str,
    exit_detail: str,
    values: Mapping[str, Any] | None = None,
) -> None:
    """Keep how a task's work at the device ended; its interaction groups are free again. Raises `LockLost`."""
    kept = {"outcome": outcome, "exit": exit, "exit_detail": exit_detail, "phase": "finished", **(values or {})}
    await _change(connection, row["id"], worker, kept)
    await connection.execute(delete(group_claims).where(group_claims.c.task_id == row["id"]))
    detail = {
        "task": row["id"],
        "outcome": outcome,
        "exit": exit,
        "exit_detail": exit_detail,
        "limit": (values or {}).get("limit"),
        "problem": (values or {}).get("problem"),
    }
    await journal.append(connection, at=at, person=journal.SERVICE, act="task_ended", subject=row["tag"], detail=detail)


async def finish(
    connection: AsyncConnection, task_id: str, *, worker: str, at: str, result: Mapping[str, Any] | None
) -> None:
    """Close a task whose end is kept, with its result. Raises `LockLost`."""
    values = {"state": FINISHED, "finished_at": at, "result": dict(result) if result is not None else None}
    await _change(connection, task_id, worker, values)


async def _change(connection: AsyncConnection, task_id: str, worker: str, values: dict[str, Any]) -> None:
    statement = (
        update(tasks)
        .where(tasks.c.id == task_id, tasks.c.worker == worker, tasks.c.state == "running")
        .values(**values)
    )
    changed = await connection.execute(statement)
    if changed.rowcount != 1:
        raise LockLost(f"task {task_id} is no longer this worker's")
