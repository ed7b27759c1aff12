"""Reduction of a process with many lags to the one or two that a rule keeps: the half rule.

Owns the half rule and the cancelling of leads. Knows no controllers. Source of all: Skogestad, J. Process Control
13:291-309, 2003, sections 2 and 3 (from memory; checked in the tests on the paper's table of examples).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from gainwright.errors import RuleNotApplicable
from gainwright.models import ProcessModel

LEAST_DAMPING = 0.7
"""Complex lags damped less than this do not act like real ones (no published number; a caution of this project)."""

CLOSE_RATIO = 1.6 - 1e-9
SLOW_IN_DEAD_TIMES = 5.0


@dataclass(frozen=True, slots=True)
class Reduced:
    """A process with few lags.

    Parameters
    ----------
    gain : float
        Positive: static gain, or integrating gain where ``integrating``.
    lags : tuple of float, seconds, descending
        The kept lags; the integrator is not among them.
    dead_time : float, seconds
        Effective dead time.
    integrating : bool
    """

    gain: float
    lags: tuple[float, ...]
    dead_time: float
    integrating: bool


def half_rule(
    gain: float,
    lags: Sequence[float],
    *,
    dead_time: float,
    keep: int,
    inverse_times: Sequence[float] = (),
    lead_times: Sequence[float] = (),
    integrating: bool = False,
) -> Reduced:
    """Reduce by the half rule: the largest neglected lag is split between the last kept lag and the dead time.

    Further lags and inverse-response times go to the dead time whole. A lead is cancelled against a lag near it.

    Parameters
    ----------
    gain : float, > 0
    lags : sequence of float, seconds, > 0
    dead_time : float, seconds, >= 0
    keep : int
        How many lags to keep, the integrator counted as one.
    inverse_times : sequence of float, seconds, > 0
        T of factors ``(1 - T s)``.
    lead_times : sequence of float, seconds, > 0
        T of factors ``(1 + T s)``.
    integrating : bool

    Returns
    -------
    Reduced

    Raises
    ------
    RuleNotApplicable
        Where a lead meets no lag.

    Examples
    --------
    >>> half_rule(1.0, [25, 10, 1, 1], dead_time=0.0, keep=1)
    Reduced(gain=1.0, lags=(30.0,), dead_time=7.0, integrating=False)
    """
    kept_count = keep - 1 if integrating else keep
    base = dead_time + sum(inverse_times)
    kept, moved = _halved(sorted(lags, reverse=True), kept_count)
    if not lead_times:
        return Reduced(gain, kept, base + moved, integrating)
    # The leads are judged against the effective dead time that results from them: a few rounds settle it.
    effective = base or moved
    for _ in range(20):
        factor, left = _without_leads(lags, lead_times, effective)
        kept, moved = _halved(left, kept_count)
        if math.isclose(base + moved, effective, rel_tol=1e-12):
            break
        effective = base + moved
    return Reduced(gain * factor, kept, base + moved, integrating)


def reduced_model(model: ProcessModel, *, keep: int) -> Reduced:
    """A fitted model reduced by the half rule.

    Parameters
    ----------
    model : ProcessModel
    keep : int
        How many lags to keep, the integrator counted as one.

    Returns
    -------
    Reduced

    Raises
    ------
    RuleNotApplicable
        For a model that oscillates by itself, or a lead without a lag to cancel it.
    """
    lags = list(model.time_constants)
    if model.natural_frequency is not None and model.damping is not None:
        if model.damping < LEAST_DAMPING:
            raise RuleNotApplicable("damping", f"is {model.damping:.2g}", f"{LEAST_DAMPING} or more")
        # A well-damped pair acts like two lags of the same sum, and of the same product where these are real.
        spread = math.sqrt(max(model.damping**2 - 1.0, 0.0))
        lags += [(model.damping + side * spread) / model.natural_frequency for side in (1, -1)]
    return half_rule(
        abs(model.gain),
        lags,
        dead_time=model.dead_time,
        keep=keep,
        inverse_times=[-model.zero_time] if model.zero_time < 0 else [],
        lead_times=[model.zero_time] if model.zero_time > 0 else [],
        integrating=model.integrating,
    )


def _halved(lags: list[float], kept_count: int) -> tuple[tuple[float, ...], float]:
    """Kept lags, descending, and what the neglected ones add to the dead time."""
    kept, neglected = lags[:kept_count], lags[kept_count:]
    if not neglected:
        return tuple(kept), 0.0
    if kept:
        kept[-1] += neglected[0] / 2
    return tuple(sorted(kept, reverse=True)), neglected[0] / 2 + sum(neglected[1:])


def _without_leads(lags: Sequence[float], leads: Sequence[float], dead_time: float) -> tuple[float, list[float]]:
    """Gain factor and lags, descending, after every lead is cancelled against a lag."""
    factor, left = 1.0, sorted(lags, reverse=True)
    for lead in sorted(leads, reverse=True):
        lag = _partner(left, lead)
        left.remove(lag)
        slow = SLOW_IN_DEAD_TIMES * dead_time
        if lead >= lag:
            # The quicker of lag, dead time and lead decides how much of the lead is seen.
            factor *= lead / max(lag, min(dead_time, lead))
        elif lead >= slow:
            factor *= lead / lag
        else:
            effective = min(lag, slow)
            factor *= effective / lag
            left.append(effective - lead)
            left.sort(reverse=True)
    return factor, [lag for lag in left if lag > 0]


def _partner(lags: Sequence[float], lead: float) -> float:
    """The next larger lag, or the next smaller where that is much closer."""
    larger = min((lag for lag in lags if lag >= lead), default=None)
    smaller = max((lag for lag in lags if lag < lead), default=None)
    if larger is None and smaller is None:
        raise RuleNotApplicable("zero_time", "meets no lag", "a lag for each lead")
    if larger is None or (smaller is not None and lead / smaller < min(larger / lead, CLOSE_RATIO)):
        return smaller if smaller is not None else lead
    return larger
