"""What makes an interval wide, and the cheapest way to halve it.

Owns the remedies and their predicted gain. Knows the interval's variance by its causes and the test's size; judges
nothing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

COARSE = 0.5
"""Share of the noise's variance from which on the signal's quantum is what has to be mended."""


@dataclass(frozen=True, slots=True)
class Remedy:
    """The largest cause of an interval's width, and what to do about it, with the predicted half-width."""

    cause: str
    advice: str


def remedy_of(causes: dict[str, float], *, spread: float, cycles: int, noise: float, quantum: float) -> Remedy:
    """The remedy for the largest cause.

    Parameters
    ----------
    causes : dict of str to float
        Variance of the logarithm of the ultimate gain by cause: noise, structure, latency, misfit.
    spread : float
        Half-width in standard deviations.
    cycles : int
        Scored cycles.
    noise, quantum : float, PV units

    Returns
    -------
    Remedy
    """
    total = sum(causes.values())
    cause = max(causes, key=lambda name: causes[name]) if total > 0 else ""
    if not cause:
        return Remedy("", "")
    now = 100 * spread * math.sqrt(total)

    def halved(*names: str) -> str:
        left = total - 0.75 * sum(causes[name] for name in names)
        return f"about {100 * spread * math.sqrt(left):.2g} % in place of {now:.2g} %"

    longer = f"{4 * cycles} cycles in place of {cycles}"
    if cause == "noise" and quantum**2 / 12 > COARSE * noise**2:
        return Remedy("quantum", f"twice the amplitude, or a finer resolution: {halved('noise', 'structure')}")
    if cause in ("noise", "structure"):
        # Less noise tells structures apart as well.
        return Remedy(cause, f"twice the amplitude, or {longer}: {halved('noise', 'structure')}")
    if cause == "latency":
        return Remedy(cause, f"a steadier link, or {longer}: {halved('latency')}")
    return Remedy(cause, "no longer test helps where no model of the family fits: use measured points")
