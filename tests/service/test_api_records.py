"""Uploaded records: malformed ones are refused by column, good ones are analysed and kept."""

from __future__ import annotations

import json
import math
from collections.abc import AsyncIterator
from pathlib import Path
from typing import Any

import pytest

from relay_records import relay_record
from service_app import Site, a_site, sqlite_url

COLUMNS = ("time_s", "process_variable", "controller_output")


@pytest.fixture
async def site(tmp_path: Path) -> AsyncIterator[Site]:
    async with a_site(sqlite_url(tmp_path)) as site:
        yield site


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


async def test_a_record_is_analysed_proposed_for_and_kept(site: Site) -> None:
    controller = {"form": "ideal", "gain": "engineering"}
    body = {**relay_record(), "tag": "TIC-201", "controller": controller, "hysteresis": 0.0, "reference": 60.0}
    made = await site.ada.post("/v1/records", json=body, headers={"Idempotency-Key": "upload-1"})
    assert made.status_code == 201, made.text
    reply = made.json()
    assert made.headers["location"] == f"/v1/records/{reply['id']}"
    assert (reply["by"], reply["tag"], reply["samples"]) == ("Ada", "TIC-201", len(body["time_s"]))
    # K Ku = 8.502425 at L/T = 0.2 (exact, recomputed).
    assert reply["analysis"]["ultimate_gain"]["value"] == pytest.approx(8.502425, rel=0.05)
    assert [p["rule"] for p in reply["analysis"]["proposals"] if p["recommended"]]
    assert (await site.grace.get(made.headers["location"])).json() == reply
    again = await site.ada.post("/v1/records", json=body, headers={"Idempotency-Key": "upload-1"})
    assert again.json() == reply


async def test_a_record_without_a_whole_cycle_is_unusable_and_says_why(site: Site) -> None:
    record = {name: column[:60] for name, column in relay_record().items()}
    analysis = (await site.ada.post("/v1/records", json=record)).json()["analysis"]
    assert analysis["grade"] == "unusable"
    assert (analysis["ultimate_gain"], analysis["proposals"]) == (None, [])
    assert "cycle" in " ".join(analysis["reasons"])
    assert all("unusable" in refused["reason"] for refused in analysis["refused_rules"])


async def test_immense_numbers_are_refused_by_column(site: Site) -> None:
    record = relay_record(2)
    record["process_variable"][7] = 1e13
    (error,) = _refused(await site.ada.post("/v1/records", json=record), "malformed_record")["errors"]
    assert (error["field"], error["problem"]) == ("process_variable", "is 1e+13 at sample 7")


async def test_estimates_beyond_what_a_reply_carries_are_refused(site: Site) -> None:
    record = relay_record()
    record["time_s"] = [1e-13 * t for t in record["time_s"]]
    _refused(await site.ada.post("/v1/records", json=record), "malformed_record")
