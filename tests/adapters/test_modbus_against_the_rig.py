"""The Modbus adapter against a real server: the practice rig's own, in process, on a free loopback port."""

from __future__ import annotations

import time
from collections.abc import AsyncIterator
from dataclasses import dataclass

import pytest

from gainwright_service.adapters.build import open_adapter
from gainwright_service.adapters.links import Links
from gainwright_service.adapters.port import LoopAdapter, Mode, Quality
from gainwright_service.clock import SystemClock
from gainwright_service.errors import AdapterError, DeviceRefused, DeviceUnreachable
from gainwright_service.practice_rig.device import Device
from gainwright_service.practice_rig.dye_house import DYE_HOUSE
from gainwright_service.practice_rig.server import serving
from gainwright_wire.loops import Loop


@dataclass
class Served:
    """The rig's devices behind a real socket."""

    port: int
    devices: dict[str, Device]
    links: Links
    log: list[tuple[str, str, float, str]]

    def adapter(self, tag: str, **changes: object) -> LoopAdapter:
        document = self.devices[tag].loop.definition("127.0.0.1", self.port)
        document["adapter"] |= changes
        return open_adapter(Loop.model_validate(document), self.links, SystemClock())


@pytest.fixture
async def served() -> AsyncIterator[Served]:
    log: list[tuple[str, str, float, str]] = []
    started = time.monotonic()
    devices = [Device(loop, lambda *entry: log.append(entry), started, 1) for loop in DYE_HOUSE]
    server = await serving(devices, time.monotonic, "127.0.0.1", 0)
    port = server.transport.sockets[0].getsockname()[1]
    links = Links()
    yield Served(port, {device.loop.tag: device for device in devices}, links, log)
    links.close()
    await server.shutdown()


@pytest.mark.parametrize("tag", [loop.tag for loop in DYE_HOUSE])
async def test_every_loop_reads_writes_and_echoes_in_its_own_register_format(served: Served, tag: str) -> None:
    adapter, loop = served.adapter(tag), served.devices[tag].loop
    reading = await adapter.read()
    assert reading.process_variable == pytest.approx(loop.resting_value, abs=8 * loop.noise + 0.01 * loop.span)
    assert (reading.mode, reading.quality) == (Mode.MANUAL, Quality.GOOD)
    assert reading.setpoint == pytest.approx(loop.resting_value, rel=1e-6)
    await adapter.write(loop.resting_output + 2.0)
    echo = (await adapter.read()).controller_output
    assert echo == pytest.approx(loop.resting_output + 2.0, abs=max(adapter.capabilities.output_quantum, 1e-4))


async def test_mode_heartbeat_and_gains_reach_the_device(served: Served) -> None:
    adapter, device = served.adapter("TIC-201"), served.devices["TIC-201"]
    await adapter.heartbeat(armed=True, resting_output=44.0)
    assert device.heartbeat > 0
    assert device.resting_output == pytest.approx(44.0)
    await adapter.heartbeat(armed=False)
    assert device.heartbeat == 0
    await adapter.hand_back(Mode.AUTOMATIC)
    assert (await adapter.read()).mode is Mode.AUTOMATIC
    await adapter.take_over()
    assert (await adapter.read()).mode is Mode.MANUAL
    gains = await adapter.read_gains()
    assert (gains.gain, gains.integral) == pytest.approx((device.loop.gain, device.loop.integral_s), rel=1e-6)


async def test_an_illegal_address_is_refused_and_named(served: Served) -> None:
    wrong = {"table": "holding", "address": 500, "format": "float32"}
    with pytest.raises(DeviceRefused):
        await served.adapter("TIC-201", controller_output=wrong).read()


async def test_a_dead_host_is_a_named_error_within_a_second() -> None:
    document = DYE_HOUSE[0].definition("127.0.0.1", 1)
    links = Links()
    adapter = open_adapter(Loop.model_validate(document), links, SystemClock())
    started = time.monotonic()
    with pytest.raises(DeviceUnreachable):
        await adapter.read()
    assert time.monotonic() - started < 1.0
    links.close()


async def test_a_host_that_never_answers_is_a_named_error_within_a_second() -> None:
    import socket

    with socket.socket() as silent:
        silent.bind(("127.0.0.1", 0))
        silent.listen(1)
        document = DYE_HOUSE[0].definition("127.0.0.1", silent.getsockname()[1])
        links = Links()
        adapter = open_adapter(Loop.model_validate(document), links, SystemClock())
        started = time.monotonic()
        with pytest.raises(AdapterError):
            await adapter.read()
        assert time.monotonic() - started < 1.0
        links.close()
