"""Excitation: how large the relay is, when it grows, and where its centre lies. Pure arithmetic.

Starts small, grows per half-period towards a target swing that a forecast keeps below half of the allowed deviation,
re-centres by a quarter of the amplitude per cycle until the half-periods balance.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from gainwright_service.experiment.commands import Facts
from gainwright_service.experiment.plan import Plan
from gainwright_service.experiment.scoring import Cycle

TARGET_HYSTERESES = 8.0
"""The target swing in hystereses; never below 4, where the hysteresis rules the answer."""
TARGET_QUANTA = 20.0
TARGET_SHARE = 0.15
LARGEST_SHARE = 0.45
"""Shares of the allowed deviation: the least swing wanted of a quiet loop, the most a forecast may reach."""
NEAR_ENOUGH = 0.75
TOO_LARGE = 1.1
"""A swing this far above the largest one that was forecast is cut back; a merely larger one than wanted is kept, since
it carries more information."""
RECENTRE_SHARE = 0.25
BALANCED = 0.05
"""Imbalance of the half-periods that is left alone."""


@dataclass(frozen=True, slots=True)
class Excitation:
    """The relay's levels and what bounds them, output units; swings in PV units."""

    plan: Plan
    resting_output: float
    amplitude: float
    bias: float
    target_swing: float
    largest_swing: float
    largest_amplitude: float

    def grown(self) -> Excitation:
        """One step of growth, for a relay that does not carry the process through the hysteresis."""
        return self._sized(self.amplitude * self.plan.growth)

    def matched(self, swing: float) -> Excitation:
        """The amplitude for the next half-period, from the swing of the last one."""
        if swing <= 0:
            return self.grown()
        ratio = self.target_swing / swing
        if ratio > 1 / NEAR_ENOUGH:
            return self._sized(self.amplitude * min(ratio, self.plan.growth))
        if swing > TOO_LARGE * self.largest_swing:
            return self._sized(self.amplitude * max(self.largest_swing / swing, 1 / self.plan.growth))
        return self

    def recentred(self, cycle: Cycle) -> Excitation:
        """The bias moved against the imbalance of a cycle, by at most a quarter of the amplitude."""
        imbalance = cycle.imbalance
        if abs(imbalance) <= BALANCED:
            return self
        most = RECENTRE_SHARE * self.amplitude
        shift = max(-most, min(most, self.amplitude * imbalance)) * self.plan.effect
        room = max(self.plan.max_output_change - self.amplitude, 0.0)
        low = max(self.resting_output - room, self.plan.output_low + self.amplitude)
        high = min(self.resting_output + room, self.plan.output_high - self.amplitude)
        if low > high:
            return self
        return replace(self, bias=max(low, min(high, self.bias + shift)))

    @property
    def exhausted(self) -> bool:
        """Whether the amplitude cannot grow any more."""
        return self.amplitude >= self.largest_amplitude * (1 - 1e-9)

    def _sized(self, amplitude: float) -> Excitation:
        plan = self.plan
        room = min(
            self.largest_amplitude,
            plan.max_output_change - abs(self.bias - self.resting_output),
            self.bias - plan.output_low,
            plan.output_high - self.bias,
        )
        return replace(self, amplitude=min(amplitude, room)) if room > 0 else self


def starting(plan: Plan, facts: Facts) -> Excitation:
    """The excitation of the first half-period."""
    narrowest = min(plan.deviation_up, plan.deviation_down)
    wanted = max(TARGET_HYSTERESES * facts.hysteresis, TARGET_QUANTA * facts.quantum, TARGET_SHARE * narrowest)
    room = min(
        plan.max_amplitude,
        plan.max_output_change,
        facts.resting_output - plan.output_low,
        plan.output_high - facts.resting_output,
    )
    return Excitation(
        plan=plan,
        resting_output=facts.resting_output,
        amplitude=min(plan.start_amplitude, room),
        bias=facts.resting_output,
        target_swing=min(wanted, LARGEST_SHARE * narrowest),
        largest_swing=LARGEST_SHARE * narrowest,
        largest_amplitude=room,
    )
