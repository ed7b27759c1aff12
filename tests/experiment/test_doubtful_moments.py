"""Moments in which whose the output is could be mistaken: half-failed writes, lost links, people during the way out."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from experiment_bench import DEVICE, Bench, run
from gainwright_service.adapters.port import Mode, Quality, Watchdog
from gainwright_service.adapters.simulated import SimulatedAdapter
from gainwright_service.clock import ManualClock
from gainwright_service.errors import DeviceTimedOut, DeviceUnreachable
from gainwright_service.experiment.states import Exit, Outcome
from gainwright_service.recovery import recover

GUARDED = replace(DEVICE, watchdog=Watchdog.RESTING, watchdog_timeout_s=3.0)
WATCHED = {"watchdog": "resting", "watchdog_timeout_s": 3.0}


class Faulty:
    """A simulated loop whose verbs can be made to fail; every verb that reaches the device is kept."""

    def __init__(self, inner: SimulatedAdapter) -> None:
        self._inner = inner
        self.calls: list[tuple[str, dict[str, Any]]] = []
        self.lost = False
        self.unanswered_writes = 0

    def __getattr__(self, name: str) -> Any:
        verb = getattr(self._inner, name)
        if name not in ("read", "write", "heartbeat", "take_over", "hand_back"):
            return verb

        async def faulty(*arguments: Any, **options: Any) -> Any:
            if self.lost:
                raise DeviceUnreachable("the link is gone")
            self.calls.append((name, options))
            answer = await verb(*arguments, **options)
            if name == "write" and self.unanswered_writes > 0:
                self.unanswered_writes -= 1
                raise DeviceTimedOut("taken, but not answered")
            return answer

        return faulty


async def test_writes_that_are_taken_but_never_answered_are_not_mistaken_for_a_person() -> None:
    made: list[Faulty] = []

    def adapter(inner: SimulatedAdapter) -> Faulty:
        made.append(Faulty(inner))
        return made[0]

    async def act(bench: Bench) -> None:
        await bench.after(18.03)
        made[0].unanswered_writes = 4

    ended, bench = await run(adapter=adapter, act=act)
    assert (ended.outcome, ended.exit) == (Outcome.LOST, Exit.VERIFIED), ended
    assert bench.adapter.output == pytest.approx(45.0, abs=1e-9)


async def test_a_link_lost_for_good_leaves_the_watchdog_armed_and_says_so() -> None:
    made: list[Faulty] = []

    def adapter(inner: SimulatedAdapter) -> Faulty:
        made.append(Faulty(inner))
        return made[0]

    async def act(bench: Bench) -> None:
        await bench.after(18.03)
        made[0].lost = True
        # The link comes back at the very end, when nothing may take the last safeguard away.
        await bench.after(60.0)

    ended, bench = await run(device=GUARDED, adapter=adapter, act=act, **WATCHED)
    assert ended.outcome is Outcome.LOST
    assert ended.exit is Exit.NOT_WRITTEN
    assert "left armed" in ended.exit_detail
    assert not [call for call in made[0].calls if call == ("heartbeat", {"armed": False})]
    assert bench.adapter.output == pytest.approx(45.0, abs=1e-6), "the device's own watchdog acted"


async def test_an_output_moved_by_hand_while_listening_is_yielded_to_untouched() -> None:
    async def act(bench: Bench) -> None:
        await bench.after(5.0)
        bench.adapter.operate(output=48.0)

    ended, bench = await run(act=act)
    assert (ended.outcome, ended.exit) == (Outcome.YIELDED, Exit.NOT_WRITTEN)
    assert bench.log.commands == []
    assert bench.adapter.output == 48.0


@pytest.mark.parametrize("hand", [{"output": 60.0}, {"mode": Mode.AUTOMATIC}])
async def test_a_person_who_acts_while_recovery_gives_back_is_not_overruled(hand: dict[str, Any]) -> None:
    _, bench = await run()
    bench.adapter.operate(output=47.0)
    writes: list[float] = []

    class Handed(Faulty):
        def __getattr__(self, name: str) -> Any:
            verb = super().__getattr__(name)
            if name == "write":

                async def kept(output: float, **options: Any) -> None:
                    writes.append(output)
                    await verb(output, **options)

                return kept
            if name == "read" and len(self.calls) == 3:
                bench.adapter.operate(**hand)
            return verb

    found = await recover(
        ownership=bench.log.secured[0],
        last_levels=(47.0, 43.0),
        last_command_age_s=2.0,
        adapter=Handed(bench.adapter),
        clock=bench.clock,
    )
    assert found.exit is Exit.NOT_OURS, found
    assert len(writes) == 1, "the exit once, and nothing after the person acted"
    if "output" in hand:
        assert bench.adapter.output == 60.0


async def test_a_reading_from_before_the_exit_write_proves_nothing() -> None:
    clock = ManualClock()
    adapter = SimulatedAdapter(DEVICE, clock)
    before = await adapter.read()
    _, bench = await run()
    from gainwright_service.experiment.ownership import Ownership
    from gainwright_service.experiment.returning import NOTHING, Return

    owned = Ownership.from_document(bench.log.secured[0])
    way_out = Return(
        plan=owned.plan,
        facts=owned.facts,
        began_at=before.taken_at + 1.0,
        exit_output=45.0,
        issued=47.0,
        levels=(47.0, 43.0),
        amplitude=2.0,
        restore=False,
    )
    way_out.begin(before.taken_at + 1.0)
    assert way_out.settle(before.taken_at + 1.1, before) == NOTHING
    assert way_out.proofs == 0


async def test_without_a_trusted_lock_nothing_is_written_the_exit_included() -> None:
    made: list[Faulty] = []
    trusted = [True]

    def adapter(inner: SimulatedAdapter) -> Faulty:
        made.append(Faulty(inner))
        return made[0]

    async def act(bench: Bench) -> None:
        await bench.after(18.03)
        trusted[0] = False
        made[0].calls.clear()
        bench.signals.store_lost()

    ended, _ = await run(adapter=adapter, act=act, permitted=lambda: trusted[0])
    assert {name for name, _ in made[0].calls} <= {"read"}
    assert ended.outcome is Outcome.INTERRUPTED
    assert ended.exit in (Exit.UNVERIFIED, Exit.NOT_WRITTEN)


class BadSignal(Faulty):
    """A loop whose signal can go bad: quality bad, value far off."""

    bad = False

    def __getattr__(self, name: str) -> Any:
        verb = super().__getattr__(name)
        if name != "read":
            return verb

        async def read(*arguments: Any, **options: Any) -> Any:
            found = await verb(*arguments, **options)
            return replace(found, quality=Quality.BAD, process_variable=1e6) if self.bad else found

        return read


async def test_nothing_is_decided_on_a_bad_signal_and_its_age_ends_the_test() -> None:
    made: list[BadSignal] = []

    def adapter(inner: SimulatedAdapter) -> BadSignal:
        made.append(BadSignal(inner))
        return made[0]

    async def act(bench: Bench) -> None:
        await bench.after(18.03)
        made[0].bad = True
        made[0].calls.clear()

    ended, _ = await run(adapter=adapter, act=act)
    written = [options for name, options in made[0].calls if name == "write"]
    assert ended.limit is not None
    assert ended.limit["item"] == "D7"
    assert ended.outcome is Outcome.LOST
    assert all(options.get("urgent") for options in written), "only the exit is written"


async def test_a_loop_found_in_automatic_is_not_given_back_to_it_without_a_good_signal() -> None:
    made: list[BadSignal] = []

    def adapter(inner: SimulatedAdapter) -> BadSignal:
        made.append(BadSignal(inner))
        return made[0]

    async def act(bench: Bench) -> None:
        await bench.after(18.03)
        made[0].bad = True
        made[0].calls.clear()
        bench.signals.request_stop("Ada")

    ended, _ = await run(device=replace(DEVICE, mode=Mode.AUTOMATIC), adapter=adapter, act=act)
    assert (ended.outcome, ended.exit) == (Outcome.STOPPED, Exit.UNVERIFIED)
    assert "no good signal" in ended.exit_detail
    assert not [name for name, _ in made[0].calls if name == "hand_back"]
