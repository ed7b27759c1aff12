"""`gainwright loop`: register, list and show loops."""

from __future__ import annotations

import json
import sys
from typing import Annotated, Any

import typer

from gainwright_client.commands.failing import failing
from gainwright_client.commands.options import AsJson, Token, Url

app = typer.Typer(rich_markup_mode=None, help="The loops that the service knows.")


@app.command("add")
def add(
    file: Annotated[str, typer.Argument(help="JSON file with one loop or a list of loops; - reads standard input.")],
    replace: Annotated[bool, typer.Option("--replace", help="Replace loops that are registered already.")] = False,
    url: Url = None,
    token: Token = None,
    as_json: AsJson = False,
) -> None:
    """Register loops from a JSON file. Their devices are not contacted."""
    with failing(as_json):
        from gainwright_client.client import Client

        documents = read_documents(file)
        with Client(url, token) as client:
            kept = [_put(client, document, replace) for document in documents]
        if as_json:
            _print([k.model_dump(mode="json", by_alias=True) for k in kept])
        for one in kept if not as_json else []:
            sys.stdout.write(f"{one.loop.tag}  registered, version {one.version}, class {one.loop.loop_class.value}\n")


@app.command("list")
def show_all(url: Url = None, token: Token = None, as_json: AsJson = False) -> None:
    """List all loops."""
    with failing(as_json):
        from gainwright_client.client import Client

        with Client(url, token) as client:
            kept = client.loops()
        if as_json:
            _print([k.model_dump(mode="json", by_alias=True) for k in kept])
            return
        for one in kept:
            loop = one.loop
            place = f"{loop.loop_class.value:<6} {loop.site:<10} {loop.adapter.kind:<10}"
            sys.stdout.write(f"{loop.tag:<16} {place} {loop.description}\n")
        if not kept:
            sys.stdout.write("no loops; `gainwright loop add FILE.json` registers one\n")


@app.command("show")
def show(
    tag: Annotated[str, typer.Argument(help="The loop's tag.")],
    answers_to: Annotated[
        str | None, typer.Option(help="Write the questions still open as a file to fill in, for `tune --answers`.")
    ] = None,
    url: Url = None,
    token: Token = None,
    as_json: AsJson = False,
) -> None:
    """Show one loop and what a test of it would do at worst; moves nothing."""
    with failing(as_json):
        from gainwright_client.client import Client

        with Client(url, token) as client:
            kept = client.loop(tag)
            if as_json and answers_to is None:
                _print(kept.model_dump(mode="json", by_alias=True))
                return
            forecast = client.forecast(tag)
        if answers_to is not None:
            _write_questions(answers_to, forecast.checklist.items)
        if as_json:
            _print(kept.model_dump(mode="json", by_alias=True))
            return
        from gainwright_client.display.checklist import checklist_view, counts
        from gainwright_client.display.forecast import forecast_view
        from gainwright_client.display.screen import screen

        console = screen()
        console.print(f"[bold]{tag}[/bold]  {kept.loop.description}  (version {kept.version}, {kept.registered_by})")
        console.print(forecast_view(forecast, kept.loop))
        console.print("\n[bold]Checklist before a test[/bold]  ", counts(forecast.checklist))
        console.print(checklist_view(forecast.checklist))


def _write_questions(file: str, items: Any) -> None:
    """Open questions as answers that still say fail, so that a file nobody filled in starts nothing."""
    from pathlib import Path

    from gainwright_client.recorded import MalformedFile

    open_items = [item for item in items if item.verdict.value != "pass"]
    document = {item.id: {"verdict": "fail", "reason": item.question} for item in open_items}
    try:
        Path(file).write_text(json.dumps(document, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
    except OSError as error:
        raise MalformedFile(file, error.strerror or str(error), "a file that can be written") from error


def read_documents(file: str) -> list[dict[str, Any]]:
    """The JSON objects in a file. Raises `MalformedFile`."""
    from pathlib import Path

    from gainwright_client.recorded import MalformedFile

    try:
        text = sys.stdin.read() if file == "-" else Path(file).read_text(encoding="utf-8")
        document = json.loads(text)
    except OSError as error:
        raise MalformedFile(file, error.strerror or str(error), "a file that can be read") from error
    except UnicodeDecodeError as error:
        raise MalformedFile(file, f"is not UTF-8 at byte {error.start}", "UTF-8 text") from error
    except json.JSONDecodeError as error:
        raise MalformedFile(file, error.msg, "a JSON object, or a list of them", error.lineno) from error
    documents = document if isinstance(document, list) else [document]
    if not documents or not all(isinstance(one, dict) for one in documents):
        raise MalformedFile(file, "holds something else", "a JSON object, or a list of them")
    return documents


def _put(client: Any, document: dict[str, Any], replace: bool) -> Any:
    from gainwright_client.errors import Conflict
    from gainwright_wire.problems import ProblemCode

    try:
        return client.register_loop(document)
    except Conflict as error:
        if not replace or error.code is not ProblemCode.ALREADY_EXISTS:
            raise
    return client.replace_loop(document, client.loop(str(document.get("tag"))).version)


def _print(document: Any) -> None:
    sys.stdout.write(json.dumps(document, ensure_ascii=False) + "\n")
