"""One pass of the main job's requests on both databases: the embedded one and a real PostgreSQL server."""

from __future__ import annotations

import asyncio

from databases import database_url, postgresql_server
from gainwright_service.store import journal
from service_app import a_site
from service_loops import loop_document

__all__ = ["database_url", "postgresql_server"]

START = {"attended": True, "bench_sentence_signed": True}


async def test_register_start_refuse_stop_and_answer(database_url: str) -> None:
    async with a_site(database_url) as site:
        await site.worker_confirms()
        key = {"Idempotency-Key": "the-first-loop"}
        first = await site.ada.post("/v1/loops", json=loop_document(), headers=key)
        again = await site.ada.post("/v1/loops", json=loop_document(), headers=key)
        assert (first.status_code, again.json()) == (201, first.json())
        assert (await site.ada.post("/v1/loops", json=loop_document())).json()["code"] == "already_exists"
        await site.ada.post("/v1/loops", json=loop_document(tag="PIC-620"))
        started = await site.ada.post("/v1/loops/TIC-201/experiments", json=START)
        assert started.status_code == 202
        busy = await site.grace.post("/v1/loops/TIC-201/experiments", json=START)
        assert (busy.status_code, busy.json()["code"]) == (409, "loop_busy")
        grouped = await site.grace.post("/v1/loops/PIC-620/experiments", json=START)
        assert (grouped.status_code, grouped.json()["code"]) == (409, "group_busy")
        path = started.headers["location"]
        signed = await site.grace.post(f"{path}/checklist", json={"B13": {"verdict": "pass"}})
        assert signed.status_code == 200
        assert (await site.grace.post(f"{path}/stop")).json()["stop_requested_by"] == "Grace"
        assert (await site.ada.get("/v1/experiments")).json()["items"][0]["id"] == started.json()["id"]
        async with site.engine.connect() as connection:
            assert await journal.verify(connection) is None


async def test_of_many_equal_starts_at_once_one_is_made(database_url: str) -> None:
    async with a_site(database_url) as site:
        await site.worker_confirms()
        await site.ada.post("/v1/loops", json=loop_document())
        key = {"Idempotency-Key": "one-start-only"}
        path = "/v1/loops/TIC-201/experiments"
        replies = await asyncio.gather(*(site.ada.post(path, json=START, headers=key) for _ in range(6)))
        assert {reply.status_code for reply in replies} == {202}
        assert len({reply.json()["id"] for reply in replies}) == 1
        others = await asyncio.gather(*(site.grace.post(path, json=START) for _ in range(4)))
        assert {reply.json()["code"] for reply in others} == {"loop_busy"}
