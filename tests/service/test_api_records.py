"""Uploaded records: malformed ones are refused by column, good ones are analysed and kept."""

from __future__ import annotations

import json
import math
from collections.abc import AsyncIterator
from pathlib import Path
from typing import Any

import pytest

from service_app import Site, a_site, sqlite_url

COLUMNS = ("time_s", "process_variable", "controller_output")


@pytest.fixture
async def site(tmp_path: Path) -> AsyncIterator[Site]:
    async with a_site(sqlite_url(tmp_path)) as site:
        yield site


def relay_record(cycles: int = 6, interval_s: float = 0.05) -> dict[str, Any]:
    """The exact limit cycle of ``exp(-2 s)/(10 s + 1)`` under a relay of 5 about 50, begun at rest (Wang, Hang and
    Zou, Ind. Eng. Chem. Res. 36(2), 1997; equations from memory): half-period 3.66589493 s, swing 0.9063."""
    gain, lag, dead_time, amplitude = 1.0, 10.0, 2.0, 5.0
    half = lag * math.log(2 * math.exp(dead_time / lag) - 1)
    times, values, outputs = [], [], []
    value, delayed = 0.0, [0.0] * round(dead_time / interval_s)
    output, samples = amplitude, int((dead_time + 2 * cycles * half) / interval_s)
    decay = math.exp(-interval_s / lag)
    for k in range(samples):
        times.append(k * interval_s)
        values.append(60.0 + value)
        if value > 0:
            output = -amplitude
        elif value < 0:
            output = amplitude
        outputs.append(50.0 + output)
        delayed.append(output)
        value = gain * delayed.pop(0) * (1 - decay) + value * decay
    return {"time_s": times, "process_variable": values, "controller_output": outputs}


def _refused(reply: Any, code: str) -> dict[str, Any]:
    problem: dict[str, Any] = reply.json()
    assert (reply.status_code, problem["code"]) == (422, code), problem
    assert (reply.headers["content-type"]) == "application/problem+json"
    return problem


@pytest.mark.parametrize("column", COLUMNS)
@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
async def test_a_number_that_is_none_is_refused_by_column(site: Site, column: str, value: float) -> None:
    record = relay_record(2)
    record[column][3] = value
    headers = {"Content-Type": "application/json"}
    reply = await site.ada.post("/v1/records", content=json.dumps(record), headers=headers)
    (error,) = _refused(reply, "malformed_record")["errors"]
    assert (error["field"], error["problem"]) == (column, "is not finite at sample 3")
    assert error["allowed"] == "finite numbers"


@pytest.mark.parametrize("column", COLUMNS)
async def test_an_empty_column_is_refused(site: Site, column: str) -> None:
    reply = await site.ada.post("/v1/records", json={**relay_record(2), column: []})
    assert column in [e["field"] for e in _refused(reply, "malformed_record")["errors"]]


async def test_unequal_columns_are_refused(site: Site) -> None:
    record = relay_record(2)
    record["controller_output"].pop()
    (error,) = _refused(await site.ada.post("/v1/records", json=record), "malformed_record")["errors"]
    assert (error["field"], error["allowed"]) == ("controller_output", "equal lengths")


async def test_time_that_runs_backwards_is_refused(site: Site) -> None:
    record = relay_record(2)
    record["time_s"][5] = 0.0
    (error,) = _refused(await site.ada.post("/v1/records", json=record), "malformed_record")["errors"]
    assert (error["field"], error["problem"]) == ("time_s", "does not increase at sample 5")


async def test_a_column_of_words_is_refused_by_its_place(site: Site) -> None:
    reply = await site.ada.post("/v1/records", json={**relay_record(2), "process_variable": ["warm"]})
    assert _refused(reply, "invalid_request")["errors"][0]["field"] == "process_variable.0"


async def test_an_unknown_alignment_is_refused(site: Site) -> None:
    reply = await site.ada.post("/v1/records", json={**relay_record(2), "output_is": "somewhere"})
    assert _refused(reply, "invalid_request")["errors"][0]["field"] == "output_is"
