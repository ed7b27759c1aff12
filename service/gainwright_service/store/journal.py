"""The journal: acts of persons and of the service, each chained to the one before by its hash.

Append only, inside the transaction of the act itself. Samples are not journal.
"""

from __future__ import annotations

import hashlib
import json
from typing import Any

from sqlalchemy import func, insert, select
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.store.tables import journal
from gainwright_wire.people import JournalEntry, JournalPage

FIRST_HASH = "0" * 64
SERVICE = "gainwright"
"""Who acts where no person does."""


async def append(
    connection: AsyncConnection, *, at: str, person: str, act: str, subject: str, detail: dict[str, Any]
) -> None:
    """Add an entry on a connection of `connect.writing`."""
    newest = (
        await connection.execute(select(journal.c.number, journal.c.hash).order_by(journal.c.number.desc()).limit(1))
    ).first()
    number, previous = (newest.number + 1, newest.hash) if newest else (1, FIRST_HASH)
    entry = {
        "number": number,
        "at": at,
        "person": person,
        "act": act,
        "subject": subject,
        "detail": _plain(detail),
        "previous_hash": previous,
    }
    await connection.execute(insert(journal).values(**entry, hash=_hash(entry)))


async def page(
    connection: AsyncConnection, after: str | None = None, limit: int = 100, *, subject: str | None = None
) -> JournalPage:
    """Entries in order, from the one after ``after``."""
    query = select(journal).order_by(journal.c.number).limit(limit + 1)
    if after is not None:
        query = query.where(journal.c.number > int(after))
    if subject is not None:
        query = query.where(journal.c.subject == subject)
    rows = [dict(row) for row in (await connection.execute(query)).mappings()]
    items = tuple(JournalEntry.model_validate(row) for row in rows[:limit])
    return JournalPage(items=items, next=str(items[-1].number) if len(rows) > limit else None)


async def verify(connection: AsyncConnection) -> int | None:
    """None where the chain holds; else the number of the first entry that does not follow from the ones before."""
    previous, expected = FIRST_HASH, 1
    rows = await connection.stream(select(journal).order_by(journal.c.number))
    try:
        async for row in rows.mappings():
            entry = {name: row[name] for name in row if name != "hash"}
            entry["detail"] = _plain(entry["detail"])
            if row["number"] != expected or row["previous_hash"] != previous or row["hash"] != _hash(entry):
                return expected
            previous, expected = row["hash"], expected + 1
    finally:
        await rows.close()
    return None


async def count(connection: AsyncConnection) -> int:
    """How many entries there are."""
    return int((await connection.execute(select(func.count()).select_from(journal))).scalar_one())


def _hash(entry: dict[str, Any]) -> str:
    text = json.dumps(entry, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()


def _plain(value: Any) -> Any:
    """The value as both databases give it back: whole numbers as integers, tuples as lists, names as text."""
    if isinstance(value, dict):
        return {str(name): _plain(item) for name, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, float):
        return int(value) if value.is_integer() and abs(value) < 2**53 else value
    if value is None or isinstance(value, bool | int):
        return value
    return str(value)
