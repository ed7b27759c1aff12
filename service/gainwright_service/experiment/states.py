"""The words of an experiment: states, phases, outcomes, exits. No behaviour."""

from __future__ import annotations

from enum import StrEnum


class State(StrEnum):
    """Where the machine stands; finer than the phases that people see."""

    LISTENING = "listening"
    TAKING_OVER = "taking_over"
    PROBING = "probing"
    SWINGING = "swinging"
    RETURNING = "returning"
    RESTORING = "restoring"
    FINISHED = "finished"


class Phase(StrEnum):
    """What people see."""

    LISTENING = "listening"
    PROBING = "probing"
    SWINGING = "swinging"
    RETURNING = "returning"
    FINISHED = "finished"


PHASES: dict[State, Phase] = {
    State.LISTENING: Phase.LISTENING,
    State.TAKING_OVER: Phase.PROBING,
    State.PROBING: Phase.PROBING,
    State.SWINGING: Phase.SWINGING,
    State.RETURNING: Phase.RETURNING,
    State.RESTORING: Phase.RETURNING,
    State.FINISHED: Phase.FINISHED,
}

DRIVING = frozenset({State.TAKING_OVER, State.PROBING, State.SWINGING, State.RETURNING, State.RESTORING})
"""States in which the output may be ours: the device's watchdog is beaten, the guard watches for other hands."""

TESTING = frozenset({State.PROBING, State.SWINGING})
"""States in which test outputs are commanded."""


class Outcome(StrEnum):
    """How an experiment ended."""

    COMPLETED = "completed"
    STOPPED = "stopped"
    LIMITED = "limited"
    YIELDED = "yielded"
    LOST = "lost"
    INTERRUPTED = "interrupted"


class Exit(StrEnum):
    """What became of the exit action."""

    PENDING = "pending"
    VERIFIED = "verified"
    UNVERIFIED = "unverified"
    NOT_WRITTEN = "not_written"
    NOT_OURS = "not_ours"
