"""The errors of the numerics, one tree, arranged by what the caller would do.

GainwrightError
+-- MalformedRecord (ValueError)     the columns cannot be a record: mend the data
+-- OutOfDomain (ValueError)         an argument outside its domain: mend the call
|   +-- RuleNotApplicable            a rule outside its range of validity: choose another rule
|   +-- ConversionImpossible         a controller form that cannot hold these gains: choose another form
+-- NoLimitCycle (ArithmeticError)   the plant and relay have no limit cycle: change relay or plant
+-- NoCrossover (ArithmeticError)    the process has no phase crossover: no ultimate point exists

Every error carries ``field`` (what is wrong) and ``allowed`` (what would be right); the sentence is built here.
"""

from __future__ import annotations


class GainwrightError(Exception):
    """Base of every error of this package.

    Parameters
    ----------
    field : str
        Name of the argument, column or quantity at fault.
    problem : str
        What is wrong with it, without the field's name.
    allowed : str
        What is allowed instead; empty when there is nothing to say.
    """

    def __init__(self, field: str, problem: str, allowed: str = "") -> None:
        self.field = field
        self.problem = problem
        self.allowed = allowed
        sentence = f"{field}: {problem}"
        super().__init__(f"{sentence}; allowed: {allowed}" if allowed else sentence)

    def __reduce__(self) -> tuple[type[GainwrightError], tuple[str, str, str]]:
        return type(self), (self.field, self.problem, self.allowed)


class MalformedRecord(GainwrightError, ValueError):
    """The columns cannot be a record of a relay test."""


class OutOfDomain(GainwrightError, ValueError):
    """An argument lies outside its documented domain."""


class RuleNotApplicable(OutOfDomain):
    """A tuning rule was asked for outside its range of validity."""


class ConversionImpossible(OutOfDomain):
    """A controller form cannot express the gains asked of it."""


class NoLimitCycle(GainwrightError, ArithmeticError):
    """No limit cycle exists for this process and relay."""


class NoCrossover(GainwrightError, ArithmeticError):
    """The phase never reaches -180 degrees: the ultimate point does not exist."""
