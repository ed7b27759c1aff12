"""Controller forms: canonical gains as the numbers, names and units of the target controller, and back.

Owns the declaration of a controller and every conversion. Knows no rules and no processes. Refuses to print where
the form, a unit or a range is undeclared, since a number without its unit has wrecked loops. Percent are of the
controller's own ranges. Sources: Astrom & Hagglund 1995; Skogestad, J. Process Control 13:291-309, 2003, eq. 36-37
(from memory).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from gainwright.errors import ConversionImpossible, OutOfDomain
from gainwright.gains import Gains

EQUATIONS = {
    "ideal": "output = K (e + 1/Ti integral of e + Td de/dt)",
    "parallel": "output = Kp e + Ki integral of e + Kd de/dt",
    "series": "output = K (1 + 1/(Ti s)) (1 + Td s) e",
}

TIME_UNITS = {"s": 1.0, "min": 60.0}
REPEAT_UNITS = {"repeats_per_s": 1.0, "repeats_per_min": 60.0}
GAIN_UNITS = ("percent_per_percent", "engineering", "proportional_band")

SERIES_NEEDS = "Ti of 4 Td or more for the series form"


@dataclass(frozen=True, slots=True)
class ControllerForm:
    """What the target controller's numbers mean.

    Parameters
    ----------
    form : {"ideal", "parallel", "series"}
    gain : {"percent_per_percent", "engineering", "proportional_band"}
        Percent of the controller's output range per percent of its input range; output units per PV unit; or the
        percent of the input range that moves the output through all of its range.
    integral_unit : {"s", "min", "repeats_per_s", "repeats_per_min"}
        Of the integral time, or of the integral gain's "per"; repeats for the ideal and the series form only.
    derivative_unit : {"s", "min"}
    input_low, input_high : float or None, PV units
        The controller's own input range; needed for percent per percent and proportional band.
    output_low, output_high : float or None, output units
    derivative_filter_n : float, > 0
        The controller's derivative filter, symbol N.
    derivative_on : {"process_variable", "error"}
    sample_interval_s : float or None, seconds
    input_unit, output_unit : str
        Names of the engineering units.
    """

    form: Literal["ideal", "parallel", "series"]
    gain: Literal["percent_per_percent", "engineering", "proportional_band"]
    integral_unit: Literal["s", "min", "repeats_per_s", "repeats_per_min"] = "s"
    derivative_unit: Literal["s", "min"] = "s"
    input_low: float | None = None
    input_high: float | None = None
    output_low: float | None = None
    output_high: float | None = None
    derivative_filter_n: float = 10.0
    derivative_on: Literal["process_variable", "error"] = "process_variable"
    sample_interval_s: float | None = None
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
        Gain; integral, left out without integral action; derivative, left out without derivative action.

    Raises
    ------
    ConversionImpossible
        Where a range is missing or reversed, a form or unit is unknown or contradicts another, or the form cannot
        hold the gains.
    """
    scale = _gain_scale(form)
    gain, integral_time, derivative_time = _in_form(gains, form)
    gain *= scale
    if form.form == "parallel":
        return _parallel_settings(gain, integral_time, derivative_time, form)
    if form.gain == "proportional_band":
        found = [Setting("PB", 100.0 / gain, "%")]
    else:
        found = [Setting("K", gain, _gain_unit(form))]
    if math.isfinite(integral_time):
        if form.integral_unit in REPEAT_UNITS:
            repeats = REPEAT_UNITS[form.integral_unit] / integral_time
            found.append(Setting("reset", repeats, form.integral_unit.replace("_per_", "/")))
        else:
            found.append(Setting("Ti", integral_time / TIME_UNITS[form.integral_unit], form.integral_unit))
    if derivative_time > 0:
        found.append(Setting("Td", derivative_time / TIME_UNITS[form.derivative_unit], form.derivative_unit))
    return tuple(found)


def gains_of(settings: tuple[Setting, ...], form: ControllerForm, *, derivative_filter_n: float = 10.0) -> Gains:
    """Canonical gains of a controller's own numbers; the inverse of `settings_of`.

    Parameters
    ----------
    settings : tuple of Setting
        By the names that `settings_of` gives; the form's units hold.
    form : ControllerForm
    derivative_filter_n : float, > 0

    Returns
    -------
    Gains

    Raises
    ------
    ConversionImpossible
        Where a name is unknown or missing, a number is not positive, or a range is missing.
    """
    scale = _gain_scale(form)
    numbers = {setting.name: setting.value for setting in settings}
    names = _names(form)
    if not set(numbers) <= set(names) or names[0] not in numbers:
        raise ConversionImpossible("settings", f"are {sorted(numbers)}", f"{names}, the first always")
    for name, value in numbers.items():
        if not (math.isfinite(value) and (value > 0 or (value == 0 and name != names[0]))):
            raise ConversionImpossible(name, f"is {value}", "a finite number, 0 or more; the gain above 0")
    shown = 100.0 / numbers["PB"] if names[0] == "PB" else numbers[names[0]]
    integral, derivative = numbers.get(names[1], 0.0), numbers.get(names[2], 0.0)
    integral_time, derivative_time = math.inf, derivative * TIME_UNITS[form.derivative_unit]
    if integral > 0:
        if form.form == "parallel":
            integral_time = shown / integral * TIME_UNITS[form.integral_unit]
        elif form.integral_unit in REPEAT_UNITS:
            integral_time = REPEAT_UNITS[form.integral_unit] / integral
        else:
            integral_time = integral * TIME_UNITS[form.integral_unit]
    if form.form == "parallel":
        derivative_time /= shown
    factor = 1.0 + derivative_time / integral_time if form.form == "series" else 1.0
    try:
        return Gains(shown / scale * factor, integral_time * factor, derivative_time / factor, derivative_filter_n)
    except OutOfDomain as error:
        raise ConversionImpossible(error.field, error.problem, error.allowed) from error


def ideal_to_series(gains: Gains) -> tuple[float, float, float]:
    """Gain, integral and derivative time of the series form ``K' (1 + 1/(Ti' s)) (1 + Td' s)``.

    Parameters
    ----------
    gains : Gains

    Returns
    -------
    tuple of float
        K' (output units per PV unit), Ti' and Td' (seconds).

    Raises
    ------
    ConversionImpossible
        Unless Ti >= 4 Td.

    Examples
    --------
    >>> ideal_to_series(Gains(1.0, 8.0, 2.0))
    (0.5, 4.0, 4.0)
    """
    if not math.isfinite(gains.integral_time) or gains.derivative_time == 0:
        return gains.proportional_gain, gains.integral_time, gains.derivative_time
    ratio = 4.0 * gains.derivative_time / gains.integral_time
    # Rounding of Ti = 4 Td, which Ziegler-Nichols has exactly, is not a refusal.
    if ratio > 1.0 + 1e-12:
        raise ConversionImpossible("Ti/Td", f"is {4.0 / ratio:.3g}", SERIES_NEEDS)
    root = math.sqrt(max(1.0 - ratio, 0.0))
    half = (1.0 + root) / 2.0
    integral_time = gains.integral_time * half
    # Their product is Ti Td; the difference 1 - root would lose digits.
    return gains.proportional_gain * half, integral_time, gains.integral_time * gains.derivative_time / integral_time


def hand_check(gains: Gains, form: ControllerForm) -> str:
    """What a person sees at the faceplate within a minute of entering the gains.

    Parameters
    ----------
    gains : Gains
    form : ControllerForm

    Returns
    -------
    str
        One sentence; the step is of the setpoint, with the process variable at rest.

    Raises
    ------
    ConversionImpossible
    """
    scale = _gain_scale(form)
    gain, integral_time, derivative_time = _in_form(gains, form)
    gain *= scale
    if form.gain == "engineering":
        step, jump, unit = f"an error step of 1 {form.input_unit}", f"{gain:.3g} {form.output_unit}", form.output_unit
    else:
        step, jump, unit = "a 1 % error step", f"{gain:.3g} %", "%"
    sentence = f"{step} moves the output {jump} at once and no further"
    if math.isfinite(integral_time):
        sentence = f"{step} moves the output {jump} at once and {jump} more every {integral_time:.3g} s"
    if derivative_time > 0 and form.derivative_on == "error" and math.isfinite(gains.derivative_filter_n):
        kick = gain * gains.derivative_filter_n
        dies = 3.0 * derivative_time / gains.derivative_filter_n
        sentence += f", and the derivative kicks it by {kick:.3g} {unit}, gone after {dies:.3g} s"
    return sentence


def _in_form(gains: Gains, form: ControllerForm) -> tuple[float, float, float]:
    if form.form == "series":
        return ideal_to_series(gains)
    return gains.proportional_gain, gains.integral_time, gains.derivative_time


def _parallel_settings(
    gain: float, integral_time: float, derivative_time: float, form: ControllerForm
) -> tuple[Setting, ...]:
    unit = _gain_unit(form)
    found = [Setting("Kp", gain, unit)]
    if math.isfinite(integral_time):
        rate = gain / integral_time * TIME_UNITS[form.integral_unit]
        found.append(Setting("Ki", rate, f"{unit} per {form.integral_unit}"))
    if derivative_time > 0:
        seconds = TIME_UNITS[form.derivative_unit]
        found.append(Setting("Kd", gain * derivative_time / seconds, f"{unit} {form.derivative_unit}"))
    return tuple(found)


def _names(form: ControllerForm) -> tuple[str, str, str]:
    if form.form == "parallel":
        return "Kp", "Ki", "Kd"
    gain = "PB" if form.gain == "proportional_band" else "K"
    return gain, "reset" if form.integral_unit in REPEAT_UNITS else "Ti", "Td"


def _gain_scale(form: ControllerForm) -> float:
    """Displayed gain (percent per percent for a proportional band) per canonical gain, the declaration checked."""
    _known("controller.form", form.form, EQUATIONS)
    _known("controller.gain", form.gain, dict.fromkeys(GAIN_UNITS))
    _known("controller.derivative_unit", form.derivative_unit, TIME_UNITS)
    allowed = TIME_UNITS if form.form == "parallel" else TIME_UNITS | REPEAT_UNITS
    _known("controller.integral_unit", form.integral_unit, allowed)
    if form.form == "parallel" and form.gain == "proportional_band":
        raise ConversionImpossible(
            "controller.gain", "is a proportional band", "percent_per_percent or engineering in the parallel form"
        )
    if form.gain == "engineering":
        return 1.0
    input_span = _span("input", form.input_low, form.input_high)
    output_span = _span("output", form.output_low, form.output_high)
    return input_span / output_span


def _gain_unit(form: ControllerForm) -> str:
    return "%/%" if form.gain == "percent_per_percent" else f"{form.output_unit}/{form.input_unit}"


def _known(field: str, value: str, allowed: Mapping[str, object]) -> None:
    if value not in allowed:
        raise ConversionImpossible(field, f"is {value!r}", f"one of {', '.join(allowed)}")


def _span(which: str, low: float | None, high: float | None) -> float:
    if low is None or high is None:
        missing = f"{which}_low" if low is None else f"{which}_high"
        raise ConversionImpossible(
            f"controller.{missing}", "is undeclared", "the controller's own range, for gains in percent"
        )
    if not (math.isfinite(low) and math.isfinite(high) and low < high):
        raise ConversionImpossible(
            f"controller.{which}_low", f"to {which}_high is {low:g} to {high:g}", "finite, low below high"
        )
    return high - low
