"""What the machine asks for. It performs nothing itself."""

from __future__ import annotations

from dataclasses import dataclass

from gainwright_service.experiment.readings import Mode
from gainwright_service.experiment.states import Exit, Outcome


@dataclass(frozen=True, slots=True)
class Command:
    """Base."""


@dataclass(frozen=True, slots=True)
class Facts:
    """What was found by listening, and what recovery needs; stored before the first write."""

    mode: Mode
    setpoint: float | None
    controller_output: float
    process_variable: float
    resting_output: float
    reference: float
    noise: float
    quantum: float
    drift_per_s: float
    hysteresis: float
    exit_output: float
    longest_still: int = 1


@dataclass(frozen=True, slots=True)
class Secure(Command):
    """Store the facts durably, then answer `Secured` or `NotSecured`."""

    facts: Facts


@dataclass(frozen=True, slots=True)
class TakeOver(Command):
    """Put the loop into manual, arm the guard and the watchdog, then answer `TookOver`."""

    facts: Facts


@dataclass(frozen=True, slots=True)
class WriteTest(Command):
    """Write a test output. ``coming`` is the opposite level, announced for recovery."""

    output: float
    coming: float


@dataclass(frozen=True, slots=True)
class WriteExit(Command):
    """Write the exit output, before everything queued on the link."""

    output: float


@dataclass(frozen=True, slots=True)
class HandBack(Command):
    """Put the loop back into the mode as found, then answer `HandedBack`."""

    mode: Mode


@dataclass(frozen=True, slots=True)
class Disarm(Command):
    """Disarm the device's watchdog; allowed after a yield too, since it moves no output."""


@dataclass(frozen=True, slots=True)
class Finish(Command):
    """Nothing more will be asked for."""

    outcome: Outcome
    exit: Exit
    detail: str
