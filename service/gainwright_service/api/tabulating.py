"""Stored columns as CSV lines, as the wire's `Samples` and as single stream samples.

A missing number is empty in CSV and null in JSON.
"""

from __future__ import annotations

import math
from collections.abc import AsyncIterator, Iterator, Mapping
from typing import Any

from gainwright_service.store.samples import PHASES
from gainwright_wire.tasks import Samples, StreamSample

HEADER = "number,time_s,process_variable,controller_output,commanded_output,phase"
_LINES_AT_ONCE = 2000


async def csv_lines(first_number: int, columns: Mapping[str, Any]) -> AsyncIterator[str]:
    """The samples as CSV text in pieces: UTF-8, comma, a header line, seventeen significant digits at most."""
    yield HEADER + "\n"
    piece: list[str] = []
    for offset in range(len(columns["time_s"])):
        fields = (
            str(first_number + offset),
            *(_text(columns[name][offset]) for name in _NUMBERS),
            _phase(columns["phase"][offset]),
        )
        piece.append(",".join(fields) + "\n")
        if len(piece) == _LINES_AT_ONCE:
            yield "".join(piece)
            piece.clear()
    yield "".join(piece)


def samples_document(first_number: int, columns: Mapping[str, Any]) -> Samples:
    """The samples in columns."""
    count = len(columns["time_s"])
    return Samples(
        number=list(range(first_number, first_number + count)),
        time_s=[float(t) for t in columns["time_s"]],
        process_variable=[_number(v) for v in columns["process_variable"]],
        controller_output=[_number(v) for v in columns["controller_output"]],
        commanded_output=[_number(v) for v in columns["commanded_output"]],
        phase=[_phase(code) for code in columns["phase"]],
    )


def stream_samples(first_number: int, columns: Mapping[str, Any]) -> Iterator[StreamSample]:
    """The samples one by one."""
    for offset in range(len(columns["time_s"])):
        yield StreamSample.model_validate(
            {
                "number": first_number + offset,
                "time_s": float(columns["time_s"][offset]),
                "process_variable": _number(columns["process_variable"][offset]),
                "controller_output": _number(columns["controller_output"][offset]),
                "commanded_output": _number(columns["commanded_output"][offset]),
                "phase": _phase(columns["phase"][offset]),
            }
        )


_NUMBERS = ("time_s", "process_variable", "controller_output", "commanded_output")


def _number(value: Any) -> float | None:
    number = float(value)
    return number if math.isfinite(number) else None


def _text(value: Any) -> str:
    number = _number(value)
    return "" if number is None else repr(number)


def _phase(code: Any) -> str:
    return str(PHASES[int(code)])
