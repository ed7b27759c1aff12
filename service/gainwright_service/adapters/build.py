"""From a loop to its adapter. Connects to nothing; the first verb does."""

from __future__ import annotations

from gainwright.models import TransferFunction
from gainwright_service.adapters.links import Links
from gainwright_service.adapters.modbus import ModbusAdapter
from gainwright_service.adapters.port import LoopAdapter, Mode
from gainwright_service.adapters.simulated import SimulatedAdapter, SimulatedDevice
from gainwright_service.clock import Clock
from gainwright_wire.loops import Loop, ModbusTcp


def open_adapter(loop: Loop, links: Links, clock: Clock) -> LoopAdapter:
    """The adapter of a loop, on the worker's shared links."""
    adapter = loop.adapter
    if isinstance(adapter, ModbusTcp):
        return ModbusAdapter(loop, adapter, links.modbus(adapter.host, adapter.port), clock)
    device = SimulatedDevice(
        transfer_function=TransferFunction(adapter.numerator, adapter.denominator, adapter.dead_time_s),
        output_low=loop.controller_output.low,
        output_high=loop.controller_output.high,
        resting_output=adapter.resting_output,
        resting_value=adapter.resting_process_variable,
        noise=adapter.noise,
        quantum=adapter.quantum,
        seed=adapter.seed,
        mode=Mode(adapter.starts_in),
        effect=1 if loop.output_effect == "raises" else -1,
    )
    return SimulatedAdapter(device, clock)
