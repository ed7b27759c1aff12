"""The maintenance round's order: turns within an interaction group, running tests followed, a stop for all."""

from __future__ import annotations

import asyncio
import importlib.util
import sys
from collections.abc import AsyncIterator
from dataclasses import dataclass, field
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

from gainwright_client.errors import Busy
from gainwright_wire.analyses import Grade
from gainwright_wire.problems import Problem, ProblemCode
from gainwright_wire.tasks import Exit, Experiment, ExperimentPage, Outcome, StartExperiment, TaskState

SCRIPT = Path(__file__).resolve().parents[2] / "clients" / "examples" / "fleet_maintenance.py"
TAKEN = Problem(title="t", status=409, detail="the group is taken", code=ProblemCode.GROUP_BUSY)


@pytest.fixture(scope="module")
def fleet() -> ModuleType:
    spec = importlib.util.spec_from_file_location("fleet_maintenance", SCRIPT)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def _experiment(tag: str, outcome: Outcome, grade: Grade | None) -> Experiment:
    return Experiment.model_construct(
        id=f"test of {tag}",
        tag=tag,
        outcome=outcome,
        exit=Exit.VERIFIED,
        grade=grade,
        proposals=(),
        limit=None,
        analysis=None,
        ultimate_gain=None,
        ultimate_period_s=None,
        finished_at="",
    )


@dataclass
class OneGroup:
    """A service whose loops all belong to one group; a test ends when it is let."""

    running: str | None = None
    already: set[str] = field(default_factory=set)
    started: list[str] = field(default_factory=list)
    stops: list[str] = field(default_factory=list)
    end: asyncio.Event = field(default_factory=asyncio.Event)
    followed: asyncio.Event = field(default_factory=asyncio.Event)

    async def experiment_page(self, tag: str, state: TaskState) -> ExperimentPage:
        found = (_experiment(tag, Outcome.COMPLETED, None),) if state == "running" and tag in self.already else ()
        return ExperimentPage.model_construct(items=found, next=None)

    async def start_experiment(self, tag: str, start: StartExperiment) -> Experiment:
        if self.running is not None:
            raise Busy(TAKEN)
        self.running = tag
        self.started.append(tag)
        return _experiment(tag, Outcome.COMPLETED, None)

    async def follow(self, id: str) -> AsyncIterator[Any]:
        self.followed.set()
        await self.end.wait()
        tag = id.removeprefix("test of ")
        self.running = None
        stopped = id in self.stops
        yield _experiment(tag, Outcome.STOPPED if stopped else Outcome.COMPLETED, None if stopped else Grade.GOOD)

    async def stop_experiment(self, id: str) -> None:
        self.stops.append(id)
        self.end.set()


def _round(fleet: ModuleType, service: OneGroup, at_once: int = 4) -> Any:
    return fleet.Round(service, StartExperiment(attended=True), at_once)


async def test_loops_of_one_group_take_turns(fleet: ModuleType) -> None:
    service = OneGroup()
    this = _round(fleet, service)
    service.end.set()
    lines = await asyncio.gather(*(this.tune(tag) for tag in ("A", "B", "C")))
    assert [line.result for line in lines] == ["tuned"] * 3
    assert sorted(service.started) == ["A", "B", "C"]


async def test_a_test_that_runs_already_is_followed_and_not_started(fleet: ModuleType) -> None:
    service = OneGroup(already={"A"})
    service.end.set()
    line = await _round(fleet, service).tune("A")
    assert (line.result, service.started) == ("tuned", [])


async def test_a_group_taken_by_somebody_else_is_told_and_not_waited_for(fleet: ModuleType) -> None:
    line = await _round(fleet, OneGroup(running="somebody's")).tune("A")
    assert (line.result, line.detail) == ("refused", "the group is taken")


async def test_a_stop_ends_what_runs_and_starts_nothing_more(fleet: ModuleType) -> None:
    service = OneGroup()
    this = _round(fleet, service, at_once=1)
    tuning = [asyncio.create_task(this.tune(tag)) for tag in ("A", "B")]
    await service.followed.wait()
    await this.stop()
    lines = [await task for task in tuning]
    assert [line.result for line in lines] == ["not tuned", "not started"]
    assert service.stops == ["test of A"]
