"""The analysis of a relay test: three estimates of the ultimate point, models, findings, grade.

Owns the order of the steps. Strategy: cycles by the output; the textbook value from the swing; the measured response
point; every structure of the family fitted to the whole record beside the disturbances it holds; the structures'
crossings, corrected by the measured point where none can express it, averaged with their spread inside the interval.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from gainwright.alignment import contradictions
from gainwright.combination import Candidate, Combined, candidates_of, combined, projected
from gainwright.cycles import Cycles, find_cycles
from gainwright.describing import ultimate_gain_from_swing
from gainwright.errors import OutOfDomain
from gainwright.findings import BOUNDS, grade_of, judge
from gainwright.frequency import response_points
from gainwright.record import Record
from gainwright.remedies import Remedy, remedy_of
from gainwright.results import Analysis, Estimate, Finding, Grade, UltimatePoint, Verdict, WeightedModel
from gainwright.selection import Explanation, explain
from gainwright.symptoms.evidence import Declared, Evidence
from gainwright.symptoms.output import output
from gainwright.symptoms.response import no_response, response
from gainwright.symptoms.signal import signal
from gainwright.symptoms.swinging import swinging

LEAST_BASELINE = 20

OutputIs = Literal["applied_after", "read_back_before"]


def analyse(
    record: Record,
    *,
    reference: float | None = None,
    hysteresis: float | None = None,
    output_is: OutputIs = "applied_after",
    latency_s: float = 0.0,
    latency_jitter_s: float = 0.0,
    confidence: float = 0.95,
    effect: int | None = None,
    commanded_amplitude: float | None = None,
    output_resolution: float | None = None,
    filter_time_s: float | None = None,
    clock_error: float | None = None,
) -> Analysis:
    """Analyse a record of a relay test.

    Parameters
    ----------
    record : Record
    reference : float or None, PV units
        What the relay switched about; the middle of the swing where it is not known.
    hysteresis : float or None, PV units
        Half-width; read from the switches where it is not known.
    output_is : {"applied_after", "read_back_before"}
        Whether ``controller_output[k]`` is in force after sample k, or was read back before it. Both readings are
        tried; where the other one fits the relay's law better, a finding says so and the interval holds both.
    latency_s : float, seconds, >= 0
        Time from a reading to the output that answers it, removed from the process.
    latency_jitter_s : float, seconds, >= 0
        Standard deviation of that time; its mean over the switches enters the interval.
    confidence : float, in (0.5, 1)
    effect : {1, -1} or None
        Declared: +1 where a rising output raises the process variable, -1 where it lowers it.
    commanded_amplitude, output_resolution : float or None, output units, > 0
        The relay amplitude that was asked for, and the output's smallest step.
    filter_time_s : float or None, seconds, > 0
        Time constant of a filter on the process variable.
    clock_error : float or None
        Share by which the record's clock differs from another, e.g. 0.001.

    Returns
    -------
    Analysis
        Graded ``unusable``, with reasons and without an ultimate point, where the record carries none.

    Raises
    ------
    OutOfDomain
        For an argument outside its domain.
    """
    _check(reference, hysteresis, output_is, latency_s, latency_jitter_s, confidence)
    declared = Declared(
        effect, commanded_amplitude, output_resolution, filter_time_s, clock_error, latency_s, latency_jitter_s
    )
    _check_declared(declared)
    if output_is == "read_back_before":
        record = _moved(record, -1)
    cycles = find_cycles(record)
    if cycles.count < 1:
        silent = no_response(record)
        if silent is not None:
            return _unusable(cycles, confidence, "no_response", BOUNDS["no_response"][1], silent)
        return _unusable(cycles, confidence, "few_cycles", "no whole cycle with equal output levels")
    swing = float(np.mean(cycles.swings))
    if not swing > 1e-9 * float(np.max(np.abs(record.process_variable))):
        return _unusable(cycles, confidence, "swing_over_noise", "the process variable does not move")
    shift = -1 if output_is == "applied_after" else 1
    misaligned = contradictions(record, cycles, 0, reference, hysteresis) - contradictions(
        record, cycles, shift, reference, hysteresis
    )
    alignment = judge("columns_misaligned", max(misaligned, 0.0))
    options = _Options(hysteresis, confidence, declared)
    found = _analysed(record, cycles, swing, options, alignment)
    if alignment.verdict is Verdict.PASS:
        return found
    other = _moved(record, shift)
    other_cycles = find_cycles(other)
    if other_cycles.count < 1:
        return found
    return _holding_both(found, _analysed(other, other_cycles, swing, options, alignment))


@dataclass(frozen=True, slots=True)
class _Options:
    hysteresis: float | None
    confidence: float
    declared: Declared


def _analysed(record: Record, cycles: Cycles, swing: float, options: _Options, alignment: Finding) -> Analysis:
    explanation = explain(record, cycles)
    noise = _noise(record, cycles, explanation)
    quantum = _quantum(record)
    width = options.hysteresis
    if width is None:
        width = _hysteresis(record, cycles, swing)
    latency = options.declared.latency
    points = response_points(record, cycles, noise=noise, latency=latency)
    spread = _quantile(options.confidence)
    candidates = candidates_of(explanation, record, cycles, points[0], latency) if points else []
    jitter = options.declared.latency_jitter / math.sqrt(cycles.switches.size)
    seen = min(width, 0.99 * swing)
    evidence = Evidence(record, cycles, explanation, candidates, options.declared, swing, noise, quantum, seen)
    findings = [alignment, *swinging(evidence), *output(evidence), *signal(evidence), *response(evidence)]
    crossover = measured = ultimate = None
    remedy = Remedy("", "")
    if candidates:
        crossover = _point(combined(candidates, explanation, swing, jitter, measured=False), spread)
        measured = _point(projected(candidates[0], record, cycles), spread)
        whole = combined(candidates, explanation, swing, jitter, measured=True)
        ultimate = _point(whole, spread)
        remedy = remedy_of(whole.causes, spread=spread, cycles=cycles.count, noise=noise, quantum=quantum)
        findings.append(judge("estimates_apart", _apart(measured, crossover)))
        findings.append(judge("interval_wide", (ultimate.gain.high - ultimate.gain.low) / ultimate.gain.value / 2))
    grade, reasons = grade_of(findings)
    if ultimate is None:
        grade, reasons = Grade.UNUSABLE, (*reasons, "no model and no measured point reach the crossover")
    usable = ultimate if grade is not Grade.UNUSABLE else None
    models = _models(candidates, latency)
    return Analysis(
        ultimate_gain=usable.gain if usable else None,
        ultimate_period=usable.period if usable else None,
        describing_function=_textbook(cycles, swing, seen),
        fourier=measured,
        model_crossover=crossover,
        response_points=points,
        model=models[0].model if models else None,
        models=models,
        findings=tuple(findings),
        grade=grade,
        reasons=reasons,
        swing=swing,
        relay_amplitude=cycles.amplitude,
        hysteresis=width,
        noise=noise,
        scored_cycles=cycles.count,
        confidence=options.confidence,
        dominant_uncertainty=remedy.cause,
        remedy=remedy.advice,
    )


def _apart(measured: UltimatePoint, crossover: UltimatePoint) -> float:
    """How far the two gains lie apart, beyond what the noise of the measured one explains."""
    explained = math.log(measured.gain.high / measured.gain.low) / 2
    return max(abs(math.log(measured.gain.value / crossover.gain.value)) - explained, 0.0)


def _models(candidates: list[Candidate], latency: float) -> tuple[WeightedModel, ...]:
    return tuple(
        WeightedModel(
            one.fit.shape.model(one.fit.parameters, one.fit.linear, one.fit.problem.period, latency=latency), one.weight
        )
        for one in candidates
    )


def _point(estimate: Combined, spread: float) -> UltimatePoint:
    halves = spread * np.sqrt(np.maximum(np.diag(estimate.covariance), 0.0))
    return UltimatePoint(
        _interval(estimate.log_gain, float(halves[0])), _interval(estimate.log_period, float(halves[1]))
    )


def _moved(record: Record, places: int) -> Record:
    """The record with its output column ``places`` samples later, -1 or 1."""
    output = record.controller_output
    moved = np.append(output[1:], output[-1]) if places < 0 else np.append(output[0], output[:-1])
    return Record(record.time, record.process_variable, moved)


def _holding_both(stated: Analysis, other: Analysis) -> Analysis:
    """The analysis as stated, its intervals holding those of the other reading of the output column."""
    if stated.ultimate_gain is None or stated.ultimate_period is None:
        return stated
    if other.ultimate_gain is None or other.ultimate_period is None:
        return stated
    told = f" Read the other way, the ultimate gain is {other.ultimate_gain.value:.4g}; the interval holds both."
    findings = tuple(
        replace(one, sentence=one.sentence + told) if one.name == "columns_misaligned" else one
        for one in stated.findings
    )
    return replace(
        stated,
        ultimate_gain=_both(stated.ultimate_gain, other.ultimate_gain),
        ultimate_period=_both(stated.ultimate_period, other.ultimate_period),
        findings=findings,
    )


def _both(first: Estimate, second: Estimate) -> Estimate:
    return Estimate(first.value, min(first.low, second.low), max(first.high, second.high))


def _check(
    reference: float | None,
    hysteresis: float | None,
    output_is: str,
    latency_s: float,
    latency_jitter_s: float,
    confidence: float,
) -> None:
    if reference is not None and not math.isfinite(reference):
        raise OutOfDomain("reference", f"is {reference}", "a finite number")
    if hysteresis is not None and not (math.isfinite(hysteresis) and hysteresis >= 0):
        raise OutOfDomain("hysteresis", f"is {hysteresis}", "0 or more")
    if output_is not in ("applied_after", "read_back_before"):
        raise OutOfDomain("output_is", f"is {output_is!r}", "'applied_after' or 'read_back_before'")
    for name, value in (("latency_s", latency_s), ("latency_jitter_s", latency_jitter_s)):
        if not (math.isfinite(value) and value >= 0):
            raise OutOfDomain(name, f"is {value}", "0 or more seconds")
    if not 0.5 < confidence < 1:
        raise OutOfDomain("confidence", f"is {confidence}", "between 0.5 and 1")


def _check_declared(declared: Declared) -> None:
    if declared.effect not in (None, 1, -1):
        raise OutOfDomain("effect", f"is {declared.effect}", "+1 (raises), -1 (lowers) or None")
    for name in ("commanded_amplitude", "output_resolution", "filter_time_s"):
        value = getattr(declared, name)
        if value is not None and not (math.isfinite(value) and value > 0):
            raise OutOfDomain(name, f"is {value}", "above 0, or None")
    if declared.clock_error is not None and not math.isfinite(declared.clock_error):
        raise OutOfDomain("clock_error", f"is {declared.clock_error}", "a finite share, or None")


def _unusable(cycles: Cycles, confidence: float, name: str, reason: str, value: float = 0.0) -> Analysis:
    bounds, sentence = BOUNDS[name]
    finding = Finding(name, Verdict.FAIL, value, bounds.caution, bounds.fail, bounds.unit, sentence)
    return Analysis(
        ultimate_gain=None,
        ultimate_period=None,
        describing_function=None,
        fourier=None,
        model_crossover=None,
        response_points=(),
        model=None,
        models=(),
        findings=(finding,),
        grade=Grade.UNUSABLE,
        reasons=(reason,),
        swing=float(np.mean(cycles.swings)) if cycles.count else 0.0,
        relay_amplitude=cycles.amplitude,
        hysteresis=0.0,
        noise=0.0,
        scored_cycles=cycles.count,
        confidence=confidence,
        dominant_uncertainty="",
        remedy="",
    )


def _quantile(confidence: float) -> float:
    """Two-sided normal quantile, by bisection on the error function: scipy.stats would cost half a second."""
    low, high = 0.0, 10.0
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if math.erf(middle / math.sqrt(2)) < confidence else (low, middle)
    return low


def _noise(record: Record, cycles: Cycles, explanation: Explanation) -> float:
    """Standard deviation, by what a misfit does not reach: neighbouring residuals, and the quiet baseline.

    Neighbours alone see little of coloured noise, a baseline alone may be short; the larger one is taken, but never
    more than the whole residual.
    """
    if not explanation.fits:
        return _by_neighbours(record.process_variable)
    residual = explanation.fits[0].residual
    found = _by_neighbours(residual)
    if cycles.baseline >= LEAST_BASELINE:
        time, quiet = record.time[: cycles.baseline], record.process_variable[: cycles.baseline]
        centred = time - time.mean()
        left = quiet - quiet.mean() - centred * float(centred @ quiet) / float(centred @ centred)
        found = max(found, float(np.std(left, ddof=2)))
    return min(found, float(np.sqrt(np.mean(residual**2))))


def _by_neighbours(value: np.ndarray) -> float:
    """Standard deviation of white noise by second differences, which drift and slow motion do not reach."""
    return float(np.median(np.abs(np.diff(value, 2)))) / 0.6745 / math.sqrt(6)


def _quantum(record: Record) -> float:
    """Smallest step between distinct values where values repeat often; 0 for a continuous signal."""
    distinct = np.unique(record.process_variable)
    if distinct.size < 2 or distinct.size > 0.5 * len(record):
        return 0.0
    return float(np.min(np.diff(distinct)))


def _hysteresis(record: Record, cycles: Cycles, swing: float) -> float:
    """Read from the process variable at the switches, half a sample's travel taken off."""
    at = record.process_variable[cycles.switches]
    rising = cycles.levels[1:] < cycles.levels[:-1]
    ups, downs = at[1:][rising], at[1:][~rising]
    if ups.size == 0 or downs.size == 0:
        return 0.0
    half = abs(float(np.mean(ups)) - float(np.mean(downs))) / 2
    travel = float(np.median(np.abs(np.diff(record.process_variable)))) / 2
    return min(max(half - travel, 0.0), swing)


def _textbook(cycles: Cycles, swing: float, hysteresis: float) -> UltimatePoint:
    gain = ultimate_gain_from_swing(swing, cycles.amplitude)
    scatter = float(np.std(cycles.swings)) / swing + hysteresis / swing
    period = cycles.period
    return UltimatePoint(
        Estimate(gain, gain * (1 - min(scatter, 0.9)), gain * (1 + scatter)),
        Estimate(period, float(np.min(cycles.periods)), float(np.max(cycles.periods))),
    )


def _interval(log_value: float, half: float) -> Estimate:
    half = min(half, 5.0)
    return Estimate(math.exp(log_value), math.exp(log_value - half), math.exp(log_value + half))
