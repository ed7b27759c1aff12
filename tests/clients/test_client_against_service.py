"""The real client against the real app in process."""

from __future__ import annotations

import math
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path

import httpx
import pytest

from gainwright_client import errors
from gainwright_client.aclient import AsyncClient
from gainwright_service.store import samples, tasks, work
from gainwright_service.store.connect import writing
from gainwright_wire.tasks import Answer, Experiment, StartExperiment, StreamProgress, StreamSample
from service_app import Site, a_site, sqlite_url
from service_loops import a_loop, loop_document

AT = "2026-03-01T08:00:00Z"
START = StartExperiment(attended=True, bench_sentence_signed=True)


class Breaking(httpx.AsyncBaseTransport):
    """The app behind a line that breaks: after the answer, or in the middle of a stream."""

    def __init__(self, inner: httpx.AsyncBaseTransport) -> None:
        self.inner = inner
        self.lose_answers = 0
        self.cut_streams_after: list[int] = []
        self.requests: list[httpx.Request] = []

    async def handle_async_request(self, request: httpx.Request) -> httpx.Response:
        self.requests.append(request)
        response = await self.inner.handle_async_request(request)
        if self.lose_answers:
            self.lose_answers -= 1
            raise httpx.ReadError("the line broke", request=request)
        if request.url.path.endswith("/stream") and self.cut_streams_after:
            body = await response.aread()
            return httpx.Response(response.status_code, stream=Cut(body[: self.cut_streams_after.pop(0)]))
        return response


class Cut(httpx.AsyncByteStream):
    """A body that breaks off."""

    def __init__(self, body: bytes) -> None:
        self.body = body

    async def __aiter__(self) -> AsyncIterator[bytes]:
        yield self.body
        raise httpx.ReadError("the line broke")


@pytest.fixture
async def site(tmp_path: Path) -> AsyncIterator[Site]:
    async with a_site(sqlite_url(tmp_path)) as site:
        await site.worker_confirms()
        yield site


@asynccontextmanager
async def _client(site: Site) -> AsyncIterator[tuple[AsyncClient, Breaking]]:
    pauses: list[float] = []

    async def pause(seconds: float) -> None:
        pauses.append(seconds)

    line = Breaking(httpx.ASGITransport(site.app, raise_app_exceptions=False))
    token = site.ada.headers["authorization"].removeprefix("Bearer ")
    async with AsyncClient("http://service", token, transport=line, pause=pause) as client:
        yield client, line


async def _finished(site: Site, client: AsyncClient, count: int) -> str:
    await client.register_loop(a_loop())
    task_id = (await client.start_experiment("TIC-201", START)).id
    rows = [(0.1 * n, 60.0 + n, math.nan if n == 0 else 50.0, 55.0, 2.0) for n in range(count)]
    async with writing(site.engine) as connection:
        await work.claim(connection, site="local", worker="w1", at=AT)
        await samples.append_chunk(connection, task_id, first_number=0, rows=rows)
    async with writing(site.engine) as connection:
        row = dict(await tasks.get(connection, task_id))
        await work.end(
            connection, row, worker="w1", at=AT, outcome="completed", exit="unverified", exit_detail="not read back"
        )
        await work.finish(connection, task_id, worker="w1", at=AT, result=None)
    return task_id


async def test_loops_are_registered_read_replaced_and_paged(site: Site) -> None:
    async with _client(site) as (client, _):
        assert (await client.me()).name == "Ada"
        kept = await client.register_loop(a_loop())
        assert kept.loop == a_loop()
        changed = await client.replace_loop(a_loop(description="bath 2"), kept.version)
        assert (await client.loop("TIC-201")).loop.description == "bath 2"
        with pytest.raises(errors.Conflict) as raised:
            await client.replace_loop(a_loop(), kept.version)
        assert raised.value.code == "version_conflict"
        assert changed.version == kept.version + 1
        for n in range(3):
            await client.register_loop(loop_document(tag=f"LIC-{n}"))
        first = await client.loop_page(limit=3)
        assert len(first.items) == 3
        assert (await client.loop_page(first.next, 3)).items[0].loop.tag == "TIC-201"
        assert [k.loop.tag for k in await client.loops()] == ["LIC-0", "LIC-1", "LIC-2", "TIC-201"]


async def test_a_mapping_is_judged_by_the_service_which_names_the_field(site: Site) -> None:
    async with _client(site) as (client, _):
        with pytest.raises(errors.InvalidRequest) as raised:
            await client.register_loop(loop_document(sample_interval_s=math.nan))
        assert raised.value.errors[0].field == "sample_interval_s"
        with pytest.raises(errors.SafetyFunction):
            await client.register_loop(loop_document(safety_function=True))


async def test_a_start_whose_answer_was_lost_starts_once(site: Site) -> None:
    async with _client(site) as (client, line):
        await client.register_loop(a_loop())
        line.lose_answers = 2
        started = await client.start_experiment("TIC-201", START)
        page = await client.experiment_page(tag="TIC-201")
        assert [e.id for e in page.items] == [started.id]
        with pytest.raises(errors.Busy):
            await client.start_experiment("TIC-201", START)


async def test_following_resumes_over_broken_connections_without_loss_or_repetition(site: Site) -> None:
    async with _client(site) as (client, line):
        task_id = await _finished(site, client, 40)
        line.cut_streams_after = [0, 20, 700, 1234, 2000]
        told = [item async for item in client.follow(task_id)]
        numbers = [item.number for item in told if isinstance(item, StreamSample)]
        assert numbers == list(range(40))
        assert any(isinstance(item, StreamProgress) for item in told)
        assert isinstance(told[-1], Experiment)
        streams = [r for r in line.requests if r.url.path.endswith("/stream")]
        assert len(streams) == 6
        assert "last-event-id" not in streams[0].headers
        assert "last-event-id" in streams[-1].headers
        later = [i.number async for i in client.follow(task_id, after=37) if isinstance(i, StreamSample)]
        assert later == [38, 39]


async def test_samples_checklist_acknowledgement_forecast_and_journal_come_as_models(site: Site) -> None:
    async with _client(site) as (client, _):
        task_id = await _finished(site, client, 4)
        assert (await client.samples(task_id, 2)).number == [2, 3]
        assert (await client.samples_csv(task_id)).startswith("number,time_s,process_variable")
        sheet = await client.answer_checklist(task_id, {"B13": Answer(verdict="pass")})
        assert sheet == await client.checklist(task_id)
        with pytest.raises(errors.ExitNotAcknowledged):
            await client.start_experiment("TIC-201", START)
        assert (await client.acknowledge_exit(task_id, "valve looked at")).exit_acknowledged_by == "Ada"
        with pytest.raises(errors.NotActive):
            await client.stop_experiment(task_id)
        assert (await client.forecast("TIC-201")).worst_deviation > 0
        page = await client.journal_page(subject="TIC-201")
        assert page.items[0].act == "loop_registered"


async def test_a_token_that_is_none_is_not_allowed(site: Site) -> None:
    async with AsyncClient("http://service", "wrong", transport=httpx.ASGITransport(site.app)) as client:
        with pytest.raises(errors.NotAllowed):
            await client.me()


async def test_what_does_not_exist_is_not_found(site: Site) -> None:
    async with _client(site) as (client, _):
        for call in (client.loop("TIC-999"), client.experiment("0" * 32), client.record("0" * 32)):
            with pytest.raises(errors.NotFound):
                await call
