"""`gainwright analyse`: a record of a relay test in a CSV file, analysed here; no service and no loop needed."""

from __future__ import annotations

import json
import sys
from enum import StrEnum
from pathlib import Path
from typing import Annotated, Any

import typer

from gainwright_client.commands.exit_codes import ExitCode, of_grade
from gainwright_client.commands.failing import failing, tell
from gainwright_client.commands.options import AsJson


class OutputIs(StrEnum):
    """What the controller output of one line means."""

    APPLIED_AFTER = "applied_after"
    READ_BACK_BEFORE = "read_back_before"


def analyse(
    file: Annotated[Path, typer.Argument(help="CSV with time_s,process_variable,controller_output.")],
    reference: Annotated[float | None, typer.Option(help="Value that the relay switched about; else measured.")] = None,
    hysteresis: Annotated[float | None, typer.Option(min=0, help="Half-width of the relay's; else measured.")] = None,
    output_is: Annotated[
        OutputIs, typer.Option(help="The output in force from each line on, or the one read back before it.")
    ] = OutputIs.APPLIED_AFTER,
    latency_s: Annotated[float, typer.Option(min=0, help="Read age and write delay of the link, seconds.")] = 0.0,
    confidence: Annotated[float, typer.Option(min=0.5, max=0.999, help="Of the intervals.")] = 0.95,
    controller: Annotated[
        str | None, typer.Option(help="Target controller: JSON, or a file with it, as in a loop's `controller`.")
    ] = None,
    time_column: Annotated[str, typer.Option(help="Its name in the header.")] = "time_s",
    value_column: Annotated[str, typer.Option(help="Its name in the header.")] = "process_variable",
    output_column: Annotated[str, typer.Option(help="Its name in the header.")] = "controller_output",
    unit: Annotated[str, typer.Option(help="Of the process variable, for the text.")] = "PV unit",
    output_unit: Annotated[str, typer.Option(help="Of the output, for the text.")] = "output unit",
    as_json: AsJson = False,
) -> None:
    """Analyse a recorded relay test: ultimate point with intervals, model, findings, proposals."""
    with failing(as_json):
        from gainwright_client.recorded import Names, read_columns

        columns = read_columns(file, Names(time_column, value_column, output_column))
        document = {
            "time_s": columns.time_s,
            "process_variable": columns.process_variable,
            "controller_output": columns.controller_output,
            "output_is": output_is.value,
            "reference": reference,
            "hysteresis": hysteresis,
            "latency_s": latency_s,
            "confidence": confidence,
            "controller": _controller(controller),
        }
    found = _analysed(document, str(file), as_json)
    if as_json:
        sys.stdout.write(json.dumps(found, indent=2, ensure_ascii=False) + "\n")
    else:
        _show(file, found, len(columns.time_s), columns.left_out, unit, output_unit)
    raise typer.Exit(of_grade(found["grade"]))


def _controller(stated: str | None) -> dict[str, Any] | None:
    if stated is None:
        return None
    from gainwright_client.commands.loops import read_documents
    from gainwright_client.recorded import MalformedFile

    if not stated.lstrip().startswith("{"):
        return read_documents(stated)[0]
    try:
        document: dict[str, Any] = json.loads(stated)
    except json.JSONDecodeError as error:
        raise MalformedFile("--controller", error.msg, "a JSON object") from error
    return document


def _analysed(document: dict[str, Any], name: str, as_json: bool) -> dict[str, Any]:
    from pydantic import ValidationError

    from gainwright_service.errors import RecordRefused
    from gainwright_service.proposals import analyse_upload

    try:
        return analyse_upload(document)
    except RecordRefused as error:
        fields = [field.model_dump() for field in error.errors]
        tell(ExitCode.MALFORMED_FILE, error.code.value, f"{name}: {error.detail}", fields, as_json=as_json)
    except ValidationError as error:
        fields = [
            {"field": ".".join(map(str, e["loc"])), "problem": e["msg"], "allowed": ""} for e in error.errors()[:20]
        ]
        tell(ExitCode.USAGE, "invalid_request", "an option is not allowed as it is", fields, as_json=as_json)
    raise AssertionError("every error ends the command")


def _show(file: Path, found: dict[str, Any], count: int, left_out: int, unit: str, output_unit: str) -> None:
    from gainwright_client.display.analysis import Units
    from gainwright_client.display.outcome import analysis_view, notice_view
    from gainwright_client.display.screen import screen
    from gainwright_wire.analyses import AnalysisReply

    analysis = AnalysisReply.model_validate(found)
    console = screen()
    missing = f", {left_out} lines left out for a missing value" if left_out else ""
    console.print(f"{file.name}: {count} samples{missing}, {analysis.scored_cycles} scored cycles", style="bold")
    console.print(analysis_view(analysis, Units(unit, output_unit)))
    console.print(notice_view(analysis.notice))
