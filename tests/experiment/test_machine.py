"""The machine against any sequence of events: limits kept, exits asked for, silence after a yield."""

from __future__ import annotations

import itertools
from dataclasses import replace

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from experiment_bench import PLAN
from gainwright_service.experiment.commands import Command, Finish, HandBack, TakeOver, WriteExit, WriteTest
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
from gainwright_service.experiment.readings import Mode, Quality, Reading
from gainwright_service.experiment.states import Exit, Outcome, State
from gainwright_service.experiment.transitions import GOES_TO, KINDS, TABLE, diagram

PLAN_FAST = replace(PLAN, listening_s=0.75, listening_samples=8, first_wait_s=0.3, max_switches=12)
TRIP = Trip("D1", 4.0, 3.0, "", "too far")


def reading(now: float, value: float = 60.0, output: float | None = 45.0, mode: Mode = Mode.MANUAL) -> Reading:
    return Reading(value, output, 60.0, mode, None, Quality.GOOD, now)


def event_of(kind: type[Event], now: float, value: float = 60.0, output: float | None = 45.0) -> Event:
    made: dict[type[Event], Event] = {
        Sampled: Sampled(now, reading(now, value, output)),
        Missed: Missed(now, "no answer"),
        Tripped: Tripped(now, TRIP),
        SomebodyActed: SomebodyActed(now, replace(TRIP, item="D6", yields=True)),
        StopRequested: StopRequested(now, "Ada"),
        Interrupted: Interrupted(now, "shut down"),
        Secured: Secured(now),
        NotSecured: NotSecured(now, "disk full"),
        TookOver: TookOver(now),
        WriteFailed: WriteFailed(now, "no answer", refused=False),
        HandedBack: HandedBack(now),
    }
    return made[kind]


def machine_in(state: State) -> Machine:
    """A machine brought to a state by the events of a plain test."""
    machine = Machine(PLAN_FAST, 0.0)
    now = 0.0
    while machine.facts is None and now < 5.0:
        now += 0.1
        machine.handle(event_of(Sampled, now, 60.0 + 0.001 * (round(now * 10) % 3)))
    steps: dict[State, list[type[Event]]] = {
        State.TAKING_OVER: [Secured, Sampled],
        State.PROBING: [Secured, Sampled, TookOver],
        State.SWINGING: [Secured, Sampled, TookOver],
        State.RETURNING: [Secured, Sampled, TookOver, StopRequested],
        State.RESTORING: [Secured, Sampled, TookOver, StopRequested],
        State.FINISHED: [Secured, Sampled, TookOver, SomebodyActed],
    }
    if state is State.LISTENING:
        return Machine(PLAN_FAST, 0.0)
    for kind in steps[state]:
        now += 0.1
        machine.handle(event_of(kind, now))
    if state is State.SWINGING:
        machine.handle(event_of(Sampled, now + 0.1, 61.0))
    if state is State.RESTORING:
        machine.state = State.RESTORING
    assert machine.state is state
    return machine


def test_every_pair_of_state_and_event_stands_in_the_table_with_a_handler_that_exists() -> None:
    for state, kind in itertools.product(State, KINDS):
        handler = TABLE[state][kind]
        assert handler in GOES_TO
        assert callable(getattr(Machine, f"_{handler}"))


@pytest.mark.parametrize("state", list(State))
@pytest.mark.parametrize("kind", KINDS)
def test_every_event_leads_where_the_table_says(state: State, kind: type[Event]) -> None:
    machine = machine_in(state)
    machine.handle(event_of(kind, 100.0))
    assert machine.state is state or machine.state in GOES_TO[TABLE[state][kind]]


def check(machine: Machine, commands: tuple[Command, ...], was: State) -> None:
    """What holds after every event."""
    resting = machine.facts.resting_output if machine.facts else 45.0
    for command in commands:
        if isinstance(command, WriteTest):
            for output in (command.output, command.coming):
                assert PLAN_FAST.output_low <= output <= PLAN_FAST.output_high
                assert abs(output - resting) <= PLAN_FAST.max_output_change + 1e-9
        if isinstance(command, WriteExit):
            assert PLAN_FAST.range_low <= command.output <= PLAN_FAST.range_high
    if was is State.FINISHED:
        assert commands == ()
    if machine.outcome is Outcome.YIELDED:
        assert not any(isinstance(c, WriteTest | WriteExit | HandBack | TakeOver) for c in commands)


def drive(kinds: list[tuple[type[Event], float, float]]) -> None:
    """Feed events and hold every invariant, the exit's included."""
    machine = Machine(PLAN_FAST, 0.0)
    now, drove, exit_asked = 0.0, False, False
    for kind, value, output in kinds:
        now += 0.1
        was = machine.state
        commands = machine.handle(event_of(kind, now, value, output))
        check(machine, commands, was)
        drove = drove or any(isinstance(c, WriteTest) for c in commands)
        exit_asked = exit_asked or any(isinstance(c, WriteExit) for c in commands)
        for command in commands:
            if isinstance(command, Finish):
                given_up = command.exit in (Exit.NOT_WRITTEN, Exit.NOT_OURS)
                assert not drove or exit_asked or machine.outcome is Outcome.YIELDED or given_up


@pytest.mark.parametrize("state", list(State))
def test_every_sequence_of_event_kinds_to_length_three_keeps_the_limits_from_every_state(state: State) -> None:
    """With the plain test's events before them, these are sequences far beyond length four from the start."""
    for kinds in itertools.product(KINDS, repeat=3):
        machine = machine_in(state) if state is not State.LISTENING else Machine(PLAN_FAST, 0.0)
        for k, kind in enumerate(kinds):
            was = machine.state
            check(machine, machine.handle(event_of(kind, 100.0 + k)), was)


def test_every_sequence_of_event_kinds_to_length_four_keeps_the_limits_from_the_start() -> None:
    for kinds in itertools.product(KINDS, repeat=4):
        drive([(kind, 60.0, 45.0) for kind in kinds])


LIKELY = st.sampled_from([*([Sampled] * 12), *KINDS])
EVENTS = st.lists(
    st.tuples(LIKELY, st.floats(56.0, 64.0), st.sampled_from([45.0, 43.0, 47.0, 40.0, 50.0])),
    min_size=50,
    max_size=90,
)


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large])
@given(EVENTS)
def test_any_sequence_of_events_keeps_the_limits(events: list[tuple[type[Event], float, float]]) -> None:
    start: list[tuple[type[Event], float, float]] = [(Sampled, 60.0 + 0.001 * (k % 3), 45.0) for k in range(10)]
    drive([*start, (Secured, 60.0, 45.0), (TookOver, 60.0, 45.0), *events])


def test_the_diagram_names_every_state() -> None:
    text = diagram()
    assert all(str(state) in text for state in State)
