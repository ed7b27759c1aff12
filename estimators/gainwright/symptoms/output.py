"""Symptoms of the output and its final element: resolution, limits, travel, sticking."""

from __future__ import annotations

import numpy as np

from gainwright.findings import judge
from gainwright.results import Finding
from gainwright.symptoms.evidence import Evidence

LEAST_DELAYS = 4


def output(evidence: Evidence) -> list[Finding]:
    """Findings of the output column and of what follows a switch.

    Parameters
    ----------
    evidence : Evidence

    Returns
    -------
    list of Finding
    """
    declared, cycles = evidence.declared, evidence.cycles
    found = [judge("slew_limited", cycles.travel / cycles.period)]
    if declared.output_resolution:
        found.append(judge("coarse_output", 2 * cycles.amplitude / declared.output_resolution))
    if declared.commanded_amplitude:
        found.append(judge("output_limited", abs(cycles.amplitude / declared.commanded_amplitude - 1)))
    scatter = delay_scatter(evidence)
    if scatter is not None:
        found.append(judge("sticking", scatter))
    return found


def delay_scatter(evidence: Evidence) -> float | None:
    """Scatter of the delay from a switch to its answer, beyond noise, over the delay of the best fit.

    Each half-period's shift is the regression of its residual on the fitted answer's slope.

    Parameters
    ----------
    evidence : Evidence

    Returns
    -------
    float or None
        None where there are too few half-periods, or no fit.
    """
    lead = evidence.lead
    if lead is None:
        return None
    problem = lead.problem
    fitted = problem.value - lead.residual
    slope = np.gradient(fitted, problem.time)
    delay = max(float(lead.parameters[0]) * problem.period, 0.05 * evidence.cycles.period)
    switches = evidence.record.time[evidence.cycles.switches]
    shifts, variances = [], []
    for begin, end in zip(switches[1:-1] + delay, switches[2:] + delay, strict=True):
        inside = (problem.time >= begin) & (problem.time < end)
        power = float(np.sum(slope[inside] ** 2))
        if np.count_nonzero(inside) < 4 or power <= 0:
            continue
        shifts.append(-float(lead.residual[inside] @ slope[inside]) / power)
        variances.append(evidence.noise**2 / power * max(1.0, _colour(problem.correlation)))
    if len(shifts) < LEAST_DELAYS:
        return None
    excess = float(np.var(shifts)) - float(np.mean(variances))
    return float(np.sqrt(max(excess, 0.0))) / delay


def _colour(correlation: float) -> float:
    """What coloured noise adds to the variance of a mean."""
    return (1 + correlation) / (1 - correlation)
