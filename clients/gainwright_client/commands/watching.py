"""Following a test to its end: the first Ctrl-C asks the service for a stop and waits for the exit; the second leaves.

SIGTERM counts as a Ctrl-C, so that a script that is ended does not leave a test running unattended.
"""

from __future__ import annotations

import signal
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType
from typing import TYPE_CHECKING, Protocol

from gainwright_client.errors import NotActive
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


class Interrupts:
    """Ctrl-C and SIGTERM as `KeyboardInterrupt`, while this is entered; held back where a request must end first."""

    def __init__(self) -> None:
        self._holding = False
        self._came = False

    def __enter__(self) -> Interrupts:
        self._before = {number: signal.signal(number, self._take) for number in (signal.SIGINT, signal.SIGTERM)}
        return self

    def __exit__(self, *raised: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    @contextmanager
    def kept(self) -> Iterator[None]:
        """An interrupt in this block is kept for `let_through`."""
        self._holding = True
        try:
            yield
        finally:
            self._holding = False

    def let_through(self) -> None:
        """Raise what was kept."""
        if self._came:
            self._came = False
            raise KeyboardInterrupt

    def _take(self, number: int, frame: FrameType | None) -> None:
        if self._holding:
            self._came = True
        else:
            raise KeyboardInterrupt


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
