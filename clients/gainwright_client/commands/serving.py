"""Commands that start the service's processes: `serve`, `worker`, `practice-rig`."""

from __future__ import annotations

import os
import signal
import sys
import threading
from typing import Annotated

import typer

from gainwright_client.commands.options import AsJson, DatabaseUrl, DataDir


def serve(
    host: Annotated[str | None, typer.Option(help="Where to listen; else GAINWRIGHT_HOST, else 127.0.0.1.")] = None,
    port: Annotated[int | None, typer.Option(min=1, max=65535, help="Else GAINWRIGHT_PORT, else 8765.")] = None,
    data_dir: DataDir = None,
    database_url: DatabaseUrl = None,
    site: Annotated[str, typer.Option(help="The site that the worker serves.")] = "local",
    lifeline: Annotated[bool, typer.Option("--lifeline", help="End when standard input closes.")] = False,
    as_json: AsJson = False,
) -> None:
    """Run the service: its API and the site's worker, until Ctrl-C, which ends every test through its exit."""
    from gainwright_service import supervisor

    environment = environment_of(host=host, port=port, data_dir=data_dir, database_url=database_url)
    place = {
        "url": f"http://{environment.get('GAINWRIGHT_HOST', '127.0.0.1')}:{environment.get('GAINWRIGHT_PORT', '8765')}",
        "data_dir": os.path.abspath(environment.get("GAINWRIGHT_DATA_DIR") or "gainwright-data"),
    }
    place["token_file"] = os.path.join(place["data_dir"], "first-token")
    _announce(place, as_json)
    if lifeline:
        threading.Thread(target=_end_with_input, name="lifeline", daemon=True).start()
    raise typer.Exit(supervisor.serve(environment, site=site))


def worker(
    site: Annotated[str, typer.Option(help="The site whose devices it opens.")] = "local",
    data_dir: DataDir = None,
    database_url: DatabaseUrl = None,
    as_json: AsJson = False,
) -> None:
    """Run one site's worker alone, as beside a shared database."""
    os.environ.update(environment_of(data_dir=data_dir, database_url=database_url))
    from gainwright_service import worker_process as process

    if as_json:
        _announce({"site": site}, as_json)
    raise typer.Exit(process.main(["--site", site]))


def practice_rig(
    host: Annotated[str, typer.Option(help="Where to listen.")] = "127.0.0.1",
    port: Annotated[int, typer.Option(min=0, max=65535, help="0 takes a free port.")] = 5020,
    log: Annotated[str | None, typer.Option(help="File for one JSON line per write.")] = None,
    as_json: AsJson = False,
) -> None:
    """Serve the dye house: five live loops over Modbus TCP to practise on, with their true values."""
    from gainwright_service.practice_rig.__main__ import main

    arguments = ["--host", host, "--port", str(port)]
    arguments += ["--log", log] if log else []
    arguments += ["--json"] if as_json else []
    raise typer.Exit(main(arguments))


def environment_of(
    *,
    host: str | None = None,
    port: int | None = None,
    data_dir: str | None = None,
    database_url: str | None = None,
) -> dict[str, str]:
    """The environment with the stated settings in it."""
    stated = {
        "GAINWRIGHT_HOST": host,
        "GAINWRIGHT_PORT": None if port is None else str(port),
        "GAINWRIGHT_DATA_DIR": data_dir,
        "GAINWRIGHT_DATABASE_URL": database_url,
    }
    return {**os.environ, **{name: value for name, value in stated.items() if value}}


def _end_with_input() -> None:
    """Ask this process to end when whoever holds its standard input is no more."""
    while os.read(sys.stdin.fileno(), 4096):
        continue
    os.kill(os.getpid(), signal.SIGTERM)


def _announce(place: dict[str, str], as_json: bool) -> None:
    if as_json:
        import json

        sys.stdout.write(json.dumps(place) + "\n")
    else:
        sys.stdout.write(
            f"Gainwright serves {place['url']} (documentation under /docs); data in {place['data_dir']}.\n"
            f"The first person's token is left in {place['token_file']}.\n"
            "Ctrl-C ends every test through its exit, then the service.\n"
        )
    sys.stdout.flush()
