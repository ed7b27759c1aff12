"""A loop in a Modbus TCP device: addresses on a shared link.

Owns which registers are read together and what they mean to the port. Knows no limits and no experiments.
"""

from __future__ import annotations

import math
from collections.abc import Awaitable, Callable, Sequence
from dataclasses import dataclass

from pymodbus.client import AsyncModbusTcpClient
from pymodbus.pdu import ModbusPDU

from gainwright_service.adapters.links import ModbusLink
from gainwright_service.adapters.port import (
    Capabilities,
    ControllerGains,
    Identity,
    Mode,
    Quality,
    Reading,
    Watchdog,
)
from gainwright_service.adapters.registers import decoded, encoded, quantum_of, words_of
from gainwright_service.clock import Clock
from gainwright_service.errors import DeviceNonsensical, DeviceRefused
from gainwright_wire.loops import GainRegisters, Loop, ModbusTcp, ModeRegister, Range, Register

WIDEST_GAP = 24
"""Unused registers that are read along rather than asked for in another exchange."""
MOST_WORDS = 120
FAR_OUTSIDE = 1.0
"""A process variable further than this many spans outside its range is nonsense, not a measurement."""
HIGHEST_BEAT = 30000


@dataclass(frozen=True, slots=True)
class Block:
    """Registers read in one exchange."""

    table: str
    address: int
    count: int


class ModbusAdapter:
    """The port's implementation over registers.

    Parameters
    ----------
    loop : Loop
        With an adapter of kind ``modbus``.
    adapter : ModbusTcp
    link : ModbusLink
    clock : Clock
    """

    def __init__(self, loop: Loop, adapter: ModbusTcp, link: ModbusLink, clock: Clock) -> None:
        self._adapter = adapter
        self._range: Range = loop.process_variable
        self._link = link
        self._clock = clock
        self._beats = 0
        wanted = [("process_variable", adapter.process_variable), ("controller_output", adapter.controller_output)]
        if adapter.setpoint is not None:
            wanted.append(("setpoint", adapter.setpoint))
        spans = [(r.table, r.address, words_of(r)) for _, r in wanted]
        if adapter.mode is not None:
            spans.append((adapter.mode.table, adapter.mode.address, 1))
        self._blocks = _blocks(spans)
        self._capabilities = _capabilities(loop, adapter)

    @property
    def capabilities(self) -> Capabilities:
        """As declared by the loop."""
        return self._capabilities

    async def identify(self) -> Identity:
        """The device identification of the protocol; empty where the device has none."""
        device_id = self._adapter.device_id
        try:
            reply = await self._exchange(lambda client: client.read_device_information(device_id=device_id))
        except DeviceRefused:
            return Identity("", "", "")
        information: dict[int, bytes] = getattr(reply, "information", {})
        texts = [information.get(k, b"").decode("latin-1") for k in range(3)]
        return Identity(vendor=texts[0], product=texts[1], revision=texts[2])

    async def read(self, *, urgent: bool = False) -> Reading:
        """All registers of the loop, in as few exchanges as they allow."""
        words: dict[tuple[str, int], int] = {}
        started = self._clock.monotonic_s()
        taken_at = started
        for block in self._blocks:
            began = self._clock.monotonic_s()
            registers = await self._registers(block, urgent=urgent)
            if _holds(block, self._adapter.process_variable):
                taken_at = (began + self._clock.monotonic_s()) / 2
            for k, word in enumerate(registers):
                words[block.table, block.address + k] = word
        value, quality = self._measured(words)
        setpoint = self._adapter.setpoint
        return Reading(
            process_variable=value,
            controller_output=self._value("controller_output", self._adapter.controller_output, words),
            setpoint=None if setpoint is None else self._value("setpoint", setpoint, words),
            mode=_mode(self._adapter.mode, words),
            output_limited=None,
            quality=quality,
            taken_at=taken_at,
        )

    def _measured(self, words: dict[tuple[str, int], int]) -> tuple[float, Quality]:
        """The process variable and its quality; an impossible one is bad, and hides neither echo nor mode."""
        low, high, span = self._range.low, self._range.high, self._range.span
        try:
            value = self._value("process_variable", self._adapter.process_variable, words)
        except DeviceNonsensical:
            return math.nan, Quality.BAD
        if not low - FAR_OUTSIDE * span <= value <= high + FAR_OUTSIDE * span:
            return value, Quality.BAD
        return value, Quality.GOOD if low <= value <= high else Quality.UNCERTAIN

    async def write(self, output: float, *, urgent: bool = False) -> None:
        """Write the output's register."""
        await self._write(self._adapter.controller_output, output, "controller_output", urgent=urgent)

    async def take_over(self) -> None:
        """Write the code of manual; nothing where no mode register is declared."""
        await self._write_mode(Mode.MANUAL, urgent=False)

    async def hand_back(self, mode: Mode, *, urgent: bool = False) -> None:
        """Write the code of the mode."""
        await self._write_mode(mode, urgent=urgent)

    async def heartbeat(self, *, armed: bool, resting_output: float | None = None) -> None:
        """A new count each time while armed; zero disarms."""
        beat = self._adapter.heartbeat
        if beat is None:
            return
        if armed and resting_output is not None and beat.resting_address is not None and self._beats == 0:
            register = Register(table="holding", address=beat.resting_address)
            await self._write(register, resting_output, "resting_output", urgent=True)
        self._beats = self._beats % HIGHEST_BEAT + 1 if armed else 0
        # Beats go first, too: one that waits behind readings is a beat missed.
        await self._write_words(beat.address, [self._beats], urgent=True)

    async def read_gains(self) -> ControllerGains:
        """The gains' registers."""
        gains = self._gains()
        wanted = [gains.gain, gains.integral, *([] if gains.derivative is None else [gains.derivative])]
        numbers = []
        for register in wanted:
            block = Block(register.table, register.address, words_of(register))
            numbers.append(decoded(register, await self._registers(block, urgent=False), "gains"))
        return ControllerGains(numbers[0], numbers[1], numbers[2] if len(numbers) > 2 else None)

    async def write_gains(self, gains: ControllerGains) -> None:
        """Write gain, integral and derivative, one after the other."""
        registers = self._gains()
        await self._write(registers.gain, gains.gain, "gain", urgent=False)
        await self._write(registers.integral, gains.integral, "integral", urgent=False)
        if registers.derivative is not None and gains.derivative is not None:
            await self._write(registers.derivative, gains.derivative, "derivative", urgent=False)

    async def close(self) -> None:
        """The link is shared and stays with its owner."""

    def _gains(self) -> GainRegisters:
        if self._adapter.gains is None:
            raise DeviceRefused("gains: the loop declares no gain registers")
        return self._adapter.gains

    def _value(self, name: str, register: Register, words: dict[tuple[str, int], int]) -> float:
        found = [words[register.table, register.address + k] for k in range(words_of(register))]
        return decoded(register, found, name)

    async def _registers(self, block: Block, *, urgent: bool) -> list[int]:
        device_id = self._adapter.device_id

        def request(client: AsyncModbusTcpClient) -> Awaitable[ModbusPDU]:
            verb = client.read_input_registers if block.table == "input" else client.read_holding_registers
            return verb(block.address, count=block.count, device_id=device_id)

        reply = await self._exchange(request, urgent=urgent)
        if len(reply.registers) != block.count:
            raise DeviceNonsensical(f"{self._link.name}: {len(reply.registers)} registers for {block.count} asked for")
        return list(reply.registers)

    async def _write(self, register: Register, value: float, name: str, *, urgent: bool) -> None:
        await self._write_words(register.address, encoded(register, value, name), urgent=urgent)

    async def _write_mode(self, mode: Mode, *, urgent: bool) -> None:
        register = self._adapter.mode
        if register is None:
            return
        codes = {Mode.MANUAL: register.manual, Mode.AUTOMATIC: register.automatic, Mode.CASCADE: register.cascade}
        code = codes.get(mode)
        if code is None:
            raise DeviceRefused(f"mode: no code is declared for {mode}")
        await self._write_words(register.address, [code], urgent=urgent)

    async def _write_words(self, address: int, words: Sequence[int], *, urgent: bool) -> None:
        device_id = self._adapter.device_id

        def request(client: AsyncModbusTcpClient) -> Awaitable[ModbusPDU]:
            if len(words) == 1:
                return client.write_register(address, words[0], device_id=device_id)
            return client.write_registers(address, list(words), device_id=device_id)

        await self._exchange(request, urgent=urgent)

    async def _exchange(
        self, request: Callable[[AsyncModbusTcpClient], Awaitable[ModbusPDU]], *, urgent: bool = False
    ) -> ModbusPDU:
        return await self._link.exchange(request, timeout_s=self._adapter.timeout_s, urgent=urgent)


def _holds(block: Block, register: Register) -> bool:
    return block.table == register.table and block.address <= register.address < block.address + block.count


def _blocks(spans: Sequence[tuple[str, int, int]]) -> tuple[Block, ...]:
    """Neighbouring registers of a table joined, so that a reading takes as few exchanges as possible."""
    blocks: list[Block] = []
    for table, address, count in sorted(spans):
        last = blocks[-1] if blocks else None
        end = address + count
        if (
            last is not None
            and last.table == table
            and address - (last.address + last.count) <= WIDEST_GAP
            and end - last.address <= MOST_WORDS
        ):
            blocks[-1] = Block(table, last.address, max(end, last.address + last.count) - last.address)
        else:
            blocks.append(Block(table, address, count))
    return tuple(blocks)


def _mode(register: ModeRegister | None, words: dict[tuple[str, int], int]) -> Mode:
    if register is None:
        return Mode.UNKNOWN
    code = words[register.table, register.address]
    codes = {register.manual: Mode.MANUAL, register.automatic: Mode.AUTOMATIC}
    if register.cascade is not None:
        codes[register.cascade] = Mode.CASCADE
    return codes.get(code, Mode.OTHER)


def _capabilities(loop: Loop, adapter: ModbusTcp) -> Capabilities:
    beat = adapter.heartbeat
    return Capabilities(
        reads_output=True,
        reads_mode=adapter.mode is not None,
        reads_setpoint=adapter.setpoint is not None,
        changes_mode=adapter.mode is not None,
        watchdog=Watchdog(beat.watchdog.value) if beat is not None else Watchdog.NONE,
        watchdog_timeout_s=beat.timeout_s if beat is not None else None,
        watchdog_value=beat.fixed_value if beat is not None else None,
        gains_readable=adapter.gains is not None,
        gains_writable=adapter.gains is not None,
        permission_bit=False,
        setpoint_follows_in_manual=loop.setpoint_follows_in_manual,
        integral_follows_in_manual=loop.integral_follows_in_manual,
        output_quantum=quantum_of(adapter.controller_output),
        link_time_s=adapter.timeout_s,
    )
