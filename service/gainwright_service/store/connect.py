"""Engines and transactions, on SQLite and PostgreSQL alike.

Owns connection settings, the two kinds of writing transaction and the translation of a database that does not answer
into `StoreUnavailable`. Knows no tables.
"""

from __future__ import annotations

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from importlib.resources import as_file, files
from typing import Any

from alembic import command
from alembic.config import Config
from sqlalchemy import Connection, event, exc
from sqlalchemy.engine import ExceptionContext
from sqlalchemy.ext.asyncio import AsyncConnection, AsyncEngine, create_async_engine

from gainwright_service.errors import StoreUnavailable

SERIAL_LOCK = 4_203_110_520
"""Advisory lock that puts PostgreSQL's journalled changes in a row, as SQLite's single writer does by itself."""
BUSY_MS = 4000
QUICK_TO_FAIL = {
    "connect_timeout": 5,
    "keepalives_idle": 2,
    "keepalives_interval": 1,
    "keepalives_count": 3,
    "tcp_user_timeout": 5000,
}
"""A connection whose packets are lost fails within the worker's patience, not within the system's."""
UNREACHABLE = (exc.OperationalError, exc.InterfaceError, exc.TimeoutError, exc.InternalError)


def open_engine(url: str) -> AsyncEngine:
    """An engine for a database address; ``postgresql://`` means the installed driver.

    Nothing is connected yet. Every database error that means "not now" is raised as `StoreUnavailable`.
    """
    if url.startswith("postgresql://"):
        url = url.replace("postgresql://", "postgresql+psycopg://", 1)
    embedded = url.startswith("sqlite")
    settings: dict[str, Any] = {}
    if not embedded:
        settings = {"pool_pre_ping": True, "pool_size": 10, "pool_timeout": 3, "connect_args": QUICK_TO_FAIL}
    try:
        engine = create_async_engine(url, **settings)
    except exc.ArgumentError as error:
        raise StoreUnavailable(f"the database's address cannot be used: {error}") from error
    event.listen(engine.sync_engine, "handle_error", _translate)
    if embedded:
        event.listen(engine.sync_engine, "connect", _embed)
        event.listen(engine.sync_engine, "begin", _begin_embedded)
    return engine


@asynccontextmanager
async def writing(engine: AsyncEngine, *, durable: bool = False) -> AsyncIterator[AsyncConnection]:
    """One transaction for a journalled change; such transactions follow one another. ``durable`` waits for the disk
    where the database would otherwise answer earlier.

    Raises
    ------
    StoreUnavailable
    """
    async with _transaction(engine, durable=durable) as connection:
        if connection.dialect.name == "postgresql":
            await connection.exec_driver_sql(f"SELECT pg_advisory_xact_lock({SERIAL_LOCK})")
        yield connection


@asynccontextmanager
async def appending(engine: AsyncEngine) -> AsyncIterator[AsyncConnection]:
    """One transaction for what has no journal entry: samples, progress, beats.

    Raises
    ------
    StoreUnavailable
    """
    async with _transaction(engine, durable=False) as connection:
        yield connection


@asynccontextmanager
async def _transaction(engine: AsyncEngine, *, durable: bool) -> AsyncIterator[AsyncConnection]:
    async with engine.connect() as connection:
        await connection.execution_options(gainwright_writes=True, gainwright_durable=durable)
        async with connection.begin():
            yield connection


async def migrate(engine: AsyncEngine) -> None:
    """Bring the schema up to date.

    Raises
    ------
    StoreUnavailable
    """
    async with writing(engine) as connection:
        await connection.run_sync(_upgrade)


def migration_config(connection: Connection | None = None) -> Config:
    """Alembic's configuration for the migrations inside this package."""
    config = Config()
    with as_file(files("gainwright_service.store") / "migrations") as folder:
        config.set_main_option("script_location", str(folder))
    config.attributes["connection"] = connection
    return config


def _upgrade(connection: Connection) -> None:
    command.upgrade(migration_config(connection), "head")


def _embed(connection: Any, record: Any) -> None:
    """Settings of a new SQLite connection; transactions are begun by `_begin_embedded` alone."""
    connection.isolation_level = None
    cursor = connection.cursor()
    for setting in ("journal_mode=WAL", "synchronous=NORMAL", "foreign_keys=ON", f"busy_timeout={BUSY_MS}"):
        cursor.execute(f"PRAGMA {setting}")
    cursor.close()


def _begin_embedded(connection: Connection) -> None:
    options = connection.get_execution_options()
    if not options.get("gainwright_writes"):
        connection.exec_driver_sql("BEGIN")
        return
    # In WAL mode NORMAL may lose the last commits with the power; what recovery needs waits for the disk.
    level = "FULL" if options.get("gainwright_durable") else "NORMAL"
    connection.exec_driver_sql(f"PRAGMA synchronous={level}")
    connection.exec_driver_sql("BEGIN IMMEDIATE")


def _translate(context: ExceptionContext) -> None:
    error = context.sqlalchemy_exception or context.original_exception
    if isinstance(error, UNREACHABLE):
        raise StoreUnavailable(f"the database does not answer: {context.original_exception}") from error
