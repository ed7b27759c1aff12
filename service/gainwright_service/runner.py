"""The runner: gives one experiment its clock, carries readings in and commands out, and keeps the log.

Owns the tick. Knows neither the store (the log is a port) nor the device (the drive has it). However it ends, by the
machine, by cancellation or by an error of our own, the exit path runs.
"""

from __future__ import annotations

import asyncio
import math
from collections.abc import Callable
from dataclasses import asdict, dataclass, field
from typing import Any, Protocol

from gainwright_service.clock import Clock
from gainwright_service.drive import Drive
from gainwright_service.errors import AdapterError, DeviceRefused, StoreError, WriteWithheld
from gainwright_service.experiment.commands import (
    Command,
    Disarm,
    Facts,
    Finish,
    HandBack,
    Secure,
    TakeOver,
    WriteExit,
    WriteTest,
)
from gainwright_service.experiment.events import (
    Event,
    HandedBack,
    Interrupted,
    Missed,
    NotSecured,
    Sampled,
    Secured,
    SomebodyActed,
    StopRequested,
    TookOver,
    Trip,
    Tripped,
    WriteFailed,
)
from gainwright_service.experiment.machine import Machine
from gainwright_service.experiment.ownership import Ownership
from gainwright_service.experiment.plan import Plan
from gainwright_service.experiment.states import DRIVING, TESTING, Exit, Outcome, State

PROGRESS_S = 0.5
DISARM_TRIES = 5


@dataclass(frozen=True, slots=True)
class RunSample:
    """One observation as it is kept; times in seconds since the first sample, NaN-free: None where nothing came."""

    time_s: float
    process_variable: float | None
    controller_output: float | None
    commanded_output: float | None
    phase: str


class ExperimentLog(Protocol):
    """Where an experiment's facts go. Only `secure` waits; the rest is taken at once and written soon."""

    async def secure(self, ownership: dict[str, Any]) -> None:
        """Store durably what recovery needs, before the first write. Raises `StoreError`."""
        ...

    def as_found(self, document: dict[str, Any]) -> None:
        """What was found."""
        ...

    def sample(self, sample: RunSample) -> None:
        """One sample."""
        ...

    def command(self, levels: tuple[float, ...]) -> None:
        """Outputs that are, or may next be, in force as ours."""
        ...

    def progress(self, phase: str, document: dict[str, Any]) -> None:
        """What is known so far."""
        ...


@dataclass(slots=True)
class Signals:
    """What reaches an experiment from outside its loop; each wakes the runner at once."""

    wake: asyncio.Event = field(default_factory=asyncio.Event)
    _events: list[Callable[[float], Event]] = field(default_factory=list)

    def request_stop(self, by: str) -> None:
        """A person asked for the end."""
        self._post(lambda now: StopRequested(now, by))

    def store_lost(self) -> None:
        """The store cannot be written, or the site's lock is lost."""
        self._post(lambda now: Interrupted(now, "the store or the site's lock was lost"))

    def shutdown(self) -> None:
        """The service ends."""
        self._post(lambda now: Interrupted(now, "the service was shut down"))

    def take(self, now: float) -> list[Event]:
        """The events posted since the last call."""
        posted, self._events = self._events, []
        self.wake.clear()
        return [make(now) for make in posted]

    def _post(self, make: Callable[[float], Event]) -> None:
        self._events.append(make)
        self.wake.set()


@dataclass(frozen=True, slots=True)
class Ended:
    """How an experiment ended, for the store."""

    outcome: Outcome
    exit: Exit
    exit_detail: str
    limit: dict[str, Any] | None
    as_found: dict[str, Any] | None
    progress: dict[str, Any]
    latency_s: float


async def run_experiment(*, plan: Plan, drive: Drive, log: ExperimentLog, signals: Signals, clock: Clock) -> Ended:
    """Run one experiment to its end.

    Cancellation is answered by the exit path, then raised again; an error of our own by the exit path and the
    outcome ``interrupted``.
    """
    runner = _Runner(plan, drive, log, signals, clock)
    try:
        await runner.run()
    except asyncio.CancelledError:
        await asyncio.shield(asyncio.ensure_future(runner.leave("cancelled")))
        raise
    except Exception as error:  # noqa: BLE001 - the last resort: whatever broke, the output must be given back
        await runner.leave(f"an error of our own: {type(error).__name__}: {error}")
    return runner.ended()


class _Runner:
    def __init__(self, plan: Plan, drive: Drive, log: ExperimentLog, signals: Signals, clock: Clock) -> None:
        self._plan = plan
        self._drive = drive
        self._log = log
        self._signals = signals
        self._clock = clock
        self._start = clock.monotonic_s()
        self._machine = Machine(plan, self._start)
        self._samples = 0
        self._progress_at = self._start
        self._repeated_at: float | None = None
        self._posted: list[Event] = []
        self._strange = False
        self._disarm_failed = False

    async def run(self) -> None:
        """Tick until the machine has finished."""
        due = self._start
        while self._machine.state is not State.FINISHED:
            await self._clock.sleep_until(due, self._signals.wake)
            now = self._clock.monotonic_s()
            self._posted += self._signals.take(now)
            if now >= due:
                # Before what was asked for meanwhile: after a pause nothing is written on old knowledge.
                await self._tick()
                due += self._plan.sample_interval_s
                behind = self._clock.monotonic_s() - due
                if behind > 0:
                    due += self._plan.sample_interval_s * (behind // self._plan.sample_interval_s)
            while self._posted and not self._strange:
                await self._dispatch(self._posted.pop(0))
        self._report(self._clock.monotonic_s())

    async def leave(self, reason: str) -> None:
        """Take the exit path from wherever the machine stands."""
        await self._dispatch(Interrupted(self._clock.monotonic_s(), reason))
        while self._machine.state is not State.FINISHED:
            await self._clock.sleep_until(self._clock.monotonic_s() + self._plan.sample_interval_s)
            try:
                await self._tick()
            except Exception as error:  # noqa: BLE001 - still the last resort: patience ends it, whatever keeps breaking
                now = self._clock.monotonic_s()
                await self._dispatch(WriteFailed(now, f"{type(error).__name__}: {error}", refused=False))

    def ended(self) -> Ended:
        """The result, once finished."""
        machine = self._machine
        facts = machine.facts
        detail = machine.detail
        if self._left_armed():
            detail += f"; the device's watchdog is left armed and acts ({self._plan.watchdog}) in " \
                      f"{self._plan.watchdog_timeout_s:g} s"  # fmt: skip
        if self._disarm_failed and self._plan.watchdog_timeout_s is not None:
            detail += f"; the device's watchdog could not be disarmed and may move the output in " \
                      f"{self._plan.watchdog_timeout_s:g} s"  # fmt: skip
        return Ended(
            outcome=machine.outcome or Outcome.INTERRUPTED,
            exit=machine.exit,
            exit_detail=detail,
            limit=_limit(machine.limit),
            as_found=_as_found(facts) if facts is not None else None,
            progress=self._progress(self._clock.monotonic_s()),
            latency_s=self._drive.latency_s,
        )

    def _left_armed(self) -> bool:
        """Whether an armed watchdog is the last safeguard of a loop that could not be given back for certain."""
        machine, timeout = self._machine, self._plan.watchdog_timeout_s
        if timeout is None or self._plan.watchdog == "none" or machine.facts is None:
            return False
        lost = machine.exit is Exit.NOT_WRITTEN and machine.outcome is Outcome.LOST
        return machine.exit is Exit.UNVERIFIED or lost

    async def _tick(self) -> None:
        urgent = self._machine.state in DRIVING and self._machine.state not in TESTING
        try:
            seen = await self._drive.read(urgent=urgent)
        except AdapterError as error:
            await self._missed(error)
            return
        now, trip = self._clock.monotonic_s(), seen.trip
        self._strange = seen.strange
        if self._machine.state in DRIVING and trip is None and not seen.strange:
            await self._beat()
        if trip is not None:
            await self._dispatch(SomebodyActed(now, trip) if trip.yields else Tripped(now, trip))
        elif seen.disobeyed and self._machine.state in TESTING:
            await self._disobeyed(now)
        if not seen.strange and (trip is None or not trip.yields):
            await self._dispatch(Sampled(now, seen.reading))
        self._keep(seen.reading.taken_at, seen.reading.process_variable, seen.reading.controller_output)
        if now - self._progress_at >= PROGRESS_S:
            self._report(now)

    async def _missed(self, error: AdapterError) -> None:
        now = self._clock.monotonic_s()
        await self._dispatch(Missed(now, error.detail))
        overdue = self._drive.overdue()
        if overdue is not None:
            await self._dispatch(Tripped(now, overdue))
        self._keep(now, None, None)

    async def _disobeyed(self, now: float) -> None:
        """The device has not taken a write within the settle time: one repeat, then the exit path."""
        if self._repeated_at is None or now - self._repeated_at > 10 * self._plan.settle_s:
            self._repeated_at = now
            try:
                await self._drive.repeat_write()
            except AdapterError as error:
                await self._dispatch(WriteFailed(now, error.detail, isinstance(error, DeviceRefused)))
            return
        trip = Trip("D6", 0.0, 0.0, "", "the device does not take the output that is written")
        await self._dispatch(Tripped(now, trip))

    async def _beat(self) -> None:
        interval = self._plan.heartbeat_s
        if interval is None or not self._drive.beat_due(interval - self._plan.sample_interval_s / 2):
            return
        try:
            await self._drive.beat()
        except AdapterError as error:
            now = self._clock.monotonic_s()
            await self._dispatch(WriteFailed(now, f"heartbeat: {error.detail}", isinstance(error, DeviceRefused)))

    async def _dispatch(self, event: Event) -> None:
        """One event, and whatever follows from carrying out its commands."""
        events = [event]
        while events:
            machine, event = self._machine, events.pop(0)
            switches, state = machine.switches, machine.state
            commands = machine.handle(event)
            if machine.switches != switches and machine.state in TESTING:
                self._drive.switched(machine.half_limit_s())
            if state in TESTING and machine.state not in TESTING:
                self._drive.returning()
            for command in commands:
                answer = await self._carry_out(command)
                if answer is not None:
                    events.append(answer)
            if machine.state is not state:
                self._report(self._clock.monotonic_s())

    async def _carry_out(self, command: Command) -> Event | None:
        try:
            return await self._perform(command)
        except AdapterError as error:
            withheld = isinstance(error, WriteWithheld)
            return WriteFailed(self._clock.monotonic_s(), error.detail, isinstance(error, DeviceRefused), withheld)

    async def _perform(self, command: Command) -> Event | None:
        drive, clock = self._drive, self._clock
        match command:
            case Secure(facts=facts):
                return await self._secure(facts)
            case TakeOver(facts=facts):
                await drive.take_over(facts)
                return TookOver(clock.monotonic_s())
            case WriteTest(output=output):
                self._log.command(self._machine.levels)
                refused = await drive.write_test(output)
                return None if refused is None else Tripped(clock.monotonic_s(), refused)
            case WriteExit(output=output):
                self._log.command((output, *self._machine.levels))
                await drive.write_exit(output)
            case HandBack(mode=mode):
                await drive.hand_back(mode)
                return HandedBack(clock.monotonic_s())
            case Disarm():
                self._disarm_failed = not await self._disarmed()
            case Finish():
                pass
        return None

    async def _disarmed(self) -> bool:
        """Whether the watchdog was disarmed, tried a few times: it moves no output."""
        for _ in range(DISARM_TRIES):
            if await self._drive.disarm():
                return True
            await self._clock.sleep_until(self._clock.monotonic_s() + self._plan.sample_interval_s)
        return False

    async def _secure(self, facts: Facts) -> Event:
        ownership = Ownership.of(self._plan, facts)
        self._log.as_found(_as_found(facts))
        try:
            await self._log.secure(ownership.document())
        except StoreError as error:
            return NotSecured(self._clock.monotonic_s(), f"what recovery needs could not be stored: {error.detail}")
        return Secured(self._clock.monotonic_s())

    def _keep(self, at: float, value: float | None, echo: float | None) -> None:
        commanded = self._drive.commanded
        if commanded is None:
            commanded = echo
        if value is not None and not math.isfinite(value):
            value = None
        self._log.sample(RunSample(at - self._start, value, echo, commanded, self._machine.phase.value))
        self._samples += 1

    def _report(self, now: float) -> None:
        self._progress_at = now
        self._log.progress(self._machine.phase.value, self._progress(now))

    def _progress(self, now: float) -> dict[str, Any]:
        return {"samples": self._samples, **self._machine.progress(now)}


def _limit(trip: Trip | None) -> dict[str, Any] | None:
    if trip is None:
        return None
    return {
        "item": trip.item,
        "number": trip.number,
        "bound": trip.bound,
        "unit": trip.unit,
        "sentence": trip.sentence,
    }


def _as_found(facts: Facts) -> dict[str, Any]:
    document = asdict(facts)
    names = ("mode", "setpoint", "controller_output", "process_variable", "resting_output", "reference")
    return {name: str(document[name]) if name == "mode" else document[name] for name in names}
