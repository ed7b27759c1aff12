"""Findings: what is wrong with a record, each a number, its bounds, a verdict and one sentence.

Owns the thresholds, which stand beside their source: the project's safety notes, section 5 (common practice and
simulations, no other source). Judges numbers that others measured.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

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
    # The cycles.
    "few_cycles": (Bounds(2.0, 1.0, "cycles", least=True), "Few whole cycles with equal levels: test for longer."),
    "chatter": (Bounds(0.0, 0.05), "Half-periods far shorter than the others: widen the hysteresis."),
    "hysteresis_wide": (Bounds(0.30, 0.45), "The hysteresis is wide for the swing: raise the amplitude."),
    "swing_over_noise": (Bounds(10.0, 5.0, least=True), "The swing is small over the noise: raise the amplitude."),
    "quantised": (Bounds(20.0, 10.0, "counts", least=True), "The signal is coarse for the swing: raise the amplitude."),
    "few_samples": (Bounds(40.0, 10.0, "per period", least=True), "Few samples per period: scan faster."),
    "sampling_sets_period": (
        Bounds(20.0, 8.0, "samples", least=True),
        "The scan itself makes the period: the result says nothing of the process.",
    ),
    "off_centre": (Bounds(0.10, 0.20), "The half-periods are unequal: a load holds the output off centre."),
    # The notes propose 0.005 / 0.02; the start alone gives 0.017 at the 95th percentile of the clean batch.
    "drift": (Bounds(0.02, 0.04, "per cycle"), "The balance of the half-periods moves: the load drifts."),
    "not_settled": (Bounds(0.03, 0.12), "Period or swing still change from cycle to cycle."),
    "swing_trend": (Bounds(0.02, 0.07, "per cycle"), "The swing grows or decays: the process's gain is changing."),
    "upset": (Bounds(0.0, 1.0, "cycles"), "Cycles unlike the others: something upset the test; leave them out."),
    "coupled_loop": (
        Bounds(0.05, 0.20),
        "The swing beats: another loop moves at nearly this period. A record without a beat proves nothing.",
    ),
    "backlash": (Bounds(0.05, 0.20), "Swing and amplitude do not scale: backlash in the final element; inspect it."),
    "unequal_gain": (Bounds(0.05, 0.15), "The swing changed with the output's centre: the gain depends on it."),
    # The output and its final element.
    "slew_limited": (Bounds(0.03, 0.10, "periods"), "The output travels slowly: its travel is part of the process."),
    "coarse_output": (Bounds(20.0, 5.0, "steps", least=True), "The output's steps are coarse for the amplitude."),
    "output_limited": (Bounds(0.02, 0.10), "The output did not reach what was asked: it runs into a limit."),
    "sticking": (
        Bounds(0.15, 0.25),
        "The answer's delay scatters from switch to switch: the final element sticks; inspect it, do not tune.",
    ),
    # The signal and its times.
    "gaps": (Bounds(1 / 40, 1 / 20, "periods"), "A gap in the samples is long for the period."),
    "jitter": (Bounds(1.2, 2.0), "The samples come unevenly."),
    "frozen": (Bounds(0.05, 0.15, "periods"), "The signal stood still while the process moved: look at the sensor."),
    "spikes": (Bounds(0.0, 2.0, "samples"), "The signal leaps out and back: look at the sensor and its wiring."),
    # The notes propose 0.05 / 0.2; the relay's pull spreads the line, and what is seen of one of a third of the swing
    # is 0.1 to 0.3. Healthy records of the batch show 0.
    "outside_oscillation": (
        Bounds(0.03, 0.10, "of the test's power"),
        "A regular oscillation that the relay does not make: find its source first.",
    ),
    "hidden_filter": (
        Bounds(20.0, 10.0, "filter times", least=True),
        "The filter is slow for the period: it belongs to the process only if the controller sees it.",
    ),
    "clock": (Bounds(0.001, 0.01), "The clocks disagree: use the source's time stamps."),
    "link_latency": (
        Bounds(1 / 20, None, "periods"),
        "The link's own delay is long for the period: it is taken out, but must be known well.",
    ),
    "columns_misaligned": (
        Bounds(0.10, 0.25, "of all switches"),
        "The output column fits the relay's law better one sample apart: say how it was recorded.",
    ),
    # The answer.
    "no_response": (
        Bounds(None, 4.0, "standard errors", least=True),
        "The process variable does not answer the output: look at mode, hand valve and wiring.",
    ),
    "wrong_sign": (Bounds(None, 0.5), "The process answers against the declared effect of the output."),
    "unlike_model": (Bounds(0.05, 0.12), "No model of the family explains the record: trust measured points only."),
    "inverse_response": (Bounds(0.02, 0.20), "The process first moves the wrong way: conservative rules only."),
    "integrating": (Bounds(None, None), "The share of integrating structures among the adequate ones."),
    "estimates_apart": (Bounds(0.10, 0.20), "The measured response and the model disagree about the ultimate gain."),
    "interval_wide": (Bounds(0.15, 0.5), "The ultimate gain's interval is wide: test for longer or swing further."),
}

BLOCKING = frozenset(
    {
        "swing_over_noise",
        "few_samples",
        "sampling_sets_period",
        "unlike_model",
        "few_cycles",
        "estimates_apart",
        "sticking",
        "frozen",
        "no_response",
        "wrong_sign",
        "outside_oscillation",
    }
)
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
