"""What an experiment will do, every limit and default taken. Immutable; made by planning, kept by the guard."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import Any


class PlanRefusedByGuard(ValueError):
    """A plan that contradicts itself or leaves the signals' ranges."""


@dataclass(frozen=True, slots=True)
class Plan:
    """One experiment's plan, in engineering units and seconds.

    The first block has the names of the wire's plan; the second is what the machine needs besides.
    """

    sample_interval_s: float
    listening_s: float
    start_amplitude: float
    max_amplitude: float
    growth: float
    output_low: float
    output_high: float
    max_output_change: float
    output_rate_per_s: float | None
    deviation_up: float
    deviation_down: float
    process_variable_low: float
    process_variable_high: float
    max_duration_s: float
    max_switches: int
    min_dwell_s: float
    scored_cycles: int
    precision_percent: float
    exit_action: str
    exit_value: float | None
    exit_valid_s: float

    effect: int = 1
    range_low: float = 0.0
    range_high: float = 100.0
    output_quantum: float = 0.0
    resting_output: float | None = None
    reference: float | None = None
    reads_output: bool = True
    reads_mode: bool = True
    setpoint_follows: bool | None = None
    integral_follows: bool | None = None
    watchdog: str = "none"
    watchdog_timeout_s: float | None = None
    watchdog_value: float | None = None
    listening_samples: int = 100
    settle_s: float = 1.0
    first_wait_s: float = 5.0
    return_time_s: float = 60.0
    link_patience_s: float = 30.0

    @property
    def longest_exit_s(self) -> float:
        """The longest that a way out may take: ramp, return, a lost link's patience, both proofs with their repeats."""
        ramp = 0.0 if not self.output_rate_per_s else 2 * self.max_output_change / self.output_rate_per_s
        return ramp + self.return_time_s + self.link_patience_s + 4 * self.settle_s

    def __post_init__(self) -> None:
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, float) and not math.isfinite(value):
                raise PlanRefusedByGuard(f"{field.name}: is not finite; allowed: a finite number")
        checks = {
            "range_low": self.range_low <= self.output_low < self.output_high <= self.range_high,
            "max_amplitude": 0 < self.start_amplitude <= self.max_amplitude,
            "deviation_up": self.deviation_up > 0 and self.deviation_down > 0,
            "process_variable_low": self.process_variable_low < self.process_variable_high,
            "growth": self.growth >= 1.0,
            "sample_interval_s": self.sample_interval_s > 0,
            "effect": self.effect in (1, -1),
            "max_output_change": self.max_output_change > 0,
            "scored_cycles": self.scored_cycles >= 1,
            "exit_value": (self.exit_action == "fixed") == (self.exit_value is not None),
        }
        for name, holds in checks.items():
            if not holds:
                raise PlanRefusedByGuard(f"{name}: contradicts the rest of the plan; value {getattr(self, name)}")

    @property
    def output_span(self) -> float:
        """Width of the output's range."""
        return self.range_high - self.range_low

    @property
    def echo_tolerance(self) -> float:
        """How far an echo may lie from what was written and still be it, output units."""
        return max(self.output_quantum, 1e-4 * self.output_span)

    @property
    def ownership_tolerance(self) -> float:
        """How far an output may lie from ours after a restart and still be ours (safety document 2.1)."""
        return max(0.01 * self.output_span, 2 * self.output_quantum)

    @property
    def stale_after_s(self) -> float:
        """Age of the newest good reading at which the test ends (D7): five samples, and never below half a second,
        so that one slow answer of a network is not a fault."""
        return max(5 * self.sample_interval_s, 0.5)

    @property
    def heartbeat_s(self) -> float | None:
        """Interval of the device's beats; None without a watchdog."""
        if self.watchdog == "none" or self.watchdog_timeout_s is None:
            return None
        return min(1.0, self.watchdog_timeout_s / 4)

    def document(self) -> dict[str, Any]:
        """Every field, as plain values."""
        return {field.name: getattr(self, field.name) for field in fields(self)}
