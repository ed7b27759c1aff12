"""Findings: what is wrong with a record, each a number, its bounds, a verdict and one sentence.

Owns the thresholds, which stand beside their source: the project's safety notes, section 5 (common practice and
simulations, no other source). Judges numbers that others measured.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from gainwright.cycles import Cycles
from gainwright.record import Record
from gainwright.results import Finding, Grade, Verdict


@dataclass(frozen=True, slots=True)
class Bounds:
    """Where a number becomes a caution and a fail; larger is worse unless ``least`` is set."""

    caution: float | None
    fail: float | None
    unit: str = ""
    least: bool = False

    def verdict(self, value: float) -> Verdict:
        """The verdict of a number."""
        if self.fail is not None and self._beyond(value, self.fail):
            return Verdict.FAIL
        if self.caution is not None and self._beyond(value, self.caution):
            return Verdict.CAUTION
        return Verdict.PASS

    def _beyond(self, value: float, bound: float) -> bool:
        return value < bound if self.least else value > bound


BOUNDS: dict[str, tuple[Bounds, str]] = {
    "chatter": (Bounds(0.0, 0.05), "Half-periods far shorter than the others: widen the hysteresis."),
    "hysteresis_wide": (Bounds(0.30, 0.45), "The hysteresis is wide for the swing: raise the amplitude."),
    "swing_over_noise": (Bounds(10.0, 5.0, least=True), "The swing is small over the noise: raise the amplitude."),
    "quantised": (Bounds(20.0, 10.0, "counts", least=True), "The signal is coarse for the swing: raise the amplitude."),
    "few_samples": (Bounds(40.0, 10.0, "per period", least=True), "Few samples per period: scan faster."),
    "gaps": (Bounds(1 / 40, 1 / 20, "periods"), "A gap in the samples is long for the period."),
    "jitter": (Bounds(1.2, 2.0), "The samples come unevenly."),
    "off_centre": (Bounds(0.10, 0.25), "The half-periods are unequal: a load holds the output off centre."),
    "drift": (Bounds(0.02, 0.06, "per cycle"), "The balance of the half-periods moves: the load drifts."),
    "not_settled": (Bounds(0.03, 0.12), "Period or swing still change from cycle to cycle."),
    "unlike_model": (Bounds(0.05, 0.12), "No model of the family explains the record: trust measured points only."),
    "few_cycles": (Bounds(2.0, 1.0, "cycles", least=True), "Few whole cycles with equal levels: test for longer."),
    "estimates_apart": (Bounds(0.10, 0.20), "The measured response and the model disagree about the ultimate gain."),
    "columns_misaligned": (
        Bounds(0.10, 0.25, "of all switches"),
        "The output column fits the relay's law better one sample apart: say how it was recorded.",
    ),
    "interval_wide": (Bounds(0.15, 0.5), "The ultimate gain's interval is wide: test for longer or swing further."),
}

BLOCKING = frozenset({"chatter", "swing_over_noise", "few_samples", "unlike_model", "few_cycles", "estimates_apart"})
"""Findings whose fail makes a record unusable; the fail of any other makes it fair."""


def judge(name: str, value: float) -> Finding:
    """The finding of a name and its measured number.

    Parameters
    ----------
    name : str
        One of `BOUNDS`.
    value : float

    Returns
    -------
    Finding
    """
    bounds, sentence = BOUNDS[name]
    number = float(np.clip(value, -1e12, 1e12))
    return Finding(name, bounds.verdict(number), number, bounds.caution, bounds.fail, bounds.unit, sentence)


def cycle_findings(record: Record, cycles: Cycles, *, hysteresis: float, noise: float, quantum: float) -> list[Finding]:
    """Findings that the cycles alone show.

    Parameters
    ----------
    record : Record
    cycles : Cycles
        With at least one scored cycle.
    hysteresis, noise, quantum : float, PV units

    Returns
    -------
    list of Finding
    """
    swing = float(np.mean(cycles.swings))
    steps = np.diff(record.time)
    nominal = float(np.median(steps))
    found = [
        judge("few_cycles", float(cycles.count)),
        judge("chatter", _chatter(record, cycles)),
        judge("hysteresis_wide", hysteresis / swing),
        judge("swing_over_noise", swing / noise if noise > 0 else 1e6),
        judge("quantised", 2 * swing / quantum if quantum > 0 else 1e6),
        judge("few_samples", cycles.period / nominal),
        judge("gaps", float(np.max(steps)) / cycles.period - (nominal / cycles.period)),
        judge("jitter", float(np.percentile(steps, 95)) / nominal),
        judge("off_centre", float(np.mean(np.abs(cycles.duties - 0.5)))),
    ]
    if cycles.count >= 4:
        # The first scored cycle still settles; what remains shows the load.
        later = cycles.duties[1:]
        slope = float(np.polyfit(np.arange(later.size), later, 1)[0])
        # The slope that sampling and noise alone give.
        resolution = (nominal / cycles.period + 0.3 * noise / swing) / later.size
        found.append(judge("drift", max(abs(slope) - resolution, 0.0)))
    return found


def settling(record: Record, cycles: Cycles, *, noise: float, explained: bool) -> Finding:
    """Whether period and swing still change; a transient that the model explains is no fault.

    Parameters
    ----------
    record : Record
    cycles : Cycles
        With at least one scored cycle.
    noise : float, PV units
    explained : bool
        Whether the fitted model leaves nothing but noise.

    Returns
    -------
    Finding
    """
    nominal, swing = float(np.median(np.diff(record.time))), float(np.mean(cycles.swings))
    period = float(np.std(cycles.periods)) / cycles.period - nominal / cycles.period
    spread = (float(np.std(cycles.swings)) - noise) / swing / 3
    return judge("not_settled", 0.0 if explained else max(period, spread, 0.0))


def grade_of(findings: list[Finding]) -> tuple[Grade, tuple[str, ...]]:
    """The grade and its reasons.

    Parameters
    ----------
    findings : list of Finding

    Returns
    -------
    tuple
        Grade, and one sentence per finding that lowers it.
    """
    bad = [f for f in findings if f.verdict is not Verdict.PASS]
    reasons = tuple(f"{f.name}: {f.sentence}" for f in bad)
    if any(f.verdict is Verdict.FAIL and f.name in BLOCKING for f in bad):
        return Grade.UNUSABLE, reasons
    return (Grade.FAIR if bad else Grade.GOOD), reasons


def _chatter(record: Record, cycles: Cycles) -> float:
    """Share of intervals between switches below 0.35 of the median of their direction."""
    # From the first switch on; the start from rest is shorter than any half-period that follows.
    lengths = np.diff(record.time[cycles.switches[1:]])
    share = 0.0
    for part in (lengths[::2], lengths[1::2]):
        if part.size:
            share = max(share, float(np.mean(part < 0.35 * np.median(part))))
    return share
