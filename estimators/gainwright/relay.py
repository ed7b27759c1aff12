"""The relay law: which side the output takes, from the process variable and the side it has.

Owns the switching rule and nothing else: standard library only, so that the experiment machine, the simulator and a
fast rig apply the very same code.

The deviation is that of the process variable from the reference, signed by the output's effect, so that the high
side always drives the deviation up. The relay leaves the high side when the deviation reaches plus the hysteresis
half-width, the low side when it reaches minus.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum


class Side(IntEnum):
    """The relay's two sides, as seen by the process: `UP` drives the process variable up."""

    UP = 1
    DOWN = -1

    @property
    def opposite(self) -> Side:
        """The other side."""
        return Side.DOWN if self is Side.UP else Side.UP


@dataclass(frozen=True, slots=True)
class RelayLaw:
    """A relay with hysteresis about a reference.

    Parameters
    ----------
    reference : float, PV units
    hysteresis : float, PV units, >= 0
        Half-width, symbol eps.
    effect : int, +1 or -1
        +1 where a rising output raises the process variable, -1 where it lowers it.
    """

    reference: float
    hysteresis: float
    effect: int = 1

    def next_side(self, side: Side, process_variable: float) -> Side:
        """The side after seeing ``process_variable`` (PV units) while on ``side``."""
        deviation = process_variable - self.reference
        if side is Side.UP:
            return Side.DOWN if deviation >= self.hysteresis else Side.UP
        return Side.UP if deviation <= -self.hysteresis else Side.DOWN

    def level(self, side: Side, bias: float, amplitude: float) -> float:
        """The output on ``side``: ``bias`` plus or minus ``amplitude`` (output units), by the effect."""
        return bias + amplitude * side * self.effect
