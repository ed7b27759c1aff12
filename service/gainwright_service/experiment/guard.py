"""The guard: every limit on a live test, checked on every sample before anything else.

`inspect` judges a reading, `allow` judges an output about to be written; both are pure: they return the next guard
and change nothing. Limit responses are never delayed by dwell, rate or switch budget. A person acting wins over a
limit. Item names are those of the safety document, section 3.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from gainwright_service.experiment.events import Trip
from gainwright_service.experiment.plan import Plan
from gainwright_service.experiment.readings import Mode, Reading

HARD_DEVIATION = 1.2
"""D1 ends at once beyond this multiple of the allowed deviation, else on two samples in a row."""
CONSECUTIVE = 2
LATEST_FACTOR = 3.0
"""D8: a half-period may last this many times the last one of the same direction."""


@dataclass(frozen=True, slots=True)
class Watch:
    """What the guard remembers between samples."""

    since: float
    newest_good_at: float
    armed: bool = False
    reference: float = 0.0
    resting_output: float = 0.0
    setpoint: float | None = None
    mode: Mode = Mode.MANUAL
    commanded: float | None = None
    commanded_at: float = 0.0
    matched: bool = False
    strange_outputs: int = 0
    strange_modes: int = 0
    strange_setpoints: int = 0
    beyond: int = 0
    switches: int = 0
    half_started_at: float | None = None
    half_limit_s: float | None = None


@dataclass(frozen=True, slots=True)
class Inspection:
    """What a look at the loop says: the guard to use from now on, and what was met, if anything."""

    guard: Guard
    trip: Trip | None = None
    disobeyed: bool = False


@dataclass(frozen=True, slots=True)
class Guard:
    """The limits of one plan and what has been seen so far."""

    plan: Plan
    watch: Watch

    def armed(self, *, now: float, reference: float, resting_output: float, setpoint: float | None) -> Guard:
        """The guard from the moment the loop is taken over in manual."""
        watch = replace(
            self.watch,
            armed=True,
            reference=reference,
            resting_output=resting_output,
            setpoint=setpoint,
            mode=Mode.MANUAL,
            strange_outputs=0,
            strange_modes=0,
            strange_setpoints=0,
            commanded_at=now,
            newest_good_at=now,
        )
        return replace(self, watch=watch)

    def wrote(self, output: float, now: float) -> Guard:
        """The guard after an output was written."""
        watch = replace(self.watch, commanded=output, commanded_at=now, matched=False, strange_outputs=0)
        return replace(self, watch=watch)

    def switched(self, now: float, half_limit_s: float | None) -> Guard:
        """The guard after a switch; ``half_limit_s`` bounds the half-period that begins."""
        watch = replace(self.watch, switches=self.watch.switches + 1, half_started_at=now, half_limit_s=half_limit_s)
        return replace(self, watch=watch)

    def returning(self) -> Guard:
        """The guard of the return: nothing of the test's swing is awaited any more."""
        return replace(self, watch=replace(self.watch, half_started_at=None, half_limit_s=None))

    def released(self, mode: Mode) -> Guard:
        """The guard once the mode as found is asked for: the output is the controller's again."""
        watch = replace(self.watch, mode=mode, commanded=None, strange_modes=0, armed=False)
        return replace(self, watch=watch)

    def allow(self, output: float, now: float) -> Trip | None:
        """None where the test output may be written; else the item it would break. Pure arithmetic, no memory."""
        plan, slack = self.plan, 1e-9 * self.plan.output_span
        if not self.watch.armed:
            return Trip("D5", output, 0.0, "", "a test output before the loop was taken over")
        if not output >= plan.output_low - slack:
            return Trip("D5", output, plan.output_low, "", "below the output band")
        if not output <= plan.output_high + slack:
            return Trip("D5", output, plan.output_high, "", "above the output band")
        change = abs(output - self.watch.resting_output)
        if change > plan.max_output_change + slack:
            return Trip("D5", change, plan.max_output_change, "", "further from the resting output than allowed")
        if plan.output_rate_per_s is not None and self.watch.commanded is not None:
            elapsed = max(now - self.watch.commanded_at, 0.0)
            step = abs(output - self.watch.commanded)
            # One sample interval is the finest in which a rate can be kept.
            most = plan.output_rate_per_s * max(elapsed, plan.sample_interval_s) + slack
            if step > most:
                return Trip("D5", step, most, "", "faster than the allowed rate")
        return None

    def inspect(self, reading: Reading, now: float) -> Inspection:
        """Judge one reading. A person acting comes first, then the hard limits, the deviation, time and switches."""
        guard, yielded, disobeyed = self._ownership(reading, now)
        if yielded is not None:
            return Inspection(guard, yielded)
        if reading.usable:
            guard = replace(guard, watch=replace(guard.watch, newest_good_at=reading.taken_at))
            guard, trip = guard._process_variable(reading)
            if trip is not None:
                return Inspection(guard, trip)
        trip = guard.overdue(now)
        return Inspection(guard, trip, disobeyed)

    def overdue(self, now: float) -> Trip | None:
        """What time alone has broken: staleness (D7), half-period (D8), total time and switches (D9)."""
        watch, plan = self.watch, self.plan
        age = now - watch.newest_good_at
        if age > plan.stale_after_s:
            return Trip("D7", age, plan.stale_after_s, "s", "no good reading for too long", link=True)
        elapsed = now - watch.since
        if elapsed > plan.max_duration_s:
            return Trip("D9", elapsed, plan.max_duration_s, "s", "the total time is over")
        if watch.switches > plan.max_switches:
            return Trip("D9", watch.switches, plan.max_switches, "", "the switches are used up")
        if watch.half_started_at is not None and watch.half_limit_s is not None:
            half = now - watch.half_started_at
            if half > watch.half_limit_s:
                return Trip("D8", half, watch.half_limit_s, "s", "a half-period lasts too long")
        return None

    def _process_variable(self, reading: Reading) -> tuple[Guard, Trip | None]:
        plan, value = self.plan, reading.process_variable
        if value < plan.process_variable_low:
            return self, Trip("D2", value, plan.process_variable_low, "", "below the hard limit")
        if value > plan.process_variable_high:
            return self, Trip("D2", value, plan.process_variable_high, "", "above the hard limit")
        if not self.watch.armed:
            return self, None
        deviation = value - self.watch.reference
        bound = plan.deviation_up if deviation >= 0 else plan.deviation_down
        size = abs(deviation)
        beyond = self.watch.beyond + 1 if size > bound else 0
        guard = replace(self, watch=replace(self.watch, beyond=beyond))
        if size > HARD_DEVIATION * bound or beyond >= CONSECUTIVE:
            return guard, Trip("D1", size, bound, "", "the process variable deviates too far from the reference")
        return guard, None

    def _ownership(self, reading: Reading, now: float) -> tuple[Guard, Trip | None, bool]:
        """Whose the output is (D6): mode, echo and setpoint, each on two samples in a row."""
        watch, plan = self.watch, self.plan
        if not watch.armed:
            return self, None, False
        strange_modes = watch.strange_modes + 1 if reading.mode not in (watch.mode, Mode.UNKNOWN) else 0
        strange_setpoints = watch.strange_setpoints + 1 if self._setpoint_moved(reading) else 0
        echo, commanded = reading.controller_output, watch.commanded
        matched, strange_outputs, disobeyed = watch.matched, 0, False
        if echo is not None and commanded is not None and reading.taken_at >= watch.commanded_at:
            if abs(echo - commanded) <= plan.echo_tolerance:
                matched = True
            elif matched:
                strange_outputs = watch.strange_outputs + 1
            else:
                disobeyed = now - watch.commanded_at > plan.settle_s
        watch = replace(
            watch,
            matched=matched,
            strange_modes=strange_modes,
            strange_setpoints=strange_setpoints,
            strange_outputs=strange_outputs,
        )
        guard = replace(self, watch=watch)
        for count, what, number, bound in (
            (strange_modes, "the mode was changed", 0.0, 0.0),
            (strange_outputs, "the output was changed", echo or 0.0, commanded or 0.0),
            (strange_setpoints, "the setpoint was changed", reading.setpoint or 0.0, watch.setpoint or 0.0),
        ):
            if count >= CONSECUTIVE:
                return guard, Trip("D6", number, bound, "", f"somebody else acts: {what}", yields=True), False
        return guard, None, disobeyed

    def _setpoint_moved(self, reading: Reading) -> bool:
        if self.plan.setpoint_follows or self.watch.setpoint is None or reading.setpoint is None:
            return False
        size = max(abs(self.watch.setpoint), self.plan.process_variable_high - self.plan.process_variable_low)
        return abs(reading.setpoint - self.watch.setpoint) > 1e-5 * size


def new_guard(plan: Plan, now: float) -> Guard:
    """The guard at the start of an experiment, before anything is written."""
    return Guard(plan, Watch(since=now, newest_good_at=now))
