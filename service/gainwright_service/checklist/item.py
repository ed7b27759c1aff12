"""One checklist item: what it asks, of which class, its star, its bounds, its remedy. No items here."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Stage = Literal["before", "during", "after"]


@dataclass(frozen=True, slots=True)
class Item:
    """One item of the checklist.

    Parameters
    ----------
    id : str
    stage : before, during or after the test
    question : str
        Answered yes for a pass.
    remedy : str
        The one thing that removes a caution or a fail.
    starred : bool
        Cannot be overridden on `plant`.
    bench : bool
        Also carried by class `bench`.
    gates_bench : bool
        One of the few that block the start on `bench`.
    pass_to, caution_to : float or None
        Bounds of the measured number, in ``unit``; beyond ``caution_to`` is a fail. Where ``pass_to`` is above
        ``caution_to`` more is better.
    """

    id: str
    stage: Stage
    question: str
    remedy: str
    starred: bool = False
    bench: bool = False
    gates_bench: bool = False
    pass_to: float | None = None
    caution_to: float | None = None
    unit: str = ""
