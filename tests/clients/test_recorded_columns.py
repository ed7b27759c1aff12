"""Records in CSV files: what is taken, and how each malformed file is refused by line and column."""

from __future__ import annotations

from pathlib import Path

import pytest

from gainwright_client.recorded import MalformedFile, Names, read_columns

HEADER = "time_s,process_variable,controller_output"


def _file(folder: Path, text: str | bytes) -> Path:
    path = folder / "record.csv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


@pytest.mark.parametrize(
    "text",
    [
        f"{HEADER}\n0,60.5,45\n0.1,6.06e1,50\n",
        f"\ufeff{HEADER}\r\n0,60.5,45\r\n0.1,60.6,50\r\n",
        f"note,{HEADER}\n\na,0,60.5,45\n,0.1,60.6,50\n\n",
        'controller_output,"time_s", process_variable\n45,0,60.5\n"50",0.1,60.6\n',
    ],
    ids=["plain", "byte order mark and CRLF", "more columns and empty lines", "another order, quotes and blanks"],
)
def test_columns_are_found_by_name(tmp_path: Path, text: str) -> None:
    found = read_columns(_file(tmp_path, text))
    assert (found.time_s, found.process_variable, found.controller_output) == ([0, 0.1], [60.5, 60.6], [45, 50])
    assert found.left_out == 0


def test_other_names_can_be_stated(tmp_path: Path) -> None:
    path = _file(tmp_path, "t,TT201,OUT\n0,1,2\n")
    assert read_columns(path, Names("t", "TT201", "OUT")).process_variable == [1]


def test_a_missed_observation_is_left_out_and_counted(tmp_path: Path) -> None:
    found = read_columns(_file(tmp_path, f"{HEADER}\n0,1,2\n1,,2\n2,1,\n3,1,2\n"))
    assert (found.time_s, found.left_out) == ([0, 3], 2)


@pytest.mark.parametrize(
    ("text", "line", "column", "problem"),
    [
        ("", None, "", "is empty"),
        ("\n \n", None, "", "is empty"),
        (f"{HEADER}\n", None, "", "a header and no values"),
        ("time_s,pv,controller_output\n0,1,2\n", 1, "process_variable", "is missing; the header has time_s, pv"),
        (f"{HEADER},time_s\n0,1,2,3\n", 1, "time_s", "stands 2 times"),
        (f"{HEADER}\n0,1,2\n1,1\n", 3, "", "has 2 fields"),
        (f"{HEADER}\n0,1,2\n1,1;5,2\n", 3, "process_variable", "'1;5' is not a number"),
        (f"{HEADER}\n0,nan,2\n", 2, "process_variable", "not finite"),
        (f"{HEADER}\n0,1,-inf\n", 2, "controller_output", "not finite"),
        (f"{HEADER}\n,1,2\n", 2, "time_s", "is empty"),
        (f'{HEADER}\n0,"1,2\n', 2, "", "unexpected end of data"),
        (b"\xff\xfe0\x00", None, "", "is not UTF-8 at byte 0"),
    ],
)
def test_a_malformed_file_is_refused_by_line_and_column(
    tmp_path: Path, text: str | bytes, line: int | None, column: str, problem: str
) -> None:
    path = _file(tmp_path, text)
    with pytest.raises(MalformedFile) as raised:
        read_columns(path)
    error = raised.value
    assert (error.line, error.column) == (line, column)
    assert problem in error.problem
    assert error.allowed
    assert str(path) in str(error)


def test_a_file_that_is_not_there_is_named(tmp_path: Path) -> None:
    with pytest.raises(MalformedFile, match=r"nowhere\.csv: No such file"):
        read_columns(tmp_path / "nowhere.csv")
