"""Following a test to its end: the first Ctrl-C asks for a stop and waits for the exit, the second leaves."""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

from gainwright_client.errors import NotActive
from gainwright_client.interrupts import Interrupts
from gainwright_wire.tasks import Experiment, StreamProgress, StreamSample

if TYPE_CHECKING:
    from gainwright_client.client import Client

STOPPING = "Stop asked for: the output is being handed back. Waiting for the exit (Ctrl-C again leaves)."


class Left(Exception):
    """The person left; the service goes on with the exit."""


class View(Protocol):
    """Whatever shows a test."""

    def take(self, told: StreamSample | StreamProgress) -> None:
        """Take what the stream tells."""
        ...

    def note(self, text: str) -> None:
        """Say something beside it."""
        ...


def watch(client: Client, id: str, view: View, interrupts: Interrupts) -> Experiment:
    """Follow a test to its end and give it back finished.

    Raises
    ------
    Left
        At the second interrupt.
    """
    last: int | None = None
    asked = False
    while True:
        try:
            interrupts.let_through()
            for told in client.follow(id, last):
                if isinstance(told, Experiment):
                    return told
                if isinstance(told, StreamSample):
                    last = told.number
                view.take(told)
        except KeyboardInterrupt:
            if asked:
                raise Left from None
            asked = True
            with interrupts.kept():
                _stop(client, id, view)


def _stop(client: Client, id: str, view: View) -> None:
    view.note(STOPPING)
    try:
        client.stop_experiment(id)
    except NotActive:
        view.note("The test is over already; waiting for its analysis.")
