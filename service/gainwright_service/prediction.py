"""The predicted swing, period, switches and cost of a relay test, before anything moves.

Pure arithmetic on a plan and on what is known of the process. From a stated first-order guess the exact limit cycle
of a first-order process with dead time is used: swing ``a = K d (1 - e^-L/T) + eps e^-L/T`` and period
``2 T ln((2 e^L/T - 1 + eps/(K d)) / (1 - eps/(K d)))`` (Wang, Hang and Zou, "Low-order modeling from relay
feedback", Ind. Eng. Chem. Res. 36(2), 1997; equations from memory). From a recorded test, its swing per output.
With neither, only the limits themselves are known.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

from gainwright_service.experiment.excitation import (
    LARGEST_SHARE,
    NEAR_ENOUGH,
    RECENTRE_SHARE,
    TARGET_HYSTERESES,
    TARGET_SHARE,
)
from gainwright_service.experiment.guard import HARD_DEVIATION
from gainwright_service.experiment.listening import HYSTERESIS_SIGMAS, SMALLEST_HYSTERESIS
from gainwright_wire.tasks import Plan

SETTLING_SWITCHES = 4
RETURN_PERIODS = 1.5


@dataclass(frozen=True, slots=True)
class Guess:
    """A stated first-order process with dead time.

    Parameters
    ----------
    static_gain : float, PV units per output unit, nonzero
        Symbol K.
    time_constant_s, dead_time_s : float, seconds, > 0
        Symbols T and L.
    noise : float, PV units, >= 0
        Standard deviation.
    """

    static_gain: float
    time_constant_s: float
    dead_time_s: float
    noise: float = 0.0


@dataclass(frozen=True, slots=True)
class History:
    """What the loop's last usable test showed.

    Parameters
    ----------
    swing_per_output : float, PV units per output unit, > 0
        Swing over relay amplitude.
    period_s : float, seconds, > 0
    noise : float, PV units, >= 0
    """

    swing_per_output: float
    period_s: float
    noise: float = 0.0


@dataclass(frozen=True, slots=True)
class Prediction:
    """What a test will do.

    Parameters
    ----------
    basis : what the prediction rests on
    worst_swing : float or None, PV units
    worst_deviation : float, PV units
    period_s : float or None, seconds
    time_to_finish_s : float, seconds
    switches : int
    output_travel : float, output units
    integrated_deviation : float or None, PV units times seconds
    no_crossing : bool
        Even the largest amplitude would not carry the process variable across the hysteresis.
    amplitude_needed : float or None, output units
        The amplitude that a swing well clear of the noise asks for; None where no process is known.
    """

    basis: Literal["limits", "listening", "history", "guess"]
    worst_swing: float | None
    worst_deviation: float
    period_s: float | None
    time_to_finish_s: float
    switches: int
    output_travel: float
    integrated_deviation: float | None
    no_crossing: bool = False
    amplitude_needed: float | None = None


def planned_switches(plan: Plan, amplitude: float | None = None) -> int:
    """Switches that a plan needs: growth from small, two cycles to settle, the scored cycles."""
    reached = plan.max_amplitude if amplitude is None else amplitude
    steps = math.log(max(1.0, reached / plan.start_amplitude)) / math.log(plan.growth) if plan.growth > 1 else 0.0
    return math.ceil(steps - 1e-9) + SETTLING_SWITCHES + 2 * plan.scored_cycles


def from_limits(plan: Plan) -> Prediction:
    """What the limits alone promise: the worst that the guard lets happen."""
    return Prediction(
        basis="limits",
        worst_swing=None,
        worst_deviation=HARD_DEVIATION * max(plan.deviation_up, plan.deviation_down),
        period_s=None,
        time_to_finish_s=plan.max_duration_s,
        switches=plan.max_switches,
        output_travel=2 * plan.max_amplitude * plan.max_switches + plan.max_output_change,
        integrated_deviation=None,
    )


def from_guess(plan: Plan, guess: Guess) -> Prediction:
    """Predict from a stated first-order process with dead time."""
    gain = abs(guess.static_gain)
    ratio = guess.dead_time_s / guess.time_constant_s
    share = -math.expm1(-ratio)
    hysteresis, wanted, allowed = _wanted(plan, guess.noise)

    def for_swing(swing: float) -> float:
        return (swing - hysteresis * (1 - share)) / (gain * share)

    needed = for_swing(wanted)
    amplitude = _reached(plan, for_swing(min(wanted, allowed)))
    if gain * amplitude <= hysteresis:
        return _without_crossing(plan, gain * amplitude + hysteresis, needed)
    relative = hysteresis / (gain * amplitude)
    rise = ratio + math.log(2.0 - (1.0 - relative) * math.exp(-ratio))
    period = 2 * guess.time_constant_s * (rise - math.log1p(-relative))
    swing = gain * amplitude * share + hysteresis * (1 - share)
    off_centre = gain * RECENTRE_SHARE * amplitude * share
    return _cost(plan, "guess", amplitude, swing, off_centre + HYSTERESIS_SIGMAS * guess.noise, period, needed)


def from_history(plan: Plan, history: History) -> Prediction:
    """Predict from the swing and period of the loop's last usable test."""
    _, wanted, allowed = _wanted(plan, history.noise)
    needed = wanted / history.swing_per_output
    amplitude = _reached(plan, min(wanted, allowed) / history.swing_per_output)
    swing = history.swing_per_output * amplitude
    extra = RECENTRE_SHARE * swing + HYSTERESIS_SIGMAS * history.noise
    return _cost(plan, "history", amplitude, swing, extra, history.period_s, needed)


def _wanted(plan: Plan, noise: float) -> tuple[float, float, float]:
    """Hysteresis, the swing wanted for this noise, and the largest that the experiment allows itself, PV units."""
    narrowest = min(plan.deviation_up, plan.deviation_down)
    hysteresis = max(HYSTERESIS_SIGMAS * noise, SMALLEST_HYSTERESIS * narrowest)
    target = max(TARGET_HYSTERESES * hysteresis, TARGET_SHARE * narrowest)
    return hysteresis, target, LARGEST_SHARE * narrowest


def _reached(plan: Plan, needed: float) -> float:
    """The amplitude at which growing from small ends."""
    amplitude = plan.start_amplitude
    while amplitude < NEAR_ENOUGH * needed and amplitude < plan.max_amplitude:
        amplitude = min(plan.max_amplitude, needed, amplitude * max(plan.growth, 1.01))
    return amplitude


def _without_crossing(plan: Plan, deviation: float, needed: float) -> Prediction:
    return Prediction(
        basis="guess",
        worst_swing=None,
        worst_deviation=deviation,
        period_s=None,
        time_to_finish_s=plan.max_duration_s,
        switches=plan.max_switches,
        output_travel=2 * plan.max_amplitude * plan.max_switches + plan.max_output_change,
        integrated_deviation=None,
        no_crossing=True,
        amplitude_needed=needed,
    )


def _cost(
    plan: Plan,
    basis: Literal["history", "guess"],
    amplitude: float,
    swing: float,
    extra_deviation: float,
    period_s: float,
    needed: float,
) -> Prediction:
    switches = planned_switches(plan, amplitude)
    swinging_s = switches * period_s / 2
    return Prediction(
        basis=basis,
        worst_swing=swing,
        worst_deviation=swing + extra_deviation,
        period_s=period_s,
        time_to_finish_s=plan.listening_s + swinging_s + RETURN_PERIODS * period_s,
        switches=switches,
        output_travel=2 * amplitude * switches,
        integrated_deviation=2 / math.pi * swing * swinging_s,
        amplitude_needed=needed,
    )
