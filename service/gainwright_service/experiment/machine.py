"""The experiment as a machine: told of events with their time, it answers with commands and performs nothing.

Owns the course of a test; the limits are the guard's, the table is in `transitions`, the way out in `returning`.
Commanded test outputs stay inside the plan's band, amplitude cap, change and rate by construction; the guard is asked
once more before each write.
"""

from __future__ import annotations

from typing import Any

from gainwright.relay import RelayLaw, Side
from gainwright_service.experiment.commands import Command, Disarm, Facts, Finish, Secure, TakeOver, WriteTest
from gainwright_service.experiment.events import (
    Event,
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
from gainwright_service.experiment.excitation import Excitation, starting
from gainwright_service.experiment.listening import Baseline, changed_since, listened
from gainwright_service.experiment.plan import Plan
from gainwright_service.experiment.progress import told
from gainwright_service.experiment.readings import Mode, Reading
from gainwright_service.experiment.returning import Return, Step
from gainwright_service.experiment.scoring import Half, Score
from gainwright_service.experiment.states import PHASES, TESTING, Exit, Outcome, Phase, State
from gainwright_service.experiment.transitions import handler_of

WRONG_SIGN_SAMPLES = 3
WRONG_SIGN_HYSTERESES = 4.0
WRONG_SIGN_SHARE = 0.3
LATE_FACTOR = 3.0
WAITS_AT_FULL_AMPLITUDE = 6

Commands = tuple[Command, ...]


class Machine:
    """One experiment.

    Parameters
    ----------
    plan : Plan
    now : float
        Monotonic seconds at the start.
    """

    def __init__(self, plan: Plan, now: float) -> None:
        self.plan = plan
        self.state = State.LISTENING
        self.outcome: Outcome | None = None
        self.exit = Exit.PENDING
        self.detail = ""
        self.limit: Trip | None = None
        self.facts: Facts | None = None
        self.switches = 0
        self.worst_deviation = 0.0
        self.score = Score()
        self._began_at = now
        self._listened_from = now
        self._baseline = Baseline()
        self._awaiting_secured = False
        self._secured_at: float | None = None
        self._law: RelayLaw | None = None
        self._excitation: Excitation | None = None
        self._side = Side.UP
        self._side_since = now
        self._grown_at = now
        self._full_waits = 0
        self._contrary = 0
        self._extreme = 0.0
        self._issued: float | None = None
        self._issued_at = now
        self._coming = 0.0
        self._previous = 0.0
        self._return: Return | None = None

    @property
    def phase(self) -> Phase:
        """What people see."""
        return PHASES[self.state]

    @property
    def levels(self) -> tuple[float, ...]:
        """Outputs that are or may next be in force as ours."""
        return () if self._issued is None else (self._issued, self._coming, self._previous)

    def handle(self, event: Event) -> Commands:
        """Take one event; the commands it calls for, in order."""
        handler = getattr(self, f"_{handler_of(self.state, event)}")
        commands: Commands = handler(event)
        return commands

    def half_limit_s(self) -> float | None:
        """Bound of the half-period that has just begun (D8); None while nothing is known to forecast it by."""
        same = self.score.last_of(self._side)
        if self.switches > 3 and same is not None:
            return LATE_FACTOR * same.seconds + self.plan.sample_interval_s
        longest = max((half.seconds for half in self.score.halves), default=None)
        return None if longest is None else 5 * LATE_FACTOR * longest + 4 * self.plan.first_wait_s

    def progress(self, now: float) -> dict[str, Any]:
        """What is known so far, under the wire's names."""
        return told(
            self.score,
            self.facts,
            self._excitation,
            elapsed_s=max(now - self._began_at, 0.0),
            switches=self.switches,
            worst_deviation=self.worst_deviation,
            message=self.detail,
        )

    # Listening

    def _listen(self, event: Sampled) -> Commands:
        if self._awaiting_secured:
            return self._take_over_unchanged(event)
        self._baseline.add(event.reading)
        enough = len(self._baseline.values) >= self.plan.listening_samples
        heard = event.now - self._listened_from
        if heard < self.plan.listening_s or not (enough or heard >= 2 * self.plan.listening_s):
            return ()
        found = listened(self._baseline, self.plan)
        if isinstance(found, Trip):
            self.limit = found
            outcome = Outcome.YIELDED if found.yields else Outcome.LIMITED
            return self._finish(outcome, Exit.NOT_WRITTEN, f"nothing was moved: {found.sentence}", disarm=False)
        self.facts = found
        self._awaiting_secured = True
        return (Secure(found),)

    def _secured(self, event: Secured) -> Commands:
        if self.facts is None:
            return self._astray(event)
        self._secured_at = event.now
        return ()

    def _take_over_unchanged(self, event: Sampled) -> Commands:
        """Take the loop over, once a reading newer than the stored facts shows it as it was found."""
        facts, reading = self.facts, event.reading
        if facts is None or self._secured_at is None or reading.taken_at < self._secured_at or not reading.usable:
            return ()
        changed = changed_since(facts, reading, self.plan)
        if changed:
            detail = f"nothing was moved: {changed} while the start was being stored"
            self.limit = Trip("D6", 0.0, 0.0, "", changed, yields=True)
            return self._finish(Outcome.YIELDED, Exit.NOT_WRITTEN, detail, disarm=False)
        self.state = State.TAKING_OVER
        return (TakeOver(facts),)

    def _begin(self, event: TookOver) -> Commands:
        if self.facts is None:
            return self._astray(event)
        self.state = State.PROBING
        self._law = RelayLaw(self.facts.reference, self.facts.hysteresis, self.plan.effect)
        self._excitation = starting(self.plan, self.facts)
        self._issued, self._issued_at = self.facts.resting_output, event.now
        self._previous = self.facts.controller_output
        self._side, self._side_since, self._grown_at = Side.UP, event.now, event.now
        return self._drive(event.now)

    # Swinging

    def _swing(self, event: Sampled) -> Commands:
        if self._law is None or self._excitation is None:
            return self._astray(event)
        if not event.reading.usable:
            # Nothing is decided on a bad signal; its age is the guard's.
            return ()
        deviation = event.reading.process_variable - self._law.reference
        self.worst_deviation = max(self.worst_deviation, abs(deviation))
        self._extreme = min(self._extreme, deviation) if self._side is Side.UP else max(self._extreme, deviation)
        if self.state is State.PROBING and self._wrong_sign(deviation):
            trip = Trip("B14", deviation, 0.0, "", "output and process variable move against the declared effect")
            return self._leave(event.now, Outcome.LIMITED, trip)
        dwelt = event.now - self._side_since >= self.plan.min_dwell_s
        if dwelt and self._law.next_side(self._side, event.reading.process_variable) is not self._side:
            return self._switch(event.now, event.reading)
        if self.switches == 0:
            unanswered = self._grow_if_unanswered(event.now)
            if unanswered is not None:
                return self._leave(event.now, Outcome.LIMITED, unanswered)
        return self._drive(event.now)

    def _switch(self, now: float, reading: Reading) -> Commands:
        excitation = self._excitation
        if excitation is None or self._law is None:
            return self._leave(now, Outcome.INTERRUPTED, None)
        half = Half(self._side, now - self._side_since, self._extreme, excitation.amplitude, excitation.bias)
        cycle = self.score.add(half) if self.switches else None
        self.switches += 1
        self.state = State.SWINGING
        if self.switches >= 2:
            self._excitation = excitation.matched(abs(half.extreme))
        if cycle is not None and self._excitation == excitation:
            if self._enough():
                return self._leave(now, Outcome.COMPLETED, None)
            self._excitation = excitation.recentred(cycle)
        if self.switches >= self.plan.max_switches:
            trip = Trip("D9", self.switches, self.plan.max_switches, "", "the switches are used up")
            return self._leave(now, Outcome.LIMITED, trip)
        self._side, self._side_since = self._side.opposite, now
        self._extreme = 0.0
        return self._drive(now)

    def _enough(self) -> bool:
        newest = self.score.cycles[-1]
        noise = self.facts.noise if self.facts else 0.0
        return self.score.agreed(
            self.plan.scored_cycles,
            period_slack=2 * self.plan.sample_interval_s + 2 * noise / max(newest.swing, 1e-300) * newest.period / 6,
            swing_slack=3 * noise,
        )

    def _grow_if_unanswered(self, now: float) -> Trip | None:
        """Growth of the first half-period, once per forecast time without a crossing."""
        if self._excitation is None or now - self._grown_at < self.plan.first_wait_s:
            return None
        self._grown_at = now
        if self._excitation.exhausted:
            self._full_waits += 1
            if self._full_waits < WAITS_AT_FULL_AMPLITUDE:
                return None
            return Trip(
                "no_response", self._excitation.amplitude, self._excitation.largest_amplitude, "",
                "no response at the largest amplitude: look at mode, hand valve and wiring",
            )  # fmt: skip
        self._excitation = self._excitation.grown()
        return None

    def _wrong_sign(self, deviation: float) -> bool:
        narrowest = min(self.plan.deviation_up, self.plan.deviation_down)
        hysteresis = self.facts.hysteresis if self.facts else 0.0
        contrary = deviation < -max(WRONG_SIGN_HYSTERESES * hysteresis, WRONG_SIGN_SHARE * narrowest)
        self._contrary = self._contrary + 1 if contrary else 0
        return self._contrary >= WRONG_SIGN_SAMPLES

    def _drive(self, now: float) -> Commands:
        """Bring the output to the side's level, as fast as the rate allows."""
        excitation, law = self._excitation, self._law
        if excitation is None or law is None or self._issued is None:
            return ()
        target = self._bounded(law.level(self._side, excitation.bias, excitation.amplitude))
        self._coming = self._bounded(law.level(self._side.opposite, excitation.bias, excitation.amplitude))
        rate = self.plan.output_rate_per_s
        if rate is not None:
            most = rate * min(max(now - self._issued_at, 0.0), self.plan.sample_interval_s)
            target = max(self._issued - most, min(self._issued + most, target))
        if target == self._issued:
            return ()
        # Until the write is known to have been taken, the level before it may still be in force as ours.
        self._previous = self._issued
        self._issued, self._issued_at = target, now
        return (WriteTest(target, self._coming),)

    def _bounded(self, output: float) -> float:
        """The output inside band and change; redundant where the excitation is right, and that is the point."""
        resting = self.facts.resting_output if self.facts else output
        low = max(self.plan.output_low, resting - self.plan.max_output_change)
        high = min(self.plan.output_high, resting + self.plan.max_output_change)
        return max(low, min(high, output))

    # Endings

    def _leave_limited(self, event: Tripped) -> Commands:
        return self._leave(event.now, Outcome.LOST if event.trip.link else Outcome.LIMITED, event.trip)

    def _leave_stopped(self, event: StopRequested) -> Commands:
        self.detail = f"stopped by {event.by}"
        return self._leave(event.now, Outcome.STOPPED, None)

    def _leave_interrupted(self, event: Interrupted) -> Commands:
        self.detail = event.reason
        return self._leave(event.now, Outcome.INTERRUPTED, None)

    def _leave_unwritten(self, event: WriteFailed) -> Commands:
        trip = Trip("D5", 0.0, 0.0, "", f"a write failed: {event.reason}", link=not event.refused)
        # Whether the loop was taken over at all is not known: it is read first.
        taking = self.state is State.TAKING_OVER
        outcome = Outcome.LIMITED if event.refused else Outcome.LOST
        return self._leave(event.now, outcome, trip, read_first=taking)

    def _leave(self, now: float, outcome: Outcome, trip: Trip | None, *, read_first: bool = False) -> Commands:
        if self.facts is None:
            return self._finish(outcome, Exit.NOT_WRITTEN, "nothing was moved", disarm=False)
        self.outcome, self.limit, self.state = outcome, trip, State.RETURNING
        automatic = self.facts.mode in (Mode.AUTOMATIC, Mode.CASCADE)
        self._return = Return(
            plan=self.plan,
            facts=self.facts,
            began_at=now,
            exit_output=self._exit_output(outcome, automatic=automatic),
            issued=self._issued if self._issued is not None else self.facts.resting_output,
            levels=self.levels or (self.facts.resting_output, self.facts.controller_output),
            amplitude=self._excitation.amplitude if self._excitation else 0.0,
            restore=automatic and self.plan.exit_action == "as_found" and outcome is not Outcome.LOST,
            read_first=read_first or (trip is not None and trip.link),
            not_before=now,
        )
        return self._return.begin(now)

    def _exit_output(self, outcome: Outcome, *, automatic: bool) -> float:
        facts = self.facts
        if facts is None or self.plan.exit_value is not None or self._excitation is None:
            return facts.exit_output if facts else 0.0
        if outcome is not Outcome.COMPLETED or automatic:
            return facts.exit_output
        # The re-centred bias balances the load of now; a step of at most one amplitude.
        shift = self._excitation.bias - facts.resting_output
        most = self._excitation.amplitude
        wanted = facts.resting_output + max(-most, min(most, shift))
        return max(self.plan.range_low, min(self.plan.range_high, wanted))

    def _settle(self, event: Sampled) -> Commands:
        return (
            self._astray(event) if self._return is None else self._step(self._return.settle(event.now, event.reading))
        )

    def _verify(self, event: Sampled) -> Commands:
        return (
            self._astray(event) if self._return is None else self._step(self._return.verify(event.now, event.reading))
        )

    def _await_link(self, event: Missed) -> Commands:
        return self._astray(event) if self._return is None else self._step(self._return.missed(event.now))

    def _exit_failed(self, event: WriteFailed) -> Commands:
        return self._astray(event) if self._return is None else self._step(self._return.failed(event))

    def _step(self, step: Step) -> Commands:
        commands, ending = step
        if ending is not None:
            outcome = self.outcome or Outcome.INTERRUPTED
            return (*commands, *self._finish(outcome, ending.exit, ending.detail, disarm=True))
        if self._return is not None and self._return.restoring:
            self.state = State.RESTORING
        return commands

    def _give_way(self, event: SomebodyActed) -> Commands:
        self.limit = event.trip
        asked = self._return is not None and self._return.exit_asked
        told = "; the exit had been asked for before" if asked else ""
        ended = Exit.NOT_OURS if asked else Exit.NOT_WRITTEN
        return self._finish(Outcome.YIELDED, ended, f"yielded: {event.trip.sentence}{told}", disarm=True)

    def _end_untouched_limited(self, event: Tripped) -> Commands:
        self.limit = event.trip
        outcome = Outcome.LOST if event.trip.link else Outcome.LIMITED
        return self._finish(outcome, Exit.NOT_WRITTEN, f"nothing was moved: {event.trip.sentence}", disarm=False)

    def _end_untouched_yielded(self, event: SomebodyActed) -> Commands:
        self.limit = event.trip
        detail = f"nothing was moved: {event.trip.sentence}"
        return self._finish(Outcome.YIELDED, Exit.NOT_WRITTEN, detail, disarm=False)

    def _end_untouched_stopped(self, event: StopRequested) -> Commands:
        detail = f"nothing was moved: stopped by {event.by} while listening"
        return self._finish(Outcome.STOPPED, Exit.NOT_WRITTEN, detail, disarm=False)

    def _end_untouched_interrupted(self, event: Interrupted | NotSecured) -> Commands:
        detail = f"nothing was moved: {event.reason}"
        return self._finish(Outcome.INTERRUPTED, Exit.NOT_WRITTEN, detail, disarm=False)

    def _astray(self, event: Event) -> Commands:
        """An event that cannot belong here: the machine no longer trusts itself and leaves."""
        self.detail = f"{type(event).__name__} cannot happen while {self.state}"
        if self.state is State.LISTENING:
            return self._finish(
                Outcome.INTERRUPTED, Exit.NOT_WRITTEN, f"nothing was moved: {self.detail}", disarm=False
            )
        if self.state in TESTING or self.state is State.TAKING_OVER:
            return self._leave(event.now, Outcome.INTERRUPTED, None)
        return self._finish(Outcome.INTERRUPTED, Exit.UNVERIFIED, self.detail, disarm=True)

    def _finish(self, outcome: Outcome, ended: Exit, detail: str, *, disarm: bool) -> Commands:
        self.state, self.outcome, self.exit = State.FINISHED, outcome, ended
        self.detail = f"{self.detail}; {detail}" if self.detail else detail
        finish = Finish(outcome, ended, self.detail)
        # A watchdog is disarmed where the exit is verified or somebody else has the loop; otherwise it stays the
        # last safeguard and is left armed, loud in the detail.
        settled = ended in (Exit.VERIFIED, Exit.NOT_OURS) or outcome is Outcome.YIELDED
        return (Disarm(), finish) if disarm and settled else (finish,)

    def _wait(self, event: Event) -> Commands:
        return ()

    def _note(self, event: Event) -> Commands:
        return ()
