"""Controller forms: canonical gains as the numbers, names and units of the target controller, and back.

Owns the declaration of a controller and every conversion. Knows no rules and no processes. Refuses to print where
the form, a unit or a range is undeclared, since a number without its unit has wrecked loops.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

from gainwright.errors import ConversionImpossible
from gainwright.gains import Gains

SECONDS = {"s": 1.0, "min": 60.0}

EQUATIONS = {
    "ideal": "output = K (e + 1/Ti integral of e + Td de/dt)",
    "parallel": "output = Kp e + Ki integral of e + Kd de/dt",
}


@dataclass(frozen=True, slots=True)
class ControllerForm:
    """What the target controller's numbers mean.

    Parameters
    ----------
    form : {"ideal", "parallel"}
    gain : {"percent_per_percent", "engineering"}
        Percent of the controller's output range per percent of its input range, or output units per PV unit.
    integral_unit, derivative_unit : {"s", "min"}
    input_low, input_high : float or None, PV units
        The controller's own input range; needed for percent per percent.
    output_low, output_high : float or None, output units
    input_unit, output_unit : str
        Names of the engineering units.
    """

    form: Literal["ideal", "parallel"]
    gain: Literal["percent_per_percent", "engineering"]
    integral_unit: Literal["s", "min"] = "s"
    derivative_unit: Literal["s", "min"] = "s"
    input_low: float | None = None
    input_high: float | None = None
    output_low: float | None = None
    output_high: float | None = None
    input_unit: str = "PV unit"
    output_unit: str = "output unit"


@dataclass(frozen=True, slots=True)
class Setting:
    """One number of the controller: its name there, the number, its unit."""

    name: str
    value: float
    unit: str


def settings_of(gains: Gains, form: ControllerForm) -> tuple[Setting, ...]:
    """The controller's own numbers for canonical gains.

    Parameters
    ----------
    gains : Gains
    form : ControllerForm

    Returns
    -------
    tuple of Setting
        Gain, integral (left out without integral action), derivative (left out without).

    Raises
    ------
    ConversionImpossible
        Where a range is missing or reversed, or the form is unknown.
    """
    scale = _gain_scale(form)
    unit = _gain_unit(form)
    gain = gains.proportional_gain * scale
    integral, derivative = SECONDS[form.integral_unit], SECONDS[form.derivative_unit]
    found = [Setting("K" if form.form == "ideal" else "Kp", gain, unit)]
    if math.isfinite(gains.integral_time):
        if form.form == "ideal":
            found.append(Setting("Ti", gains.integral_time / integral, form.integral_unit))
        else:
            found.append(Setting("Ki", gain / gains.integral_time * integral, f"{unit} per {form.integral_unit}"))
    if gains.derivative_time > 0:
        if form.form == "ideal":
            found.append(Setting("Td", gains.derivative_time / derivative, form.derivative_unit))
        else:
            found.append(Setting("Kd", gain * gains.derivative_time / derivative, f"{unit} {form.derivative_unit}"))
    return tuple(found)


def gains_of(settings: tuple[Setting, ...], form: ControllerForm, *, derivative_filter_n: float = 10.0) -> Gains:
    """Canonical gains of a controller's own numbers; the inverse of `settings_of`.

    Parameters
    ----------
    settings : tuple of Setting
        By the names that `settings_of` gives.
    form : ControllerForm
    derivative_filter_n : float, > 0

    Returns
    -------
    Gains

    Raises
    ------
    ConversionImpossible
        Where a name is unknown or missing, or a range is missing.
    """
    numbers = {setting.name: setting.value for setting in settings}
    names = {"K", "Ti", "Td"} if form.form == "ideal" else {"Kp", "Ki", "Kd"}
    unknown = sorted(set(numbers) - names)
    proportional = numbers.get("K" if form.form == "ideal" else "Kp")
    if unknown or proportional is None:
        raise ConversionImpossible("settings", f"are {sorted(numbers)}", f"{sorted(names)}, the gain included")
    gain = proportional / _gain_scale(form)
    integral, derivative = SECONDS[form.integral_unit], SECONDS[form.derivative_unit]
    if form.form == "ideal":
        integral_time = numbers.get("Ti", math.inf) * integral
        derivative_time = numbers.get("Td", 0.0) * derivative
    else:
        rate = numbers.get("Ki", 0.0)
        integral_time = proportional / rate * integral if rate > 0 else math.inf
        derivative_time = numbers.get("Kd", 0.0) / proportional * derivative
    return Gains(gain, integral_time, derivative_time, derivative_filter_n)


def hand_check(gains: Gains, form: ControllerForm) -> str:
    """What a person sees at the faceplate within a minute of entering the gains.

    Parameters
    ----------
    gains : Gains
    form : ControllerForm

    Returns
    -------
    str

    Raises
    ------
    ConversionImpossible
    """
    gain = gains.proportional_gain * _gain_scale(form)
    if form.gain == "percent_per_percent":
        step, jump = "a 1 % error step", f"{gain:.3g} %"
    else:
        step, jump = f"an error step of 1 {form.input_unit}", f"{gain:.3g} {form.output_unit}"
    if math.isfinite(gains.integral_time):
        return f"{step} moves the output {jump} at once and {jump} more every {gains.integral_time:.3g} s"
    return f"{step} moves the output {jump} and no further"


def _gain_scale(form: ControllerForm) -> float:
    """Displayed gain per canonical gain."""
    if form.form not in EQUATIONS:
        raise ConversionImpossible("controller.form", f"is {form.form!r}", f"one of {sorted(EQUATIONS)}")
    if form.gain == "engineering":
        return 1.0
    input_span = _span("input", form.input_low, form.input_high)
    output_span = _span("output", form.output_low, form.output_high)
    return input_span / output_span


def _gain_unit(form: ControllerForm) -> str:
    return "%/%" if form.gain == "percent_per_percent" else f"{form.output_unit}/{form.input_unit}"


def _span(which: str, low: float | None, high: float | None) -> float:
    if low is None or high is None:
        raise ConversionImpossible(
            f"controller.{which}_low/high", "is undeclared", "the controller's own range, for gains in percent"
        )
    if not (math.isfinite(low) and math.isfinite(high) and low < high):
        raise ConversionImpossible(f"controller.{which}_low/high", f"is {low} to {high}", "low below high")
    return high - low
