"""Functions of the rules that start from a process model.

Owns the formulas; a model with more lags than a formula has is reduced by the half rule (`reduction`), or described
by its step response (`step_response`) where the rule was published for that.
"""

from __future__ import annotations

from collections.abc import Callable

from gainwright.errors import RuleNotApplicable
from gainwright.gains import Gains
from gainwright.rules.reduction import Reduced, reduced_model
from gainwright.rules.rule import Kind, Knowledge
from gainwright.rules.step_response import StepShape, step_shape

Function = Callable[[Knowledge], Gains]


def series_to_ideal(gain: float, integral_time: float, derivative_time: float) -> Gains:
    """Ideal-form gains of the series form ``K' (1 + 1/(Ti' s)) (1 + Td' s)``.

    Parameters
    ----------
    gain : float, > 0
    integral_time : float, seconds, > 0
    derivative_time : float, seconds, >= 0

    Returns
    -------
    Gains

    Notes
    -----
    Source: Skogestad, J. Process Control 13:291-309, 2003, eq. 36-37 (from memory).

    Examples
    --------
    >>> series_to_ideal(0.5, 4.0, 4.0)
    Gains(proportional_gain=1.0, integral_time=8.0, derivative_time=2.0, derivative_filter_n=10.0)
    """
    factor = 1.0 + derivative_time / integral_time
    return Gains(gain * factor, integral_time * factor, derivative_time / factor)


def simc(reduced: Reduced, *, closed_loop_time: float, derivative: bool) -> tuple[float, float, float]:
    """Series-form gain, integral and derivative time by Skogestad 2003.

    ``Kc = tau1/(k (tauc + theta))``, ``tauI = min(tau1, 4 (tauc + theta))``, ``tauD = tau2``; integrating:
    ``Kc = 1/(k' (tauc + theta))``, ``tauI = 4 (tauc + theta)``.

    Parameters
    ----------
    reduced : Reduced
    closed_loop_time : float, seconds
        Symbol tauc; the effective dead time for tight control.
    derivative : bool
        Whether the controller has derivative action.

    Returns
    -------
    tuple of float
        Kc (output units per PV unit), tauI, tauD (seconds).

    Raises
    ------
    RuleNotApplicable
        Without dead time, without a lag, or without a second lag for the derivative to cancel.
    """
    total = closed_loop_time + reduced.dead_time
    if reduced.dead_time <= 0 or total <= 0:
        raise RuleNotApplicable("dead_time", "is 0, so that nothing bounds the gain", "an effective dead time above 0")
    lags = list(reduced.lags)
    if reduced.integrating:
        gain, integral_time = 1.0 / (reduced.gain * total), 4.0 * total
    else:
        if not lags:
            raise RuleNotApplicable("time_constants", "are none", "at least one lag")
        first = lags.pop(0)
        gain, integral_time = first / (reduced.gain * total), min(first, 4.0 * total)
    if not derivative:
        return gain, integral_time, 0.0
    if not lags:
        raise RuleNotApplicable("time_constants", "hold no second lag to cancel", "a second-order model")
    return gain, integral_time, lags[0]


def skogestad(kind: Kind) -> Function:
    """Skogestad 2003 with the closed-loop time constant equal to the effective dead time.

    Parameters
    ----------
    kind : Kind
        PI or PID.

    Returns
    -------
    callable
        From `Knowledge` to `Gains`.
    """

    def function(knowledge: Knowledge) -> Gains:
        reduced = reduced_model(knowledge.known_model, keep=2 if kind is Kind.PID else 1)
        return series_to_ideal(*simc(reduced, closed_loop_time=reduced.dead_time, derivative=kind is Kind.PID))

    return function


def improved_simc_pi(knowledge: Knowledge) -> Gains:
    """Grimholt & Skogestad 2012: a third of the dead time is added to the lag.

    Parameters
    ----------
    knowledge : Knowledge

    Returns
    -------
    Gains
    """
    reduced = _first_order(knowledge)
    lag = reduced.lags[0] + reduced.dead_time / 3
    slower = Reduced(reduced.gain, (lag,), reduced.dead_time, integrating=False)
    return series_to_ideal(*simc(slower, closed_loop_time=reduced.dead_time, derivative=False))


def improved_simc_pid(knowledge: Knowledge) -> Gains:
    """Grimholt & Skogestad 2018: derivative of a third of the dead time in the series form.

    Parameters
    ----------
    knowledge : Knowledge

    Returns
    -------
    Gains
    """
    reduced = _first_order(knowledge)
    gain, integral_time, _ = simc(reduced, closed_loop_time=reduced.dead_time, derivative=False)
    return series_to_ideal(gain, integral_time, reduced.dead_time / 3)


def internal_model(kind: Kind) -> Function:
    """Rivera, Morari & Skogestad 1986 at the fastest filter they allow: 1.7 (PI) or 0.8 (PID) dead times.

    Parameters
    ----------
    kind : Kind
        PI or PID.

    Returns
    -------
    callable
        From `Knowledge` to `Gains`.
    """

    def function(knowledge: Knowledge) -> Gains:
        reduced = _first_order(knowledge)
        k, lag, dead_time = reduced.gain, reduced.lags[0], reduced.dead_time
        if kind is Kind.PI:
            return Gains(lag / (k * 1.7 * dead_time), lag)
        gain = (2 * lag + dead_time) / (k * (2 * 0.8 * dead_time + dead_time))
        return Gains(gain, lag + dead_time / 2, lag * dead_time / (2 * lag + dead_time))

    return function


def lambda_pi(knowledge: Knowledge) -> Gains:
    """Lambda tuning with the closed-loop time constant equal to the lag: ``K = 1/(k (1 + theta/tau))``, ``Ti = tau``.

    Parameters
    ----------
    knowledge : Knowledge

    Returns
    -------
    Gains
    """
    reduced = _first_order(knowledge)
    lag = reduced.lags[0]
    return Gains(lag / (reduced.gain * (lag + reduced.dead_time)), lag)


def amigo_step(kind: Kind) -> Function:
    """Astrom & Hagglund 2004, from the step response; its integrating form from gain and dead time.

    Parameters
    ----------
    kind : Kind
        PI or PID.

    Returns
    -------
    callable
        From `Knowledge` to `Gains`.
    """

    def function(knowledge: Knowledge) -> Gains:
        shape = _shape(knowledge)
        k, t, lag = shape.gain, shape.time_constant, shape.dead_time
        if t is None:
            if kind is Kind.PI:
                return Gains(0.35 / (k * lag), 13.4 * lag)
            return Gains(0.45 / (k * lag), 8.0 * lag, 0.5 * lag)
        if kind is Kind.PI:
            gain = 0.15 + 0.35 * t / lag - t**2 / (lag + t) ** 2
            return Gains(gain / k, 0.35 * lag + 13 * lag * t**2 / (t**2 + 12 * lag * t + 7 * lag**2))
        integral_time = lag * (0.4 * lag + 0.8 * t) / (lag + 0.1 * t)
        return Gains((0.2 + 0.45 * t / lag) / k, integral_time, 0.5 * lag * t / (0.3 * lag + t))

    return function


def ziegler_nichols_step(kind: Kind) -> Function:
    """Ziegler & Nichols 1942 from the steepest tangent of the step response.

    Parameters
    ----------
    kind : Kind
        PI or PID.

    Returns
    -------
    callable
        From `Knowledge` to `Gains`.
    """

    def function(knowledge: Knowledge) -> Gains:
        shape = _shape(knowledge)
        lag = shape.dead_time
        if kind is Kind.PI:
            return Gains(0.9 / (shape.slope * lag), lag / 0.3)
        return Gains(1.2 / (shape.slope * lag), 2 * lag, 0.5 * lag)

    return function


def _first_order(knowledge: Knowledge) -> Reduced:
    if knowledge.known_model.integrating:
        raise RuleNotApplicable("model", "is integrating", "a self-regulating process")
    reduced = reduced_model(knowledge.known_model, keep=1)
    if reduced.dead_time <= 0 or not reduced.lags:
        raise RuleNotApplicable("model", "has no dead time or no lag", "a lag and an effective dead time above 0")
    return reduced


def _shape(knowledge: Knowledge) -> StepShape:
    shape = step_shape(knowledge.known_model)
    if shape.dead_time <= 0 or shape.time_constant == 0:
        raise RuleNotApplicable("model", "has no dead time or no lag", "both above 0 in its step response")
    return shape
