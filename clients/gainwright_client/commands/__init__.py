"""The `gainwright` command. Heavy imports stay inside the commands, so that `--help` answers at once."""

from __future__ import annotations

from typing import Annotated

import typer

from gainwright_client.commands import analyse, demo, exit_codes, loops, serving, tokens, tune

app = typer.Typer(
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    add_completion=False,
    no_args_is_help=True,
    help=(
        "Relay-feedback tuning of live PID loops: bounded, yielding and accounted for. The stop is a software stop, "
        "not an emergency stop; local codes, permits and licensed practice come first."
    ),
    epilog=exit_codes.listed(),
)
app.command("demo")(demo.demo)
app.command("serve")(serving.serve)
app.command("worker")(serving.worker)
app.command("practice-rig")(serving.practice_rig)
app.add_typer(loops.app, name="loop")
app.command("tune")(tune.tune)
app.command("analyse")(analyse.analyse)
app.add_typer(tokens.app, name="token")


def _version(wanted: bool) -> None:
    if wanted:
        from importlib.metadata import version

        typer.echo(version("gainwright"))
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    """Options before the command."""


def main() -> None:
    """Run the command."""
    app(prog_name="gainwright")
