"""What is known of an experiment so far, under the wire's names. Standard library only; decides nothing."""

from __future__ import annotations

import math
from typing import Any

from gainwright_service.experiment.commands import Facts
from gainwright_service.experiment.excitation import Excitation
from gainwright_service.experiment.scoring import Score


def told(score: Score, facts: Facts | None, excitation: Excitation | None, **known: Any) -> dict[str, Any]:
    """The progress of a test: its cycles so far, what was found, how it is driven, and what the machine knows."""
    newest = score.cycles[-1] if score.cycles else None
    gain = None
    if newest is not None and newest.swing > 0:
        gain = 4 * newest.up.amplitude / (math.pi * newest.swing)
    return {
        **known,
        "cycles": max(len(score.halves) - 1, 0) // 2,
        "scored_cycles": len(score.cycles),
        "amplitude": excitation.amplitude if excitation else None,
        "hysteresis": facts.hysteresis if facts else None,
        "noise": facts.noise if facts else None,
        "reference": facts.reference if facts else None,
        "resting_output": facts.resting_output if facts else None,
        "swing": newest.swing if newest else None,
        "period_s": newest.period if newest else None,
        "provisional_ultimate_gain": gain,
    }
