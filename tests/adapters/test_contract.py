"""One contract suite for the port, over the simulated loop and over every loop of the rig on a real Modbus server."""

from __future__ import annotations

import time
from dataclasses import replace

import pytest

from experiment_bench import DEVICE
from gainwright_service.adapters.build import open_adapter
from gainwright_service.adapters.links import Links
from gainwright_service.adapters.port import Mode
from gainwright_service.adapters.simulated import SimulatedAdapter
from gainwright_service.clock import ManualClock, SystemClock
from gainwright_service.practice_rig.device import Device
from gainwright_service.practice_rig.dye_house import AUTOMATIC, DYE_HOUSE, MANUAL
from gainwright_service.practice_rig.server import serving
from gainwright_service.testing import check_loop_adapter
from gainwright_wire.loops import Loop


@pytest.mark.parametrize("mode", [Mode.MANUAL, Mode.AUTOMATIC])
async def test_the_simulated_loop_keeps_the_contract(mode: Mode) -> None:
    clock = ManualClock()
    adapter = SimulatedAdapter(replace(DEVICE, mode=mode), clock)
    checks = await check_loop_adapter(adapter, clock=clock, step=2.0, output_span=100.0)
    assert len(checks) >= 6
    assert [check for check in checks if not check.kept] == []


@pytest.mark.parametrize("mode", [MANUAL, AUTOMATIC])
@pytest.mark.parametrize("loop", DYE_HOUSE, ids=lambda loop: loop.tag)
async def test_every_rig_loop_keeps_the_contract_over_modbus(loop: object, mode: int) -> None:
    device = Device(replace(loop, mode=mode), lambda *_: None, time.monotonic(), 1)  # type: ignore[type-var]
    server = await serving([device], time.monotonic, "127.0.0.1", 0)
    links = Links()
    port = server.transport.sockets[0].getsockname()[1]
    document = Loop.model_validate(device.loop.definition("127.0.0.1", port))
    adapter = open_adapter(document, links, SystemClock())
    checks = await check_loop_adapter(adapter, clock=SystemClock(), step=2.0, output_span=100.0)
    links.close()
    await server.shutdown()
    assert len(checks) >= 6
    assert [check for check in checks if not check.kept] == []


async def test_a_dead_device_is_a_check_that_fails_and_not_an_exception() -> None:
    links = Links()
    adapter = open_adapter(Loop.model_validate(DYE_HOUSE[0].definition("127.0.0.1", 1)), links, SystemClock())
    (check,) = await check_loop_adapter(adapter, clock=SystemClock(), step=2.0, output_span=100.0)
    links.close()
    assert not check.kept
    assert "DeviceUnreachable" in check.detail
