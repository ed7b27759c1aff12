"""Shared links: one Modbus TCP connection per device address, taken in turns, urgent exchanges first.

Owns connecting, turns, time-outs and the one table that translates foreign errors. Knows no loops and no registers.
After a time-out or a cancelled exchange the connection is dropped, so that a late reply is never taken for the answer
to another request.
"""

from __future__ import annotations

import asyncio
import logging
from collections import deque
from collections.abc import AsyncIterator, Awaitable, Callable
from contextlib import asynccontextmanager
from typing import TypeVar

from pymodbus.client import AsyncModbusTcpClient
from pymodbus.exceptions import ConnectionException, ModbusException, ModbusIOException
from pymodbus.pdu import ModbusPDU

from gainwright_service.errors import AdapterError, DeviceNonsensical, DeviceRefused, DeviceTimedOut, DeviceUnreachable

logging.getLogger("pymodbus").setLevel(logging.CRITICAL)

T = TypeVar("T", bound=ModbusPDU)

FOREIGN_ERRORS: tuple[tuple[type[BaseException], type[AdapterError], str], ...] = (
    (TimeoutError, DeviceTimedOut, "no answer in time"),
    (ConnectionException, DeviceUnreachable, "the connection broke"),
    (ModbusIOException, DeviceTimedOut, "no answer in time"),
    (ModbusException, DeviceNonsensical, "an answer that is no Modbus reply"),
    (OSError, DeviceUnreachable, "no connection"),
)
"""Foreign error, ours, and what to say; the first that fits counts."""


class Turns:
    """A lock that is handed to urgent waiters first, each kind in order of arrival."""

    def __init__(self) -> None:
        self._held = False
        self._urgent: deque[asyncio.Future[None]] = deque()
        self._ordinary: deque[asyncio.Future[None]] = deque()

    @asynccontextmanager
    async def turn(self, *, urgent: bool) -> AsyncIterator[None]:
        """Hold the link for one exchange."""
        if self._held:
            waiter: asyncio.Future[None] = asyncio.get_running_loop().create_future()
            queue = self._urgent if urgent else self._ordinary
            queue.append(waiter)
            try:
                await waiter
            except asyncio.CancelledError:
                if waiter in queue:
                    queue.remove(waiter)
                elif waiter.done() and not waiter.cancelled():
                    self._pass_on()
                raise
        self._held = True
        try:
            yield
        finally:
            self._pass_on()

    def _pass_on(self) -> None:
        for queue in (self._urgent, self._ordinary):
            while queue:
                waiter = queue.popleft()
                if not waiter.done():
                    # Still held: the turn goes straight to the waiter.
                    waiter.set_result(None)
                    return
        self._held = False


class ModbusLink:
    """One connection to one device address, shared by all its loops.

    Parameters
    ----------
    host : str
    port : int
    """

    def __init__(self, host: str, port: int) -> None:
        self.name = f"{host}:{port}"
        self._host = host
        self._port = port
        self._turns = Turns()
        self._client: AsyncModbusTcpClient | None = None

    async def exchange(
        self, request: Callable[[AsyncModbusTcpClient], Awaitable[T]], *, timeout_s: float, urgent: bool
    ) -> T:
        """One request and its reply, connecting first where needed; everything within ``timeout_s`` once its turn
        has come, the wait for the turn within as much again.

        Raises
        ------
        AdapterError
        """
        try:
            async with asyncio.timeout(2 * timeout_s), self._turns.turn(urgent=urgent), asyncio.timeout(timeout_s):
                return await self._exchange(request)
        except TimeoutError as error:
            raise DeviceTimedOut(f"{self.name}: no answer within {timeout_s:g} s") from error

    def close(self) -> None:
        """Drop the connection; the next exchange connects anew."""
        client, self._client = self._client, None
        if client is not None:
            client.close()

    async def _exchange(self, request: Callable[[AsyncModbusTcpClient], Awaitable[T]]) -> T:
        done = False
        try:
            client = await self._connected()
            reply = await request(client)
            done = True
        except tuple(foreign for foreign, _, _ in FOREIGN_ERRORS) as error:
            raise self._translated(error) from error
        finally:
            if not done:
                self.close()
        if reply.isError():
            raise DeviceRefused(f"{self.name}: the device refuses: {reply}")
        return reply

    async def _connected(self) -> AsyncModbusTcpClient:
        if self._client is not None and self._client.connected:
            return self._client
        self.close()
        # The outer time-out bounds the exchange; the library's own must not cut in before it, nor retry behind it.
        client = AsyncModbusTcpClient(self._host, port=self._port, timeout=2.0, retries=0, reconnect_delay=0)
        self._client = client
        if not await client.connect():
            raise DeviceUnreachable(f"{self.name}: no connection")
        return client

    def _translated(self, error: BaseException) -> AdapterError:
        for foreign, ours, sentence in FOREIGN_ERRORS:
            if isinstance(error, foreign):
                return ours(f"{self.name}: {sentence}: {error}".rstrip(": "))
        return DeviceUnreachable(f"{self.name}: {error}")


class Links:
    """All links of a worker, one per address."""

    def __init__(self) -> None:
        self._modbus: dict[tuple[str, int], ModbusLink] = {}

    def modbus(self, host: str, port: int) -> ModbusLink:
        """The link to an address, shared by whoever asks."""
        return self._modbus.setdefault((host, port), ModbusLink(host, port))

    def close(self) -> None:
        """Drop every connection."""
        for link in self._modbus.values():
            link.close()
        self._modbus.clear()
