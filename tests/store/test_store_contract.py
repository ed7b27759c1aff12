"""One contract for the store, on SQLite and on a real PostgreSQL."""

from __future__ import annotations

import asyncio
import math
from collections.abc import AsyncIterator
from typing import Any

import pytest
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from sqlalchemy import text
from sqlalchemy.ext.asyncio import AsyncEngine

from databases import (  # noqa: F401 - fixtures
    database_url,
    postgresql_server,
    threads_of_failed_connections_end,
)
from gainwright_service.errors import (
    AlreadyExists,
    ExitNotAcknowledged,
    GroupBusy,
    IdempotencyConflict,
    LockLost,
    LoopBusy,
    NotActive,
    NotFound,
    StoreUnavailable,
    VersionConflict,
)
from gainwright_service.store import answers, journal, loops, people, records, samples, sign_offs, sites, tasks, work
from gainwright_service.store.connect import appending, migrate, open_engine, writing
from gainwright_service.store.tables import metadata
from gainwright_wire.analyses import RecordUpload
from gainwright_wire.loops import Loop

AT = "2026-03-01T08:00:00.000+00:00"


def a_loop(tag: str = "TIC-201", **changes: Any) -> Loop:
    document: dict[str, Any] = {
        "tag": tag,
        "class": "bench",
        "adapter": {"kind": "simulated", "numerator": [1.0], "denominator": [1.0, 1.0], "dead_time_s": 0.5},
        "process_variable": {"unit": "degC", "low": 0, "high": 120},
        "controller_output": {"unit": "%", "low": 0, "high": 100},
        "output_effect": "raises",
        "limits": {"process_variable_low": 20, "process_variable_high": 95, "output_low": 10, "output_high": 90},
        "exit_action": {"kind": "as_found"},
        **changes,
    }
    return Loop.model_validate(document)


@pytest.fixture
async def engine(database_url: str) -> AsyncIterator[AsyncEngine]:  # noqa: F811
    opened = open_engine(database_url)
    await migrate(opened)
    yield opened
    await opened.dispose()


async def registered(engine: AsyncEngine, loop: Loop) -> None:
    async with writing(engine) as connection:
        await loops.register(connection, loop, by="Ada", at=AT)


async def queued(engine: AsyncEngine, loop: Loop) -> str:
    async with writing(engine) as connection:
        return await tasks.create(connection, kind="experiment", loop=loop, request={}, by="Ada", at=AT)


async def claimed(engine: AsyncEngine, worker: str = "w1") -> Any:
    async with writing(engine) as connection:
        return await work.claim(connection, site="local", worker=worker, at=AT)


async def ended(engine: AsyncEngine, row: Any, *, exit: str, outcome: str = "completed") -> None:
    async with writing(engine) as connection:
        await work.end(connection, row, worker="w1", at=AT, outcome=outcome, exit=exit, exit_detail="detail")
        await work.finish(connection, row["id"], worker="w1", at=AT, result=None)


async def test_the_migrations_give_the_schema_of_the_tables(engine: AsyncEngine) -> None:
    def difference(connection: Any) -> list[Any]:
        return compare_metadata(MigrationContext.configure(connection), metadata)

    async with engine.connect() as connection:
        assert await connection.run_sync(difference) == []


async def test_migrating_twice_changes_nothing(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    await migrate(engine)
    async with engine.connect() as connection:
        assert (await loops.get(connection, "TIC-201")).version == 1


async def test_a_loop_comes_back_as_it_was_registered(engine: AsyncEngine) -> None:
    loop = a_loop()
    await registered(engine, loop)
    async with engine.connect() as connection:
        kept = await loops.get(connection, loop.tag)
        assert kept.loop == loop
        with pytest.raises(NotFound):
            await loops.get(connection, "nowhere")
    with pytest.raises(AlreadyExists):
        await registered(engine, loop)


async def test_replacing_a_loop_needs_its_newest_version(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    async with writing(engine) as connection:
        kept = await loops.replace(connection, "TIC-201", a_loop(description="new"), version=1, by="Ada", at=AT)
    assert kept.version == 2
    with pytest.raises(VersionConflict):
        async with writing(engine) as connection:
            await loops.replace(connection, "TIC-201", a_loop(), version=1, by="Ada", at=AT)


async def test_loops_come_in_pages_by_tag(engine: AsyncEngine) -> None:
    for k in range(5):
        await registered(engine, a_loop(f"L-{k}"))
    async with engine.connect() as connection:
        first = await loops.page(connection, None, 3)
        second = await loops.page(connection, first.next, 3)
    assert [kept.loop.tag for kept in (*first.items, *second.items)] == [f"L-{k}" for k in range(5)]
    assert second.next is None


async def test_a_second_driving_task_on_a_loop_is_refused_and_leaves_nothing(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    await queued(engine, a_loop())
    with pytest.raises(LoopBusy):
        await queued(engine, a_loop())
    async with engine.connect() as connection:
        rows, following = await tasks.page(connection, tag="TIC-201")
        assert (len(rows), following) == (1, None)
        assert await journal.count(connection) == 2


async def test_an_interaction_group_is_driven_once_and_freed_at_the_end(engine: AsyncEngine) -> None:
    first, second = a_loop("A-1", interaction_groups=("steam",)), a_loop("A-2", interaction_groups=("steam",))
    await registered(engine, first)
    await registered(engine, second)
    await queued(engine, first)
    with pytest.raises(GroupBusy):
        await queued(engine, second)
    await ended(engine, await claimed(engine), exit="verified")
    assert await queued(engine, second)


@pytest.mark.parametrize(("exit", "outcome"), [("unverified", "limited"), ("not_ours", "interrupted")])
async def test_an_exit_that_is_not_verified_blocks_the_loop_until_acknowledged(
    engine: AsyncEngine, exit: str, outcome: str
) -> None:
    await registered(engine, a_loop())
    task_id = await queued(engine, a_loop())
    await ended(engine, await claimed(engine), exit=exit, outcome=outcome)
    with pytest.raises(ExitNotAcknowledged, match=task_id):
        await queued(engine, a_loop())
    async with writing(engine) as connection:
        await tasks.acknowledge(connection, task_id, by="Grace", at=AT, remark="valve looked at")
    assert await queued(engine, a_loop())


async def test_a_task_is_claimed_by_one_worker_only(engine: AsyncEngine) -> None:
    for k in range(4):
        await registered(engine, a_loop(f"L-{k}"))
        await queued(engine, a_loop(f"L-{k}"))
    rows = await asyncio.gather(*(claimed(engine, f"w{k}") for k in range(6)))
    taken = [row["tag"] for row in rows if row is not None]
    assert sorted(taken) == [f"L-{k}" for k in range(4)]


async def test_a_worker_that_lost_its_task_changes_nothing(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    await queued(engine, a_loop())
    row = await claimed(engine)
    async with writing(engine) as connection:
        assert [r["id"] for r in await work.adopt(connection, site="local", worker="w2")] == [row["id"]]
    with pytest.raises(LockLost):
        async with writing(engine) as connection:
            await work.note(connection, row["id"], worker="w1", values={"phase": "swinging"})


async def test_a_stop_reaches_the_worker_and_not_a_finished_task(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    task_id = await queued(engine, a_loop())
    async with writing(engine) as connection:
        await tasks.request_stop(connection, task_id, by="Grace", at=AT)
        await tasks.request_stop(connection, task_id, by="Ada", at=AT)
        assert await work.stops(connection, "local") == {task_id: "Grace"}
    await ended(engine, await claimed(engine), exit="not_written", outcome="stopped")
    with pytest.raises(NotActive):
        async with writing(engine) as connection:
            await tasks.request_stop(connection, task_id, by="Grace", at=AT)


async def test_what_recovery_needs_is_kept_with_its_time(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    await queued(engine, a_loop())
    row = await claimed(engine)
    async with writing(engine, durable=True) as connection:
        await work.secure(connection, row["id"], worker="w1", ownership={"facts": {"mode": "manual"}}, commanded_at=5.5)
    async with engine.connect() as connection:
        kept = await tasks.get(connection, row["id"])
    assert kept["ownership"] == {"facts": {"mode": "manual"}}
    assert kept["last_command_at"] == 5.5


async def test_samples_come_back_by_number_across_chunks(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    task_id = await queued(engine, a_loop())
    rows = [(0.1 * k, 60.0 + k, math.nan if k == 3 else 45.0, 47.0, 2.0) for k in range(10)]
    async with appending(engine) as connection:
        await samples.append_chunk(connection, task_id, first_number=0, rows=rows[:6])
        await samples.append_chunk(connection, task_id, first_number=6, rows=rows[6:])
        whole = await samples.columns(connection, task_id)
        rest = await samples.columns(connection, task_id, 4)
        assert await samples.stored(connection, task_id) == 10
    assert whole["process_variable"].tolist() == [row[1] for row in rows]
    assert math.isnan(whole["controller_output"][3])
    assert rest["time_s"].tolist() == [row[0] for row in rows[4:]]
    assert samples.named(rest) == ["swinging"] * 6


async def test_an_answer_is_kept_with_its_key_and_refused_for_another_request(engine: AsyncEngine) -> None:
    keep = {"person": "Ada", "key": "key-0001", "status": 202, "headers": {"Location": "/x"}, "body": "{}", "at": AT}
    async with writing(engine) as connection:
        await answers.keep(connection, request_hash="a" * 64, **keep)
        found = await answers.find(connection, person="Ada", key="key-0001", request_hash="a" * 64)
        assert found == answers.Kept(202, {"Location": "/x"}, "{}")
        assert await answers.find(connection, person="Grace", key="key-0001", request_hash="a" * 64) is None
        with pytest.raises(IdempotencyConflict):
            await answers.find(connection, person="Ada", key="key-0001", request_hash="b" * 64)


async def test_a_token_names_its_person_until_it_is_revoked(engine: AsyncEngine) -> None:
    async with writing(engine) as connection:
        token = await people.create_token(connection, person="Ada", label="desk", at=AT)
        assert await people.person_of(connection, token) == "Ada"
        assert await people.person_of(connection, token + "x") is None
        (listed,) = await people.list_tokens(connection)
        assert token not in str(listed)
        await people.revoke(connection, shown=listed["token"], by="Grace", at=AT)
        assert await people.person_of(connection, token) is None
        with pytest.raises(NotFound):
            await people.revoke(connection, shown="nothing", by="Grace", at=AT)


async def test_the_journal_finds_a_changed_entry(engine: AsyncEngine) -> None:
    detail = {"number": 3.0, "small": 1.5e-7, "list": [1, 2.5, None], "text": "Kühlung"}
    for k in range(4):
        async with writing(engine) as connection:
            await journal.append(connection, at=AT, person="Ada", act="act", subject=f"L-{k}", detail=detail)
    async with engine.connect() as connection:
        assert await journal.verify(connection) is None
        page = await journal.page(connection, "1", 2)
        assert ([entry.number for entry in page.items], page.next) == ([2, 3], "3")
    async with writing(engine) as connection:
        await connection.execute(text("UPDATE journal SET person = 'Mallory' WHERE number = 3"))
    async with engine.connect() as connection:
        assert await journal.verify(connection) == 3


async def test_journal_entries_of_many_writers_make_one_chain(engine: AsyncEngine) -> None:
    async def act(k: int) -> None:
        async with writing(engine) as connection:
            await journal.append(connection, at=AT, person="Ada", act="act", subject=str(k), detail={})

    await asyncio.gather(*(act(k) for k in range(12)))
    async with engine.connect() as connection:
        assert await journal.count(connection) == 12
        assert await journal.verify(connection) is None


async def test_a_refused_change_leaves_no_journal_entry(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    with pytest.raises(AlreadyExists):
        await registered(engine, a_loop())
    async with engine.connect() as connection:
        assert await journal.count(connection) == 1


async def test_sign_offs_are_replaced_and_journalled(engine: AsyncEngine) -> None:
    await registered(engine, a_loop())
    task_id = await queued(engine, a_loop())
    for verdict in ("caution", "pass"):
        async with writing(engine) as connection:
            await sign_offs.put(connection, task_id, item="B7", verdict=verdict, reason="looked", person="Ada", at=AT)
    async with engine.connect() as connection:
        assert [row["verdict"] for row in await sign_offs.of_tasks(connection, [task_id])] == ["pass"]
        assert len((await journal.page(connection, None, 50, subject=task_id)).items) == 2


async def test_a_record_is_kept_with_its_analysis(engine: AsyncEngine) -> None:
    upload = RecordUpload(time_s=[0, 1, 2], process_variable=[1, 2, 3], controller_output=[4, 5, 6], tag="X-1")
    analysis: dict[str, Any] = {
        **dict.fromkeys(
            ("ultimate_gain", "ultimate_period_s", "describing_function", "fourier", "model_crossover", "model")
        ),
        "response_points": [],
        "findings": [],
        "grade": "unusable",
        "reasons": ["too short"],
        **dict.fromkeys(("swing", "relay_amplitude", "hysteresis", "noise"), 0.0),
        "scored_cycles": 0,
        "confidence": 0.95,
        "dominant_uncertainty": "",
        "remedy": "",
    }
    async with writing(engine) as connection:
        kept = await records.keep(connection, upload, analysis, by="Ada", at=AT)
        again = await records.get(connection, kept.id)
    assert again == kept
    assert (again.samples, again.analysis.grade) == (3, "unusable")


async def test_a_site_is_confirmed_and_released(engine: AsyncEngine) -> None:
    async with appending(engine) as connection:
        await sites.confirm(connection, "local", "w1", 100.0)
        await sites.confirm(connection, "local", "w2", 101.0)
        assert await sites.confirmations(connection) == {"local": 101.0}
        assert await sites.last_holder(connection, "local") == ("w2", 101.0, False)
        await sites.release(connection, "local", "w2")
        assert await sites.confirmations(connection) == {}


async def test_a_database_that_does_not_answer_is_a_named_error() -> None:
    for url in ("postgresql://nobody@127.0.0.1:1/none?connect_timeout=2", "sqlite+aiosqlite:////no/such/folder/x.db"):
        engine = open_engine(url)
        with pytest.raises(StoreUnavailable):
            async with engine.connect() as connection:
                await connection.execute(text("SELECT 1"))
        await engine.dispose()
        threads_of_failed_connections_end()
