"""Tasks: what a worker does at a loop's device. The only wire between the API and the workers.

States ``queued, running, finished``. A loop has at most one unfinished task that drives; an interaction group likewise.
Driving tasks are never claimed twice. People's side of a task stands here, the worker's in `work`.
"""

from __future__ import annotations

import uuid
from collections.abc import Mapping
from typing import Any

from sqlalchemy import func, insert, select, update
from sqlalchemy.exc import IntegrityError
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.errors import ExitNotAcknowledged, GroupBusy, LoopBusy, NotActive, NotFound
from gainwright_service.store import journal
from gainwright_service.store.tables import group_claims, tasks
from gainwright_wire.loops import Loop, ModbusTcp

DRIVING_KINDS = frozenset({"prove_exit", "experiment", "install", "roll_back"})
FINISHED = "finished"

Row = Mapping[str, Any]


async def create(
    connection: AsyncConnection, *, kind: str, loop: Loop, request: dict[str, Any], by: str, at: str
) -> str:
    """Queue a task on a loop; its identifier.

    Raises
    ------
    LoopBusy, GroupBusy, ExitNotAcknowledged
    """
    drives = kind in DRIVING_KINDS
    if drives:
        await _refuse_unacknowledged(connection, loop.tag)
    task_id = uuid.uuid4().hex
    newest = (await connection.execute(select(func.max(tasks.c.number)))).scalar_one_or_none() or 0
    try:
        await connection.execute(
            insert(tasks).values(
                id=task_id,
                number=newest + 1,
                kind=kind,
                tag=loop.tag,
                site=loop.site,
                state="queued",
                drives=drives,
                loop=loop.model_dump(mode="json", by_alias=True),
                request=request,
                requested_by=by,
                created_at=at,
                progress={},
            )
        )
    except IntegrityError as error:
        raise LoopBusy(f"{loop.tag} is being driven by another task; wait for it or stop it") from error
    for group in sorted({group.casefold() for group in loop.interaction_groups}) if drives else ():
        try:
            await connection.execute(insert(group_claims).values(interaction_group=group, task_id=task_id))
        except IntegrityError as error:
            raise GroupBusy(f"interaction group {group!r}: another of its loops is being driven") from error
    if drives and isinstance(loop.adapter, ModbusTcp):
        place = output_place(loop.adapter)
        try:
            await connection.execute(insert(group_claims).values(interaction_group=place, task_id=task_id))
        except IntegrityError as error:
            raise GroupBusy(f"{place}: another loop drives this very output; wait for it or stop it") from error
    detail = {"task": task_id, "kind": kind, "request": request}
    await journal.append(connection, at=at, person=by, act="task_requested", subject=loop.tag, detail=detail)
    return task_id


def output_place(adapter: ModbusTcp) -> str:
    """Where a loop's output stands in the world: two tags may name it, one task may drive it."""
    return f"output {adapter.host.casefold()}:{adapter.port} device {adapter.device_id} register " \
           f"{adapter.controller_output.address}"  # fmt: skip


async def get(connection: AsyncConnection, task_id: str) -> Row:
    """A task's row. Raises `NotFound`."""
    row = (await connection.execute(select(tasks).where(tasks.c.id == task_id))).mappings().first()
    if row is None:
        raise NotFound(f"id: no task {task_id}")
    return dict(row)


async def page(
    connection: AsyncConnection,
    *,
    kind: str | None = None,
    tag: str | None = None,
    state: str | None = None,
    after: str | None = None,
    limit: int = 50,
) -> tuple[list[Row], str | None]:
    """Tasks, newest first, and the cursor of the next page."""
    query = select(tasks).order_by(tasks.c.number.desc()).limit(limit + 1)
    for column, value in ((tasks.c.kind, kind), (tasks.c.tag, tag), (tasks.c.state, state)):
        if value is not None:
            query = query.where(column == value)
    if after is not None:
        query = query.where(tasks.c.number < int(after))
    rows: list[Row] = [dict(row) for row in (await connection.execute(query)).mappings()]
    return rows[:limit], str(rows[limit - 1]["number"]) if len(rows) > limit else None


async def last_result(connection: AsyncConnection, tag: str) -> Mapping[str, Any] | None:
    """The result of the loop's newest experiment that has one."""
    query = (
        select(tasks.c.result)
        .where(
            tasks.c.tag == tag, tasks.c.kind == "experiment", tasks.c.state == FINISHED, tasks.c.outcome.is_not(None)
        )
        .order_by(tasks.c.number.desc())
        .limit(10)
    )
    found = (result for (result,) in (await connection.execute(query)).all() if result and result.get("analysis"))
    return next(found, None)


async def count_by_state(connection: AsyncConnection) -> dict[str, int]:
    """How many tasks stand in each state."""
    query = select(tasks.c.state, func.count()).group_by(tasks.c.state)
    return {state: int(count) for state, count in (await connection.execute(query)).all()}


async def request_stop(connection: AsyncConnection, task_id: str, *, by: str, at: str) -> None:
    """Ask for a task's end; asking again changes nothing. Raises `NotFound`, `NotActive`."""
    row = await get(connection, task_id)
    if row["state"] == FINISHED:
        raise NotActive(f"id: task {task_id} has finished already")
    if row["stop_requested_at"] is not None:
        return
    await connection.execute(
        update(tasks).where(tasks.c.id == task_id).values(stop_requested_at=at, stop_requested_by=by)
    )
    detail = {"task": task_id}
    await journal.append(connection, at=at, person=by, act="stop_requested", subject=row["tag"], detail=detail)


async def acknowledge(connection: AsyncConnection, task_id: str, *, by: str, at: str, remark: str) -> None:
    """Keep that a person has looked at the loop after a task's exit. Raises `NotFound`, `NotActive`."""
    row = await get(connection, task_id)
    if row["state"] != FINISHED:
        raise NotActive(f"id: task {task_id} has not finished; there is no exit to acknowledge yet")
    if row["exit_acknowledged_by"] is None:
        change = {"exit_acknowledged_by": by, "exit_acknowledged_at": at}
        await connection.execute(update(tasks).where(tasks.c.id == task_id).values(**change))
    detail = {"task": task_id, "exit": row["exit"], "remark": remark}
    await journal.append(connection, at=at, person=by, act="exit_acknowledged", subject=row["tag"], detail=detail)


def needs_acknowledgement(row: Row) -> bool:
    """Whether a finished task left a loop that a person must look at first."""
    if row["exit_acknowledged_by"] is not None or not row["drives"]:
        return False
    if row["exit"] in ("unverified", "not_ours", "pending"):
        return True
    # Lost with something of ours possibly in force; a test that never took over left nothing behind.
    return bool(row["exit"] == "not_written" and row["outcome"] == "lost" and row["ownership"])


async def _refuse_unacknowledged(connection: AsyncConnection, tag: str) -> None:
    query = (
        select(tasks)
        .where(tasks.c.tag == tag, tasks.c.drives, tasks.c.state == FINISHED)
        .order_by(tasks.c.number.desc())
        .limit(1)
    )
    row = (await connection.execute(query)).mappings().first()
    if row is not None and needs_acknowledgement(dict(row)):
        raise ExitNotAcknowledged(
            f"{tag}: the last test ended with exit '{row['exit']}' ({row['exit_detail']}); "
            f"look at the loop, then acknowledge task {row['id']}"
        )
