"""The adapter check: proves the port's written contract for any adapter, a user's own device included.

No test runner inside. The check moves the output by a small step and gives the loop back; it is for a loop that may be
moved, and stops at the first verb that fails. Knows the port only.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from gainwright_service.adapters.port import LoopAdapter, Mode, Quality, Reading
from gainwright_service.clock import Clock
from gainwright_service.errors import AdapterError

SETTLE_S = 1.0
POLL_S = 0.02


@dataclass(frozen=True, slots=True)
class Check:
    """One promise of the port and whether it was kept."""

    name: str
    kept: bool
    detail: str


async def check_loop_adapter(
    adapter: LoopAdapter, *, clock: Clock, step: float, output_span: float
) -> tuple[Check, ...]:
    """Prove the port's contract on a loop.

    Parameters
    ----------
    adapter : LoopAdapter
    clock : Clock
    step : float, output units
        How far the output is moved, once, and back.
    output_span : float, output units

    Returns
    -------
    tuple of Check
        In order; after a verb that raises, the last one says so.
    """
    done: list[Check] = []
    try:
        await _check(adapter, clock, step, output_span, done)
    except AdapterError as error:
        done.append(Check("every verb answers", False, f"{type(error).__name__}: {error.detail}"))
    return tuple(done)


async def _check(adapter: LoopAdapter, clock: Clock, step: float, span: float, done: list[Check]) -> None:
    facts = adapter.capabilities
    await adapter.identify()
    before = clock.monotonic_s()
    found = await adapter.read()
    after = clock.monotonic_s()
    finite = math.isfinite(found.process_variable) and found.quality is not Quality.BAD
    done.append(Check("a reading is finite", finite, f"{found.process_variable:g}"))
    timely = before <= found.taken_at <= after
    done.append(Check("a reading is stamped inside its exchange", timely, f"{found.taken_at - before:.4f} s"))
    declared = (found.controller_output is not None) == facts.reads_output
    declared = declared and (found.mode is not Mode.UNKNOWN) == facts.reads_mode
    done.append(Check("echo and mode are read as declared", declared, f"{found.controller_output}, {found.mode}"))
    resting = found.controller_output
    if resting is None:
        return
    tolerance = max(facts.output_quantum, 1e-4 * span)
    await adapter.take_over()
    taken = await _until(adapter, clock, lambda r: r.mode in (Mode.MANUAL, Mode.UNKNOWN))
    bumpless = taken.controller_output is not None and abs(taken.controller_output - resting) <= 0.02 * span
    done.append(Check("taking over moves no output", bumpless, f"{resting:g} to {taken.controller_output}"))
    resting = taken.controller_output if taken.controller_output is not None else resting
    await adapter.heartbeat(armed=True, resting_output=resting)
    for name, wanted in (("a write is echoed", resting + step), ("the output comes back", resting)):
        await adapter.write(wanted)
        echo = (await _until(adapter, clock, _near(wanted, tolerance))).controller_output
        kept = echo is not None and abs(echo - wanted) <= tolerance
        done.append(Check(name, kept, f"{wanted:g} written, {echo} echoed"))
    await adapter.heartbeat(armed=False)
    if found.setpoint is not None and facts.setpoint_follows_in_manual is False:
        now = await adapter.read()
        stays = now.setpoint is not None and math.isclose(now.setpoint, found.setpoint, rel_tol=1e-5, abs_tol=1e-9)
        done.append(Check("the setpoint stays in manual", stays, f"{found.setpoint} to {now.setpoint}"))
    if facts.changes_mode and found.mode in (Mode.AUTOMATIC, Mode.CASCADE):
        await adapter.hand_back(found.mode, urgent=True)
        back = await _until(adapter, clock, lambda r: r.mode is found.mode)
        done.append(Check("the mode as found comes back", back.mode is found.mode, str(back.mode)))
        jump = abs((resting if back.controller_output is None else back.controller_output) - resting)
        smooth = jump <= 0.02 * span or facts.integral_follows_in_manual is not True
        done.append(Check("the integral follows as declared", smooth, f"the output moves by {jump:.3g}"))


def _near(wanted: float, tolerance: float) -> Callable[[Reading], bool]:
    def near(reading: Reading) -> bool:
        return reading.controller_output is not None and abs(reading.controller_output - wanted) <= tolerance

    return near


async def _until(adapter: LoopAdapter, clock: Clock, condition: Callable[[Reading], bool]) -> Reading:
    """The first reading that meets the condition, or the last one within the settle time."""
    deadline = clock.monotonic_s() + SETTLE_S
    reading = await adapter.read()
    while not condition(reading) and clock.monotonic_s() < deadline:
        await clock.sleep_until(clock.monotonic_s() + POLL_S)
        reading = await adapter.read()
    return reading
