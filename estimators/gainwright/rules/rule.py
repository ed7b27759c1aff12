"""What a published tuning rule is: its label, what it needs, where it holds, and its function.

Owns the refusal of a rule outside its range. Holds no coefficients; those stand beside their functions.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from enum import StrEnum

from gainwright.errors import RuleNotApplicable
from gainwright.gains import Gains
from gainwright.models import ProcessModel


class Needs(StrEnum):
    """What a rule is computed from."""

    ULTIMATE_POINT = "ultimate_point"
    ULTIMATE_POINT_AND_STATIC_GAIN = "ultimate_point_and_static_gain"
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
        Symbol Ku.
    ultimate_period : float or None, seconds
        Symbol Tu.
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

    @property
    def ultimate_point(self) -> tuple[float, float]:
        """Ku and Tu.

        Raises
        ------
        RuleNotApplicable
            Where either is unknown.
        """
        if self.ultimate_gain is None or self.ultimate_period is None:
            raise RuleNotApplicable("ultimate_point", "is not known", "a usable relay test")
        return self.ultimate_gain, self.ultimate_period

    @property
    def known_model(self) -> ProcessModel:
        """The model.

        Raises
        ------
        RuleNotApplicable
            Where there is none.
        """
        if self.model is None:
            raise RuleNotApplicable("model", "is not known", "an adequate model of the process")
        return self.model


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
        Range of ``kappa = 1/(K Ku)``, judged where it is known.
    function : callable
        From `Knowledge` to `Gains`, without regard to the range of ``kappa``.
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
            Outside the rule's range, or where it needs what is not known, with the reason.
        """
        try:
            ratio = knowledge.gain_ratio
            if ratio is None and self.needs is Needs.ULTIMATE_POINT_AND_STATIC_GAIN:
                raise RuleNotApplicable("static_gain", "is not known", "a model with its static gain")
            if ratio is not None and not self.lowest_gain_ratio <= ratio <= self.highest_gain_ratio:
                raise RuleNotApplicable("1/(K Ku)", f"is {ratio:.3g}", self.validity)
            gains = self.function(knowledge)
        except RuleNotApplicable as error:
            raise RuleNotApplicable(self.name, f"{error.field} {error.problem}", error.allowed) from error
        return Gains(gains.proportional_gain, gains.integral_time, gains.derivative_time, derivative_filter_n)
