"""A whole experiment on a simulated loop and a manual clock, for the tests of machine, drive and runner."""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable
from dataclasses import dataclass, field, replace
from typing import Any

from gainwright.models import TransferFunction
from gainwright_service.adapters.simulated import SimulatedAdapter, SimulatedDevice
from gainwright_service.clock import ManualClock
from gainwright_service.drive import Drive
from gainwright_service.experiment.guard import new_guard
from gainwright_service.experiment.plan import Plan
from gainwright_service.runner import Ended, RunSample, Signals, run_experiment

PLAN = Plan(
    sample_interval_s=0.1,
    listening_s=10.0,
    start_amplitude=2.0,
    max_amplitude=5.0,
    growth=2.0,
    output_low=10.0,
    output_high=90.0,
    max_output_change=10.0,
    output_rate_per_s=None,
    deviation_up=3.0,
    deviation_down=3.0,
    process_variable_low=20.0,
    process_variable_high=95.0,
    max_duration_s=600.0,
    max_switches=40,
    min_dwell_s=0.0,
    scored_cycles=3,
    precision_percent=10.0,
    exit_action="as_found",
    exit_value=None,
    exit_valid_s=600.0,
    integral_follows=True,
)
TWO_LAGS = TransferFunction((1.2,), (1.0, 2.0, 1.0), 0.6)
DEVICE = SimulatedDevice(TWO_LAGS, noise=0.02, resting_output=45.0, resting_value=60.0)


@dataclass
class KeptLog:
    """The runner's log, kept in memory."""

    samples: list[RunSample] = field(default_factory=list)
    commands: list[tuple[float, ...]] = field(default_factory=list)
    secured: list[dict[str, Any]] = field(default_factory=list)
    found: dict[str, Any] | None = None
    refuse: Exception | None = None

    async def secure(self, ownership: dict[str, Any]) -> None:
        if self.refuse is not None:
            raise self.refuse
        self.secured.append(ownership)

    def as_found(self, document: dict[str, Any]) -> None:
        self.found = document

    def sample(self, sample: RunSample) -> None:
        self.samples.append(sample)

    def command(self, levels: tuple[float, ...]) -> None:
        self.commands.append(levels)

    def progress(self, phase: str, document: dict[str, Any]) -> None:
        assert document["samples"] >= 0


@dataclass
class Bench:
    """One experiment's parts."""

    clock: ManualClock
    adapter: SimulatedAdapter
    log: KeptLog
    signals: Signals

    async def after(self, seconds: float) -> None:
        """Wait on the manual clock."""
        await self.clock.sleep_until(self.clock.monotonic_s() + seconds)


Act = Callable[[Bench], Awaitable[None]]


async def run(
    *,
    device: SimulatedDevice = DEVICE,
    act: Act | None = None,
    adapter: Any = None,
    log: KeptLog | None = None,
    permitted: Callable[[], bool] = lambda: True,
    **plan: Any,
) -> tuple[Ended, Bench]:
    """Run an experiment to its end while ``act`` happens beside it."""
    clock = ManualClock()
    simulated = SimulatedAdapter(device, clock)
    bench = Bench(clock, simulated, log or KeptLog(), Signals())
    chosen = replace(PLAN, effect=device.effect, **plan)
    device_side = adapter(simulated) if adapter else simulated
    drive = Drive(device_side, new_guard(chosen, clock.monotonic_s()), clock, permitted=permitted)
    running = asyncio.ensure_future(
        run_experiment(plan=chosen, drive=drive, log=bench.log, signals=bench.signals, clock=clock)
    )
    if act is not None:
        await act(bench)
    return await running, bench
