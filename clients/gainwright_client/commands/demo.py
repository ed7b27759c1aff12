"""`gainwright demo`: the whole job on a loop of the practice rig, over real HTTP and real Modbus TCP."""

from __future__ import annotations

import json
import sys
import time
from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from gainwright_client.commands.exit_codes import ExitCode
from gainwright_client.commands.failing import failing, tell
from gainwright_client.commands.options import AsJson
from gainwright_client.commands.tune import code_of, run_test, show_forecast

if TYPE_CHECKING:
    from rich.console import Console

    from gainwright_wire.loops import Loop
    from gainwright_wire.tasks import Experiment

FOLDER = "gainwright-demo"
LOOP = "loop.json"


def demo(
    tag: Annotated[str, typer.Option("--loop", help="TIC-201, FIC-105, LIC-310, SIC-410 or PIC-620.")] = "TIC-201",
    data_dir: Annotated[
        Path | None, typer.Option("--data-dir", help="Folder for the record; else one in ./gainwright-demo.")
    ] = None,
    as_json: AsJson = False,
) -> None:
    """Tune a live loop of the practice rig, from forecast to checklist, within a minute. Leaves nothing running."""
    from gainwright_client.demonstration import NotReady

    with failing(as_json):
        folder = _folder(data_dir)
        try:
            finished, document = _demonstrate(tag, folder, as_json)
        except NotReady as error:
            tell(ExitCode.SERVICE, "not_ready", str(error), [], as_json=as_json)
    if as_json:
        sys.stdout.write(json.dumps(document, ensure_ascii=False) + "\n")
    raise typer.Exit(code_of(finished))


def _demonstrate(tag: str, folder: Path, as_json: bool) -> tuple[Experiment, dict[str, Any]]:
    from gainwright_client.client import Client
    from gainwright_client.commands.saving import save
    from gainwright_client.demonstration import practice_rig, service
    from gainwright_client.display.screen import screen
    from gainwright_client.interrupts import Interrupts
    from gainwright_wire.tasks import StartExperiment

    console = screen(errors=as_json)
    quiet = as_json and not console.is_terminal
    began = time.monotonic()
    with Interrupts(), ExitStack() as stack:
        rig = stack.enter_context(practice_rig(folder))
        if tag not in rig.loops:
            raise typer.BadParameter(f"the rig has {', '.join(rig.loops)}", param_hint="--loop")
        running = stack.enter_context(service(folder))
        definition = rig.loops[tag]["definition"]
        (folder / LOOP).write_text(json.dumps(definition, indent=2) + "\n", encoding="utf-8")
        client = stack.enter_context(Client(running.url, running.token))
        loop = client.register_loop(definition).loop
        _say_ready(console, rig, running.url, time.monotonic() - began, quiet=quiet)
        forecast = client.forecast(tag)
        show_forecast(console, forecast, loop, quiet=quiet)
        start = StartExperiment(attended=True, bench_sentence_signed=True, comment="demonstration on the practice rig")
        finished = run_test(client, loop, forecast, start, console, quiet=quiet)
        save(client, finished, folder)
    elapsed_s = time.monotonic() - began
    true = rig.loops[tag]["true"]
    if not as_json:
        _show(console, finished, loop, true, folder, elapsed_s)
    return finished, {
        "true": true,
        "errors_percent": _errors(finished, true),
        "elapsed_s": round(elapsed_s, 1),
        "folder": str(folder),
        "experiment": finished.model_dump(mode="json", by_alias=True),
    }


def _folder(stated: Path | None) -> Path:
    """The folder for the record: as stated, else a new one in the working directory."""
    from gainwright_client.recorded import MalformedFile

    folder = stated or Path(FOLDER) / time.strftime("%Y-%m-%d-%H%M%S")
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise MalformedFile(str(folder), error.strerror or str(error), "a folder that can be written") from error
    return folder


def _errors(finished: Experiment, true: dict[str, float]) -> dict[str, float | None]:
    """Estimate against truth, in percent."""
    found = {"ultimate_gain": finished.ultimate_gain, "ultimate_period_s": finished.ultimate_period_s}
    return {
        name: None if estimate is None else round(100.0 * (estimate.value / true[name] - 1.0), 3)
        for name, estimate in found.items()
    }


def _say_ready(console: Console, rig: Any, url: str, seconds: float, *, quiet: bool) -> None:
    if quiet:
        return
    from rich.text import Text

    console.print(
        Text.assemble(
            ("Gainwright", "bold"),
            f"  practice rig on Modbus TCP {rig.host}:{rig.port}, service on {url}, both processes of their own, ",
            f"ready after {seconds:.1f} s.",
        )
    )


def _show(
    console: Console, finished: Experiment, loop: Loop, true: dict[str, float], folder: Path, took_s: float
) -> None:
    from gainwright_client.commands.saving import EXPERIMENT, SAMPLES
    from gainwright_client.display.analysis import Truth
    from gainwright_client.display.outcome import notice_view, outcome_view, section

    console.print(outcome_view(finished, loop, Truth(true["ultimate_gain"], true["ultimate_period_s"])))
    console.print(section("The record"))
    console.print(f"  {folder}", style="bold", soft_wrap=True)
    console.print(f"  {SAMPLES} · {EXPERIMENT}, the whole reply · rig.jsonl, every write as the rig saw it")
    console.print(f"  {LOOP}, the loop's definition · gainwright.db, the service's store with its journal")
    console.print(section("Try next"))
    unit, output_unit = loop.process_variable.unit, loop.controller_output.unit
    columns = f"--output-column commanded_output --unit {unit} --output-unit {output_unit}"
    console.print(f"  gainwright analyse {folder / SAMPLES} {columns}", soft_wrap=True)
    console.print("  gainwright demo --loop LIC-310    a level, which integrates; or FIC-105, a fast and noisy flow")
    console.print("  gainwright serve                  then a loop of yours, described as in loop.json, from another")
    console.print("                                    terminal: gainwright loop add FILE.json; gainwright tune TAG")
    console.print(notice_view(finished.notice))
    console.print(f"\nThe demo took {took_s:.0f} s. Nothing is left running.", style="bold")
