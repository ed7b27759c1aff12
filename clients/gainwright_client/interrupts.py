"""Ctrl-C and SIGTERM: when they may interrupt, when they are kept, when they change nothing.

SIGTERM counts as a Ctrl-C, so that a script that is ended does not leave a test running unattended.
"""

from __future__ import annotations

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

NUMBERS = (signal.SIGINT, signal.SIGTERM)


@contextmanager
def uninterrupted() -> Iterator[None]:
    """Neither ends this block: what is being ended in it is waited for."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {number: signal.signal(number, signal.SIG_IGN) for number in NUMBERS}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


class Interrupts:
    """Ctrl-C and SIGTERM as `KeyboardInterrupt`, while this is entered; held back where a request must end first."""

    def __init__(self) -> None:
        self._holding = False
        self._came = False

    def __enter__(self) -> Interrupts:
        self._before = {number: signal.signal(number, self._take) for number in NUMBERS}
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
