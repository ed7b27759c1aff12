"""A real site for tests: the practice rig and the service as processes of their own, on free loopback ports.

Owns starting, finding, killing and ending those processes, and reading the rig's own log. Asserts nothing.
"""

from __future__ import annotations

import contextlib
import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx

POLL_S = 0.05


def free_port() -> int:
    """A loopback port that was free a moment ago."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def wait_for(what: str, condition: Callable[[], Any], timeout_s: float) -> Any:
    """The first true value of ``condition``, asked often; an error that names ``what`` after ``timeout_s``."""
    deadline = time.monotonic() + timeout_s
    while True:
        value = condition()
        if value:
            return value
        if time.monotonic() > deadline:
            raise AssertionError(f"{what}: not within {timeout_s} s")
        time.sleep(POLL_S)


def processes_of(marker: str) -> dict[int, str]:
    """Processes whose environment holds ``marker``: process id to command line."""
    found: dict[int, str] = {}
    for entry in Path("/proc").iterdir():
        if not entry.name.isdigit() or int(entry.name) == os.getpid():
            continue
        with contextlib.suppress(OSError):
            if marker.encode() in (entry / "environ").read_bytes():
                line = (entry / "cmdline").read_bytes().replace(b"\0", b" ").decode().strip()
                if line:
                    found[int(entry.name)] = line
    return found


@dataclass
class Rig:
    """The practice rig, its loops and its log."""

    process: subprocess.Popen[str]
    announced: dict[str, Any]
    log: Path

    def loop(self, tag: str) -> dict[str, Any]:
        """The announced loop: its wire definition and its true values."""
        for loop in self.announced["loops"]:
            if loop["definition"]["tag"] == tag:
                return dict(loop)
        raise KeyError(tag)

    def operate(self, document: dict[str, Any]) -> None:
        """Act as the person at the rig."""
        assert self.process.stdin is not None
        self.process.stdin.write(json.dumps(document) + "\n")
        self.process.stdin.flush()

    def entries(self, tag: str, what: str | None = None) -> list[dict[str, Any]]:
        """What the rig logged of one loop so far."""
        found = []
        for line in self.log.read_text().splitlines():
            with contextlib.suppress(json.JSONDecodeError):
                entry = json.loads(line)
                if entry.get("loop") == tag and (what is None or entry.get("what") == what):
                    found.append(entry)
        return found


@contextlib.contextmanager
def practice_rig(folder: Path) -> Iterator[Rig]:
    """The rig as a process; ended and waited for at the end."""
    log = folder / "rig.jsonl"
    log.touch()
    command = [sys.executable, "-m", "gainwright_service.practice_rig", "--port", "0", "--log", str(log), "--json"]
    process = subprocess.Popen(
        command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, start_new_session=True
    )
    try:
        assert process.stdout is not None
        yield Rig(process, json.loads(process.stdout.readline()), log)
    finally:
        _end(process)


@dataclass
class Service:
    """The service's processes, found by a marker in their environment."""

    parent: subprocess.Popen[bytes]
    marker: str
    url: str
    token: str
    folder: Path

    def http(self) -> httpx.Client:
        """A plain HTTP client with the first person's token."""
        return httpx.Client(base_url=self.url, headers={"Authorization": f"Bearer {self.token}"}, timeout=10)

    def children(self, module: str) -> list[int]:
        """Process ids of one of the service's modules, e.g. ``gainwright_service.worker_process``."""
        return sorted(pid for pid, line in processes_of(self.marker).items() if f"-m {module}" in line)

    def kill(self, module: str) -> int:
        """``kill -9`` one of the service's processes; its process id."""
        pid = self.children(module)[0]
        os.kill(pid, signal.SIGKILL)
        return pid

    def kill_everything(self) -> None:
        """``kill -9`` the parent first, then all the others."""
        os.kill(self.parent.pid, signal.SIGKILL)
        for pid in processes_of(self.marker):
            with contextlib.suppress(ProcessLookupError):
                os.kill(pid, signal.SIGKILL)
        self.parent.wait(10)


@contextlib.contextmanager
def service(folder: Path, *, database_url: str | None = None) -> Iterator[Service]:
    """The service on a free port with its data in ``folder``; every process ended and waited for at the end."""
    port = free_port()
    marker = f"GAINWRIGHT_TEST_SITE={folder}"
    name, value = marker.split("=", 1)
    environment = {
        **os.environ,
        name: value,
        "GAINWRIGHT_DATA_DIR": str(folder),
        "GAINWRIGHT_HOST": "127.0.0.1",
        "GAINWRIGHT_PORT": str(port),
        "GAINWRIGHT_FIRST_PERSON": "first engineer",
    }
    if database_url is not None:
        environment["GAINWRIGHT_DATABASE_URL"] = database_url
    log = (folder / "service.log").open("ab")
    command = [sys.executable, "-m", "gainwright_client", "serve"]
    parent = subprocess.Popen(command, env=environment, stdout=log, stderr=log, start_new_session=True)
    url = f"http://127.0.0.1:{port}"
    try:
        wait_for("the service is ready", lambda: _ready(url), 30)
        yield Service(parent, marker, url, (folder / "first-token").read_text().strip(), folder)
    finally:
        _end(parent)
        for pid in processes_of(marker):
            with contextlib.suppress(ProcessLookupError):
                os.kill(pid, signal.SIGKILL)
        log.close()


def _ready(url: str) -> bool:
    with contextlib.suppress(httpx.HTTPError):
        return httpx.get(f"{url}/health/ready", timeout=2).status_code == 200
    return False


def _end(process: subprocess.Popen[Any]) -> None:
    if process.poll() is None:
        process.terminate()
    try:
        process.wait(20)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait(10)
    for stream in (process.stdin, process.stdout):
        if stream is not None:
            stream.close()
