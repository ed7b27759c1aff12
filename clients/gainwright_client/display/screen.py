"""The console that everything is shown on."""

from __future__ import annotations

import os
import sys

from rich.console import Console

WIDTH = 100
"""Of output that goes to a file or a pipe."""


def screen(*, errors: bool = False) -> Console:
    """A console on standard output, or on standard error beside a JSON document."""
    stream = sys.stderr if errors else sys.stdout
    width = None if stream.isatty() or "COLUMNS" in os.environ else WIDTH
    return Console(stderr=errors, highlight=False, width=width, emoji=False)
