"""Listening: what an untouched loop tells, and whether a test may start from it.

Owns the baseline's statistics and the refusals that follow from them. Moves nothing.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field

from gainwright_service.experiment.commands import Facts
from gainwright_service.experiment.events import Trip
from gainwright_service.experiment.plan import Plan
from gainwright_service.experiment.readings import Mode, Reading

HYSTERESIS_SIGMAS = 3.0
"""Half-width against chatter: 2.5 sigma to 100 samples per period, 3 at 400 (safety document, section 4)."""
HYSTERESIS_QUANTA = 1.5
SMALLEST_HYSTERESIS = 0.01
"""Share of the allowed deviation: the hysteresis of a noiseless loop."""
AGREEMENT = 0.25
"""The setpoint is the reference in automatic when it agrees with the mean within this share of D."""
RESTING_SHARE = 0.01
"""Share of the output's span by which a resting output asked for may differ from the one found."""
LARGEST_DRIFT = 0.5
"""Share of D by which a self-regulating baseline may move over the listening time."""


@dataclass(slots=True)
class Baseline:
    """Readings collected so far."""

    times: list[float] = field(default_factory=list)
    values: list[float] = field(default_factory=list)
    outputs: list[float] = field(default_factory=list)
    newest: Reading | None = None
    modes: set[Mode] = field(default_factory=set)

    def add(self, reading: Reading) -> None:
        """Take one reading of good or uncertain quality."""
        self.newest = reading
        self.modes.add(reading.mode)
        if not reading.usable:
            return
        self.times.append(reading.taken_at)
        self.values.append(reading.process_variable)
        if reading.controller_output is not None:
            self.outputs.append(reading.controller_output)


def listened(baseline: Baseline, plan: Plan) -> Facts | Trip:
    """The facts of a baseline, or why no test may start from it."""
    newest = baseline.newest
    if newest is None or len(baseline.values) < 8:
        return Trip("D7", len(baseline.values), 8, "", "too few good readings while listening", link=True)
    if len(baseline.modes) > 1:
        return Trip("D6", len(baseline.modes), 1, "", "the mode changed while listening", yields=True)
    moved = _moved_by_hand(baseline, plan)
    if moved is not None:
        return moved
    mean, slope, noise = _trend(baseline.times, baseline.values)
    quantum = _quantum(baseline.values)
    resting = plan.resting_output
    if resting is None:
        if not baseline.outputs:
            return Trip("B20", 0, 1, "", "the output cannot be read: give the resting output when starting")
        resting = math.fsum(baseline.outputs) / len(baseline.outputs)
    elif baseline.outputs:
        seen = math.fsum(baseline.outputs) / len(baseline.outputs)
        if abs(resting - seen) > RESTING_SHARE * plan.output_span:
            return Trip(
                "B20", resting, seen, "",
                "the resting output asked for is not the output found: leave it out, it is read from the loop",
            )  # fmt: skip
    narrowest = min(plan.deviation_up, plan.deviation_down)
    hysteresis = max(HYSTERESIS_SIGMAS * noise, HYSTERESIS_QUANTA * quantum, SMALLEST_HYSTERESIS * narrowest)
    reference = plan.reference if plan.reference is not None else mean
    if plan.reference is None and newest.mode in (Mode.AUTOMATIC, Mode.CASCADE) and newest.setpoint is not None:
        if abs(newest.setpoint - mean) > AGREEMENT * narrowest:
            return Trip(
                "B11", abs(newest.setpoint - mean), AGREEMENT * narrowest, "",
                "setpoint and process variable do not agree: wait until the loop has settled",
            )  # fmt: skip
        reference = newest.setpoint
    found = Facts(
        mode=newest.mode,
        setpoint=newest.setpoint,
        controller_output=baseline.outputs[-1] if baseline.outputs else resting,
        process_variable=newest.process_variable,
        resting_output=resting,
        reference=reference,
        noise=noise,
        quantum=quantum,
        drift_per_s=slope,
        hysteresis=hysteresis,
        exit_output=plan.exit_value if plan.exit_value is not None else resting,
        longest_still=_longest_still(baseline.values),
    )
    return _refusal(found, plan, baseline, narrowest) or found


def changed_since(found: Facts, reading: Reading, plan: Plan) -> str:
    """What is no longer as it was found, in words; empty where nothing is."""
    if reading.mode is not found.mode:
        return f"the mode changed from {found.mode} to {reading.mode}"
    moved = reading.controller_output is not None and (
        abs(reading.controller_output - found.controller_output) > 2 * plan.echo_tolerance
    )
    if found.mode is Mode.MANUAL and moved:
        return "the output was changed"
    if not plan.setpoint_follows and found.setpoint is not None and reading.setpoint is not None:
        span = plan.process_variable_high - plan.process_variable_low
        if abs(reading.setpoint - found.setpoint) > 1e-5 * max(span, abs(found.setpoint)):
            return "the setpoint was changed"
    return ""


def _moved_by_hand(baseline: Baseline, plan: Plan) -> Trip | None:
    """In manual nobody but a person moves the output; a mean over such a move would be a bump of its own."""
    if baseline.outputs and Mode.MANUAL in baseline.modes:
        spread, bound = max(baseline.outputs) - min(baseline.outputs), 2 * plan.echo_tolerance
        if spread > bound:
            return Trip("D6", spread, bound, "", "somebody moved the output while listening", yields=True)
    return None


def _refusal(found: Facts, plan: Plan, baseline: Baseline, narrowest: float) -> Trip | None:
    low, high = plan.process_variable_low, plan.process_variable_high
    if not low < found.reference < high:
        bound = low if found.reference <= low else high
        return Trip("D2", found.reference, bound, "", "the reference lies outside the hard limits")
    room = min(found.resting_output - plan.output_low, plan.output_high - found.resting_output)
    if room <= 0:
        return Trip("D5", found.resting_output, plan.output_low, "", "the resting output lies outside the band")
    if abs(found.process_variable - found.reference) > narrowest:
        return Trip(
            "D1", abs(found.process_variable - found.reference), narrowest, "",
            "the process variable is not near the reference",
        )  # fmt: skip
    if 4 * found.hysteresis > 0.5 * narrowest:
        return Trip(
            "B12", 8 * found.hysteresis, narrowest, "",
            "the noise is too large for the allowed deviation: allow more, or filter the signal",
        )  # fmt: skip
    moved = abs(found.drift_per_s) * (baseline.times[-1] - baseline.times[0])
    if moved > LARGEST_DRIFT * narrowest:
        return Trip("B11", moved, LARGEST_DRIFT * narrowest, "", "the process variable drifts: wait for a steady start")
    automatic = found.mode in (Mode.AUTOMATIC, Mode.CASCADE)
    if automatic and plan.exit_action == "as_found" and plan.integral_follows is not True:
        return Trip(
            "B19", 0, 1, "",
            "found in automatic, and it is not proven that the controller's integral follows the output in manual: "
            "put the loop into manual, or prove and declare integral_follows_in_manual",
        )  # fmt: skip
    if automatic and plan.exit_action == "as_found" and found.setpoint is None and plan.setpoint_follows is not False:
        return Trip(
            "B19", 0, 1, "",
            "found in automatic, its setpoint cannot be read, and it is not declared that it stays in manual: put the "
            "loop into manual, or declare setpoint_follows_in_manual",
        )  # fmt: skip
    if found.mode is Mode.OTHER:
        return Trip("B20", 0, 1, "", "the loop is in a mode that cannot be restored: put it into manual or automatic")
    return None


def _trend(times: list[float], values: list[float]) -> tuple[float, float, float]:
    """Mean, slope per second and standard deviation about the straight line."""
    count = len(values)
    mean_time, mean = math.fsum(times) / count, math.fsum(values) / count
    spread = math.fsum((t - mean_time) ** 2 for t in times)
    slope = math.fsum((t - mean_time) * (v - mean) for t, v in zip(times, values, strict=True)) / (spread or 1.0)
    residual = math.fsum((v - mean - slope * (t - mean_time)) ** 2 for t, v in zip(times, values, strict=True))
    return mean, slope, math.sqrt(residual / max(count - 2, 1))


def _longest_still(values: list[float]) -> int:
    """Longest run of equal values."""
    return max(len(list(run)) for _, run in itertools.groupby(values))


def _quantum(values: list[float]) -> float:
    """Smallest step between neighbouring distinct values, where values repeat; 0 where they look continuous."""
    distinct = sorted(set(values))
    if len(distinct) > len(values) // 2 or len(distinct) < 2:
        return 0.0
    return min(b - a for a, b in itertools.pairwise(distinct))
