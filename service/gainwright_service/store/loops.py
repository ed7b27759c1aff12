"""Loops as registered: one wire document each, with a version for edits."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from sqlalchemy import insert, select, update
from sqlalchemy.exc import IntegrityError
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.errors import AlreadyExists, LoopBusy, NotFound, VersionConflict
from gainwright_service.store import journal
from gainwright_service.store.tables import loops, tasks
from gainwright_wire.loops import Loop, LoopPage, RegisteredLoop


async def register(connection: AsyncConnection, loop: Loop, *, by: str, at: str) -> RegisteredLoop:
    """Keep a new loop. Raises `AlreadyExists`."""
    document = loop.model_dump(mode="json", by_alias=True)
    row = {
        "tag": loop.tag,
        "site": loop.site,
        "definition": document,
        "version": 1,
        "registered_at": at,
        "registered_by": by,
        "updated_at": at,
    }
    try:
        await connection.execute(insert(loops).values(**row))
    except IntegrityError as error:
        raise AlreadyExists(f"tag: {loop.tag} is registered already; replace it with PUT and If-Match") from error
    await journal.append(connection, at=at, person=by, act="loop_registered", subject=loop.tag, detail=document)
    return _registered(row)


async def get(connection: AsyncConnection, tag: str) -> RegisteredLoop:
    """The loop with this tag. Raises `NotFound`."""
    row = (await connection.execute(select(loops).where(loops.c.tag == tag))).mappings().first()
    if row is None:
        raise NotFound(f"tag: no loop {tag} is registered")
    return _registered(dict(row))


async def replace(
    connection: AsyncConnection, tag: str, loop: Loop, *, version: int, by: str, at: str
) -> RegisteredLoop:
    """Keep a new definition in place of version ``version``. Raises `NotFound`, `VersionConflict`, `LoopBusy`."""
    kept = await get(connection, tag)
    if kept.version != version:
        raise VersionConflict(f"If-Match: version {version} is not the newest; the loop stands at {kept.version}")
    active = select(tasks.c.id).where(tasks.c.tag == tag, tasks.c.drives, tasks.c.state != "finished")
    if (await connection.execute(active)).first() is not None:
        raise LoopBusy(f"{tag} is being driven; change it when the task has finished")
    document = loop.model_dump(mode="json", by_alias=True)
    change = {"definition": document, "version": version + 1, "site": loop.site, "updated_at": at}
    await connection.execute(update(loops).where(loops.c.tag == tag, loops.c.version == version).values(**change))
    detail = {"version": version + 1, "definition": document}
    await journal.append(connection, at=at, person=by, act="loop_replaced", subject=tag, detail=detail)
    return await get(connection, tag)


async def page(connection: AsyncConnection, after: str | None = None, limit: int = 100) -> LoopPage:
    """Loops by tag, from the one after ``after``."""
    query = select(loops).order_by(loops.c.tag).limit(limit + 1)
    if after is not None:
        query = query.where(loops.c.tag > after)
    rows = (await connection.execute(query)).mappings().all()
    items = tuple(_registered(dict(row)) for row in rows[:limit])
    return LoopPage(items=items, next=items[-1].loop.tag if len(rows) > limit else None)


def _registered(row: Mapping[str, Any]) -> RegisteredLoop:
    return RegisteredLoop(
        loop=Loop.model_validate(row["definition"]),
        version=row["version"],
        registered_at=row["registered_at"],
        registered_by=row["registered_by"],
        updated_at=row["updated_at"],
    )
