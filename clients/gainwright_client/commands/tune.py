"""`gainwright tune`: forecast, questions, a live test, its outcome."""

from __future__ import annotations

import sys
import time
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from gainwright_client.commands.exit_codes import ExitCode, of_experiment
from gainwright_client.commands.failing import failing, tell
from gainwright_client.commands.options import AsJson, Token, Url

if TYPE_CHECKING:
    from rich.console import Console

    from gainwright_client.client import Client
    from gainwright_wire.loops import Loop
    from gainwright_wire.tasks import Experiment, Forecast, StartExperiment


def tune(
    tag: Annotated[str, typer.Argument(help="The loop's tag.")],
    attended: Annotated[
        bool, typer.Option("--attended", help="Somebody is at the loop, with a stop in reach.")
    ] = False,
    yes: Annotated[
        bool, typer.Option("--yes", help="Answer the bench questions with yes and sign the sentence; for scripts.")
    ] = False,
    precision: Annotated[float | None, typer.Option(min=1, max=50, help="Wanted precision in percent.")] = None,
    scored_cycles: Annotated[int | None, typer.Option(min=2, max=20, help="Cycles to score at least.")] = None,
    resting_output: Annotated[float | None, typer.Option(help="Else the mean while listening.")] = None,
    reference: Annotated[float | None, typer.Option(help="Else the mean, or the setpoint in automatic.")] = None,
    answers: Annotated[
        str | None, typer.Option(help="JSON file of checklist answers: item to verdict and reason.")
    ] = None,
    approver: Annotated[str | None, typer.Option(help="Who approved it (plant).")] = None,
    acknowledged_by: Annotated[str | None, typer.Option(help="Console operator who knows (plant).")] = None,
    work_order: Annotated[str | None, typer.Option(help="Work-order or change number (plant).")] = None,
    save: Annotated[Path | None, typer.Option(help="Folder for the samples (CSV) and the whole reply (JSON).")] = None,
    url: Url = None,
    token: Token = None,
    as_json: AsJson = False,
) -> None:
    """Test a loop and propose gains. The first Ctrl-C asks for a stop and waits until the output is handed back."""
    with failing(as_json):
        from gainwright_client.client import Client
        from gainwright_client.display.screen import screen

        stated: dict[str, Any] = {
            "precision_percent": precision,
            "scored_cycles": scored_cycles,
            "resting_output": resting_output,
            "reference": reference,
            "approver": approver,
            "acknowledged_by": acknowledged_by,
            "work_order": work_order,
        }
        console = screen(errors=as_json)
        with Client(url, token) as client:
            loop = client.loop(tag).loop
            forecast = client.forecast(tag)
            show_forecast(console, forecast, loop, quiet=as_json)
            start = _agreed(
                loop, forecast, stated, answers, attended=attended, yes=yes, console=console, as_json=as_json
            )
            finished = run_test(client, loop, forecast, start, console, quiet=as_json and not console.is_terminal)
            if save is not None:
                from gainwright_client.commands.saving import save as save_files

                save_files(client, finished, save)
    _show(finished, loop, console, save, as_json)
    raise typer.Exit(code_of(finished))


def code_of(finished: Experiment) -> ExitCode:
    """The exit code of a finished test."""
    grade = finished.grade.value if finished.grade else None
    return of_experiment(finished.outcome.value if finished.outcome else None, finished.exit.value, grade)


def show_forecast(console: Console, forecast: Forecast, loop: Loop, *, quiet: bool = False) -> None:
    """Show what the test will do at worst."""
    from gainwright_client.display.forecast import forecast_view
    from gainwright_client.display.outcome import section

    if not quiet:
        console.print(section(f"Forecast for {loop.tag}, {loop.description}"))
        console.print(forecast_view(forecast, loop))
        console.print()


def run_test(
    client: Client, loop: Loop, forecast: Forecast, start: StartExperiment, console: Console, *, quiet: bool = False
) -> Experiment:
    """Start a test and follow it to its end."""
    from gainwright_client.commands.watching import Left, watch
    from gainwright_client.display.live import LiveView, Silent
    from gainwright_client.interrupts import Interrupts

    deviation = min(forecast.plan.deviation_up, forecast.plan.deviation_down)
    with Interrupts() as interrupts:
        with interrupts.kept():
            # An interrupt in the middle of the start must not leave a test running that nobody follows.
            started = client.start_experiment(loop.tag, start)
        try:
            with Silent() if quiet else LiveView(console, loop, deviation, time.monotonic) as view:
                return watch(client, started.id, view, interrupts)
        except Left:
            console.print(
                f"Left. The service goes on with the exit of {loop.tag} (experiment {started.id}): look there."
            )
            raise typer.Exit(ExitCode.LEFT) from None


def _agreed(
    loop: Loop,
    forecast: Forecast,
    stated: dict[str, Any],
    answers_file: str | None,
    *,
    attended: bool,
    yes: bool,
    console: Console,
    as_json: bool,
) -> StartExperiment:
    """What the person says when starting, asked for where it is not stated."""
    from gainwright_client.commands.asking import Declined, ask_bench, ask_plant
    from gainwright_wire.loops import LoopClass
    from gainwright_wire.tasks import StartExperiment

    bench = loop.loop_class is LoopClass.BENCH
    asks = sys.stdin.isatty() and not yes and not as_json
    answers = _answers(answers_file)
    try:
        if bench and not yes:
            if not asks:
                raise Declined("nobody is there to be asked: state --yes and --attended")
            ask_bench(loop, forecast)
            attended = True
        elif not bench and asks:
            answers = ask_plant(forecast.checklist, answers, console)
    except Declined as declined:
        tell(ExitCode.REFUSED, "not_started", f"{loop.tag}: nothing was started: {declined}", [], as_json=as_json)
    return StartExperiment.model_validate(
        {
            **stated,
            "attended": attended,
            "bench_sentence_signed": bench,
            "answers": {item: answer.model_dump(mode="json") for item, answer in answers.items()},
        }
    )


def _answers(file: str | None) -> dict[str, Any]:
    if file is None:
        return {}
    from pydantic import ValidationError

    from gainwright_client.commands.asking import read_answers
    from gainwright_client.commands.loops import read_documents
    from gainwright_client.recorded import MalformedFile

    try:
        return read_answers(read_documents(file)[0])
    except ValidationError as error:
        first = error.errors()[0]
        where = ".".join(map(str, first["loc"]))
        raise MalformedFile(file, first["msg"], "item: {verdict, reason}", column=where) from error


def _show(finished: Experiment, loop: Loop, console: Console, saved: Path | None, as_json: bool) -> None:
    if as_json:
        sys.stdout.write(finished.model_dump_json(by_alias=True) + "\n")
        return
    from gainwright_client.display.outcome import notice_view, outcome_view

    console.print(outcome_view(finished, loop))
    if saved is not None:
        console.print(f"\nSaved in {saved}")
    console.print(notice_view(finished.notice))
