"""Published tuning rules as one table: who, what they need, where they hold, and the function.

Owns the coefficients and each rule's range of validity. A rule gives canonical gains; what margins they leave is
for `margins`, which of them to recommend is for the service. Adding a rule is adding one row.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from enum import StrEnum

from gainwright.errors import OutOfDomain, RuleNotApplicable
from gainwright.gains import Gains
from gainwright.models import ProcessModel


class Needs(StrEnum):
    """What a rule is computed from."""

    ULTIMATE_POINT = "ultimate_point"
    MODEL = "model"


class Kind(StrEnum):
    """Which actions the controller has."""

    P = "P"
    PI = "PI"
    PID = "PID"


@dataclass(frozen=True, slots=True)
class Knowledge:
    """What is known of the process, as far as it is known.

    Parameters
    ----------
    ultimate_gain : float or None, output units per PV unit, positive
    ultimate_period : float or None, seconds
    model : ProcessModel or None
    """

    ultimate_gain: float | None = None
    ultimate_period: float | None = None
    model: ProcessModel | None = None

    @property
    def gain_ratio(self) -> float | None:
        """``kappa = 1/(K Ku)``: gain at the crossover over static gain; 0 for integrating processes."""
        if self.model is None or self.ultimate_gain is None:
            return None
        if self.model.static_gain is None:
            return 0.0
        return 1.0 / (abs(self.model.static_gain) * self.ultimate_gain)


@dataclass(frozen=True, slots=True)
class Rule:
    """One published rule for one kind of controller.

    Parameters
    ----------
    name : str
        Label by author and year.
    kind : Kind
    needs : Needs
    validity : str
        The range in words.
    source : str
    lowest_gain_ratio, highest_gain_ratio : float
        Range of ``kappa``, judged where it is known.
    function : callable
        From `Knowledge` to `Gains`.
    """

    name: str
    kind: Kind
    needs: Needs
    validity: str
    source: str
    lowest_gain_ratio: float
    highest_gain_ratio: float
    function: Callable[[Knowledge], Gains]

    def gains(self, knowledge: Knowledge, *, derivative_filter_n: float = 10.0) -> Gains:
        """Gains by this rule.

        Parameters
        ----------
        knowledge : Knowledge
        derivative_filter_n : float, > 0
            The target controller's own filter.

        Returns
        -------
        Gains

        Raises
        ------
        RuleNotApplicable
            Outside the rule's range, with the reason.
        """
        if self.needs is Needs.MODEL and knowledge.model is None:
            raise RuleNotApplicable(self.name, "needs a process model and there is none", "an adequate model")
        if self.needs is Needs.ULTIMATE_POINT and (
            knowledge.ultimate_gain is None or knowledge.ultimate_period is None
        ):
            raise RuleNotApplicable(self.name, "needs the ultimate point and there is none", "a usable relay test")
        ratio = knowledge.gain_ratio
        if ratio is not None and not self.lowest_gain_ratio <= ratio <= self.highest_gain_ratio:
            raise RuleNotApplicable(self.name, f"1/(K Ku) is {ratio:.3g}", self.validity)
        gains = self.function(knowledge)
        return Gains(gains.proportional_gain, gains.integral_time, gains.derivative_time, derivative_filter_n)


def _ultimate(gain: float, integral: float = math.inf, derivative: float = 0.0) -> Callable[[Knowledge], Gains]:
    """A rule of the form K = gain Ku, Ti = integral Tu, Td = derivative Tu."""

    def function(knowledge: Knowledge) -> Gains:
        if knowledge.ultimate_gain is None or knowledge.ultimate_period is None:
            raise OutOfDomain("knowledge", "has no ultimate point", "an ultimate point")
        period = knowledge.ultimate_period
        return Gains(gain * knowledge.ultimate_gain, integral * period, derivative * period)

    return function


def _simc(kind: Kind) -> Callable[[Knowledge], Gains]:
    def function(knowledge: Knowledge) -> Gains:
        if knowledge.model is None:
            raise OutOfDomain("knowledge", "has no model", "a model")
        gain, lags, dead_time = _half_rule(knowledge.model, keep=2 if kind is Kind.PID else 1)
        if dead_time <= 0:
            raise RuleNotApplicable(
                "skogestad_2003",
                "the effective dead time is 0, so the rule sets no bound on the gain",
                "dead time > 0",
            )
        closed = dead_time
        integrating = knowledge.model.integrating
        if integrating:
            series_gain, series_integral = 1.0 / (gain * 2 * closed), 8 * dead_time
            derivative = lags[0] if kind is Kind.PID and lags else 0.0
        else:
            first = lags[0] if lags else 0.0
            if first <= 0:
                raise RuleNotApplicable("skogestad_2003", "the model has no lag", "at least one lag")
            series_gain = first / (gain * (closed + dead_time))
            series_integral = min(first, 4 * (closed + dead_time))
            derivative = lags[1] if kind is Kind.PID and len(lags) > 1 else 0.0
        if kind is Kind.PID and derivative <= 0:
            raise RuleNotApplicable(
                "skogestad_2003", "the model has no second lag to cancel", "a second-order model"
            )
        return series_to_ideal(series_gain, series_integral, derivative)

    return function


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


def _half_rule(model: ProcessModel, *, keep: int) -> tuple[float, list[float], float]:
    """Gain, kept lags, effective dead time: the largest neglected lag is split, the rest adds to the dead time."""
    lags = sorted(model.time_constants, reverse=True)
    if model.natural_frequency is not None and model.damping is not None:
        if model.damping < 0.7:
            raise RuleNotApplicable("skogestad_2003", f"the damping is {model.damping:.2g}", "damping 0.7 or more")
        # A well-damped pair acts like two lags of the same sum and product, as far as these are real.
        spread = math.sqrt(max(model.damping**2 - 1.0, 0.0))
        slow = (model.damping + spread) / model.natural_frequency
        fast = (model.damping - spread) / model.natural_frequency
        lags = sorted([*lags, slow, fast], reverse=True)
    dead_time = model.dead_time
    if model.zero_time < 0:
        dead_time += -model.zero_time
    elif model.zero_time > 0:
        lags = _cancelled(lags, model.zero_time)
    kept_count = keep - 1 if model.integrating else keep
    kept, neglected = lags[:kept_count], lags[kept_count:]
    if neglected:
        half = neglected[0] / 2
        dead_time += half + sum(neglected[1:])
        if kept:
            kept[-1] += half
    return abs(model.gain), kept, dead_time


def _cancelled(lags: list[float], zero: float) -> list[float]:
    """A zero in the left half-plane cancelled against the lag nearest to it, where one is near enough."""
    nearest = min(lags, key=lambda lag: abs(math.log(lag / zero)), default=None)
    if nearest is None or not 0.8 <= zero / nearest <= 1.25:
        raise RuleNotApplicable(
            "skogestad_2003", "the model's zero is near none of its lags", "a zero within a quarter of a lag"
        )
    rest = list(lags)
    rest.remove(nearest)
    return rest


_ZIEGLER_NICHOLS = "Ziegler & Nichols, Trans. ASME 64:759-768, 1942"
_ZN_RANGE = "0.1 <= 1/(K Ku) <= 0.7 (Astrom & Hagglund 1995, from memory); judged where a model is known"
_SIMC = "Skogestad, J. Process Control 13:291-309, 2003, closed-loop time constant = dead time"
_TL_RANGE = "1/(K Ku) <= 0.5: lag-dominated and integrating processes (common practice, no source for the number)"

RULES: tuple[Rule, ...] = (
    Rule("skogestad_2003", Kind.PI, Needs.MODEL, "dead time > 0", _SIMC, 0.0, math.inf, _simc(Kind.PI)),
    Rule(
        "skogestad_2003",
        Kind.PID,
        Needs.MODEL,
        "dead time > 0, a second lag",
        _SIMC,
        0.0,
        math.inf,
        _simc(Kind.PID),
    ),
    Rule(
        "tyreus_luyben_1992",
        Kind.PI,
        Needs.ULTIMATE_POINT,
        _TL_RANGE,
        "Tyreus & Luyben, Ind. Eng. Chem. Res. 31(11):2625-2628, 1992",
        0.0,
        0.5,
        _ultimate(1 / 3.2, 2.2),
    ),
    Rule(
        "luyben_luyben_1997",
        Kind.PID,
        Needs.ULTIMATE_POINT,
        _TL_RANGE,
        "Luyben & Luyben, Essentials of Process Control, McGraw-Hill 1997 (companion of Tyreus-Luyben)",
        0.0,
        0.5,
        _ultimate(1 / 2.2, 2.2, 1 / 6.3),
    ),
    Rule(
        "ziegler_nichols_1942", Kind.P, Needs.ULTIMATE_POINT, _ZN_RANGE, _ZIEGLER_NICHOLS, 0.1, 0.7, _ultimate(0.5)
    ),
    Rule(
        "ziegler_nichols_1942",
        Kind.PI,
        Needs.ULTIMATE_POINT,
        _ZN_RANGE,
        _ZIEGLER_NICHOLS,
        0.1,
        0.7,
        _ultimate(0.45, 1 / 1.2),
    ),
    Rule(
        "ziegler_nichols_1942",
        Kind.PID,
        Needs.ULTIMATE_POINT,
        _ZN_RANGE,
        _ZIEGLER_NICHOLS,
        0.1,
        0.7,
        _ultimate(0.6, 0.5, 0.125),
    ),
)


def rules_by_name() -> Mapping[tuple[str, Kind], Rule]:
    """Every rule under its name and kind."""
    return {(rule.name, rule.kind): rule for rule in RULES}


__all__ = ["RULES", "Kind", "Knowledge", "Needs", "Rule", "rules_by_name", "series_to_ideal"]
