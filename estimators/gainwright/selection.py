"""Which structures explain a record, beside which disturbances and in what noise.

Owns the order in which a record is explained: every structure alone; the disturbances that what is left calls for;
the noise's colour; every structure that is still in question again. Strategy: a disturbance is tried by the score of
its column with the fit's own tangents taken out, after the structures with a zero, since a missing zero looks like a
load; it must also be of a size that matters, since a structure's own misfit is never noise.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from gainwright.columns import Upsets, answers_of
from gainwright.cycles import Cycles
from gainwright.fitting import EXACT, TINY, Fit, Problem, best_starts, fit
from gainwright.modes import UNDERFLOW, Drive
from gainwright.noise import inflation_of
from gainwright.record import Record
from gainwright.structures import FAMILY

FloatArray = npt.NDArray[np.float64]

WITH_ZERO = next(shape for shape in FAMILY if shape.zero)

MOST_UPSETS = 3
MOST_COLOURS = 2
SAME_COLOUR = 0.05
MOST_MISSING = 4
ROUGH_STEPS = 5
IN_QUESTION = 40.0
"""Structures further than this from the best criterion, in units of its own colour, are not looked at again."""
LEAST_SAMPLES = 20
"""Fewer samples than this are hardly more than the numbers to be fitted."""
MOSTLY_MISFIT = 0.5
"""A residual of which this share comes again in every cycle is misfit: it has no colour to be whitened by."""
LOAD_TIMES = 72
SCORE = 12.0
"""Least fall of the squared residual, in variances, for a disturbance: some four standard errors."""
SCORE_LOAD = 20.0
"""The same for a load, whose time is looked for as well."""
LEAST_LOAD = 0.01
"""Least load, as a share of the relay amplitude."""
LEAST_RAMP = 0.003
"""Least drift a cycle, as a share of the swing."""
LEAST_START = 0.02
"""Least deviation from rest at the record's begin, as a share of the swing."""
AT_REST = 0.25
"""Periods of quiet baseline from which a record can be trusted to begin at rest."""


@dataclass(frozen=True, slots=True, eq=False)
class Explanation:
    """A record explained.

    Parameters
    ----------
    fits : list of Fit
        Every structure, best first, all beside the same disturbances and in the same noise; may be empty.
    misfit : float, PV units
        What the best fit leaves over that comes again in every cycle: no noise, but the structure's own error.
    """

    fits: list[Fit]
    misfit: float


def explain(record: Record, cycles: Cycles) -> Explanation:
    """Every structure that explains a record, best first.

    Parameters
    ----------
    record : Record
    cycles : Cycles
        With at least one scored cycle.

    Returns
    -------
    Explanation
    """
    problem = _problem(record, cycles)
    if problem.time.size < LEAST_SAMPLES:
        return Explanation([], 0.0)
    rough = _first_looks(problem)
    if not rough:
        return Explanation([], 0.0)
    story = _Story(record, cycles)
    lead = story.told(_again(problem, rough[0]))
    rivals = {one.shape.name: one for one in rough}
    looks = [fit(problem, WITH_ZERO, start, ROUGH_STEPS) for start in _zero_starts(problem, rivals.get("third"))]
    zero = _best(looks)
    if zero is not None:
        zero = _again(problem, zero)
        rivals[zero.shape.name] = zero
        if zero.own_colour_criterion < lead.own_colour_criterion:
            lead = min(lead, story.told(zero), key=lambda one: one.own_colour_criterion)
    fits = _all_beside(lead, list(rivals.values()))
    share = _misfit_share(fits[0], record, cycles)
    return Explanation(fits, math.sqrt(share * float(np.mean(fits[0].residual ** 2))))


class _Story:
    """How one structure's fit grows into a full account of a record: doubtful changes, disturbances, colour."""

    def __init__(self, record: Record, cycles: Cycles) -> None:
        self._record = record
        self._cycles = cycles
        self._swing = float(np.mean(cycles.swings))
        self._doubtful = _doubtful_changes(record)

    def told(self, lead: Fit) -> Fit:
        """The fit beside everything that the record calls for."""
        lead = self._disturbed(self._sharpened(lead))
        lead = self._sharpened(lead)
        for _ in range(MOST_COLOURS):
            share = _misfit_share(lead, self._record, self._cycles)
            correlation = 0.0 if share > MOSTLY_MISFIT else lead.correlation
            if abs(correlation - lead.problem.correlation) < SAME_COLOUR:
                break
            lead = self._disturbed(_again(lead.problem.in_colour(correlation), lead))
        return lead

    def _sharpened(self, lead: Fit) -> Fit:
        if not self._doubtful:
            return lead
        problem = _sharpened(lead, self._doubtful)
        return lead if problem is lead.problem else _again(problem, lead)

    def _disturbed(self, lead: Fit) -> Fit:
        """The fit beside the disturbances that its residual calls for, one after the other, the best first."""
        for _ in range(MOST_UPSETS):
            upsets = _called_for(lead, self._cycles, self._swing)
            better = _best(
                [fit(lead.problem.with_upsets(one), lead.shape, lead.parameters) for one in upsets], own=True
            )
            if better is None or better.own_colour_criterion >= lead.own_colour_criterion:
                break
            lead = better
        return lead


def _best(tried: list[Fit | None], *, own: bool = False) -> Fit | None:
    """The fit of the least criterion, in its own colour where problems differ."""
    found = [one for one in tried if one is not None]
    return min(found, key=lambda one: one.own_colour_criterion if own else one.criterion) if found else None


def _again(problem: Problem, before: Fit) -> Fit:
    """A fit for another problem, from where it stands; as it was where that fails."""
    return fit(problem, before.shape, before.parameters) or before


def _first_looks(problem: Problem) -> list[Fit]:
    """Each structure without a zero, roughly, from the best start of its grid; best first."""
    plain = [shape for shape in FAMILY if not shape.zero]
    looks = [
        _best([fit(problem, shape, start, ROUGH_STEPS) for start in best_starts(problem, shape)]) for shape in plain
    ]
    return sorted((one for one in looks if one is not None), key=lambda one: one.criterion)


def _all_beside(lead: Fit, rivals: list[Fit]) -> list[Fit]:
    """Every structure still in question, in the lead's account of the record; best first."""
    problem = lead.problem
    own = {one.shape.name: one for one in rivals} | {lead.shape.name: lead}
    least = min(one.criterion for one in rivals)
    limit = least + IN_QUESTION * max(1.0, *(inflation_of(one.white) for one in rivals if one.criterion == least))
    found = {lead.shape.name: lead}
    for one in own.values():
        if one.shape.name in found or one.criterion > limit:
            continue
        start = one.parameters[: one.shape.parameters]
        if one.shape.zero and "third" in found and one.problem.upsets != problem.upsets:
            # What it explained before may have been a disturbance: it starts anew as well.
            looks = [fit(problem, one.shape, other, ROUGH_STEPS) for other in (start, *_beside(found["third"]))]
            best = _best(looks)
            start = start if best is None else best.parameters[: one.shape.parameters]
        again = fit(problem, one.shape, start)
        if again is not None:
            found[one.shape.name] = again
    return sorted(found.values(), key=lambda one: one.criterion)


def _misfit_share(best: Fit, record: Record, cycles: Cycles) -> float:
    """Share of the best fit's squared residual that comes again from cycle to cycle; 0 where nothing tells."""
    if cycles.count < 2:
        return 0.0
    edges = record.time[cycles.switches[cycles.scored]]
    time, residual = best.problem.time, best.residual
    inside = (time >= edges[-2]) & (time < edges[-1])
    if np.count_nonzero(inside) < 8:
        return 0.0
    before = np.interp(time[inside] - (edges[-1] - edges[-2]), time, residual)
    power = float(np.mean(residual[inside] ** 2) + np.mean(before**2)) / 2
    return max(0.0, 1.0 - float(np.mean((residual[inside] - before) ** 2)) / 2 / power) if power > 0 else 0.0


def _problem(record: Record, cycles: Cycles) -> Problem:
    problem = Problem.of(record, cycles.period)
    baseline = float(record.time[cycles.switches[0]] - record.time[0])
    if baseline >= AT_REST * cycles.period:
        return problem
    # What was on its way before the record began is not known: half a period covers any dead time.
    return problem.with_upsets(Upsets(from_rest=False)).later_than(float(record.time[0]) + 0.5 * cycles.period)


def _zero_starts(problem: Problem, third: Fit | None) -> list[FloatArray]:
    grid = best_starts(problem, WITH_ZERO)
    return [grid[0], *_beside(third)] if third is not None else grid


def _beside(third: Fit) -> list[FloatArray]:
    """Starts for a zero from the fit without one, which itself is a saddle: there a zero is a dead time."""
    own = third.parameters[: third.shape.parameters]
    return [np.concatenate([[own[0] * share], own[1:]]) for share in (0.4, 1.6)]


def _doubtful_changes(record: Record) -> list[tuple[int, float]]:
    """Changes of the output that follow a gap, so that they may have come with a sample that is missing: the place
    among the changes and the time of the missing sample."""
    places = np.flatnonzero(np.diff(record.controller_output) != 0) + 1
    steps = np.diff(record.time)
    nominal = float(np.median(steps))
    found = []
    for number, place in enumerate(places):
        missing = round(float(steps[place - 1]) / nominal) - 1
        if 1 <= missing <= MOST_MISSING:
            found.extend([(number, float(record.time[place] - nominal * k)) for k in range(1, missing + 1)])
    return found


def _sharpened(best: Fit, doubtful: list[tuple[int, float]]) -> Problem:
    """The problem with each doubtful change where the best fit explains the record best."""
    problem = best.problem
    least = _left(problem, best)
    for number, at in doubtful:
        times = problem.drive.times.copy()
        times[number] = at
        moved = replace(problem, drive=Drive(times, problem.drive.levels))
        left = _left(moved, best)
        if left < least:
            problem, least = moved, left
    return problem


def _left(problem: Problem, best: Fit) -> float:
    """Squared residual at a fit's nonlinear parameters, the sizes fitted anew."""
    share = float(best.linear[1] / best.linear[0]) if best.shape.zero else 0.0
    columns = problem.whitening(problem.columns(best.shape, best.parameters, share).matrix)
    basis, _ = np.linalg.qr(columns / (np.sqrt(np.sum(columns**2, axis=0)) + TINY))
    value = problem.whitening(problem.value)
    return float(value @ value - np.sum((basis.T @ value) ** 2))


def _called_for(best: Fit, cycles: Cycles, swing: float) -> list[Upsets]:
    """The further disturbances, one at a time, that the best fit's residual calls for."""
    upsets, problem = best.problem.upsets, best.problem
    variance = best.variance
    if variance <= EXACT * swing**2:
        return []
    basis, _ = np.linalg.qr(best.tangents / (np.sqrt(np.sum(best.tangents**2, axis=0)) + TINY))
    span = float(problem.time[-1] - problem.time[0])

    def score(columns: FloatArray) -> tuple[FloatArray, FloatArray]:
        white = problem.whitening(columns)
        white = white - basis @ (basis.T @ white)
        power = np.sum(white**2, axis=0)
        size = np.where(power > 1e-9 * np.sum(columns**2, axis=0), (white.T @ best.white) / np.maximum(power, TINY), 0)
        return size**2 * power / variance, size

    candidates: list[Upsets] = []
    if not upsets.drift:
        ramp = (problem.time - problem.time[0]) / span - 0.5
        gained, size = score(ramp[:, None])
        if gained[0] > SCORE and abs(size[0]) * cycles.period / span > LEAST_RAMP * swing:
            candidates.append(replace(upsets, drift=True))
    if upsets.load_at is None:
        times = np.linspace(problem.time[0], problem.time[-1], LOAD_TIMES + 2)[1:-1]
        gained, size = score(_load_columns(best, times))
        place = int(np.argmax(gained))
        if gained[place] > SCORE_LOAD and abs(size[place]) > LEAST_LOAD * cycles.amplitude:
            candidates.append(replace(upsets, load_at=float(times[place])))
    if upsets.from_rest:
        poles, _ = best.shape.poles(best.parameters[: best.shape.parameters], problem.period)
        slow = poles.real[:, None] * (problem.time - problem.time[0])
        gained, size = score(np.exp(np.maximum(slow, UNDERFLOW)).T)
        if np.max(gained) > SCORE and np.max(np.abs(size)) > LEAST_START * swing:
            candidates.append(replace(upsets, from_rest=False))
    return candidates


def _load_columns(best: Fit, times: FloatArray) -> FloatArray:
    """The fitted process's answers to unit loads at given times, shape (n, t)."""
    problem, own = best.problem, best.shape.parameters
    one = Drive(np.zeros(1), np.ones(1))
    poles, _ = best.shape.poles(best.parameters[:own], problem.period)
    dead_time = np.zeros(1) + best.parameters[0] * problem.period
    shifted = problem.time[None, :] - times[:, None]
    every = np.broadcast_to(poles, (times.size, poles.size))
    answers = answers_of(best.shape, every, dead_time, one, shifted, problem.period)
    return np.asarray(np.einsum("p,gpn->ng", best.linear[: best.paths], answers))
