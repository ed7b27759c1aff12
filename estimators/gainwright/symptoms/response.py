"""Symptoms of the process's answer: unlike any model, inverse, integrating, of the wrong sign."""

from __future__ import annotations

import numpy as np

from gainwright.findings import BOUNDS, judge
from gainwright.models import TransferFunction
from gainwright.noise import inflation_of
from gainwright.record import Record
from gainwright.results import Finding
from gainwright.simulation import respond
from gainwright.symptoms.evidence import Evidence

POINTS = 200
LEAST_SAMPLES = 8


def response(evidence: Evidence) -> list[Finding]:
    """Findings of the fitted answer.

    Parameters
    ----------
    evidence : Evidence

    Returns
    -------
    list of Finding
    """
    lead = evidence.lead
    if lead is None:
        return []
    found = [judge("unlike_model", evidence.misfit_share)]
    candidates = evidence.candidates
    if candidates and evidence.declared.effect is not None:
        # Candidates have the sign that the measured response shows at the oscillation.
        contrary = candidates[0].fit.linear[0] * evidence.declared.effect < 0
        found.append(judge("wrong_sign", 1.0 if contrary else 0.0))
    if candidates:
        found.append(judge("inverse_response", _inverse_response(evidence)))
        found.append(judge("integrating", sum(one.weight for one in candidates if one.fit.shape.integrator)))
    return found


def no_response(record: Record) -> float | None:
    """Move of the process variable after the output's first change, in standard errors, where there is too little.

    Parameters
    ----------
    record : Record

    Returns
    -------
    float or None
        None where the output never changes, or the process variable answers.
    """
    changes = np.flatnonzero(np.diff(record.controller_output) != 0) + 1
    if not changes.size or changes[0] < LEAST_SAMPLES or len(record) - changes[0] < LEAST_SAMPLES:
        return None
    before = record.process_variable[: changes[0]]
    after = record.process_variable[(changes[0] + len(record)) // 2 :]
    error = 0.0
    for part in (before, after):
        # A mean of coloured noise: the sum of its correlations is the inflation of its variance.
        centred = part - np.mean(part)
        error += float(np.var(part)) / part.size * inflation_of(centred)
    move = abs(float(np.mean(after) - np.mean(before))) / max(float(np.sqrt(error)), 1e-300)
    return move if move < (BOUNDS["no_response"][0].fail or 0.0) else None


def _inverse_response(evidence: Evidence) -> float:
    """First move of the fitted process against its net move after a switch, over the swing."""
    best = evidence.candidates[0].fit
    if not best.shape.zero:
        return 0.0
    model = best.shape.model(best.parameters, best.linear, best.problem.period)
    if model.zero_time >= 0:
        return 0.0
    process = model.transfer_function()
    undelayed = TransferFunction(process.numerator, process.denominator, 0.0)
    time = np.linspace(0.0, evidence.cycles.period, POINTS)
    answer = respond(undelayed, [0.0], [2 * evidence.cycles.amplitude], time)
    return max(-float(np.min(answer * np.sign(model.gain))), 0.0) / evidence.swing
