"""`gainwright token`: tokens of people, made where the database is; no service needed."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Awaitable, Callable
from typing import Annotated, Any, TypeVar

import typer

from gainwright_client.commands.exit_codes import ExitCode
from gainwright_client.commands.failing import tell
from gainwright_client.commands.options import AsJson, DatabaseUrl, DataDir

Result = TypeVar("Result")

app = typer.Typer(rich_markup_mode=None, help="People's tokens, made where the database is; no service needed.")


@app.command("create")
def create(
    person: Annotated[str, typer.Argument(help="Who stands behind requests that carry the token.")],
    label: Annotated[str, typer.Option(help="What it is for.")] = "",
    data_dir: DataDir = None,
    database_url: DatabaseUrl = None,
    as_json: AsJson = False,
) -> None:
    """Make a token for a person. It is shown this once."""
    from gainwright_service.store import people

    if not person.strip() or len(person) > 80:
        raise typer.BadParameter("a name of 1 to 80 characters", param_hint="PERSON")
    token = _in_store(
        lambda connection, at: people.create_token(connection, person=person, label=label, at=at),
        data_dir,
        database_url,
        as_json,
    )
    _print({"person": person, "token": token}, as_json, f"{token}\n")


@app.command("list")
def show(data_dir: DataDir = None, database_url: DatabaseUrl = None, as_json: AsJson = False) -> None:
    """List tokens by their shown names; no token itself is told."""
    from gainwright_service.store import people

    rows = _in_store(lambda connection, at: people.list_tokens(connection), data_dir, database_url, as_json)
    lines = [f"{r['token']}  {r['person']:<24} {r['created_at'][:19]}  {_state(r)}{r['label']}\n" for r in rows]
    _print([dict(row) for row in rows], as_json, "".join(lines) or "no tokens\n")


@app.command("revoke")
def revoke(
    token: Annotated[str, typer.Argument(help="Its shown name, as `token list` tells it.")],
    by: Annotated[str, typer.Option(help="Who revokes it.")],
    data_dir: DataDir = None,
    database_url: DatabaseUrl = None,
    as_json: AsJson = False,
) -> None:
    """Revoke a token."""
    from gainwright_service.store import people

    person = _in_store(
        lambda connection, at: people.revoke(connection, shown=token, by=by, at=at), data_dir, database_url, as_json
    )
    _print({"token": token, "person": person, "revoked_by": by}, as_json, f"revoked {token} of {person}\n")


def _state(row: Any) -> str:
    return f"revoked {row['revoked_at'][:19]}  " if row["revoked_at"] else ""


def _in_store(
    act: Callable[[Any, str], Awaitable[Result]],
    data_dir: str | None,
    database_url: str | None,
    as_json: bool,
) -> Result:
    """Run one act in one transaction on the store that the settings name; a new one is set up first."""

    import asyncio

    from gainwright_client.commands.serving import environment_of
    from gainwright_service.errors import RequestError, ServiceError, StoreError
    from gainwright_service.first_start import act_alone
    from gainwright_service.settings import Settings

    os.environ.update(environment_of(data_dir=data_dir, database_url=database_url))
    try:
        return asyncio.run(act_alone(Settings(), act))
    except StoreError as error:
        tell(ExitCode.SERVICE, error.code.value, error.detail, [], as_json=as_json)
    except RequestError as error:
        tell(ExitCode.REFUSED, error.code.value, error.detail, [], as_json=as_json)
    except ServiceError as error:
        tell(ExitCode.SERVICE, error.code.value, error.detail, [], as_json=as_json)
    except OSError as error:
        tell(ExitCode.USAGE, "usage", f"the data folder cannot be used: {error}", [], as_json=as_json)
    raise AssertionError("every error ends the command")


def _print(document: Any, as_json: bool, text: str) -> None:
    sys.stdout.write(json.dumps(document, ensure_ascii=False) + "\n" if as_json else text)
