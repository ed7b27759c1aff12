"""The first start: the schema, and a token for the first person, left in a file that only its owner can read."""

from __future__ import annotations

import os
from collections.abc import Awaitable, Callable
from typing import TypeVar

from sqlalchemy.ext.asyncio import AsyncConnection, AsyncEngine

from gainwright_service.clock import Clock, SystemClock
from gainwright_service.settings import Settings
from gainwright_service.store import people
from gainwright_service.store.connect import migrate, open_engine, writing

Result = TypeVar("Result")


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


async def act_alone(settings: Settings, act: Callable[[AsyncConnection, str], Awaitable[Result]]) -> Result:
    """One act in one transaction on the store that the settings name, which is set up first where it is new.

    Parameters
    ----------
    settings : Settings
    act : callable
        Takes the connection and the time, as the journal writes it.

    Raises
    ------
    ServiceError
    """
    settings.data_dir.mkdir(parents=True, exist_ok=True)
    engine = open_engine(settings.database)
    try:
        await migrate(engine)
        async with writing(engine) as connection:
            return await act(connection, SystemClock().wall_time().isoformat(timespec="milliseconds"))
    finally:
        await engine.dispose()
