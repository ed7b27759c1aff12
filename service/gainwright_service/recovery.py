"""Recovery: what is done with a loop whose test did not end in an orderly way. Reads before it writes.

The exit action runs only where the loop is demonstrably still ours (safety document, section 2.1): the mode is the
one the test set, the output is one of our last levels, the exit value or the declared watchdog value, and the last
command is young enough. Otherwise nothing is written. Driving is never resumed.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from gainwright_service.adapters.port import LoopAdapter
from gainwright_service.clock import Clock
from gainwright_service.drive import Drive
from gainwright_service.errors import AdapterError, WriteWithheld
from gainwright_service.experiment.commands import Command, HandBack, WriteExit
from gainwright_service.experiment.events import WriteFailed
from gainwright_service.experiment.guard import new_guard
from gainwright_service.experiment.ownership import Ownership
from gainwright_service.experiment.readings import Mode
from gainwright_service.experiment.returning import Ending, Return
from gainwright_service.experiment.states import Exit, Outcome


@dataclass(frozen=True, slots=True)
class Recovered:
    """What recovery found and did."""

    outcome: Outcome
    exit: Exit
    exit_detail: str


async def recover(
    *,
    ownership: dict[str, Any],
    last_levels: tuple[float, ...],
    last_command_age_s: float,
    adapter: LoopAdapter,
    clock: Clock,
    permitted: Callable[[], bool] = lambda: True,
) -> Recovered:
    """Give back, if it is still ours, the output of a test that died.

    Parameters
    ----------
    ownership : dict
        The document stored before the first write.
    last_levels : tuple of float
        The levels announced last.
    last_command_age_s : float
        Age of the last command, wall clock, seconds.
    adapter : LoopAdapter
    clock : Clock
    permitted : callable
        As of `Drive`.
    """
    owned = Ownership.from_document(ownership)
    plan, facts = owned.plan, owned.facts
    if not 0 <= last_command_age_s <= plan.exit_valid_s:
        # A negative age is a stepped clock: how old the command is cannot be told.
        return Recovered(
            Outcome.INTERRUPTED,
            Exit.NOT_OURS,
            f"the last command is {last_command_age_s:.0f} s old, not 0 to {plan.exit_valid_s:g} s: nothing written",
        )
    now = clock.monotonic_s()
    way_out = Return(
        plan=plan,
        facts=facts,
        began_at=now,
        exit_output=facts.exit_output,
        issued=last_levels[0] if last_levels else facts.resting_output,
        levels=last_levels or (facts.resting_output,),
        amplitude=plan.max_amplitude,
        restore=facts.mode in (Mode.AUTOMATIC, Mode.CASCADE) and plan.exit_action == "as_found",
        read_first=True,
    )
    drive = Drive(adapter, new_guard(plan, now), clock, permitted=permitted)
    drive.resume(facts)
    ending: Ending | None = None
    while ending is None:
        ending = await _one_step(way_out, drive, clock)
        if ending is None:
            await clock.sleep_until(clock.monotonic_s() + plan.sample_interval_s)
    detail = ending.detail
    settled = ending.exit in (Exit.VERIFIED, Exit.NOT_OURS)
    if settled and plan.watchdog_timeout_s is not None and not await drive.disarm():
        detail += (
            f"; the device's watchdog could not be disarmed and may move the output in {plan.watchdog_timeout_s:g} s"
        )
    return Recovered(Outcome.INTERRUPTED, ending.exit, detail)


async def _one_step(way_out: Return, drive: Drive, clock: Clock) -> Ending | None:
    try:
        seen = await drive.read(urgent=True)
        now = clock.monotonic_s()
        step = way_out.verify if way_out.restoring else way_out.settle
        commands, ending = step(now, seen.reading)
        for command in commands:
            await _carry_out(command, drive)
        interval = way_out.plan.heartbeat_s
        if ending is None and way_out.exit_asked and interval is not None and drive.beat_due(interval):
            # The return may be longer than the watchdog's time; its own action must not fall into it.
            await drive.beat()
    except AdapterError as error:
        now = clock.monotonic_s()
        withheld = isinstance(error, WriteWithheld)
        _, ending = way_out.failed(WriteFailed(now, error.detail, refused=False, withheld=withheld))
    return ending


async def _carry_out(command: Command, drive: Drive) -> None:
    match command:
        case WriteExit(output=output):
            await drive.write_exit(output)
        case HandBack(mode=mode):
            await drive.hand_back(mode)
