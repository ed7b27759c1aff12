"""The parent: two children, `api` and `worker`, watched by their beats, restarted when they end or hang.

Standard library only: no HTTP, no database, no adapter. A child that ends, or misses three beats of one second, is
killed and, once waited for, started again. Children live in sessions of their own, so that a Ctrl-C reaches the parent
alone, which asks them to end and waits for the worker's exit path.
"""

from __future__ import annotations

import os
import selectors
import signal
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

BEAT_S = 1.0
MISSED_BEATS = 3
FIRST_BEAT_S = 20.0
"""A new process has this long to import and to beat for the first time."""
EXIT_PATH_S = 900.0
"""The longest that an ending child is waited for while it beats: above any exit path, return included."""
LONGEST_BACKOFF_S = 5.0


@dataclass
class Child:
    """One watched process.

    Parameters
    ----------
    name : str
    command : sequence of str
    environment : mapping
    ended : str
        Process identifier of the one before, which has been waited for; empty at first.
    """

    name: str
    command: Sequence[str]
    environment: Mapping[str, str]
    process: subprocess.Popen[bytes] | None = None
    beats: int = -1
    heard_at: float = 0.0
    has_beaten: bool = False
    start_after: float = 0.0
    backoff_s: float = 0.0
    restarts: int = field(default=0)
    ended: str = ""

    def start(self, now: float) -> None:
        """Start the process with a pipe for its beats."""
        reader, writer = os.pipe()
        os.set_blocking(reader, False)
        environment = {**self.environment, "GAINWRIGHT_BEAT_FD": str(writer), "GAINWRIGHT_ENDED_WORKER": self.ended}
        self.process = subprocess.Popen(
            list(self.command), env=environment, pass_fds=(writer,), start_new_session=True, stdin=subprocess.DEVNULL
        )
        os.close(writer)
        self.beats, self.heard_at, self.has_beaten = reader, now, False

    def listen(self, now: float, beat_s: float) -> None:
        """Take the beats that have come."""
        if self.beats < 0:
            return
        try:
            heard = os.read(self.beats, 4096)
        except BlockingIOError:
            return
        if heard:
            self.heard_at, self.has_beaten = now, True
            if self.backoff_s and now - self.start_after > 10 * beat_s:
                self.backoff_s = 0.0

    def silent(self, now: float, beat_s: float) -> bool:
        """Whether it has missed its beats."""
        bound = MISSED_BEATS * beat_s if self.has_beaten else FIRST_BEAT_S
        return now - self.heard_at > bound

    def kill(self) -> None:
        """Kill it and wait for it, so that what it held is free before another starts."""
        if self.process is None:
            return
        if self.process.poll() is None:
            self.process.kill()
        self.process.wait()
        # Waited for: whoever follows need not fear that it still acts.
        self.ended = str(self.process.pid)
        self.process = None
        os.close(self.beats)
        self.beats = -1


class Supervisor:
    """The parent's loop.

    Parameters
    ----------
    children : sequence of Child
    beat_s : float
    exit_path_s : float
        How long the children are waited for at the end.
    """

    def __init__(self, children: Sequence[Child], *, beat_s: float = BEAT_S, exit_path_s: float = EXIT_PATH_S) -> None:
        self.children = list(children)
        self._beat_s = beat_s
        self._exit_path_s = exit_path_s
        self._ending = False

    def end(self, *_: object) -> None:
        """Begin the end; safe as a signal handler."""
        self._ending = True

    def run(self) -> int:
        """Watch until asked to end; the exit status."""
        for number in (signal.SIGTERM, signal.SIGINT):
            signal.signal(number, self.end)
        try:
            while not self._ending:
                now = time.monotonic()
                for child in self.children:
                    self._tend(child, now)
                self._wait()
        finally:
            self._end_children()
        return 0

    def _tend(self, child: Child, now: float) -> None:
        if child.process is None:
            if now >= child.start_after:
                child.start(now)
            return
        child.listen(now, self._beat_s)
        ended = child.process.poll() is not None
        if ended or child.silent(now, self._beat_s):
            _say(f"{child.name} {'ended' if ended else 'missed its beats'}; it is started again")
            child.kill()
            child.restarts += 1
            child.start_after = now + child.backoff_s
            child.backoff_s = min(max(2 * child.backoff_s, self._beat_s / 4), LONGEST_BACKOFF_S)

    def _wait(self) -> None:
        """Until a beat comes or a fraction of a beat is over."""
        with selectors.DefaultSelector() as selector:
            for child in self.children:
                if child.beats >= 0:
                    selector.register(child.beats, selectors.EVENT_READ)
            selector.select(self._beat_s / 10)
        time.sleep(self._beat_s / 50)

    def _end_children(self) -> None:
        for child in self.children:
            if child.process is not None and child.process.poll() is None:
                child.process.terminate()
        deadline = time.monotonic() + self._exit_path_s
        for child in self.children:
            while child.process is not None and child.process.poll() is None:
                now = time.monotonic()
                child.listen(now, self._beat_s)
                # One that still beats is on its way out, with outputs in its hands; a silent one does nothing more.
                if child.silent(now, self._beat_s) or now > deadline:
                    _say(f"{child.name} did not end in time and is killed")
                    break
                self._wait()
            child.kill()


def serve(environment: Mapping[str, str], *, site: str) -> int:
    """Run the service: the API and the site's worker, until SIGTERM or Ctrl-C."""
    python = [sys.executable, "-m"]
    worker = Child("worker", [*python, "gainwright_service.worker_process", "--site", site], environment)
    api = Child("api", [*python, "gainwright_service.api"], environment)
    return Supervisor([worker, api]).run()


def _say(text: str) -> None:
    sys.stderr.write(f"gainwright: {text}\n")
    sys.stderr.flush()
