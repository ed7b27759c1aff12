"""What an analysis of a relay test says: estimates, findings, grade.

Owns the result types only; `analysis` fills them.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from gainwright.models import ProcessModel


class Verdict(StrEnum):
    """The three verdicts of findings and checklists."""

    PASS = "pass"
    CAUTION = "caution"
    FAIL = "fail"


class Grade(StrEnum):
    """How far a record can be trusted."""

    GOOD = "good"
    FAIR = "fair"
    UNUSABLE = "unusable"


@dataclass(frozen=True, slots=True)
class Estimate:
    """A value with its interval at the analysis's confidence, in the unit of its name."""

    value: float
    low: float
    high: float


@dataclass(frozen=True, slots=True)
class UltimatePoint:
    """Ultimate gain Ku (output units per PV unit, positive) and ultimate period Tu (seconds)."""

    gain: Estimate
    period: Estimate


@dataclass(frozen=True, slots=True)
class ResponsePoint:
    """One measured point of the frequency response.

    Parameters
    ----------
    omega_rad_s : float
    response : complex, PV units per output unit
    covariance : tuple of three float
        Variances and covariance of real and imaginary part: (var_re, cov, var_im).
    harmonic : int
        Harmonic of the oscillation at which it was measured, 1 for the fundamental.
    """

    omega_rad_s: float
    response: complex
    covariance: tuple[float, float, float]
    harmonic: int


@dataclass(frozen=True, slots=True)
class Finding:
    """One diagnosis with its number, the bounds it was judged by, and one sentence.

    Parameters
    ----------
    name : str
        Stable identifier, e.g. ``chatter``.
    verdict : Verdict
    value : float
        The measured number, in ``unit``.
    caution_at, fail_at : float or None
        The bounds of the verdicts; None where the finding has no such verdict.
    unit : str
        Empty for a ratio.
    sentence : str
        What it means and what to do.
    """

    name: str
    verdict: Verdict
    value: float
    caution_at: float | None
    fail_at: float | None
    unit: str
    sentence: str


@dataclass(frozen=True, slots=True)
class WeightedModel:
    """An adequate model of the family and its weight among the adequate ones (weights sum to one)."""

    model: ProcessModel
    weight: float


@dataclass(frozen=True, slots=True)
class Analysis:
    """Everything `analyse` says of one record.

    Parameters
    ----------
    ultimate_gain, ultimate_period : Estimate or None
        The reported ultimate point (output units per PV unit, positive; seconds); None when unusable.
    describing_function, fourier, model_crossover : UltimatePoint or None
        The three estimates: the textbook formula; the measured response point projected on the crossover; the
        crossover of the fitted model.
    response_points : tuple of ResponsePoint
    model : ProcessModel or None
        The best-supported model of the continuous process, signed.
    models : tuple of WeightedModel
        All adequate models, best first.
    findings : tuple of Finding
    grade : Grade
    reasons : tuple of str
        Why the grade is not ``good``; empty when it is.
    swing : float, PV units
        Half of peak-to-peak over the scored cycles.
    relay_amplitude : float, output units
        Half of the step between the two output levels.
    hysteresis : float, PV units
        Half-width.
    noise : float, PV units
        Standard deviation.
    scored_cycles : int
    confidence : float
    dominant_uncertainty : str
        The largest cause of the interval's width, e.g. ``noise``.
    remedy : str
        The cheapest way to halve it, with the predicted gain.
    """

    ultimate_gain: Estimate | None
    ultimate_period: Estimate | None
    describing_function: UltimatePoint | None
    fourier: UltimatePoint | None
    model_crossover: UltimatePoint | None
    response_points: tuple[ResponsePoint, ...]
    model: ProcessModel | None
    models: tuple[WeightedModel, ...]
    findings: tuple[Finding, ...]
    grade: Grade
    reasons: tuple[str, ...]
    swing: float
    relay_amplitude: float
    hysteresis: float
    noise: float
    scored_cycles: int
    confidence: float
    dominant_uncertainty: str
    remedy: str
