"""Following a test from the command: interrupts become a stop, and the exit is waited for."""

from __future__ import annotations

import signal
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any, cast

import pytest

from gainwright_client.client import Client
from gainwright_client.commands.watching import STOPPING, Left, watch
from gainwright_client.errors import NotActive
from gainwright_client.interrupts import Interrupts, uninterrupted
from gainwright_wire.problems import Problem, ProblemCode
from gainwright_wire.tasks import Experiment, Phase, StreamProgress, StreamSample

END = Experiment.model_construct(id="e")
OVER = Problem(title="t", status=409, detail="it is over", code=ProblemCode.NOT_ACTIVE)


def _sample(number: int) -> StreamSample:
    return StreamSample(
        number=number,
        time_s=number,
        process_variable=1,
        controller_output=1,
        commanded_output=1,
        phase=Phase.SWINGING,
    )


@dataclass
class Scripted:
    """A client that tells what its script says; a signal in the script is raised there."""

    scripts: list[list[Any]]
    over: bool = False
    follows: list[int | None] = field(default_factory=list)
    stops: list[str] = field(default_factory=list)

    def follow(self, id: str, after: int | None = None) -> Iterator[Any]:
        self.follows.append(after)
        for told in self.scripts.pop(0):
            if isinstance(told, signal.Signals):
                signal.raise_signal(told)
            else:
                yield told

    def stop_experiment(self, id: str) -> None:
        self.stops.append(id)
        if self.over:
            raise NotActive(OVER)


@dataclass
class Notebook:
    """A view that remembers."""

    numbers: list[int] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    def take(self, told: StreamSample | StreamProgress) -> None:
        if isinstance(told, StreamSample):
            self.numbers.append(told.number)

    def note(self, text: str) -> None:
        self.notes.append(text)


def _watched(client: Scripted, view: Notebook) -> Experiment:
    with Interrupts() as interrupts:
        return watch(cast(Client, client), "e", view, interrupts)


def test_a_test_is_followed_to_its_end() -> None:
    client, view = Scripted([[_sample(0), StreamProgress(), _sample(1), END]]), Notebook()
    assert _watched(client, view) is END
    assert (view.numbers, client.stops) == ([0, 1], [])


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_the_first_interrupt_asks_for_a_stop_and_follows_on_where_it_was(number: signal.Signals) -> None:
    client, view = Scripted([[_sample(0), _sample(1), number], [_sample(2), END]]), Notebook()
    assert _watched(client, view) is END
    assert (client.stops, client.follows) == (["e"], [None, 1])
    assert (view.numbers, view.notes) == ([0, 1, 2], [STOPPING])


def test_an_interrupt_after_the_end_is_no_error() -> None:
    client, view = Scripted([[signal.SIGINT], [END]], over=True), Notebook()
    assert _watched(client, view) is END
    assert view.notes[-1].startswith("The test is over already")


def test_the_second_interrupt_leaves() -> None:
    client = Scripted([[signal.SIGINT], [signal.SIGINT]])
    with pytest.raises(Left):
        _watched(client, Notebook())
    assert client.stops == ["e"]


def test_an_interrupt_during_the_start_is_kept_until_the_test_is_followed() -> None:
    client = Scripted([[END]])
    with Interrupts() as interrupts:
        with interrupts.kept():
            signal.raise_signal(signal.SIGINT)
        assert watch(cast(Client, client), "e", Notebook(), interrupts) is END
    assert client.stops == ["e"]


def test_the_handlers_of_before_are_put_back() -> None:
    before = signal.getsignal(signal.SIGTERM)
    with Interrupts():
        assert signal.getsignal(signal.SIGTERM) != before
    assert signal.getsignal(signal.SIGTERM) == before


def test_what_is_being_ended_is_not_interrupted() -> None:
    with Interrupts(), uninterrupted():
        signal.raise_signal(signal.SIGINT)
        signal.raise_signal(signal.SIGTERM)
