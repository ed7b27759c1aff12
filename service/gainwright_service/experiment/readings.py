"""One observation of a loop, as every adapter gives it and the guard and the machine take it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum


class Mode(StrEnum):
    """The controller's mode as the device shows it."""

    MANUAL = "manual"
    AUTOMATIC = "automatic"
    CASCADE = "cascade"
    OTHER = "other"
    UNKNOWN = "unknown"


class Quality(StrEnum):
    """Quality of the process variable's signal."""

    GOOD = "good"
    UNCERTAIN = "uncertain"
    BAD = "bad"


@dataclass(frozen=True, slots=True)
class Reading:
    """One observation of the loop, taken in one exchange.

    Parameters
    ----------
    process_variable : float, PV units
        NaN only with bad quality: an impossible value hides neither echo nor mode.
    controller_output : float or None, output units
        Echo of the register; None where the device has none.
    setpoint : float or None, PV units
    mode : Mode
    output_limited : bool or None
    quality : Quality
    taken_at : float
        Monotonic seconds of the service's clock, at the middle of the exchange.
    source_time : float or None
        The device's own time stamp, seconds since the epoch.
    """

    process_variable: float
    controller_output: float | None
    setpoint: float | None
    mode: Mode
    output_limited: bool | None
    quality: Quality
    taken_at: float
    source_time: float | None = None

    @property
    def usable(self) -> bool:
        """Whether the process variable may be judged and acted on: a bad or impossible one never is."""
        return self.quality is not Quality.BAD and math.isfinite(self.process_variable)
