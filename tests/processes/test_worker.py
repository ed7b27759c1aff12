"""The worker in process, over both databases: from a queued row to a stored result, on a simulated loop."""

from __future__ import annotations

import asyncio
from pathlib import Path
from typing import Any

import structlog

from databases import database_url, postgresql_server
from gainwright_service.analysis_pool import AnalysisPool
from gainwright_service.clock import SystemClock
from gainwright_service.fence import fence_of
from gainwright_service.store import journal, loops, samples, tasks
from gainwright_service.store.connect import migrate, open_engine, writing
from gainwright_service.worker import Worker
from gainwright_wire.loops import Loop

__all__ = ["database_url", "postgresql_server"]

AT = "2026-03-01T08:00:00.000+00:00"
"""Long ago: a start that waits since then is stale."""
QUICK = {
    "tag": "SIM-1",
    "class": "bench",
    "adapter": {
        "kind": "simulated",
        "numerator": [1.2],
        "denominator": [0.01, 0.2, 1.0],
        "dead_time_s": 0.06,
        "noise": 0.01,
        "resting_output": 45.0,
        "resting_process_variable": 60.0,
    },
    "process_variable": {"unit": "degC", "low": 0, "high": 120},
    "controller_output": {"unit": "%", "low": 0, "high": 100},
    "output_effect": "raises",
    "sample_interval_s": 0.01,
    "limits": {
        "process_variable_low": 20,
        "process_variable_high": 95,
        "deviation_up": 4,
        "deviation_down": 4,
        "output_low": 10,
        "output_high": 90,
    },
    "exit_action": {"kind": "as_found"},
}
START = {"attended": True, "bench_sentence_signed": True}


async def _state(engine: Any, task_id: str) -> dict[str, Any]:
    async with engine.connect() as connection:
        return dict(await tasks.get(connection, task_id))


async def _until(condition: Any) -> Any:
    """Poll the store: the worker's wire is the database."""
    clock = SystemClock()
    deadline = clock.monotonic_s() + 40
    while clock.monotonic_s() < deadline:
        found = await condition()
        if found:
            return found
        await clock.sleep_until(clock.monotonic_s() + 0.1)
    raise AssertionError("not in time")


async def test_a_queued_experiment_is_claimed_run_stored_and_journalled(database_url: str, tmp_path: Path) -> None:
    engine, pool, clock = open_engine(database_url), AnalysisPool(), SystemClock()
    await migrate(engine)
    loop = Loop.model_validate(QUICK)
    async with writing(engine) as connection:
        await loops.register(connection, loop, by="Ada", at=AT)
        now = clock.wall_time().isoformat()
        task_id = await tasks.create(connection, kind="experiment", loop=loop, request=START, by="Ada", at=now)
    fence = fence_of(engine, tmp_path, "local")
    worker = Worker(engine, fence, clock, pool, site="local", name="w1", log=structlog.get_logger())
    serving = asyncio.ensure_future(worker.run())

    async def over() -> bool:
        return bool((await _state(engine, task_id))["state"] == "finished")

    await _until(over)
    row = await _state(engine, task_id)
    worker.end()
    await serving
    assert (row["outcome"], row["exit"]) == ("completed", "verified"), row["exit_detail"]
    assert row["result"]["analysis"]["grade"] in ("good", "fair", "unusable")
    async with engine.connect() as connection:
        whole = await samples.columns(connection, task_id)
        assert await journal.verify(connection) is None
    assert len(whole["time_s"]) == row["progress"]["samples"]
    pool.close()
    await engine.dispose()


async def test_a_start_that_waited_too_long_for_its_worker_moves_nothing(database_url: str, tmp_path: Path) -> None:
    engine, pool, clock = open_engine(database_url), AnalysisPool(), SystemClock()
    await migrate(engine)
    loop = Loop.model_validate(QUICK)
    async with writing(engine) as connection:
        await loops.register(connection, loop, by="Ada", at=AT)
        task_id = await tasks.create(connection, kind="experiment", loop=loop, request=START, by="Ada", at=AT)
    fence = fence_of(engine, tmp_path, "local")
    worker = Worker(engine, fence, clock, pool, site="local", name="w1", log=structlog.get_logger())
    serving = asyncio.ensure_future(worker.run())

    async def over() -> bool:
        return bool((await _state(engine, task_id))["state"] == "finished")

    await _until(over)
    row = await _state(engine, task_id)
    worker.end()
    await serving
    assert (row["outcome"], row["exit"]) == ("limited", "not_written")
    assert "ask again" in row["exit_detail"]
    pool.close()
    await engine.dispose()


async def test_a_second_worker_of_a_site_stands_by(database_url: str, tmp_path: Path) -> None:
    engine = open_engine(database_url)
    await migrate(engine)
    first, second = fence_of(engine, tmp_path, "local"), fence_of(engine, tmp_path, "local")
    assert await first.take()
    assert await first.held()
    assert not await second.take()
    await first.release()
    assert await second.take()
    await second.release()
    await engine.dispose()
