"""The fence: one active worker per site, held by one lock, confirmed each second.

A file lock beside an embedded database, one advisory lock on one dedicated connection of PostgreSQL. The system frees
both when their holder dies. A worker that loses its lock takes every experiment through the exit path.
"""

from __future__ import annotations

import fcntl
import hashlib
import os
from pathlib import Path
from typing import IO, Protocol

from sqlalchemy import text
from sqlalchemy.exc import SQLAlchemyError
from sqlalchemy.ext.asyncio import AsyncConnection, AsyncEngine

from gainwright_service.errors import StoreError

PATIENCE_S = 5.0
"""A lock that cannot be confirmed for this long is lost."""


def silent_from(last: tuple[str, float, bool] | None, *, longest_exit_s: float, ended_worker: str) -> float:
    """The instant from which the last holder of a database's lock writes nothing more, seconds since the epoch.

    The lock is freed by a broken connection while its holder may live on and take its experiments through the exit
    path; each of its writes checks how long ago the lock was confirmed.

    Parameters
    ----------
    last : tuple or None
        The holder's name, when it was confirmed, whether it let go in good order.
    longest_exit_s : float, seconds
        The longest exit of the tasks it left running.
    ended_worker : str
        Host and process of a worker that was waited for, so that it cannot act; empty where none is known.
    """
    if last is None:
        return 0.0
    name, confirmed_at, released = last
    if released or (ended_worker and name.rpartition("-")[0] == ended_worker):
        return 0.0
    return confirmed_at + PATIENCE_S + longest_exit_s


class Fence(Protocol):
    """One site's lock."""

    async def take(self) -> bool:
        """Try to take the lock; whether it is ours."""
        ...

    async def held(self) -> bool:
        """Whether it is still ours, asked of whoever keeps it."""
        ...

    async def release(self) -> None:
        """Let it go."""
        ...


class FileFence:
    """A lock on a file; freed by the system when the process ends, however it ends."""

    def __init__(self, folder: Path, site: str) -> None:
        self._path = folder / f"site-{site}.lock"
        self._file: IO[str] | None = None

    async def take(self) -> bool:
        """Try to lock the file."""
        file = self._path.open("a")
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            file.close()
            return False
        self._file = file
        return True

    async def held(self) -> bool:
        """A file lock is lost only with the file itself; another file of its name is another lock."""
        if self._file is None or not self._path.exists():
            return False
        return os.fstat(self._file.fileno()).st_ino == self._path.stat().st_ino

    async def release(self) -> None:
        """Unlock."""
        if self._file is not None:
            self._file.close()
            self._file = None


class AdvisoryFence:
    """An advisory lock on a connection of its own; lost with the connection."""

    def __init__(self, engine: AsyncEngine, site: str) -> None:
        self._engine = engine
        digest = hashlib.sha256(f"gainwright site {site}".encode()).digest()
        self._number = int.from_bytes(digest[:8], "big", signed=True)
        self._connection: AsyncConnection | None = None

    async def take(self) -> bool:
        """Try to take the lock on a new connection."""
        await self.release()
        connection = await self._engine.connect()
        await connection.execution_options(isolation_level="AUTOCOMMIT")
        taken = await connection.scalar(text("SELECT pg_try_advisory_lock(:number)"), {"number": self._number})
        if not taken:
            await connection.close()
            return False
        self._connection = connection
        return True

    async def held(self) -> bool:
        """Ask the database over the lock's own connection."""
        if self._connection is None:
            return False
        query = text(
            "SELECT count(*) FROM pg_locks WHERE locktype = 'advisory' AND pid = pg_backend_pid() AND granted "
            "AND ((classid::bigint << 32) | objid::bigint) = :number"
        )
        try:
            return bool(await self._connection.scalar(query, {"number": self._number}))
        except (StoreError, SQLAlchemyError, OSError):
            # A lock that cannot be asked for is not known to be held, whatever broke.
            return False

    async def release(self) -> None:
        """Close the connection, and with it the lock."""
        connection, self._connection = self._connection, None
        if connection is None:
            return
        try:
            await connection.execute(text("SELECT pg_advisory_unlock(:number)"), {"number": self._number})
            await connection.close()
        except (StoreError, SQLAlchemyError, OSError):
            # A broken connection has let the lock go already.
            await connection.invalidate()


def fence_of(engine: AsyncEngine, data_dir: Path, site: str) -> Fence:
    """The kind of lock that belongs to a database."""
    if engine.dialect.name == "sqlite":
        return FileFence(data_dir, site)
    return AdvisoryFence(engine, site)
