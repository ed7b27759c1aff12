"""What may not be registered, started or even read, because it could move the wrong output or hide what was meant."""

from __future__ import annotations

from collections.abc import AsyncIterator
from pathlib import Path
from typing import Any

import pytest
from pydantic import ValidationError

from gainwright_wire.loops import Loop
from gainwright_wire.tasks import StartExperiment
from service_app import Site, a_site, sqlite_url
from service_loops import loop_document

START = {"attended": True, "bench_sentence_signed": True}


@pytest.fixture
async def site(tmp_path: Path) -> AsyncIterator[Site]:
    async with a_site(sqlite_url(tmp_path)) as site:
        await site.worker_confirms()
        await site.ada.post("/v1/loops", json=loop_document())
        yield site


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({"adapter__heartbeat__address": 0}, "share a register"),
        ({"adapter__heartbeat__address": 1}, "share a register"),
        ({"adapter__mode__address": 0}, "share a register"),
        ({"adapter__process_variable": {"table": "holding", "address": 1}}, "share a register"),
        ({"adapter__device_id": 0}, "greater than or equal to 1"),
        ({"adapter__port": "5020"}, "valid integer"),
        ({"adapter__mode__manual": True}, "valid integer"),
        ({"sample_interval_s": True}, "valid number"),
        ({"limits__max_switches_per_hour": 100}, "not watched"),
        ({"witnesses": [{"tag": "PT-1", "low": 0, "high": 1}]}, "not watched"),
        ({"attended_integrating_hold": True}, "not watched"),
        ({"adapter__heartbeat__timeout_s": 0.2}, "four times"),
        (
            {"adapter__heartbeat": {"address": 20, "watchdog": "fixed", "fixed_value": 500, "timeout_s": 3}},
            "must lie inside",
        ),
        ({"exit_action": {"kind": "fixed", "value": 5}}, "contradicts"),
        ({"interaction_groups": ["Steam "]}, "match pattern"),
        ({"description": "TIC\u202e102"}, "match pattern"),
    ],
)
def test_a_document_that_could_move_the_wrong_output_is_refused(changes: dict[str, Any], told: str) -> None:
    with pytest.raises(ValidationError, match=told):
        Loop.model_validate(loop_document(**changes))


@pytest.mark.parametrize("name", [" ", "\u200b", "Ada\u200b", "-"])
def test_a_stated_name_has_something_to_read_and_nothing_hidden(name: str) -> None:
    with pytest.raises(ValidationError, match="match pattern"):
        StartExperiment.model_validate({**START, "approver": name})


async def test_one_output_is_driven_by_one_task_whatever_its_tags(site: Site) -> None:
    other = loop_document(tag="TIC-999", interaction_groups=[])
    assert (await site.ada.post("/v1/loops", json=other)).status_code == 201
    assert (await site.ada.post("/v1/loops/TIC-201/experiments", json=START)).status_code == 202
    second = await site.ada.post("/v1/loops/TIC-999/experiments", json=START)
    assert (second.status_code, second.json()["code"]) == (409, "group_busy")
    assert "this very output" in second.json()["detail"]


async def test_interaction_groups_are_the_same_in_any_case(site: Site) -> None:
    other = loop_document(tag="TIC-999", interaction_groups=["STEAM-MAIN"], adapter__controller_output__address=40)
    assert (await site.ada.post("/v1/loops", json=other)).status_code == 201
    assert (await site.ada.post("/v1/loops/TIC-201/experiments", json=START)).status_code == 202
    assert (await site.ada.post("/v1/loops/TIC-999/experiments", json=START)).json()["code"] == "group_busy"


async def test_what_a_person_answered_with_fail_blocks_on_bench_too(site: Site) -> None:
    answers = {"B16": {"verdict": "fail", "reason": "the signal jumps"}}
    reply = await site.ada.post("/v1/loops/TIC-201/experiments", json={**START, "answers": answers})
    assert (reply.status_code, reply.json()["code"]) == (409, "checklist_failed")


async def test_an_answer_to_no_item_is_refused_not_lost(site: Site) -> None:
    answers = {"B99": {"verdict": "fail"}}
    reply = await site.ada.post("/v1/loops/TIC-201/experiments", json={**START, "answers": answers})
    assert reply.status_code == 409
    assert reply.json()["errors"][0]["field"] == "answers.B99"


async def test_a_body_that_says_a_thing_twice_is_refused(site: Site) -> None:
    body = '{"attended": true, "attended": false, "bench_sentence_signed": true}'
    reply = await site.ada.post(
        "/v1/loops/TIC-201/experiments", content=body, headers={"Content-Type": "application/json"}
    )
    assert reply.status_code == 422
    assert "attended" in reply.json()["detail"]
    assert (await site.ada.get("/v1/experiments")).json()["items"] == []


async def test_nothing_of_somebody_unknown_is_read(site: Site) -> None:
    read = 0

    async def body() -> AsyncIterator[bytes]:
        nonlocal read
        for _ in range(50):
            read += 1
            yield b"[" * 1000

    reply = await site.nobody.post("/v1/records", content=body(), headers={"Content-Type": "application/json"})
    assert reply.status_code == 401
    assert read == 0
