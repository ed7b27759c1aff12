"""Whole experiments on a simulated loop: how each ends, what the output did, what nothing may do."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from experiment_bench import DEVICE, PLAN, Bench, KeptLog, run
from gainwright.models import TransferFunction
from gainwright_service.adapters.port import Mode
from gainwright_service.adapters.simulated import SimulatedAdapter
from gainwright_service.clock import ManualClock
from gainwright_service.errors import DeviceRefused, DeviceUnreachable, StoreUnavailable
from gainwright_service.experiment.states import Exit, Outcome
from gainwright_service.recovery import recover

PROCESSES = {
    "first order": TransferFunction((1.0,), (3.0, 1.0), 0.6),
    "two lags": DEVICE.transfer_function,
    "integrating": TransferFunction((0.2,), (1.0, 0.0), 0.6),
}


@pytest.mark.parametrize("name", PROCESSES)
@pytest.mark.parametrize("effect", [1, -1])
@pytest.mark.parametrize("mode", [Mode.MANUAL, Mode.AUTOMATIC])
async def test_a_test_completes_and_gives_the_loop_back_as_found(name: str, effect: int, mode: Mode) -> None:
    process = PROCESSES[name]
    signed = TransferFunction(tuple(effect * c for c in process.numerator), process.denominator, process.dead_time)
    ended, bench = await run(device=replace(DEVICE, transfer_function=signed, effect=effect, mode=mode))
    assert (ended.outcome, ended.exit) == (Outcome.COMPLETED, Exit.VERIFIED), ended
    assert bench.adapter.mode is mode
    assert ended.progress["scored_cycles"] >= PLAN.scored_cycles
    for level, coming, *_ in bench.log.commands[:-1]:
        assert abs(level - 45.0) <= PLAN.max_output_change + 1e-9
        assert PLAN.output_low <= coming <= PLAN.output_high


async def test_what_recovery_needs_is_secured_before_the_first_write() -> None:
    ended, bench = await run(log=KeptLog(refuse=StoreUnavailable("disk full")))
    assert (ended.outcome, ended.exit) == (Outcome.INTERRUPTED, Exit.NOT_WRITTEN)
    assert bench.log.commands == []
    assert bench.adapter.output == 45.0


async def test_every_level_in_force_was_announced_a_half_period_ahead() -> None:
    _, bench = await run()
    for (_, coming, *_), (level, *_) in zip(bench.log.commands, bench.log.commands[1:-1], strict=False):
        assert abs(level - coming) < 5.0


async def test_a_stop_ends_with_the_resting_output_verified() -> None:
    async def act(bench: Bench) -> None:
        await bench.after(20.03)
        bench.signals.request_stop("Ada")

    ended, bench = await run(act=act)
    assert (ended.outcome, ended.exit) == (Outcome.STOPPED, Exit.VERIFIED)
    assert bench.adapter.output == pytest.approx(45.0, abs=1e-9)


@pytest.mark.parametrize(
    ("hand", "expected"), [({"output": 52.5}, 52.5), ({"mode": Mode.AUTOMATIC}, None), ({"setpoint": 61.0}, None)]
)
async def test_a_person_who_acts_is_yielded_to_and_nothing_is_written_after(
    hand: dict[str, Any], expected: float | None
) -> None:
    async def act(bench: Bench) -> None:
        await bench.after(20.03)
        bench.adapter.operate(**hand)

    ended, bench = await run(act=act)
    assert (ended.outcome, ended.exit) == (Outcome.YIELDED, Exit.NOT_WRITTEN)
    written = len(bench.log.commands)
    if expected is not None:
        assert bench.adapter.output == expected
    await bench.after(30.0)
    assert len(bench.log.commands) == written


async def test_a_load_that_drives_the_process_away_meets_the_deviation_limit() -> None:
    async def act(bench: Bench) -> None:
        await bench.after(20.03)
        bench.adapter.operate(load=15.0)

    ended, _ = await run(act=act)
    assert (ended.outcome, ended.exit) == (Outcome.LIMITED, Exit.VERIFIED)
    assert ended.limit is not None
    assert ended.limit["item"] == "D1"
    assert ended.limit["number"] > ended.limit["bound"] == 3.0


async def test_a_loop_that_moves_against_its_declared_effect_is_let_go() -> None:
    wrong = TransferFunction((-1.2,), (1.0, 2.0, 1.0), 0.6)
    ended, _ = await run(device=replace(DEVICE, transfer_function=wrong))
    assert (ended.outcome, ended.exit) == (Outcome.LIMITED, Exit.VERIFIED)
    assert ended.limit is not None
    assert ended.limit["item"] == "B14"


async def test_a_loop_that_does_not_answer_the_output_ends_without_gains() -> None:
    dead = TransferFunction((1e-6,), (1.0, 1.0), 0.6)
    ended, _ = await run(device=replace(DEVICE, transfer_function=dead, noise=0.0))
    assert (ended.outcome, ended.exit) == (Outcome.LIMITED, Exit.VERIFIED)
    assert ended.limit is not None
    assert ended.limit["item"] == "no_response"


async def test_found_in_automatic_with_unproven_tracking_nothing_is_moved() -> None:
    ended, bench = await run(device=replace(DEVICE, mode=Mode.AUTOMATIC), integral_follows=None)
    assert (ended.outcome, ended.exit) == (Outcome.LIMITED, Exit.NOT_WRITTEN)
    assert bench.adapter.mode is Mode.AUTOMATIC
    assert bench.log.commands == []


class Broken:
    """An adapter whose reads or writes fail from a time on."""

    def __init__(self, inner: SimulatedAdapter, *, verbs: tuple[str, ...], error: Exception, after: int) -> None:
        self._inner = inner
        self._verbs = verbs
        self._error = error
        self._left = after

    def __getattr__(self, name: str) -> Any:
        verb = getattr(self._inner, name)
        if name not in self._verbs:
            return verb

        async def failing(*arguments: Any, **options: Any) -> Any:
            self._left -= 1
            if self._left < 0:
                raise self._error
            return await verb(*arguments, **options)

        return failing


async def test_a_link_lost_for_good_ends_unverified_or_unwritten_and_says_so() -> None:
    error = DeviceUnreachable("the link is gone")
    ended, _ = await run(
        adapter=lambda inner: Broken(inner, verbs=("read", "write", "heartbeat"), error=error, after=200)
    )
    assert ended.outcome is Outcome.LOST
    assert ended.exit in (Exit.NOT_WRITTEN, Exit.UNVERIFIED)


async def test_a_refused_write_leads_to_the_exit_path() -> None:
    error = DeviceRefused("write protected")
    ended, _ = await run(adapter=lambda inner: Broken(inner, verbs=("write",), error=error, after=2))
    assert ended.outcome is Outcome.LIMITED
    assert ended.exit in (Exit.NOT_WRITTEN, Exit.UNVERIFIED)


async def test_an_error_of_our_own_still_gives_the_output_back() -> None:
    class Full(KeptLog):
        def sample(self, sample: Any) -> None:
            if len(self.samples) == 180:
                self.samples.append(sample)
                raise RuntimeError("a defect")
            super().sample(sample)

    ended, bench = await run(log=Full())
    assert (ended.outcome, ended.exit) == (Outcome.INTERRUPTED, Exit.VERIFIED)
    assert bench.adapter.output == pytest.approx(45.0, abs=1e-9)


async def _left_driven(**device: Any) -> tuple[dict[str, Any], SimulatedAdapter, ManualClock]:
    """An experiment's ownership, and its device as a dead worker leaves it."""
    _, bench = await run(**device)
    ownership = bench.log.secured[0]
    bench.adapter.operate(output=47.0)
    return ownership, bench.adapter, bench.clock


async def test_recovery_gives_back_what_is_still_ours() -> None:
    ownership, adapter, clock = await _left_driven()
    found = await recover(
        ownership=ownership, last_levels=(47.0, 43.0), last_command_age_s=2.0, adapter=adapter, clock=clock
    )
    assert (found.outcome, found.exit) == (Outcome.INTERRUPTED, Exit.VERIFIED)
    assert adapter.output == pytest.approx(45.0, abs=1e-6)


@pytest.mark.parametrize("change", [{"output": 60.0}, {"mode": Mode.AUTOMATIC}])
async def test_recovery_writes_nothing_where_the_loop_is_not_as_left(change: dict[str, Any]) -> None:
    ownership, adapter, clock = await _left_driven()
    adapter.operate(**change)
    before = adapter.mode
    found = await recover(
        ownership=ownership, last_levels=(47.0, 43.0), last_command_age_s=2.0, adapter=adapter, clock=clock
    )
    assert found.exit is Exit.NOT_OURS
    assert adapter.mode is before


async def test_recovery_of_an_old_command_reads_and_writes_nothing() -> None:
    ownership, adapter, clock = await _left_driven()
    found = await recover(
        ownership=ownership, last_levels=(47.0, 43.0), last_command_age_s=3600.0, adapter=adapter, clock=clock
    )
    assert found.exit is Exit.NOT_OURS
    assert adapter.output == 47.0
