"""One ultimate point from all adequate structures and the measured response, with an interval that holds.

Owns how estimates are weighed: each structure's crossing, corrected by the measured fundamental where the structure
cannot express it; the structures' average, their spread inside the interval; allowances for what no residual shows.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from gainwright.crossover import Crossing, crossing_of, log_response
from gainwright.cycles import Cycles
from gainwright.fitting import Fit
from gainwright.frequency import phasor
from gainwright.noise import inflation_of
from gainwright.record import Record
from gainwright.results import ResponsePoint
from gainwright.selection import Explanation

FloatArray = npt.NDArray[np.float64]

SOFTENED = 0.25
"""Exponent per unit of the criterion in a structure's weight, half of what independent residuals would allow: plain
weights cover too little, and residuals of one record are never quite independent."""
LEAST_WEIGHT = 0.005
FAR = 0.5
"""A structure whose own response is this far (log or rad) from the measured one at the oscillation is no candidate."""
CONVINCING = 6.0
"""A fundamental in the residual must have this many times the noise's power before it corrects the fit."""
FLOOR = 1e-4
MISFIT_WEIGHT = 0.35
CORRECTION_WEIGHT = 0.35
"""Shares of misfit (over swing) and of the correction that stay inside the interval, as standard deviations."""


@dataclass(frozen=True, slots=True, eq=False)
class Combined:
    """Logarithms of ultimate gain and period with their covariance.

    Parameters
    ----------
    log_gain, log_period : float
    covariance : ndarray, shape (2, 2)
    causes : dict of str to float
        The gain's variance by its causes: noise, structure, latency, misfit.
    """

    log_gain: float
    log_period: float
    covariance: FloatArray
    causes: dict[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, eq=False)
class Candidate:
    """An adequate structure.

    Parameters
    ----------
    fit : Fit
    weight : float
    crossing, corrected : Crossing
        As fitted, and after the measured fundamental corrected it.
    """

    fit: Fit
    weight: float
    crossing: Crossing
    corrected: Crossing


def candidates_of(
    explanation: Explanation, record: Record, cycles: Cycles, point: ResponsePoint, latency: float
) -> list[Candidate]:
    """The adequate structures of an explanation, best first; their weights sum to one.

    Parameters
    ----------
    explanation : Explanation
    record : Record
    cycles : Cycles
    point : ResponsePoint
        The measured response at the fundamental, the latency taken out.
    latency : float, seconds

    Returns
    -------
    list of Candidate
        Empty where no structure reaches the crossover.
    """
    found: list[Candidate] = []
    best = math.inf
    # At the oscillation the process answers against the output, whatever its sign at rest seems to be.
    effect = -1.0 if point.response.real > 0 else 1.0
    for fit in explanation.fits:
        weight = math.exp(-SOFTENED * max(fit.criterion - best, 0.0)) if math.isfinite(best) else 1.0
        if weight < LEAST_WEIGHT:
            break
        crossing = crossing_of(fit, latency)
        if crossing is None or fit.linear[0] * effect < 0 or _astray(fit, crossing, point, latency):
            continue
        if not found:
            best, weight = fit.criterion, 1.0
        found.append(Candidate(fit, weight, crossing, _corrected(fit, crossing, record, cycles)))
    total = sum(one.weight for one in found)
    return [Candidate(one.fit, one.weight / total, one.crossing, one.corrected) for one in found]


def combined(
    candidates: list[Candidate], explanation: Explanation, swing: float, jitter: float, *, measured: bool
) -> Combined:
    """The average over candidates.

    Parameters
    ----------
    candidates : list of Candidate
        At least one.
    explanation : Explanation
    swing : float, PV units
    jitter : float, seconds
        Standard error of the latency that was taken out.
    measured : bool
        Whether the measured fundamental corrects the structures.

    Returns
    -------
    Combined
    """
    crossings = [one.corrected if measured else one.crossing for one in candidates]
    points = np.array([[one.log_gain, one.log_period] for one in crossings])
    weights = np.array([one.weight for one in candidates])
    mean = weights @ points
    best = candidates[0]
    inflation = inflation_of(best.fit.white)
    noisy, spread, late = np.zeros((2, 2)), np.zeros((2, 2)), np.zeros((2, 2))
    for weight, crossing, at in zip(weights, crossings, points, strict=True):
        noisy += weight * inflation * crossing.covariance
        spread += weight * np.outer(at - mean, at - mean)
        late += weight * np.outer(crossing.by_dead_time, crossing.by_dead_time) * jitter**2
    moved = np.array(
        [best.corrected.log_gain - best.crossing.log_gain, best.corrected.log_period - best.crossing.log_period]
    )
    share = explanation.misfit / swing if swing > 0 else 0.0
    # The period is known about twice as well as the gain, by misfit as by noise.
    own = np.array([FLOOR + MISFIT_WEIGHT * share, (FLOOR + MISFIT_WEIGHT * share) / 2])
    unexplained = np.diag(own**2 + (CORRECTION_WEIGHT * moved) ** 2)
    causes = {"noise": noisy, "structure": spread, "latency": late, "misfit": unexplained}
    return Combined(
        float(mean[0]),
        float(mean[1]),
        noisy + spread + late + unexplained,
        {name: float(part[0, 0]) for name, part in causes.items()},
    )


def projected(best: Candidate, record: Record, cycles: Cycles) -> Combined:
    """The measured response alone, carried to the crossover along the best structure's shape.

    Parameters
    ----------
    best : Candidate
    record : Record
    cycles : Cycles

    Returns
    -------
    Combined
    """
    ratio, scatter = _ratio(best.fit, record, cycles, cycles.count)
    moved = best.crossing.corrected(complex(np.log(ratio)), scatter)
    return Combined(moved.log_gain, moved.log_period, moved.covariance)


def _astray(fit: Fit, crossing: Crossing, point: ResponsePoint, latency: float) -> bool:
    """Whether a fit crosses over far from the oscillation and does not show the measured response there either: one
    whose static gain has the wrong sign, say, because a drift was taken for it."""
    away = abs(crossing.log_period - math.log(2 * math.pi / point.omega_rad_s))
    return away > FAR and _distance(fit, point, latency) > FAR


def _distance(fit: Fit, point: ResponsePoint, latency: float) -> float:
    """Distance of a fit's response from the measured one, in the logarithm's plane, the phase within half a turn."""
    own = log_response(fit, np.array([point.omega_rad_s]), latency)[0]
    seen = np.log(point.response * (1.0 if fit.linear[0] > 0 else -1.0))
    apart = complex(own - seen)
    return abs(complex(apart.real, (apart.imag + math.pi) % (2 * math.pi) - math.pi))


def _corrected(fit: Fit, crossing: Crossing, record: Record, cycles: Cycles) -> Crossing:
    """The crossing corrected by the fundamental that the residual holds, as far as it convinces over the noise."""
    later = max(1, (cycles.count + 1) // 2)
    ratio, scatter = _ratio(fit, record, cycles, later)
    moved = complex(np.log(ratio))
    if abs(moved) == 0.0 or not math.isfinite(abs(moved)):
        return crossing
    kept = max(0.0, 1.0 - CONVINCING * scatter**2 / abs(moved) ** 2)
    return crossing.corrected(moved * kept, scatter * kept) if kept > 0 else crossing


def _ratio(fit: Fit, record: Record, cycles: Cycles, later: int) -> tuple[complex, float]:
    """The measured fundamental over the fitted one in the last ``later`` cycles, and the scatter of either part."""
    problem = fit.problem
    edges = record.time[cycles.switches[cycles.scored[-1 - later :]]]
    inside = (problem.time >= edges[0]) & (problem.time < edges[-1])
    time, residual = problem.time[inside], fit.residual[inside]
    if time.size < 8:
        return 1.0 + 0.0j, 0.0
    fitted = problem.value[inside] - residual
    omega = 2.0 * math.pi * later / float(edges[-1] - edges[0])
    size = phasor(time, fitted, omega)
    left = phasor(time, residual, omega)
    if abs(size) == 0.0:
        return 1.0 + 0.0j, 0.0
    step = float(np.median(np.diff(time)))
    colour = problem.correlation
    density = fit.variance * (1.0 - colour**2) / abs(1.0 - colour * np.exp(-1j * omega * step)) ** 2
    scatter = math.sqrt(density * 2.0 / time.size) / abs(size)
    if later > 1:
        # What changes from cycle to cycle is noise; misfit comes again.
        each = []
        for low, high in itertools.pairwise(edges):
            part = (time >= low) & (time < high)
            if np.count_nonzero(part) >= 8:
                each.append(phasor(time[part], residual[part], omega) / size)
        if len(each) > 1:
            scatter = min(scatter, math.sqrt(float(np.mean(np.abs(np.diff(each)) ** 2)) / 2 / later))
    return 1.0 + left / size, scatter
