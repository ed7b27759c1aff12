"""Records of relay tests in CSV files: columns of numbers, or one error that names line, column and what is allowed.

UTF-8, comma, a header line; more columns are allowed. Knows nothing of what the numbers mean.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

MOST_ROWS = 2_000_000
NUMBER = "a finite number with a decimal point, e.g. 61.25"


class MalformedFile(Exception):
    """A file that cannot be read as what it should be.

    Parameters
    ----------
    path : str
    problem, allowed : str
    line : int or None
        Counted from 1, the header included.
    column : str
    """

    def __init__(self, path: str, problem: str, allowed: str, line: int | None = None, column: str = "") -> None:
        self.path, self.problem, self.allowed, self.line, self.column = path, problem, allowed, line, column
        where = "".join([path, f", line {line}" if line is not None else "", f", column {column}" if column else ""])
        super().__init__(f"{where}: {problem}; allowed: {allowed}")


@dataclass(frozen=True, slots=True)
class Names:
    """The names of the three columns in the file's header."""

    time_s: str = "time_s"
    process_variable: str = "process_variable"
    controller_output: str = "controller_output"


@dataclass(frozen=True, slots=True)
class Columns:
    """The three columns, of equal length, and how many lines were left out because a value was missing."""

    time_s: list[float]
    process_variable: list[float]
    controller_output: list[float]
    left_out: int


def read_columns(path: Path, names: Names | None = None) -> Columns:
    """The three columns of a CSV file.

    A line whose process variable or output is empty is an observation that was missed: it is left out and counted.

    Raises
    ------
    MalformedFile
    """
    names = names or Names()
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            return _read(str(path), _rows(str(path), file), names)
    except OSError as error:
        raise MalformedFile(str(path), error.strerror or str(error), "a file that can be read") from error
    except UnicodeDecodeError as error:
        raise MalformedFile(str(path), f"is not UTF-8 at byte {error.start}", "UTF-8 text") from error


def _rows(path: str, lines: Iterable[str]) -> Iterator[tuple[int, list[str]]]:
    reader = csv.reader(lines, strict=True)
    while True:
        try:
            row = next(reader)
        except StopIteration:
            return
        except csv.Error as error:
            raise MalformedFile(path, str(error), "comma-separated values", reader.line_num) from error
        if any(cell.strip() for cell in row):
            yield reader.line_num, row


def _read(path: str, rows: Iterator[tuple[int, list[str]]], names: Names) -> Columns:
    header_line, header = next(rows, (None, []))
    header = [name.strip() for name in header]
    wanted = (names.time_s, names.process_variable, names.controller_output)
    if header_line is None:
        raise MalformedFile(path, "is empty", f"a header line with {','.join(wanted)}")
    places = [_place(path, header_line, header, name) for name in wanted]
    columns: tuple[list[float], list[float], list[float]] = ([], [], [])
    left_out = 0
    for line, row in rows:
        if len(row) != len(header):
            raise MalformedFile(path, f"has {len(row)} fields", f"{len(header)} fields, as in the header", line)
        cells = [row[place].strip() for place in places]
        if cells[0] and not all(cells):
            left_out += 1
            continue
        for column, name, cell in zip(columns, wanted, cells, strict=True):
            column.append(_number(path, line, name, cell))
        if len(columns[0]) > MOST_ROWS:
            raise MalformedFile(path, f"has more than {MOST_ROWS} samples", "a part of it", line)
    if not columns[0]:
        raise MalformedFile(path, "has a header and no values", "at least one whole cycle of a relay test")
    return Columns(*columns, left_out=left_out)


def _place(path: str, line: int, header: list[str], name: str) -> int:
    count = header.count(name)
    if count == 1:
        return header.index(name)
    there = ", ".join(header[:12]) or "nothing"
    problem = f"is missing; the header has {there}" if count == 0 else f"stands {count} times in the header"
    raise MalformedFile(path, problem, "once in the header (another name can be stated with an option)", line, name)


def _number(path: str, line: int, column: str, cell: str) -> float:
    if not cell:
        raise MalformedFile(path, "is empty", NUMBER, line, column)
    try:
        value = float(cell)
    except ValueError as error:
        raise MalformedFile(path, f"{cell[:40]!r} is not a number", NUMBER, line, column) from error
    if not math.isfinite(value):
        raise MalformedFile(path, f"{cell[:40]!r} is not finite", NUMBER, line, column)
    return value
