"""The parent with real children: restarts what ends or hangs, and ends with them."""

from __future__ import annotations

import os
import signal
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from gainwright_service.supervisor import Child, Supervisor

BEATING = """
import os, time
fd = int(os.environ["GAINWRIGHT_BEAT_FD"])
while True:
    os.write(fd, b".")
    time.sleep(0.02)
"""
ENDING = "raise SystemExit(1)"
BEAT_S = 0.2


def supervised(source: str, act: Callable[[Supervisor, Child], None]) -> Child:
    """Run a parent over one child while ``act`` happens in another thread; the child as it was at the end."""
    child = Child("child", [sys.executable, "-c", source], dict(os.environ))
    supervisor = Supervisor([child], beat_s=BEAT_S, exit_path_s=5.0)
    failures: list[BaseException] = []

    def acting() -> None:
        try:
            act(supervisor, child)
        except AssertionError as error:
            failures.append(error)
        finally:
            supervisor.end()

    thread = threading.Thread(target=acting)
    before = {number: signal.getsignal(number) for number in (signal.SIGTERM, signal.SIGINT)}
    thread.start()
    try:
        assert supervisor.run() == 0
    finally:
        thread.join(10)
        for number, handler in before.items():
            signal.signal(number, handler)
    assert not failures, failures[0]
    return child


def until(condition: Callable[[], bool], seconds: float = 10.0) -> None:
    """Wait for a condition of real processes."""
    deadline = time.monotonic() + seconds
    gate = threading.Event()
    while not condition():
        assert time.monotonic() < deadline, "not in time"
        gate.wait(0.01)


def test_a_child_that_ends_is_started_again() -> None:
    child = supervised(ENDING, lambda _, child: until(lambda: child.restarts >= 2))
    assert child.process is None


@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGSTOP])
def test_a_child_that_is_killed_or_stopped_is_replaced(number: int) -> None:
    def act(_: Supervisor, child: Child) -> None:
        until(lambda: child.has_beaten)
        assert child.process is not None
        old = child.process.pid
        os.kill(old, number)
        until(lambda: child.process is not None and child.process.pid != old and child.has_beaten)

    child = supervised(BEATING, act)
    assert child.restarts == 1


def test_a_child_that_beats_is_left_alone_and_ended_with_the_parent() -> None:
    def act(_: Supervisor, child: Child) -> None:
        until(lambda: child.has_beaten)
        first = child.heard_at
        until(lambda: child.heard_at > first + 5 * BEAT_S)

    child = supervised(BEATING, act)
    assert child.restarts == 0
    assert child.process is None


def test_a_child_on_its_way_out_is_waited_for_while_it_beats(tmp_path: Path) -> None:
    done = tmp_path / "given back"
    slow = f"""
import os, signal, time
ending = []
signal.signal(signal.SIGTERM, lambda *_: ending.append(1))
fd = int(os.environ["GAINWRIGHT_BEAT_FD"])
left = 40
while left:
    os.write(fd, b".")
    time.sleep(0.05)
    left -= len(ending)
open({str(done)!r}, "w").close()
"""
    supervised(slow, lambda _, child: until(lambda: child.has_beaten))
    assert done.exists()


def test_a_child_that_falls_silent_on_its_way_out_is_killed() -> None:
    deaf = BEATING.replace("import os, time", "import os, signal, time\nsignal.signal(signal.SIGTERM, hang)").replace(
        "import os", "def hang(*_):\n    while True:\n        time.sleep(1)\nimport os", 1
    )
    child = supervised(deaf, lambda _, child: until(lambda: child.has_beaten))
    assert child.process is None
