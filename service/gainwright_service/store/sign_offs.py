"""Sign-offs: who answered which item of a checklist. A later answer replaces an earlier one; the journal has both."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from sqlalchemy import delete, insert, select
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.store import journal
from gainwright_service.store.tables import sign_offs


async def put(
    connection: AsyncConnection, task_id: str, *, item: str, verdict: str, reason: str, person: str, at: str
) -> None:
    """Keep one answer."""
    values = {"task_id": task_id, "item": item, "verdict": verdict, "reason": reason, "person": person, "at": at}
    await connection.execute(delete(sign_offs).where(sign_offs.c.task_id == task_id, sign_offs.c.item == item))
    await connection.execute(insert(sign_offs).values(**values))
    detail = {"item": item, "verdict": verdict, "reason": reason}
    await journal.append(connection, at=at, person=person, act="item_answered", subject=task_id, detail=detail)


async def of_tasks(connection: AsyncConnection, task_ids: Sequence[str]) -> list[dict[str, Any]]:
    """The sign-offs of some tasks."""
    if not task_ids:
        return []
    query = select(sign_offs).where(sign_offs.c.task_id.in_(list(task_ids))).order_by(sign_offs.c.item)
    return [dict(row) for row in (await connection.execute(query)).mappings()]
