"""Answers kept for their `Idempotency-Key`, so that a repeated request changes nothing twice."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from sqlalchemy import insert, select
from sqlalchemy.exc import IntegrityError
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.errors import IdempotencyConflict
from gainwright_service.store.tables import answers


@dataclass(frozen=True, slots=True)
class Kept:
    """A kept answer."""

    status: int
    headers: dict[str, str]
    body: str


async def find(connection: AsyncConnection, *, person: str, key: str, request_hash: str) -> Kept | None:
    """The answer kept for a person's key. Raises `IdempotencyConflict` where the request was another."""
    query = select(answers).where(answers.c.person == person, answers.c.key == key)
    row = (await connection.execute(query)).mappings().first()
    if row is None:
        return None
    if row["request_hash"] != request_hash:
        raise IdempotencyConflict(f"Idempotency-Key: {key!r} was used for another request; choose a new one")
    return Kept(row["status"], {str(k): str(v) for k, v in row["headers"].items()}, row["body"])


async def keep(
    connection: AsyncConnection,
    *,
    person: str,
    key: str,
    request_hash: str,
    status: int,
    headers: dict[str, Any],
    body: str,
    at: str,
) -> None:
    """Keep an answer, in the transaction of the change that it answers."""
    values = {
        "person": person,
        "key": key,
        "request_hash": request_hash,
        "status": status,
        "headers": headers,
        "body": body,
        "at": at,
    }
    try:
        await connection.execute(insert(answers).values(**values))
    except IntegrityError as error:
        raise IdempotencyConflict(f"Idempotency-Key: {key!r} is in use by another request") from error
