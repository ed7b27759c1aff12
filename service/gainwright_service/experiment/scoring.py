"""Cycles as the machine scores them: half-periods, swing, agreement. Sums only, so a switch costs microseconds."""

from __future__ import annotations

from dataclasses import dataclass, field

from gainwright.relay import Side

PERIOD_AGREEMENT = 0.03
SWING_AGREEMENT = 0.05
"""A cycle agrees with the ones before within these shares (safety document section 5, "not settled": pass)."""
PATIENCE = 4
"""Cycles beyond the wanted ones that the test waits for agreement."""


@dataclass(frozen=True, slots=True)
class Half:
    """One half-period: side, length in seconds, the extreme reached against that side's drive, output levels."""

    side: Side
    seconds: float
    extreme: float
    amplitude: float
    bias: float


@dataclass(frozen=True, slots=True)
class Cycle:
    """Two half-periods with equal levels."""

    up: Half
    down: Half

    @property
    def period(self) -> float:
        """Seconds."""
        return self.up.seconds + self.down.seconds

    @property
    def swing(self) -> float:
        """Half of peak-to-peak, PV units."""
        return abs(self.up.extreme - self.down.extreme) / 2

    @property
    def imbalance(self) -> float:
        """(time up - time down)/period, from -1 to 1."""
        return (self.up.seconds - self.down.seconds) / self.period


@dataclass(slots=True)
class Score:
    """Half-periods so far and the cycles that count."""

    halves: list[Half] = field(default_factory=list)
    cycles: list[Cycle] = field(default_factory=list)

    def add(self, half: Half) -> Cycle | None:
        """Take a finished half-period; the cycle it completes, if it does. Other levels begin the score anew."""
        previous = self.halves[-1] if self.halves else None
        self.halves.append(half)
        if previous is None:
            return None
        if (previous.amplitude, previous.bias) != (half.amplitude, half.bias):
            self.cycles.clear()
            return None
        if half.side is not Side.DOWN or previous.side is half.side:
            return None
        cycle = Cycle(previous, half)
        self.cycles.append(cycle)
        return cycle

    def last_of(self, side: Side) -> Half | None:
        """The newest finished half-period on ``side``."""
        return next((half for half in reversed(self.halves) if half.side is side), None)

    def agreed(self, wanted: int, *, period_slack: float, swing_slack: float) -> bool:
        """Whether the last ``wanted`` cycles agree, allowing for sampling (seconds) and noise (PV units)."""
        if len(self.cycles) < wanted:
            return False
        if len(self.cycles) >= wanted + PATIENCE:
            return True
        newest = self.cycles[-wanted:]
        periods = [cycle.period for cycle in newest]
        swings = [cycle.swing for cycle in newest]
        period_spread, swing_spread = max(periods) - min(periods), max(swings) - min(swings)
        return (
            period_spread <= 2 * PERIOD_AGREEMENT * max(periods) + period_slack
            and swing_spread <= 2 * SWING_AGREEMENT * max(swings) + swing_slack
        )
