"""The rig's Modbus TCP face: registers to verbs and back. Knows the register map, not the processes."""

from __future__ import annotations

from collections.abc import Callable

from pymodbus.constants import ExcCodes
from pymodbus.server import ModbusTcpServer
from pymodbus.simulator import DataType, SimData, SimDevice

from gainwright_service.adapters.registers import decoded, encoded
from gainwright_service.errors import ServiceError
from gainwright_service.practice_rig.device import Device
from gainwright_service.practice_rig.dye_house import (
    FIRED,
    GAINS,
    HEARTBEAT,
    MODE,
    OUTPUT,
    PROCESS_VARIABLE,
    RESTING,
    SETPOINT,
)
from gainwright_wire.loops import Register

HOLDING_WORDS = 40
INPUT_WORDS = 2
WRITE_CODES = (6, 16)


class DeviceRegisters:
    """The registers of one device.

    Parameters
    ----------
    device : Device
    now : callable
        Monotonic seconds.
    """

    def __init__(self, device: Device, now: Callable[[], float]) -> None:
        loop = device.loop
        self._device = device
        self._now = now
        self._value = Register(**loop.register(PROCESS_VARIABLE, "input", loop.value_format, loop.low, loop.span))
        self._output = Register(**loop.register(OUTPUT, "holding", loop.output_format, 0.0, 100.0))
        self._number = Register(**loop.register(SETPOINT, "holding", "float32", 0.0, 1.0))
        # The resting output comes from the service in the plain word order of its declaration.
        self._resting = Register(table="holding", address=RESTING)

    def simulated(self) -> SimDevice:
        """The device for the protocol's server."""
        holding = [SimData(0, count=HOLDING_WORDS, datatype=DataType.REGISTERS)]
        inputs = [SimData(0, count=INPUT_WORDS, datatype=DataType.REGISTERS)]
        unused = [SimData(0, count=1, datatype=DataType.BITS, values=False)]
        return SimDevice(
            id=self._device.loop.device_id,
            simdata=(unused, unused, holding, inputs),
            action=self._access,
        )

    async def _access(
        self,
        function_code: int,
        start: int,
        address: int,
        count: int,
        registers: list[int],
        values: list[int] | list[bool] | None,
    ) -> ExcCodes | None:
        self._device.advance(self._now())
        if values is not None and function_code in WRITE_CODES:
            return self._written(address, [int(word) for word in values])
        if function_code == 4:
            words = encoded(self._value, self._device.measured(), "process_variable")
            registers[: len(words)] = words
        else:
            self._show(registers)
        return None

    def _show(self, registers: list[int]) -> None:
        device = self._device
        output = encoded(self._output, device.output, "output")
        registers[OUTPUT : OUTPUT + len(output)] = output
        registers[SETPOINT : SETPOINT + 2] = encoded(self._number, device.setpoint, "setpoint")
        registers[MODE] = device.mode
        registers[HEARTBEAT] = device.heartbeat
        registers[RESTING : RESTING + 2] = encoded(self._resting, device.resting_output, "resting")
        registers[FIRED] = int(device.fired)
        registers[GAINS : GAINS + 2] = encoded(self._number, device.gain, "gain")
        registers[GAINS + 2 : GAINS + 4] = encoded(self._number, device.integral_s, "integral")

    def _written(self, address: int, words: list[int]) -> ExcCodes | None:
        device = self._device
        try:
            match address, len(words):
                case (n, k) if n == OUTPUT and k == (2 if self._output.format == "float32" else 1):
                    device.write_output(decoded(self._output, words, "output"), "client")
                case (n, 2) if n == SETPOINT:
                    device.write_setpoint(decoded(self._number, words, "setpoint"), "client")
                case (n, 1) if n == MODE:
                    device.write_mode(words[0], "client")
                case (n, 1) if n == HEARTBEAT:
                    device.write_heartbeat(words[0], "client")
                case (n, 2) if n == RESTING:
                    device.write_resting(decoded(self._resting, words, "resting"), "client")
                case (n, 2) if n in (GAINS, GAINS + 2):
                    device.write_gain((n - GAINS) // 2, decoded(self._number, words, "gain"), "client")
                case _:
                    return ExcCodes.ILLEGAL_ADDRESS
        except ServiceError:
            return ExcCodes.ILLEGAL_VALUE
        return None


async def serving(devices: list[Device], now: Callable[[], float], host: str, port: int) -> ModbusTcpServer:
    """A running server for all devices; ``port`` 0 takes a free one."""
    server = ModbusTcpServer([DeviceRegisters(device, now).simulated() for device in devices], address=(host, port))
    await server.serve_forever(background=True)
    return server
