"""The practice rig and the service as processes of one's own, on free loopback ports; ended and waited for at the end.

Owns starting, waiting until they are ready, and ending, whatever happens between. Knows nothing of what is done with
them.
"""

from __future__ import annotations

import json
import os
import selectors
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx

from gainwright_client.interrupts import uninterrupted

READY_S = 30.0
POLL_S = 0.05
EXIT_S = 60.0
"""Longer than the service's own wait for the worker's exit path."""
TAIL_LINES = 15


class NotReady(Exception):
    """A process ended, or was not ready in time; ``detail`` holds the end of what it said."""

    def __init__(self, name: str, detail: str) -> None:
        self.detail = detail
        super().__init__(f"the {name} did not get ready:\n{detail}" if detail else f"the {name} did not get ready")


@dataclass(frozen=True, slots=True)
class Rig:
    """A running practice rig: its loops' definitions and true values by tag."""

    host: str
    port: int
    loops: dict[str, dict[str, Any]]
    process: subprocess.Popen[bytes]


@dataclass(frozen=True, slots=True)
class Service:
    """A running service: its address and the first person's token."""

    url: str
    token: str
    process: subprocess.Popen[bytes]


@contextmanager
def practice_rig(folder: Path) -> Iterator[Rig]:
    """A rig that logs its writes in the folder. It ends by itself when this process is no more."""
    command = [sys.executable, "-m", "gainwright_service.practice_rig", "--port", "0", "--json", "--lifeline"]
    said = folder / "rig.log"
    with said.open("ab") as errors:
        process = subprocess.Popen(
            [*command, "--log", str(folder / "rig.jsonl")],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=errors,
            start_new_session=True,
        )
    try:
        announced = json.loads(_first_line(process, said))
        loops = {loop["definition"]["tag"]: loop for loop in announced["loops"]}
        yield Rig(announced["host"], announced["port"], loops, process)
    finally:
        with uninterrupted():
            _end(process)


@contextmanager
def service(folder: Path) -> Iterator[Service]:
    """A service whose data lies in the folder, with none of this process's own settings; ends by itself as the rig."""
    url = f"http://127.0.0.1:{_free_port()}"
    said = folder / "service.log"
    environment = {name: value for name, value in os.environ.items() if not name.startswith("GAINWRIGHT_")}
    command = [sys.executable, "-m", "gainwright_client", "serve"]
    with said.open("ab") as output:
        process = subprocess.Popen(
            [*command, "--port", url.rpartition(":")[2], "--data-dir", str(folder), "--lifeline"],
            env=environment,
            stdin=subprocess.PIPE,
            stdout=output,
            stderr=output,
            start_new_session=True,
        )
    try:
        _wait_ready(url, process, said)
        yield Service(url, (folder / "first-token").read_text(encoding="utf-8").strip(), process)
    finally:
        with uninterrupted():
            _end(process)


def _first_line(process: subprocess.Popen[bytes], said: Path) -> bytes:
    """What the process says first."""
    assert process.stdout is not None
    with selectors.DefaultSelector() as selector:
        selector.register(process.stdout, selectors.EVENT_READ)
        line = process.stdout.readline() if selector.select(READY_S) else b""
    if not line:
        raise NotReady("practice rig", _tail(said))
    return line


def _wait_ready(url: str, process: subprocess.Popen[bytes], said: Path) -> None:
    deadline = time.monotonic() + READY_S
    with httpx.Client(timeout=2.0, trust_env=False) as http:
        while process.poll() is None and time.monotonic() < deadline:
            try:
                if http.get(f"{url}/health/ready").status_code == httpx.codes.OK:
                    return
            except httpx.TransportError:
                # Nobody listens yet; the deadline bounds the wait.
                pass
            time.sleep(POLL_S)
    raise NotReady("service", _tail(said))


def _end(process: subprocess.Popen[bytes]) -> None:
    """Ask the process to end, wait, and kill it only if it does not."""
    if process.poll() is None:
        process.terminate()
    try:
        process.wait(EXIT_S)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()
    for stream in (process.stdin, process.stdout):
        if stream is not None:
            stream.close()


def _free_port() -> int:
    """A loopback port that was free a moment ago."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def _tail(file: Path) -> str:
    lines = file.read_text(encoding="utf-8", errors="replace").splitlines()
    return "\n".join(lines[-TAIL_LINES:])
