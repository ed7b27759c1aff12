"""Errors become one message and one exit code. Owns the table from an error to its code; prints to standard error."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager

import typer

from gainwright_client.commands.exit_codes import ExitCode


@contextmanager
def failing(as_json: bool) -> Iterator[None]:
    """Run a command's body; a known error is told in one message and ends the command with its code."""
    from gainwright_client.errors import ClientError, Problem
    from gainwright_client.recorded import MalformedFile

    try:
        yield
    except ClientError as error:
        fields = [e.model_dump() for e in error.errors] if isinstance(error, Problem) else []
        code = error.code.value if isinstance(error, Problem) else _snake(type(error).__name__)
        tell(code_of(error), code, str(error), fields, as_json=as_json)
    except MalformedFile as error:
        field = {"field": error.column, "problem": error.problem, "allowed": error.allowed}
        tell(ExitCode.MALFORMED_FILE, "malformed_file", str(error), [field], as_json=as_json)
    except UnicodeError as error:
        tell(ExitCode.USAGE, "usage", f"a character that cannot be sent or kept: {error}", [], as_json=as_json)
    except RecursionError:
        tell(ExitCode.MALFORMED_FILE, "malformed_file", "the file is nested too deeply", [], as_json=as_json)
    except (KeyboardInterrupt, typer.Abort):
        tell(ExitCode.LEFT, "left", "left", [], as_json=as_json)


def tell(exit_code: ExitCode, code: str, detail: str, fields: list[dict[str, str]], *, as_json: bool) -> None:
    """Tell what went wrong and end the command."""
    if as_json:
        document = {"code": code, "detail": detail, "errors": fields, "exit_code": int(exit_code)}
        sys.stderr.write(json.dumps(document, ensure_ascii=False) + "\n")
    else:
        lines = [f"gainwright: {detail}"]
        for field in fields:
            told = f"  {field['field'] or 'request'}: {field['problem']}"
            allowed = f"; allowed: {field['allowed']}" if field["allowed"] else ""
            if field["problem"] not in detail:
                lines.append(told + allowed)
        sys.stderr.write("\n".join(lines) + "\n")
    raise typer.Exit(exit_code)


def code_of(error: Exception) -> ExitCode:
    """The exit code of a client's error: the nearest class in the table."""
    from gainwright_client import errors

    table: dict[type[Exception], ExitCode] = {
        errors.ServiceUnreachable: ExitCode.UNREACHABLE,
        errors.UnexpectedReply: ExitCode.SERVICE,
        errors.NotAllowed: ExitCode.NOT_ALLOWED,
        errors.RequestRefused: ExitCode.REFUSED,
        errors.Busy: ExitCode.BUSY,
        errors.ExitNotAcknowledged: ExitCode.BUSY,
        errors.DeviceFailed: ExitCode.DEVICE,
        errors.ServiceFailed: ExitCode.SERVICE,
    }
    return next((table[kind] for kind in type(error).__mro__ if kind in table), ExitCode.FAULT)


def _snake(name: str) -> str:
    return "".join(f"_{c.lower()}" if c.isupper() else c for c in name).lstrip("_")
