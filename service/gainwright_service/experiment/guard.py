"""The guard: every limit on a live test, checked on every sample before anything else.

`inspect` judges a reading, `allow` judges an output about to be written; both are pure: they return the next guard
and change nothing. Limit responses are never delayed by dwell, rate or switch budget. A person acting wins over a
limit. Item names are those of the safety document, section 3.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from gainwright_service.experiment.commands import Facts
from gainwright_service.experiment.events import Trip
from gainwright_service.experiment.plan import Plan
from gainwright_service.experiment.readings import Mode, Reading

HARD_DEVIATION = 1.2
"""D1 ends at once beyond this multiple of the allowed deviation, else on two samples in a row."""
CONSECUTIVE = 2
MOST_UNSURE = 4
STILL_FACTOR, STILL_SAMPLES = 6, 30
"""D13: a signal frozen for this many times the longest standstill of the baseline, and this many samples more."""


@dataclass(frozen=True, slots=True)
class Watch:
    """What the guard remembers between samples.

    ``in_force`` is the output last seen to be ours: until a write is echoed, the device may stand anywhere between it
    and what was commanded. ``unsure`` are outputs whose write was never answered and which may still land.
    """

    since: float
    newest_good_at: float
    armed: bool = False
    reference: float = 0.0
    resting_output: float = 0.0
    setpoint: float | None = None
    mode: Mode = Mode.MANUAL
    commanded: float | None = None
    commanded_at: float = 0.0
    in_force: float | None = None
    unmatched_since: float | None = None
    unsure: tuple[float, ...] = ()
    newest_value: float | None = None
    still: int = 0
    still_bound: int | None = None
    strange_outputs: int = 0
    strange_modes: int = 0
    strange_setpoints: int = 0
    beyond: int = 0
    switches: int = 0
    half_started_at: float | None = None
    half_limit_s: float | None = None


@dataclass(frozen=True, slots=True)
class Inspection:
    """What a look at the loop says: the guard to use from now on, and what was met, if anything.

    ``strange`` is a first sign of somebody else: until the next sample tells, nothing is written.
    """

    guard: Guard
    trip: Trip | None = None
    disobeyed: bool = False
    strange: bool = False


@dataclass(frozen=True, slots=True)
class Guard:
    """The limits of one plan and what has been seen so far."""

    plan: Plan
    watch: Watch

    def armed(self, facts: Facts, now: float) -> Guard:
        """The guard from the moment the loop is taken over in manual."""
        watch = replace(
            self.watch,
            armed=True,
            reference=facts.reference,
            resting_output=facts.resting_output,
            setpoint=facts.setpoint,
            mode=Mode.MANUAL,
            # A controller in automatic may have moved the output since: any start is its own.
            in_force=facts.controller_output if facts.mode is Mode.MANUAL else None,
            unmatched_since=now,
            still_bound=STILL_FACTOR * facts.longest_still + STILL_SAMPLES,
            still=0,
            strange_outputs=0,
            strange_modes=0,
            strange_setpoints=0,
            commanded_at=now,
            newest_good_at=now,
        )
        return replace(self, watch=watch)

    def wrote(self, output: float, now: float) -> Guard:
        """The guard after an output was written, or is about to be."""
        since = self.watch.unmatched_since
        watch = replace(self.watch, commanded=output, commanded_at=now, unmatched_since=now if since is None else since)
        return replace(self, watch=watch)

    def unanswered(self, output: float) -> Guard:
        """The guard after a write that nobody answered: it may have been taken, or may land late."""
        unsure = (*self.watch.unsure, output)[-MOST_UNSURE:]
        return replace(self, watch=replace(self.watch, unsure=unsure))

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
        guard, yielded, disobeyed, strange = self._ownership(reading, now)
        if yielded is not None:
            return Inspection(guard, yielded)
        gap = reading.taken_at - self.watch.newest_good_at
        paused = self.watch.armed and gap > self.plan.stale_after_s
        if reading.usable:
            guard = replace(guard, watch=replace(guard.watch, newest_good_at=reading.taken_at))
        if strange:
            # A limit on this very sample is met again on the next one; a person and a limit at once: yielding wins.
            return Inspection(guard, strange=True)
        if paused:
            # Nobody watched for so long: what is found now is read before anything is written.
            trip = Trip("D7", gap, self.plan.stale_after_s, "s", "no good reading for too long", link=True)
            return Inspection(guard, trip)
        if reading.usable:
            guard, met = guard._process_variable(reading)
            if met is not None:
                return Inspection(guard, met)
        return Inspection(guard, guard.overdue(now), disobeyed)

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
        still = self.watch.still + 1 if value == self.watch.newest_value else 0
        bound_still = self.watch.still_bound
        if bound_still is not None and still > bound_still:
            return self, Trip("D13", still, bound_still, "samples", "the process variable stands still: frozen signal")
        beyond = self.watch.beyond + 1 if size > bound else 0
        guard = replace(self, watch=replace(self.watch, beyond=beyond, still=still, newest_value=value))
        if size > HARD_DEVIATION * bound or beyond >= CONSECUTIVE:
            return guard, Trip("D1", size, bound, "", "the process variable deviates too far from the reference")
        return guard, None

    def _ownership(self, reading: Reading, now: float) -> tuple[Guard, Trip | None, bool, bool]:
        """Whose the output is (D6): mode, echo and setpoint, each on two samples in a row; whether the device disobeys;
        whether there is a first sign of somebody else."""
        watch = self.watch
        if not watch.armed:
            return self, None, False, False
        watch, disobeyed = self._echoed(reading, now)
        strange_modes = watch.strange_modes + 1 if reading.mode not in (watch.mode, Mode.UNKNOWN) else 0
        strange_setpoints = watch.strange_setpoints + 1 if self._setpoint_moved(reading) else 0
        watch = replace(watch, strange_modes=strange_modes, strange_setpoints=strange_setpoints)
        guard = replace(self, watch=watch)
        echo = reading.controller_output or 0.0
        signs = (
            (strange_modes, "the mode was changed", 0.0, 0.0),
            (watch.strange_outputs, "the output was changed", echo, watch.commanded or 0.0),
            (strange_setpoints, "the setpoint was changed", reading.setpoint or 0.0, watch.setpoint or 0.0),
        )
        for count, what, number, bound in signs:
            if count >= CONSECUTIVE:
                trip = Trip("D6", number, bound, "", f"somebody else acts: {what}", yields=True)
                return guard, trip, False, False
        return guard, None, disobeyed, any(count for count, *_ in signs)

    def _echoed(self, reading: Reading, now: float) -> tuple[Watch, bool]:
        """The watch after an echo, and whether the device disobeys.

        Between the output last in force and the commanded one the device may still be on its way, or be clamped;
        outside of both it was somebody else, unless it is a write of ours that nobody answered and that landed late.
        """
        watch, tolerance = self.watch, self.plan.echo_tolerance
        echo, commanded = reading.controller_output, watch.commanded
        if echo is None or commanded is None or reading.taken_at < watch.commanded_at:
            return watch, False
        if abs(echo - commanded) <= tolerance:
            return replace(watch, in_force=commanded, unmatched_since=None, strange_outputs=0), False
        since = watch.unmatched_since
        in_force = commanded if since is None else echo if watch.in_force is None else watch.in_force
        if min(in_force, commanded) - tolerance <= echo <= max(in_force, commanded) + tolerance:
            return replace(watch, strange_outputs=0), since is not None and now - since > self.plan.settle_s
        if any(abs(echo - level) <= tolerance for level in watch.unsure):
            return replace(watch, strange_outputs=0), True
        if self._by_watchdog(echo):
            return replace(watch, strange_outputs=0), True
        return replace(watch, strange_outputs=watch.strange_outputs + 1), False

    def _by_watchdog(self, echo: float) -> bool:
        """Whether an output is where the device's own watchdog puts it."""
        plan, watch = self.plan, self.watch
        level = watch.resting_output if plan.watchdog == "resting" else plan.watchdog_value
        declared = plan.watchdog in ("resting", "fixed") and level is not None
        return declared and level is not None and abs(echo - level) <= plan.ownership_tolerance

    def _setpoint_moved(self, reading: Reading) -> bool:
        if self.plan.setpoint_follows or self.watch.setpoint is None or reading.setpoint is None:
            return False
        size = max(abs(self.watch.setpoint), self.plan.process_variable_high - self.plan.process_variable_low)
        return abs(reading.setpoint - self.watch.setpoint) > 1e-5 * size


def new_guard(plan: Plan, now: float) -> Guard:
    """The guard at the start of an experiment, before anything is written."""
    return Guard(plan, Watch(since=now, newest_good_at=now))
