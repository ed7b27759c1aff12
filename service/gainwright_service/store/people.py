"""People and their tokens. A token is kept as its hash only."""

from __future__ import annotations

import hashlib
import secrets
from collections.abc import Mapping
from typing import Any

from sqlalchemy import insert, select, update
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.errors import NotFound
from gainwright_service.store import journal
from gainwright_service.store.tables import people, tokens

TOKEN_BYTES = 32
SHOWN = 12
"""Characters of the hash that name a token to people."""


async def create_token(connection: AsyncConnection, *, person: str, label: str, at: str) -> str:
    """A new token for a person, who is entered if unknown. The token is told this once."""
    known = (await connection.execute(select(people.c.name).where(people.c.name == person))).first()
    if known is None:
        await connection.execute(insert(people).values(name=person, created_at=at))
    token = secrets.token_urlsafe(TOKEN_BYTES)
    digest = _digest(token)
    await connection.execute(insert(tokens).values(hash=digest, person=person, label=label, created_at=at))
    detail = {"token": digest[:SHOWN], "label": label}
    await journal.append(connection, at=at, person=person, act="token_created", subject=person, detail=detail)
    return token


async def person_of(connection: AsyncConnection, token: str) -> str | None:
    """Whose token it is; None where it is unknown or revoked."""
    query = select(tokens.c.person).where(tokens.c.hash == _digest(token), tokens.c.revoked_at.is_(None))
    return (await connection.execute(query)).scalar_one_or_none()


async def list_tokens(connection: AsyncConnection) -> list[Mapping[str, Any]]:
    """Every token by its shown name: ``token, person, label, created_at, revoked_at``."""
    rows = (await connection.execute(select(tokens).order_by(tokens.c.created_at, tokens.c.hash))).mappings()
    return [
        {
            "token": row["hash"][:SHOWN],
            "person": row["person"],
            "label": row["label"],
            "created_at": row["created_at"],
            "revoked_at": row["revoked_at"],
        }
        for row in rows
    ]


async def revoke(connection: AsyncConnection, *, shown: str, by: str, at: str) -> str:
    """Revoke the token with this shown name; whose it was. Raises `NotFound`."""
    query = select(tokens.c.hash, tokens.c.person).where(tokens.c.hash.startswith(shown, autoescape=True))
    found = (await connection.execute(query)).all()
    if len(found) != 1 or len(shown) < SHOWN:
        raise NotFound(f"token: no token is named {shown!r}")
    await connection.execute(update(tokens).where(tokens.c.hash == found[0].hash).values(revoked_at=at))
    detail = {"token": shown}
    await journal.append(connection, at=at, person=by, act="token_revoked", subject=found[0].person, detail=detail)
    return str(found[0].person)


def _digest(token: str) -> str:
    return hashlib.sha256(token.encode()).hexdigest()
