"""Loops over HTTP: register, list, show, replace; who asks; repeated requests; bad input."""

from __future__ import annotations

import json
from collections.abc import AsyncIterator
from pathlib import Path
from typing import Any

import httpx
import pytest

from service_app import Site, a_site, sqlite_url
from service_loops import loop_document

pytestmark = pytest.mark.asyncio


@pytest.fixture
async def site(tmp_path: Path) -> AsyncIterator[Site]:
    async with a_site(sqlite_url(tmp_path)) as site:
        yield site


def _problem(reply: httpx.Response, status: int, code: str) -> dict[str, Any]:
    assert reply.headers["content-type"] == "application/problem+json"
    problem: dict[str, Any] = reply.json()
    assert (reply.status_code, problem["status"], problem["code"]) == (status, status, code)
    return problem


async def test_a_loop_is_registered_shown_and_listed(site: Site) -> None:
    made = await site.ada.post("/v1/loops", json=loop_document())
    assert (made.status_code, made.headers["location"], made.headers["etag"]) == (201, "/v1/loops/TIC-201", '"v1"')
    assert made.json()["registered_by"] == "Ada"
    assert made.json()["loop"]["class"] == "bench"
    shown = await site.grace.get("/v1/loops/TIC-201")
    assert shown.json() == made.json()
    assert shown.headers["etag"] == '"v1"'
    listed = await site.ada.get("/v1/loops")
    assert [item["loop"]["tag"] for item in listed.json()["items"]] == ["TIC-201"]


async def test_pages_follow_their_cursor(site: Site) -> None:
    for number in range(5):
        await site.ada.post("/v1/loops", json=loop_document(tag=f"FIC-{number}"))
    tags, after = [], None
    while True:
        params = {"limit": "2"} | ({"after": after} if after else {})
        page = (await site.ada.get("/v1/loops", params=params)).json()
        tags += [item["loop"]["tag"] for item in page["items"]]
        after = page["next"]
        if after is None:
            break
    assert tags == [f"FIC-{n}" for n in range(5)]


async def test_a_tag_is_registered_once(site: Site) -> None:
    await site.ada.post("/v1/loops", json=loop_document())
    _problem(await site.ada.post("/v1/loops", json=loop_document()), 409, "already_exists")


async def test_a_repeated_request_with_its_key_gets_the_kept_answer(site: Site) -> None:
    headers = {"Idempotency-Key": "register-201"}
    first = await site.ada.post("/v1/loops", json=loop_document(), headers=headers)
    again = await site.ada.post("/v1/loops", json=loop_document(), headers=headers)
    assert (again.status_code, again.json(), again.headers["etag"]) == (201, first.json(), first.headers["etag"])
    assert again.headers["idempotency-replayed"] == "true"
    entries = (await site.ada.get("/v1/journal", params={"subject": "TIC-201"})).json()["items"]
    assert len(entries) == 1


async def test_a_key_used_for_another_request_is_refused(site: Site) -> None:
    headers = {"Idempotency-Key": "register-201"}
    await site.ada.post("/v1/loops", json=loop_document(), headers=headers)
    other = await site.ada.post("/v1/loops", json=loop_document(tag="FIC-1"), headers=headers)
    _problem(other, 422, "idempotency_conflict")


async def test_a_refused_request_keeps_no_answer(site: Site) -> None:
    headers = {"Idempotency-Key": "register-201"}
    _problem(
        await site.ada.post("/v1/loops", json=loop_document(safety_function=True), headers=headers),
        422,
        "safety_function",
    )
    assert (await site.ada.post("/v1/loops", json=loop_document(), headers=headers)).status_code == 201


async def test_two_people_may_use_the_same_key(site: Site) -> None:
    headers = {"Idempotency-Key": "my-first-loop"}
    assert (await site.ada.post("/v1/loops", json=loop_document(), headers=headers)).status_code == 201
    other = await site.grace.post("/v1/loops", json=loop_document(tag="FIC-1"), headers=headers)
    assert other.status_code == 201


async def test_a_replacement_needs_the_version_that_was_read(site: Site) -> None:
    await site.ada.post("/v1/loops", json=loop_document())
    changed = loop_document(description="dye bath, new valve")
    _problem(await site.ada.put("/v1/loops/TIC-201", json=changed), 428, "version_required")
    stale = await site.ada.put("/v1/loops/TIC-201", json=changed, headers={"If-Match": '"v7"'})
    _problem(stale, 412, "version_conflict")
    wrong = await site.ada.put("/v1/loops/TIC-201", json=changed, headers={"If-Match": "seven"})
    assert _problem(wrong, 422, "invalid_request")["errors"][0]["field"] == "If-Match"
    done = await site.ada.put("/v1/loops/TIC-201", json=changed, headers={"If-Match": '"v1"'})
    assert (done.status_code, done.headers["etag"], done.json()["version"]) == (200, '"v2"', 2)
    assert done.json()["loop"]["description"] == "dye bath, new valve"


async def test_a_replacement_cannot_rename(site: Site) -> None:
    await site.ada.post("/v1/loops", json=loop_document())
    reply = await site.ada.put("/v1/loops/TIC-201", json=loop_document(tag="X-1"), headers={"If-Match": '"v1"'})
    assert _problem(reply, 422, "invalid_request")["errors"][0]["field"] == "tag"


@pytest.mark.parametrize(
    ("changes", "code", "field"),
    [
        ({"safety_function": True}, "safety_function", "safety_function"),
        ({"adapter": {"kind": "telegraph"}}, "invalid_request", "adapter.kind"),
        ({"limits__process_variable_high": 500}, "invalid_request", "limits.process_variable_low/high"),
        ({"limits__output_high": 150}, "invalid_request", "limits.output_low/high"),
        ({"limits__deviation_up": float("nan")}, "invalid_request", "limits.deviation_up"),
        ({"limits__deviation_up": float("inf")}, "invalid_request", "limits.deviation_up"),
        ({"loop_class": "plant", "adapter__mode": None}, "invalid_request", "adapter.mode"),
        ({"colour": "blue"}, "invalid_request", "colour"),
        ({"description": "a\x00b"}, "invalid_request", "description"),
    ],
)
async def test_bad_loops_are_refused_by_field_and_nothing_is_kept(
    site: Site, changes: dict[str, Any], code: str, field: str
) -> None:
    body = json.dumps(loop_document(**changes))
    reply = await site.ada.post("/v1/loops", content=body, headers={"Content-Type": "application/json"})
    problem = _problem(reply, 422, code)
    assert field in [e["field"] for e in problem["errors"]]
    assert all(e["allowed"] for e in problem["errors"])
    assert (await site.ada.get("/v1/loops")).json()["items"] == []


async def test_a_body_that_is_no_json_is_refused(site: Site) -> None:
    reply = await site.ada.post("/v1/loops", content="{oops", headers={"Content-Type": "application/json"})
    assert _problem(reply, 422, "invalid_request")["errors"][0]["allowed"] == "a JSON document"


async def test_without_a_token_nothing_is_told(site: Site) -> None:
    for method, path in (("GET", "/v1/loops"), ("POST", "/v1/loops"), ("GET", "/v1/journal"), ("GET", "/v1/me")):
        reply = await site.nobody.request(method, path)
        _problem(reply, 401, "unauthenticated")
        assert reply.headers["www-authenticate"] == "Bearer"
    wrong = await site.nobody.get("/v1/me", headers={"Authorization": "Bearer wrong"})
    _problem(wrong, 401, "unauthenticated")


async def test_a_token_names_its_person(site: Site) -> None:
    assert (await site.ada.get("/v1/me")).json() == {"name": "Ada"}


async def test_unknown_paths_methods_and_loops_are_problems(site: Site) -> None:
    _problem(await site.ada.get("/v1/nothing"), 404, "not_found")
    _problem(await site.ada.get("/v1/loops/NO-1"), 404, "not_found")
    reply = await site.ada.delete("/v1/loops")
    _problem(reply, 405, "method_not_allowed")


async def test_too_large_a_body_is_refused_before_it_is_parsed(site: Site) -> None:
    _problem(await site.ada.post("/v1/loops", content=b"x" * 600_000), 413, "too_large")


async def test_a_forecast_moves_nothing_and_needs_no_device(site: Site) -> None:
    await site.ada.post("/v1/loops", json=loop_document())
    limits = await site.ada.post("/v1/loops/TIC-201/forecast")
    assert (limits.status_code, limits.json()["basis"]) == (200, "limits")
    guess = {"static_gain": 0.5, "time_constant_s": 10, "dead_time_s": 2}
    guessed = await site.ada.post("/v1/loops/TIC-201/forecast", json=guess)
    assert guessed.json()["basis"] == "guess"
    outside = await site.ada.post("/v1/loops/TIC-201/forecast", json={"reference": 99})
    assert _problem(outside, 422, "plan_refused")["errors"][0]["field"] == "reference"
    assert (await site.ada.get("/v1/experiments")).json()["items"] == []


async def test_every_change_is_in_the_journal_chained_and_by_person(site: Site) -> None:
    await site.ada.post("/v1/loops", json=loop_document())
    changed = loop_document(description="new valve")
    await site.grace.put("/v1/loops/TIC-201", json=changed, headers={"If-Match": '"v1"'})
    entries = (await site.ada.get("/v1/journal", params={"subject": "TIC-201"})).json()["items"]
    assert [entry["person"] for entry in entries] == ["Ada", "Grace"]
    assert entries[1]["previous_hash"] == entries[0]["hash"]


@pytest.mark.parametrize(
    "path",
    [
        "/v1/loops/%00",
        "/v1/loops?after=%00",
        "/v1/loops?limit=0",
        "/v1/loops?limit=99999999999999999999",
        "/v1/experiments?after=99999999999999999999",
        "/v1/experiments?state=resting",
        "/v1/journal?after=-1",
        "/v1/journal?subject=%00",
    ],
)
async def test_odd_paths_and_queries_are_refused_by_name(site: Site, path: str) -> None:
    assert _problem(await site.ada.get(path), 422, "invalid_request")["errors"][0]["field"]


@pytest.mark.parametrize("body", [b"", b"null", b"[]", b"\xff\xfe", b"[" * 100_000, b'{"a":' * 50_000])
async def test_bodies_that_are_no_loop_are_refused(site: Site, body: bytes) -> None:
    reply = await site.ada.post("/v1/loops", content=body, headers={"Content-Type": "application/json"})
    _problem(reply, 422, "invalid_request")


async def test_a_guess_beyond_any_plant_is_refused(site: Site) -> None:
    await site.ada.post("/v1/loops", json=loop_document())
    guess = {"static_gain": 1, "time_constant_s": 1, "dead_time_s": 1, "noise": 1e12}
    problem = _problem(await site.ada.post("/v1/loops/TIC-201/forecast", json=guess), 422, "invalid_request")
    assert "noise" in [e["field"] for e in problem["errors"]]
