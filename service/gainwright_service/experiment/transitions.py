"""The one transition table: what each state does with each kind of event.

Theory. A test is a short loan of somebody else's output. While LISTENING nothing is ours and every ending is an
ending untouched. From TAKING_OVER on the output may be ours, so every ending is a `leave`: the exit output is asked
for first and the ending's cause is kept for the record, until RETURNING has seen it in force and RESTORING has seen
the mode as found. The one exception is another hand on the loop: then everything of ours stops at once, nothing is
written, and the machine is FINISHED. A kind of event that cannot belong to a state is `astray`: the machine trusts
itself no longer and leaves by the same path. FINISHED takes every event and asks for nothing.

The entries are names of the machine's methods; a test proves that every pair stands here and every name exists.
"""

from __future__ import annotations

from collections.abc import Mapping

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
    Tripped,
    WriteFailed,
)
from gainwright_service.experiment.states import State

KINDS: tuple[type[Event], ...] = (
    Sampled,
    Missed,
    Tripped,
    SomebodyActed,
    StopRequested,
    Interrupted,
    Secured,
    NotSecured,
    TookOver,
    WriteFailed,
    HandedBack,
)

_TESTING: Mapping[type[Event], str] = {
    Sampled: "swing",
    Missed: "wait",
    Tripped: "leave_limited",
    SomebodyActed: "give_way",
    StopRequested: "leave_stopped",
    Interrupted: "leave_interrupted",
    Secured: "astray",
    NotSecured: "astray",
    TookOver: "astray",
    WriteFailed: "leave_unwritten",
    HandedBack: "astray",
}

TABLE: Mapping[State, Mapping[type[Event], str]] = {
    State.LISTENING: {
        Sampled: "listen",
        Missed: "wait",
        Tripped: "end_untouched_limited",
        SomebodyActed: "end_untouched_yielded",
        StopRequested: "end_untouched_stopped",
        Interrupted: "end_untouched_interrupted",
        Secured: "secured",
        NotSecured: "end_untouched_interrupted",
        TookOver: "astray",
        WriteFailed: "astray",
        HandedBack: "astray",
    },
    State.TAKING_OVER: {
        **_TESTING,
        Sampled: "wait",
        TookOver: "begin",
    },
    State.PROBING: _TESTING,
    State.SWINGING: _TESTING,
    State.RETURNING: {
        Sampled: "settle",
        Missed: "await_link",
        Tripped: "note",
        SomebodyActed: "give_way",
        StopRequested: "note",
        Interrupted: "note",
        Secured: "note",
        NotSecured: "note",
        TookOver: "note",
        WriteFailed: "exit_failed",
        HandedBack: "note",
    },
    State.RESTORING: {
        Sampled: "verify",
        Missed: "await_link",
        Tripped: "note",
        SomebodyActed: "give_way",
        StopRequested: "note",
        Interrupted: "note",
        Secured: "note",
        NotSecured: "note",
        TookOver: "note",
        WriteFailed: "exit_failed",
        HandedBack: "note",
    },
    State.FINISHED: dict.fromkeys(KINDS, "note"),
}


def handler_of(state: State, event: Event) -> str:
    """The machine's method for an event in a state."""
    return TABLE[state][type(event)]


GOES_TO: Mapping[str, tuple[State, ...]] = {
    "listen": (State.LISTENING, State.TAKING_OVER, State.FINISHED),
    "secured": (State.LISTENING, State.FINISHED),
    "begin": (State.PROBING, State.RETURNING, State.FINISHED),
    "swing": (State.PROBING, State.SWINGING, State.RETURNING),
    "leave_limited": (State.RETURNING,),
    "leave_stopped": (State.RETURNING,),
    "leave_interrupted": (State.RETURNING,),
    "leave_unwritten": (State.RETURNING,),
    "give_way": (State.FINISHED,),
    "end_untouched_limited": (State.FINISHED,),
    "end_untouched_yielded": (State.FINISHED,),
    "end_untouched_stopped": (State.FINISHED,),
    "end_untouched_interrupted": (State.FINISHED,),
    "astray": (State.RETURNING, State.FINISHED),
    "settle": (State.RETURNING, State.RESTORING, State.FINISHED),
    "await_link": (State.RETURNING, State.RESTORING, State.FINISHED),
    "exit_failed": (State.RETURNING, State.RESTORING, State.FINISHED),
    "verify": (State.RESTORING, State.FINISHED),
    "wait": (),
    "note": (),
}
"""Where each handler may lead; empty where it stays. The machine's tests hold it to this."""


def diagram() -> str:
    """The table as a Mermaid state diagram."""
    edges: dict[tuple[State, State], list[str]] = {}
    for state, row in TABLE.items():
        for kind, handler in row.items():
            for target in GOES_TO[handler]:
                if target is not state:
                    edges.setdefault((state, target), []).append(kind.__name__)
    lines = ["stateDiagram-v2", "    [*] --> listening"]
    for (source, target), kinds in edges.items():
        lines.append(f"    {source} --> {target}: {', '.join(dict.fromkeys(kinds))}")
    lines.append("    finished --> [*]")
    return "\n".join(lines) + "\n"
