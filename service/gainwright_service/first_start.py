"""The first start: the schema, and a token for the first person, left in a file that only its owner can read."""

from __future__ import annotations

import os

from sqlalchemy.ext.asyncio import AsyncEngine

from gainwright_service.clock import Clock
from gainwright_service.settings import Settings
from gainwright_service.store import people
from gainwright_service.store.connect import migrate, writing


async def prepare(engine: AsyncEngine, settings: Settings, clock: Clock) -> None:
    """Bring the schema up to date and make the first token where there is none. Raises `StoreUnavailable`."""
    settings.data_dir.mkdir(parents=True, exist_ok=True)
    await migrate(engine)
    async with writing(engine) as connection:
        if await people.list_tokens(connection):
            return
        at = clock.wall_time().isoformat(timespec="milliseconds")
        token = await people.create_token(connection, person=settings.person(), label="first start", at=at)
        descriptor = os.open(settings.token_file, os.O_WRONLY | os.O_CREAT | os.O_TRUNC, 0o600)
        with os.fdopen(descriptor, "w") as file:
            file.write(token + "\n")
