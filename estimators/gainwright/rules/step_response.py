"""The step response of a model as the rules of the step test read it: steepest tangent and 63 percent.

Owns the reading. A first-order model with dead time gives its own parameters back.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from gainwright.errors import RuleNotApplicable
from gainwright.models import ProcessModel, Structure
from gainwright.simulation import respond

POINTS = 500
LENGTH_IN_LAGS = 10.0


@dataclass(frozen=True, slots=True)
class StepShape:
    """A step response in few numbers.

    Parameters
    ----------
    gain : float
        Positive: static gain, or integrating gain (per second).
    dead_time : float, seconds
        Where the steepest tangent meets the start value, symbol L.
    time_constant : float or None, seconds
        From there to 63 percent, symbol T; None for an integrating process.
    slope : float, PV units per output unit and second
        Of the steepest tangent.
    """

    gain: float
    dead_time: float
    time_constant: float | None
    slope: float


def step_shape(model: ProcessModel) -> StepShape:
    """Read the step response of a model.

    Parameters
    ----------
    model : ProcessModel

    Returns
    -------
    StepShape

    Raises
    ------
    RuleNotApplicable
        For a response that overshoots or starts the wrong way, which these rules were not published for.
    """
    gain = abs(model.gain)
    if model.structure is Structure.INTEGRATING:
        return StepShape(gain, model.dead_time, None, gain)
    if model.structure is Structure.FIRST_ORDER:
        lag = model.time_constants[0]
        return StepShape(gain, model.dead_time, lag, gain / lag)
    if model.integrating:
        # The ramp's own tangent: all lags count as dead time.
        return StepShape(gain, model.dead_time + sum(model.time_constants) - model.zero_time, None, gain)
    return _read(model, gain)


def _read(model: ProcessModel, gain: float) -> StepShape:
    lags = sum(model.time_constants) + abs(model.zero_time)
    if model.natural_frequency is not None:
        lags += 2.0 / model.natural_frequency
    time = np.linspace(0.0, LENGTH_IN_LAGS * lags, POINTS)
    undelayed = ProcessModel(
        model.structure,
        gain,
        model.time_constants,
        0.0,
        model.zero_time,
        model.natural_frequency,
        model.damping,
    )
    rise = respond(undelayed.transfer_function(), [0.0], [1.0], time) / gain
    if np.max(rise) > 1.02 or np.min(rise) < -0.02:
        raise RuleNotApplicable("model", "overshoots or starts the wrong way", "a step response that only rises")
    speed = np.gradient(rise, time)
    k = int(np.argmax(speed))
    meets = max(float(time[k] - rise[k] / speed[k]), 0.0)
    reached = float(np.interp(1.0 - np.exp(-1.0), rise, time))
    return StepShape(gain, model.dead_time + meets, reached - meets, gain * float(speed[k]))
