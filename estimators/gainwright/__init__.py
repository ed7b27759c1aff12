"""Pure numerics of relay-feedback tuning: records, estimates, models, rules and controller forms.

Never logs, prints, reads a clock or a file. Names are imported on first use, so that ``import gainwright`` stays
cheap.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from gainwright.analysis import analyse as analyse
    from gainwright.record import Record as Record
    from gainwright.results import Analysis as Analysis

_HOMES = {
    "Analysis": "gainwright.results",
    "Record": "gainwright.record",
    "analyse": "gainwright.analysis",
}

__all__ = ["Analysis", "Record", "analyse"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(_HOMES[name]), name)
