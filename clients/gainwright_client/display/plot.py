"""Signals drawn in text: braille dots, two by four to a character. Owns the drawing, not the colours or the frame."""

from __future__ import annotations

import math
from collections.abc import Sequence

_DOTS = ((0x01, 0x02, 0x04, 0x40), (0x08, 0x10, 0x20, 0x80))
_BLANK = 0x2800


class Canvas:
    """A grid of dots over characters.

    Parameters
    ----------
    width, height : int, characters
    """

    def __init__(self, width: int, height: int) -> None:
        self.columns, self.rows = 2 * width, 4 * height
        self._cells = [[_BLANK] * width for _ in range(height)]

    def dot(self, column: int, row: int) -> None:
        """Set one dot, row 0 on top; outside the grid nothing happens."""
        if 0 <= column < self.columns and 0 <= row < self.rows:
            self._cells[row // 4][column // 2] |= _DOTS[column % 2][row % 4]

    def stroke(self, column: int, first: int, last: int) -> None:
        """Set a vertical stroke of dots."""
        for row in range(max(0, min(first, last)), min(self.rows - 1, max(first, last)) + 1):
            self.dot(column, row)

    def lines(self) -> list[str]:
        """The characters, line by line."""
        return ["".join(map(chr, row)) for row in self._cells]


def trace(
    times: Sequence[float],
    values: Sequence[float],
    *,
    span: tuple[float, float],
    low: float,
    high: float,
    width: int,
    height: int,
    marks: Sequence[float] = (),
) -> list[str]:
    """A signal against time as lines of text.

    Parameters
    ----------
    times, values : sequences of equal length; values that are not finite leave a gap
    span : tuple
        The times at the left and the right edge.
    low, high : float
        The values at the lower and the upper edge.
    width, height : int, characters
    marks : sequence of float
        Values that get a dotted horizontal line.
    """
    canvas = Canvas(width, height)

    def row(value: float) -> int:
        share = (value - low) / (high - low)
        return round((1.0 - min(1.0, max(0.0, share))) * (canvas.rows - 1))

    for mark in marks:
        for column in range(0, canvas.columns, 4):
            canvas.dot(column, row(mark))
    before: int | None = None
    for column, extremes in sorted(_by_column(times, values, span, canvas.columns).items()):
        first, least, most, last = (row(value) for value in extremes)
        canvas.stroke(column, least, most)
        if before is not None:
            canvas.stroke(column, before, first)
        before = last
    return canvas.lines()


def _by_column(
    times: Sequence[float], values: Sequence[float], span: tuple[float, float], columns: int
) -> dict[int, tuple[float, float, float, float]]:
    """The first, least, greatest and last value of each column."""
    found: dict[int, tuple[float, float, float, float]] = {}
    scale = (columns - 1) / max(span[1] - span[0], 1e-9)
    for time, value in zip(times, values, strict=True):
        if not math.isfinite(value) or not span[0] <= time <= span[1]:
            continue
        column = round((time - span[0]) * scale)
        first, least, most, _ = found.get(column, (value, value, value, value))
        found[column] = (first, min(least, value), max(most, value), value)
    return found


def gauge(share: float, width: int) -> str:
    """A bar that fills with a share from 0 to 1."""
    eighths = round(8 * width * min(1.0, max(0.0, share)))
    full, part = divmod(eighths, 8)
    text = "█" * full + (" ▏▎▍▌▋▊▉"[part] if part else "")
    return text.ljust(width, "·")[:width]
