"""Numbers as people read them: as many digits as the interval supports, no exponents where they can be avoided."""

from __future__ import annotations

import math

from gainwright_wire.base import Interval


def figure(value: float | None, digits: int = 4) -> str:
    """A number to some significant digits; a dash for None."""
    if value is None:
        return "–"
    if value == 0:
        return "0"
    size = math.floor(math.log10(abs(value)))
    if size < -5 or size > 8:
        return f"{value:.{digits - 1}e}"
    text = f"{value:.{max(0, digits - 1 - size)}f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def interval(estimate: Interval) -> str:
    """A value and its bounds, to two digits of the interval's width."""
    places = _places(estimate)
    return f"{estimate.value:.{places}f}  [{estimate.low:.{places}f} … {estimate.high:.{places}f}]"


def half_width_percent(estimate: Interval) -> float:
    """Half the width of the interval, in percent of the value."""
    return 50.0 * (estimate.high - estimate.low) / abs(estimate.value) if estimate.value else math.inf


def duration(seconds: float) -> str:
    """A time as people say it."""
    if seconds < 100:
        return f"{figure(seconds, 3)} s"
    if seconds < 6000:
        return f"{figure(seconds / 60, 2)} min"
    return f"{figure(seconds / 3600, 2)} h"


def with_unit(value: float | None, unit: str, digits: int = 3) -> str:
    """A number and its unit."""
    return f"{figure(value, digits)} {unit}".rstrip()


def _places(estimate: Interval) -> int:
    width = estimate.high - estimate.low
    reference = width if width > 0 else abs(estimate.value)
    if reference <= 0:
        return 2
    return min(8, max(0, 1 - math.floor(math.log10(reference))))
