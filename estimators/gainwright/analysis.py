"""The analysis of a relay test: three estimates of the ultimate point, models, findings, grade.

Owns the order of the steps and the combination of the estimates. Strategy: cycles by the output; the textbook value
from the swing; the measured response point; the family of models fitted to the whole record; the measured point
projected on the crossover by the model's shape; both combined, the spread across adequate structures inside the
interval.
"""

from __future__ import annotations

import math
from typing import Literal

import numpy as np

from gainwright.cycles import Cycles, find_cycles
from gainwright.describing import ultimate_gain_from_swing
from gainwright.errors import NoCrossover, OutOfDomain
from gainwright.findings import BOUNDS, cycle_findings, grade_of, judge, settling
from gainwright.fitting import Fit, fit_family, model_of
from gainwright.frequency import fundamental, response_points
from gainwright.margins import ultimate_point
from gainwright.record import Record
from gainwright.results import Analysis, Estimate, Finding, Grade, ResponsePoint, UltimatePoint, Verdict, WeightedModel

ADEQUATE = 12.0
"""Structures within this much of the best criterion are adequate; a weight of e^-6 of the best one is none."""
LONGEST_CORRELATION = 40
SMALLEST_SHARE = 1e-4


def analyse(
    record: Record,
    *,
    reference: float | None = None,
    hysteresis: float | None = None,
    output_is: Literal["applied_after", "read_back_before"] = "applied_after",
    latency_s: float = 0.0,
    confidence: float = 0.95,
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
        Whether ``controller_output[k]`` is in force after sample k, or was read back before it.
    latency_s : float, seconds, >= 0
        Time from a reading to the output that answers it, removed from the process.
    confidence : float, in (0.5, 1)

    Returns
    -------
    Analysis
        Graded ``unusable``, with reasons and without an ultimate point, where the record carries none.

    Raises
    ------
    OutOfDomain
        For an argument outside its domain.
    """
    _check(reference, hysteresis, output_is, latency_s, confidence)
    if output_is == "read_back_before":
        shifted = np.append(record.controller_output[1:], record.controller_output[-1])
        record = Record(record.time, record.process_variable, shifted)
    cycles = find_cycles(record)
    if cycles.count < 1:
        return _unusable(cycles, confidence, "few_cycles", "no whole cycle with equal output levels")
    swing = float(np.mean(cycles.swings))
    if not swing > 0:
        return _unusable(cycles, confidence, "swing_over_noise", "the process variable does not move")
    fits = fit_family(record, cycles.period)
    noise = _noise(record, fits)
    quantum = _quantum(record)
    width = hysteresis if hysteresis is not None else _hysteresis(record, cycles, reference, swing)
    points = response_points(record, cycles, noise=noise, latency=latency_s)
    findings = cycle_findings(record, cycles, hysteresis=min(width, 0.99 * swing), noise=noise, quantum=quantum)
    spread = _quantile(confidence)
    textbook = _textbook(cycles, swing, min(width, 0.99 * swing))
    adequate = _adequate(fits, latency_s)
    crossover = _crossover(adequate, spread, latency_s)
    measured = _projected(record, cycles, points, adequate, spread, latency_s)
    gain, period = _combined(crossover, measured, swing, quantum, cycles)
    if fits:
        findings.append(judge("unlike_model", _misfit(fits[0], noise, swing)))
        explained = findings[-1].verdict is Verdict.PASS
        findings.append(settling(record, cycles, noise=noise, explained=explained))
    if crossover is not None and measured is not None:
        findings.append(judge("estimates_apart", abs(math.log(measured.gain.value / crossover.gain.value))))
    if gain is not None:
        findings.append(judge("interval_wide", (gain.high - gain.low) / gain.value / 2))
    grade, reasons = grade_of(findings)
    if gain is None:
        grade, reasons = Grade.UNUSABLE, (*reasons, "no model and no measured point reach the crossover")
    cause, remedy = _dominant(noise, swing, quantum, cycles, record)
    usable = grade is not Grade.UNUSABLE
    return Analysis(
        ultimate_gain=gain if usable else None,
        ultimate_period=period if usable else None,
        describing_function=textbook,
        fourier=measured,
        model_crossover=crossover,
        response_points=points,
        model=adequate[0][0].model(latency=latency_s) if adequate else None,
        models=tuple(WeightedModel(fit.model(latency=latency_s), weight) for fit, weight in adequate),
        findings=tuple(findings),
        grade=grade,
        reasons=reasons,
        swing=swing,
        relay_amplitude=cycles.amplitude,
        hysteresis=width,
        noise=noise,
        scored_cycles=cycles.count,
        confidence=confidence,
        dominant_uncertainty=cause,
        remedy=remedy,
    )


def _check(
    reference: float | None, hysteresis: float | None, output_is: str, latency_s: float, confidence: float
) -> None:
    if reference is not None and not math.isfinite(reference):
        raise OutOfDomain("reference", f"is {reference}", "a finite number")
    if hysteresis is not None and not (math.isfinite(hysteresis) and hysteresis >= 0):
        raise OutOfDomain("hysteresis", f"is {hysteresis}", "0 or more")
    if output_is not in ("applied_after", "read_back_before"):
        raise OutOfDomain("output_is", f"is {output_is!r}", "'applied_after' or 'read_back_before'")
    if not (math.isfinite(latency_s) and latency_s >= 0):
        raise OutOfDomain("latency_s", f"is {latency_s}", "0 or more seconds")
    if not 0.5 < confidence < 1:
        raise OutOfDomain("confidence", f"is {confidence}", "between 0.5 and 1")


def _unusable(cycles: Cycles, confidence: float, name: str, reason: str) -> Analysis:
    bounds, sentence = BOUNDS[name]
    finding = Finding(name, Verdict.FAIL, 0.0, bounds.caution, bounds.fail, bounds.unit, sentence)
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


def _noise(record: Record, fits: list[Fit]) -> float:
    """Standard deviation by second differences, which drift and slow motion do not reach; else by the best fit."""
    second = np.diff(record.process_variable, 2)
    by_difference = float(np.median(np.abs(second))) / 0.6745 / math.sqrt(6)
    by_fit = float(np.std(fits[0].residual)) if fits else by_difference
    return min(by_fit, max(by_difference, 0.3 * by_fit)) if fits else by_difference


def _quantum(record: Record) -> float:
    """Smallest step between distinct values where values repeat often; 0 for a continuous signal."""
    distinct = np.unique(record.process_variable)
    if distinct.size < 2 or distinct.size > 0.5 * len(record):
        return 0.0
    return float(np.min(np.diff(distinct)))


def _hysteresis(record: Record, cycles: Cycles, reference: float | None, swing: float) -> float:
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


def _adequate(fits: list[Fit], latency_s: float) -> list[tuple[Fit, float]]:
    """Fits near the best criterion that cross over, with weights that sum to one."""
    crossing = []
    for fit in fits:
        try:
            ultimate_point(fit.model(latency=latency_s).transfer_function())
        except (NoCrossover, OutOfDomain):
            continue
        crossing.append(fit)
    if not crossing:
        return []
    near = [fit for fit in crossing if fit.criterion - crossing[0].criterion <= ADEQUATE]
    # Residuals of one record are never quite independent: half the difference keeps the runners-up in play.
    raw = np.exp([-0.25 * (fit.criterion - near[0].criterion) for fit in near])
    return [(fit, float(weight)) for fit, weight in zip(near, raw / raw.sum(), strict=True)]


def _log_point(fit: Fit, parameters: np.ndarray, gain: float, latency_s: float) -> tuple[float, float]:
    ku, tu = ultimate_point(model_of(fit.structure, parameters, gain, latency=latency_s).transfer_function())
    return math.log(ku), math.log(tu)


def _variances(fit: Fit, latency_s: float) -> tuple[float, float]:
    """Variances of log gain and log period by the fit's tangents, coloured residuals allowed for."""
    base = _log_point(fit, fit.parameters, float(fit.linear[0]), latency_s)
    slopes = np.zeros((2, fit.parameters.size + 1))
    # The gain scales the ultimate gain inversely and leaves the period alone.
    slopes[0, -1] = -1.0
    for k in range(fit.parameters.size):
        moved = fit.parameters.copy()
        moved[k] += 1e-4
        try:
            point = _log_point(fit, moved, float(fit.linear[0]), latency_s)
        except NoCrossover:
            continue
        slopes[:, k] = [(point[i] - base[i]) / 1e-4 for i in range(2)]
    covariance = slopes @ fit.covariance @ slopes.T * _colour(fit.residual)
    return max(float(covariance[0, 0]), 0.0), max(float(covariance[1, 1]), 0.0)


def _colour(residual: np.ndarray) -> float:
    """Inflation of variances by the residual's autocorrelation over its first lags, at least 1."""
    centred = residual - residual.mean()
    power = float(centred @ centred)
    if power <= 0:
        return 1.0
    lags = min(LONGEST_CORRELATION, centred.size // 4)
    correlation = [float(centred[k:] @ centred[: centred.size - k]) / power for k in range(1, lags)]
    total = 1.0
    for value in correlation:
        if value < 2.0 / math.sqrt(centred.size):
            break
        total += 2 * value
    return total


def _crossover(adequate: list[tuple[Fit, float]], spread: float, latency_s: float) -> UltimatePoint | None:
    if not adequate:
        return None
    points, variances, weights = [], [], []
    for fit, weight in adequate:
        points.append(_log_point(fit, fit.parameters, float(fit.linear[0]), latency_s))
        variances.append(_variances(fit, latency_s))
        weights.append(weight)
    estimates = []
    for i in range(2):
        mean = sum(w * p[i] for w, p in zip(weights, points, strict=True))
        variance = sum(w * (v[i] + (p[i] - mean) ** 2) for w, p, v in zip(weights, points, variances, strict=True))
        estimates.append(_interval(mean, spread * math.sqrt(variance)))
    return UltimatePoint(estimates[0], estimates[1])


def _projected(
    record: Record,
    cycles: Cycles,
    points: tuple[ResponsePoint, ...],
    adequate: list[tuple[Fit, float]],
    spread: float,
    latency_s: float,
) -> UltimatePoint | None:
    """The measured fundamental against the best model's own, over the same window, carried to the crossover along the
    model's shape. Both hold the same transient, so that it drops out."""
    if not points or not adequate:
        return None
    fit = adequate[0][0]
    start, end = (float(record.time[cycles.switches[cycles.scored[k]]]) for k in (0, -1))
    seen = np.interp(fit.time, record.time, record.process_variable)
    ratio = fundamental(fit.time, seen, start, end, cycles.count) / fundamental(
        fit.time, seen - fit.residual, start, end, cycles.count
    )
    model = fit.model(latency=latency_s).transfer_function()
    omega = 2 * math.pi / ultimate_point(model)[1]
    near = np.angle(model.response(np.array([omega * 1.001])) / model.response(np.array([omega * 0.999])))
    slope = float(near[0]) / (math.log(1.001) - math.log(0.999))
    turn = math.atan2(ratio.imag, ratio.real)
    shift = max(-0.5, min(0.5, -turn / slope)) if slope < 0 else 0.0
    moved = complex(model.response(omega * math.exp(shift)))
    # The noise of the settled window, and the shape's own uncertainty through the fit's variance.
    scatter = math.sqrt(points[0].covariance[0]) / abs(points[0].response)
    by_gain, by_period = _variances(fit, latency_s)
    return UltimatePoint(
        _interval(-math.log(abs(moved) * abs(ratio)), spread * math.hypot(scatter, math.sqrt(by_gain))),
        _interval(-math.log(omega / (2 * math.pi)) - shift, spread * math.hypot(scatter, math.sqrt(by_period))),
    )


def _combined(
    crossover: UltimatePoint | None, measured: UltimatePoint | None, swing: float, quantum: float, cycles: Cycles
) -> tuple[Estimate | None, Estimate | None]:
    """Both estimates by their variances; what they differ by, and the quantum, are inside the interval."""
    if crossover is None:
        return None, None
    allowance = SMALLEST_SHARE + (quantum / swing / math.sqrt(12) / max(cycles.count, 1) if quantum else 0.0)
    combined = []
    for name in ("gain", "period"):
        first: Estimate = getattr(crossover, name)
        second: Estimate = getattr(measured, name) if measured is not None else first
        halves = [(math.log(e.high / e.low)) / 2 + 1e-9 for e in (first, second)]
        weights = [1 / half**2 for half in halves]
        logs = [math.log(first.value), math.log(second.value)]
        mean = sum(w * v for w, v in zip(weights, logs, strict=True)) / sum(weights)
        # The two share their data, so that combining them does not make the narrower one narrower.
        half = math.hypot(min(halves), abs(logs[0] - logs[1]) / 2) + allowance
        combined.append(_interval(mean, half))
    return combined[0], combined[1]


def _interval(log_value: float, half: float) -> Estimate:
    half = min(half, 5.0)
    return Estimate(math.exp(log_value), math.exp(log_value - half), math.exp(log_value + half))


def _misfit(fit: Fit, noise: float, swing: float) -> float:
    """Fit error beyond the noise, as a share of the swing."""
    excess = max(float(np.mean(fit.residual**2)) - noise**2, 0.0)
    return math.sqrt(excess) / swing


def _dominant(noise: float, swing: float, quantum: float, cycles: Cycles, record: Record) -> tuple[str, str]:
    """The largest cause of the interval's width, and the cheapest way to halve it."""
    samples = cycles.period / float(np.median(np.diff(record.time)))
    causes = {
        "noise": noise / swing / math.sqrt(samples * cycles.count),
        "quantum": quantum / swing / math.sqrt(12 * samples * cycles.count),
        "sampling": 0.3 / samples / cycles.count,
    }
    cause = max(causes, key=lambda name: causes[name])
    remedies = {
        "noise": f"twice the amplitude, or {4 * cycles.count} cycles in place of {cycles.count}",
        "quantum": "twice the amplitude",
        "sampling": "half the sample interval",
    }
    return cause, remedies[cause]
