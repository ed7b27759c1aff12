"""The way out: the exit output, its proof, and the mode as found. Owned by the machine, pure like it.

Order (safety document, section 2.3): exit output first; its echo on two readings; where the loop was found in
automatic, the return band or the return time; the setpoint as found; the mode; its proof and the output's jump.
After a failed exchange the device is read before it is written again.
"""

from __future__ import annotations

from dataclasses import dataclass

from gainwright_service.experiment.commands import Command, Facts, HandBack, WriteExit
from gainwright_service.experiment.events import WriteFailed
from gainwright_service.experiment.plan import Plan
from gainwright_service.experiment.readings import Mode, Reading
from gainwright_service.experiment.states import Exit

PROOFS = 2
SCANS = 3
JUMP_SHARE = 0.02
BAND_SHARE = 0.25
MOST_LEVELS = 64
MOST_REPEATS = 3


@dataclass(frozen=True, slots=True)
class Ending:
    """How the exit came out, for a person."""

    exit: Exit
    detail: str


Step = tuple[tuple[Command, ...], Ending | None]
"""What to do now, and the ending once it is known."""
NOTHING: Step = ((), None)


@dataclass(slots=True)
class Return:
    """One way out, from the moment the test ends.

    Parameters
    ----------
    plan : Plan
    facts : Facts
    began_at : float
    exit_output : float
    issued : float
        The output last asked for.
    levels : tuple of float
        Outputs that may still be in force as ours.
    amplitude : float
    restore : bool
        Whether the mode as found is to be restored.
    read_first : bool
    not_before : float
        Readings taken before this prove nothing: something failed or changed since.
    """

    plan: Plan
    facts: Facts
    began_at: float
    exit_output: float
    issued: float
    levels: tuple[float, ...]
    amplitude: float
    restore: bool
    read_first: bool = False
    not_before: float = 0.0
    missed_since: float | None = None
    failing_since: float | None = None
    failure: str = ""
    sent: bool = False
    exit_asked: bool = False
    written_at: float = 0.0
    repeats: int = 0
    proofs: int = 0
    strange: int = 0
    matched: bool = False
    restoring: bool = False
    asked_mode_at: float = 0.0
    mode_repeats: int = 0
    scans: int = 0

    def begin(self, now: float) -> tuple[Command, ...]:
        """The first exit command, unless the device must be read first."""
        return () if self.read_first else self._write(now)

    def settle(self, now: float, reading: Reading) -> Step:
        """One reading while the exit output is being proven."""
        if reading.taken_at < self.not_before:
            return NOTHING
        self.missed_since = None
        if self.read_first:
            if not self._ours(reading):
                return (), Ending(Exit.NOT_OURS, "the loop is not as we left it: nothing was written")
            self.read_first = False
            if reading.controller_output is not None:
                # The way out begins where the output is, not where it was asked to be.
                self.issued = reading.controller_output
            return self._write(now), None
        if reading.taken_at < self.written_at:
            # Taken before the write that it would prove.
            return NOTHING
        if reading.mode not in (Mode.MANUAL, Mode.UNKNOWN):
            return self._stranger(f"the mode is {reading.mode}, not the manual that the test set")
        if self.issued != self.exit_output:
            if self._foreign(reading):
                return self._stranger(f"the output is {reading.controller_output:g}, which is none of ours")
            return self._write(now), None
        if reading.controller_output is None:
            if now - self.written_at > self.plan.settle_s:
                return (), Ending(Exit.UNVERIFIED, f"exit output {self.exit_output:g} written; no echo to verify it")
            return NOTHING
        if abs(reading.controller_output - self.exit_output) > self.plan.echo_tolerance:
            late = any(abs(reading.controller_output - level) <= self.plan.echo_tolerance for level in self.levels)
            if self.matched and late and self.repeats < MOST_REPEATS:
                # A write of ours that nobody answered has landed after the exit: the exit is asked for once more.
                self.repeats += 1
                return self._write(now), None
            if self.matched:
                return self._stranger(f"the output was {self.exit_output:g} and now is {reading.controller_output:g}")
            return self._not_obeyed(now, reading.controller_output)
        self.matched, self.strange, self.failing_since = True, 0, None
        self.proofs += 1
        if self.proofs < PROOFS:
            return NOTHING
        return self._proven(now, reading)

    def verify(self, now: float, reading: Reading) -> Step:
        """One reading after the mode as found was asked for."""
        if reading.taken_at < self.not_before:
            return NOTHING
        self.missed_since = None
        echo = reading.controller_output
        if reading.mode is not self.facts.mode:
            moved = echo is not None and abs(echo - self.exit_output) > self.plan.echo_tolerance
            if self.scans or moved or reading.mode is not Mode.MANUAL:
                # The mode as found had been seen, or the output is no longer ours: a person, not a deaf device.
                return (), Ending(Exit.NOT_OURS, f"somebody else acts: the mode is {reading.mode} after the hand-back")
            if now - self.asked_mode_at <= self.plan.settle_s:
                return NOTHING
            if self.mode_repeats == 0:
                self.mode_repeats += 1
                self.asked_mode_at = now
                return (HandBack(self.facts.mode),), None
            return (), Ending(Exit.UNVERIFIED, f"the mode {self.facts.mode} was not restored: left in {reading.mode}")
        if echo is None:
            return (), Ending(
                Exit.UNVERIFIED, f"mode {self.facts.mode} as found, but no echo shows what the output does"
            )
        jump = abs(echo - self.exit_output)
        most = max(JUMP_SHARE * self.plan.output_span, self.amplitude)
        if jump > most:
            return (), Ending(Exit.UNVERIFIED, f"the output moved by {jump:.3g} on hand-back, more than {most:.3g}")
        self.scans += 1
        if self.scans < SCANS:
            return NOTHING
        return (), Ending(Exit.VERIFIED, f"output {self.exit_output:g}, then mode {self.facts.mode} as found")

    def missed(self, now: float) -> Step:
        """A reading failed: from now on read before writing, for as long as patience lasts."""
        self.not_before = now
        if not self.restoring:
            self.read_first = True
            self.proofs = 0
        if self.missed_since is None:
            self.missed_since = now
        # Readings that come while every write fails are no link either.
        since = min(self.missed_since, now if self.failing_since is None else self.failing_since)
        if now - since <= self.plan.link_patience_s:
            return NOTHING
        why = self.failure or "the link was lost"
        if self.exit_asked:
            return (), Ending(Exit.UNVERIFIED, f"exit asked for, but {why} before it could be verified")
        return (), Ending(Exit.NOT_WRITTEN, f"{why}: the output is left to the device's own watchdog")

    def failed(self, event: WriteFailed) -> Step:
        """An exit write failed, or was withheld and never sent."""
        self.failure = event.reason
        if self.failing_since is None:
            self.failing_since = event.now
        if event.withheld and not self.sent:
            self.exit_asked = False
        self.sent = self.sent or not event.withheld
        return self.missed(event.now)

    def _write(self, now: float) -> tuple[Command, ...]:
        rate = self.plan.output_rate_per_s
        step = self.exit_output - self.issued
        if rate is not None:
            # Of a ramp the step before may still be in force, should this write fail.
            self.levels = (*self.levels, self.issued)[-MOST_LEVELS:]
            most = rate * self.plan.sample_interval_s
            step = max(-most, min(most, step))
        self.issued = self.exit_output if step == self.exit_output - self.issued else self.issued + step
        self.exit_asked = True
        self.written_at = now
        self.proofs, self.strange, self.matched = 0, 0, False
        return (WriteExit(self.issued),)

    def _stranger(self, what: str) -> Step:
        """Somebody else acts, on two readings in a row: nothing more is written."""
        self.proofs = 0
        self.strange += 1
        if self.strange < PROOFS:
            return NOTHING
        return (), Ending(Exit.NOT_OURS, f"somebody else acts: {what}; nothing more was written")

    def _foreign(self, reading: Reading) -> bool:
        """Whether the echo lies outside everything that a ramp of ours may have left in force."""
        echo, tolerance = reading.controller_output, self.plan.echo_tolerance
        ours = (*self.levels, self.issued)
        return echo is not None and not min(ours) - tolerance <= echo <= max(ours) + tolerance

    def _not_obeyed(self, now: float, echo: float) -> Step:
        self.proofs = 0
        if now - self.written_at <= self.plan.settle_s:
            return NOTHING
        if self.repeats == 0:
            self.repeats += 1
            return self._write(now), None
        return (), Ending(Exit.UNVERIFIED, f"the device does not take the exit output {self.exit_output:g}: {echo:g}")

    def _proven(self, now: float, reading: Reading) -> Step:
        at = f"output {self.exit_output:g}, echoed"
        if reading.mode is Mode.UNKNOWN:
            return (), Ending(Exit.UNVERIFIED, f"{at}; the device shows no mode by which to verify it")
        if not self.restore:
            if self.facts.mode in (Mode.AUTOMATIC, Mode.CASCADE):
                return (), Ending(Exit.UNVERIFIED, f"{at}; left in manual at {self.exit_output:g}, found in "
                                  f"{self.facts.mode}")  # fmt: skip
            return (), Ending(Exit.VERIFIED, at)
        if not reading.usable:
            if now - self.began_at <= self.plan.return_time_s:
                return NOTHING
            return (), Ending(Exit.UNVERIFIED, f"{at}; left in manual: the process variable has no good signal")
        deviation = reading.process_variable - self.facts.reference
        bound = self.plan.deviation_up if deviation >= 0 else self.plan.deviation_down
        if abs(deviation) > BAND_SHARE * bound and now - self.began_at <= self.plan.return_time_s:
            return NOTHING
        if self._setpoint_differs(reading):
            return (), Ending(Exit.UNVERIFIED, f"{at}; left in manual: the setpoint is {reading.setpoint:g}, found "
                              f"{self.facts.setpoint:g}")  # fmt: skip
        self.restoring = True
        self.asked_mode_at = now
        return (HandBack(self.facts.mode),), None

    def _setpoint_differs(self, reading: Reading) -> bool:
        found, now = self.facts.setpoint, reading.setpoint
        if found is None or now is None:
            return False
        span = self.plan.process_variable_high - self.plan.process_variable_low
        return abs(now - found) > 1e-5 * max(span, abs(found))

    def _ours(self, reading: Reading) -> bool:
        if reading.mode not in (Mode.MANUAL, Mode.UNKNOWN):
            return False
        if not self.plan.setpoint_follows and self._setpoint_differs(reading):
            return False
        if reading.controller_output is None:
            return not self.plan.reads_output
        ours = [*self.levels, self.issued, self.exit_output]
        if self.plan.watchdog == "resting":
            ours.append(self.facts.resting_output)
        elif self.plan.watchdog == "fixed" and self.plan.watchdog_value is not None:
            ours.append(self.plan.watchdog_value)
        return any(abs(reading.controller_output - level) <= self.plan.ownership_tolerance for level in ours)
