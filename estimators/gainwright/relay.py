"""The relay law: which side the output takes, from the process variable and the side it has.

Owns the switching rule and nothing else: standard library only, so that the experiment machine, the simulator and a
fast rig apply the very same code.

The deviation is that of the process variable from the reference. The up side is the one that drives it up, whatever
the sign of the output's effect. The relay leaves the up side when the deviation passes plus the hysteresis
half-width, the down side when it passes minus; at the very edge it stays, so that a process at rest on the
reference does not chatter.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import IntEnum

from gainwright.errors import OutOfDomain


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

    Raises
    ------
    OutOfDomain
    """

    reference: float
    hysteresis: float
    effect: int = 1

    def __post_init__(self) -> None:
        if not math.isfinite(self.reference):
            raise OutOfDomain("reference", f"is {self.reference}", "a finite number")
        if not 0 <= self.hysteresis < math.inf:
            raise OutOfDomain("hysteresis", f"is {self.hysteresis}", "a finite number, 0 or more")
        if self.effect not in (1, -1):
            raise OutOfDomain("effect", f"is {self.effect}", "+1 (raises) or -1 (lowers)")

    def next_side(self, side: Side, process_variable: float) -> Side:
        """The side after seeing ``process_variable`` (PV units) while on ``side``."""
        deviation = process_variable - self.reference
        if side is Side.UP:
            return Side.DOWN if deviation > self.hysteresis else Side.UP
        return Side.UP if deviation < -self.hysteresis else Side.DOWN

    def level(self, side: Side, bias: float, amplitude: float) -> float:
        """The output on ``side``: ``bias`` plus or minus ``amplitude`` (output units), by the effect."""
        return bias + amplitude * side * self.effect
