"""Symptoms in the cycles themselves: their number, times, swings and balance."""

from __future__ import annotations

import numpy as np

from gainwright.findings import BOUNDS, judge
from gainwright.results import Finding, Verdict
from gainwright.symptoms.evidence import Evidence

BALANCED = 0.3
"""What a share of the noise over the swing does to a half-period's share of the period."""
LEAST_TREND = 4
LEAST_UPSET = 4
LEAST_BEAT = 6


def swinging(evidence: Evidence) -> list[Finding]:
    """Findings of the cycles.

    Parameters
    ----------
    evidence : Evidence

    Returns
    -------
    list of Finding
    """
    cycles, swing = evidence.cycles, evidence.swing
    found = [
        judge("few_cycles", float(cycles.count)),
        judge("chatter", _chatter(evidence)),
        judge("hysteresis_wide", evidence.hysteresis / swing),
        judge("swing_over_noise", evidence.quiet_swing / evidence.noise if evidence.noise > 0 else 1e6),
        judge("quantised", 2 * evidence.quiet_swing / evidence.quantum if evidence.quantum > 0 else 1e6),
        judge("few_samples", cycles.period / evidence.nominal),
        judge("sampling_sets_period", cycles.period / evidence.nominal),
        judge("off_centre", float(np.mean(np.abs(cycles.duties[min(1, cycles.count - 1) :] - 0.5)))),
    ]
    explained = evidence.lead is not None and _passes("unlike_model", evidence.misfit_share)
    found.append(judge("not_settled", 0.0 if explained else _unsettled(evidence)))
    if cycles.count >= LEAST_TREND:
        found.append(judge("drift", _drift(evidence)))
        found.append(judge("swing_trend", 0.0 if explained else _trend(evidence)))
    if cycles.count > LEAST_UPSET:
        found.append(judge("upset", float(_upset_cycles(evidence))))
    if cycles.count >= LEAST_BEAT:
        found.append(judge("coupled_loop", _beat(evidence)))
    found += _of_several_levels(evidence)
    return found


def _passes(name: str, value: float) -> bool:
    return BOUNDS[name][0].verdict(value) is Verdict.PASS


def _chatter(evidence: Evidence) -> float:
    """Share of intervals between switches below 0.35 of the median of their direction."""
    # From the first switch on; the start from rest is shorter than any half-period that follows.
    lengths = np.diff(evidence.record.time[evidence.cycles.switches[1:]])
    share = 0.0
    for part in (lengths[::2], lengths[1::2]):
        if part.size:
            share = max(share, float(np.mean(part < 0.35 * np.median(part))))
    return share


def _unsettled(evidence: Evidence) -> float:
    """Scatter of periods and (a third of that of) swings, less what sampling and noise give."""
    cycles = evidence.cycles
    period = float(np.std(cycles.periods)) / cycles.period - evidence.nominal / cycles.period
    spread = (float(np.std(cycles.swings)) - evidence.noise) / evidence.swing / 3
    return max(period, spread, 0.0)


def _drift(evidence: Evidence) -> float:
    """Slope of the half-periods' balance, less what sampling and noise alone give."""
    cycles = evidence.cycles
    # The first scored cycle still settles; what remains shows the load.
    later = cycles.duties[1:]
    slope = float(np.polyfit(np.arange(later.size), later, 1)[0])
    resolution = (evidence.nominal / cycles.period + BALANCED * evidence.noise / evidence.swing) / later.size
    return max(abs(slope) - resolution, 0.0)


def _trend(evidence: Evidence) -> float:
    """Slope of the logarithm of the swing per cycle, less what noise alone gives."""
    later = np.log(evidence.cycles.swings[1:])
    slope = float(np.polyfit(np.arange(later.size), later, 1)[0])
    return max(abs(slope) - evidence.noise / evidence.swing / later.size, 0.0)


def _upset_cycles(evidence: Evidence) -> int:
    """Of the last four cycles, those whose period or swing lies apart from the median of all."""
    cycles = evidence.cycles
    noise = evidence.noise / evidence.swing
    slack = {"periods": evidence.nominal / cycles.period + noise, "swings": 2 * noise}
    # Without the first cycle, which still starts.
    apart = np.zeros(cycles.count - 1, dtype=bool)
    for name in ("periods", "swings"):
        values = getattr(cycles, name)[1:]
        middle = float(np.median(values))
        spread = 4 * float(np.median(np.abs(values - middle))) / middle
        apart |= np.abs(values / middle - 1) > max(spread, 0.10) + slack[name]
    return int(np.count_nonzero(apart[-LEAST_UPSET:]))


def _beat(evidence: Evidence) -> float:
    """Regular up and down of the swing from cycle to cycle, a share of it, beyond noise and trend."""
    swings = evidence.cycles.swings[1:]
    count = np.arange(swings.size)
    left = swings - np.polyval(np.polyfit(count, swings, 1), count)
    lines = np.abs(np.fft.rfft(left))[1:] * 2 / swings.size
    threshold = 3.0 * evidence.noise / np.sqrt(swings.size)
    return max(float(np.max(lines)) - threshold, 0.0) / evidence.swing if lines.size else 0.0


def _of_several_levels(evidence: Evidence) -> list[Finding]:
    """Backlash from two amplitudes, unequal gain from two biases, where the record holds whole cycles of both."""
    runs = evidence.cycles.runs(evidence.record)
    found = []
    first = next(
        (run for run in runs[:-1] if abs(run.amplitude / runs[-1].amplitude - 1) > 0.2 and run.cycles >= 2), None
    )
    if first is not None:
        last = runs[-1]
        slope = (last.swing - first.swing) / (last.amplitude - first.amplitude)
        if slope > 0:
            # a = s (d - b/2): the line of swing against amplitude meets zero swing at half the backlash.
            found.append(judge("backlash", max(1.0 - last.swing / slope / last.amplitude, 0.0)))
    for run in runs[:-1]:
        last = runs[-1]
        same = abs(run.amplitude / last.amplitude - 1) < 0.02 and run.cycles >= 2
        if same and abs(run.bias - last.bias) > 0.1 * last.amplitude:
            resolution = evidence.noise / evidence.swing
            found.append(judge("unequal_gain", max(abs(last.swing / run.swing - 1) - resolution, 0.0)))
            break
    return found
