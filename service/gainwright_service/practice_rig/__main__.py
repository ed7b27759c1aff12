"""The rig as a process: serves until asked to end, prints the true values, logs every write."""

from __future__ import annotations

import argparse
import asyncio
import json
import logging
import os
import signal
import sys
import time
from pathlib import Path
from typing import Any, TextIO

from gainwright_service.practice_rig.device import Device
from gainwright_service.practice_rig.dye_house import DYE_HOUSE
from gainwright_service.practice_rig.server import serving

ADVANCE_S = 0.02
"""Devices live on between accesses: watchdogs fire and controllers act at this interval."""


def main(argv: list[str] | None = None) -> int:
    """Serve the dye house; the process's exit status."""
    parser = argparse.ArgumentParser(
        prog="gainwright practice-rig",
        description="Serves the dye house's five loops over Modbus TCP, in real time, until interrupted. "
        "Lines of JSON on standard input act as the person at the rig, e.g. "
        '{"loop": "TIC-201", "set": {"output": 52}}.',
    )
    parser.add_argument("--host", default="127.0.0.1")
    parser.add_argument("--port", type=int, default=5020, help="0 takes a free port")
    parser.add_argument("--log", type=Path, help="file for one JSON line per write")
    parser.add_argument("--seed", type=int, default=201)
    parser.add_argument("--json", action="store_true", help="print one JSON document in place of the table")
    parser.add_argument("--lifeline", action="store_true", help="end when standard input closes")
    options = parser.parse_args(argv)
    logging.getLogger("pymodbus").setLevel(logging.CRITICAL)
    log = options.log.open("a", buffering=1) if options.log else None
    try:
        return asyncio.run(_serve(options, log))
    finally:
        if log is not None:
            log.close()


async def _serve(options: argparse.Namespace, log: TextIO | None) -> int:
    def write(loop: str, what: str, value: float, by: str) -> None:
        if log is not None:
            entry = {"t": time.time(), "monotonic_s": time.monotonic(), "loop": loop, "what": what, "value": value}
            log.write(json.dumps({**entry, "by": by}) + "\n")

    started = time.monotonic()
    devices = [Device(loop, write, started, options.seed + k) for k, loop in enumerate(DYE_HOUSE)]
    try:
        server = await serving(devices, time.monotonic, options.host, options.port)
    except (OSError, RuntimeError) as error:
        sys.stderr.write(f"port {options.port}: cannot be served: {error}\n")
        return 3
    # The protocol's library types its transport loosely; a listening TCP server has sockets.
    transport: Any = server.transport
    port = int(transport.sockets[0].getsockname()[1])
    _announce(options, port)
    ended = asyncio.Event()
    event_loop = asyncio.get_running_loop()
    for number in (signal.SIGTERM, signal.SIGINT):
        event_loop.add_signal_handler(number, ended.set)
    door = Door(devices, ended if options.lifeline else None, event_loop)
    door.open()
    while not ended.is_set():
        now = time.monotonic()
        for device in devices:
            device.advance(now)
        try:
            async with asyncio.timeout(ADVANCE_S):
                await ended.wait()
        except TimeoutError:
            continue
    await server.shutdown()  # type: ignore[no-untyped-call]
    return 0


class Door:
    """The person's way in: lines of JSON on standard input.

    Parameters
    ----------
    devices : list of Device
    ended : asyncio.Event or None
        Set when standard input closes.
    event_loop : asyncio.AbstractEventLoop
    """

    def __init__(
        self, devices: list[Device], ended: asyncio.Event | None, event_loop: asyncio.AbstractEventLoop
    ) -> None:
        self._devices = devices
        self._ended = ended
        self._event_loop = event_loop
        self._rest = b""

    def open(self) -> None:
        """Listen where standard input can be waited for; a file or the null device has nobody behind it."""
        try:
            self._event_loop.add_reader(sys.stdin.fileno(), self._take)
        except (OSError, ValueError):
            return

    def _take(self) -> None:
        taken = os.read(sys.stdin.fileno(), 65536)
        if not taken:
            self._event_loop.remove_reader(sys.stdin.fileno())
            if self._ended is not None:
                self._ended.set()
            return
        *lines, self._rest = (self._rest + taken).split(b"\n")
        for line in lines:
            self._operate(line)

    def _operate(self, line: bytes) -> None:
        try:
            document: dict[str, Any] = json.loads(line)
            device = next(d for d in self._devices if d.loop.tag == document["loop"])
            device.advance(time.monotonic())
            device.operate(document["set"])
        except (ValueError, KeyError, StopIteration, TypeError) as error:
            sys.stderr.write(f"not understood: {line!r} ({error})\n")


def _announce(options: argparse.Namespace, port: int) -> None:
    loops = [
        {"definition": loop.definition(options.host, port), "true": loop.truth(), "description": loop.description}
        for loop in DYE_HOUSE
    ]
    if options.json:
        sys.stdout.write(json.dumps({"host": options.host, "port": port, "loops": loops}) + "\n")
    else:
        sys.stdout.write(f"The dye house is served over Modbus TCP at {options.host}:{port}. Ctrl-C ends it.\n\n")
        sys.stdout.write(f"{'loop':10}{'device':>7}  {'true ultimate gain':>22}  {'true ultimate period':>20}\n")
        for loop in DYE_HOUSE:
            truth = loop.truth()
            gain = f"{truth['ultimate_gain']:.4g} %/{loop.unit}"
            period = f"{truth['ultimate_period_s']:.4g} s"
            sys.stdout.write(f"{loop.tag:10}{loop.device_id:>7}  {gain:>22}  {period:>20}  {loop.description}\n")
    sys.stdout.flush()


if __name__ == "__main__":
    raise SystemExit(main())
