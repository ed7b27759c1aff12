"""Fitting one structure to a whole record: variable projection with analytic tangents.

Owns the least-squares problem of one structure, its search and its covariance. The columns' sizes are linear and
projected out (Golub & Pereyra 1973; Kaufman's tangents 1975; both from memory), which leaves one to four nonlinear
parameters for a damped Gauss-Newton search from the best of a small grid. A weak prior bounds the directions that a
record cannot tell.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from gainwright.columns import Columns, Upsets, answers_of, columns_of
from gainwright.modes import Drive
from gainwright.noise import Whitening, correlation_of
from gainwright.record import Record
from gainwright.structures import Shape, start_poles

FloatArray = npt.NDArray[np.float64]

MOST_STEPS = 12
LARGEST_STEP = np.array([0.15, 1.0])
"""Of the dead time (periods) and of the logarithms, in one search step."""
SETTLED = 1e-4
SETTLED_STEP = 1e-2
MOST_DAMPINGS = 3
EXACT = 1e-12
"""A residual's variance below this share of the record's needs no further step."""
LOOKED_FOR = 6.0
"""What a load's time, looked for over the whole record, costs in the criterion besides its two numbers."""
TINY = 1e-300
THINNED = 160
MOST_SAMPLES = 1200
BLOCKS_PER_PERIOD = 64


@dataclass(frozen=True, slots=True, eq=False)
class Problem:
    """What all structures are fitted to.

    Parameters
    ----------
    time, value : ndarray, shape (n,), seconds and PV units
        A long record is averaged in blocks.
    drive : Drive
    period : float, seconds
        The oscillation's, the scale of every start and prior.
    whitening : Whitening
    upsets : Upsets
    """

    time: FloatArray
    value: FloatArray
    drive: Drive
    period: float
    whitening: Whitening
    upsets: Upsets
    correlation: float = 0.0

    @classmethod
    def of(cls, record: Record, period: float) -> Problem:
        """A record's problem, for white noise and a start at rest."""
        time, value = _averaged(record.time, record.process_variable, period)
        return cls(time, value, Drive.of(record), period, Whitening.of(time, 0.0), Upsets())

    def later_than(self, start: float) -> Problem:
        """The problem without what was seen before ``start`` (seconds)."""
        kept = self.time >= start
        time = self.time[kept]
        return replace(self, time=time, value=self.value[kept], whitening=Whitening.of(time, 0.0))

    def with_upsets(self, upsets: Upsets) -> Problem:
        """The problem with other disturbances fitted."""
        return replace(self, upsets=upsets)

    def in_colour(self, correlation: float) -> Problem:
        """The problem with noise of a lag-one correlation."""
        return replace(self, correlation=correlation, whitening=Whitening.of(self.time, correlation))

    def columns(self, shape: Shape, parameters: FloatArray, zero_share: float) -> Columns:
        """The columns of a shape at parameters."""
        return columns_of(shape, parameters, self.period, self.drive, self.time, self.upsets, zero_share)


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """One structure fitted to a problem.

    Parameters
    ----------
    shape : Shape
    parameters : ndarray, shape (k,)
        The shape's, and the load's time at the end where one is fitted.
    linear : ndarray, shape (c,)
        Sizes of the columns, the process's paths first.
    residual, white : ndarray, shape (n,), PV units
        What is left, as seen and whitened.
    tangents : ndarray, shape (n, k + c)
        Whitened derivatives by the parameters and by the sizes.
    covariance : ndarray, shape (k + c, k + c)
    variance : float
        Of the whitened noise.
    problem : Problem
    """

    shape: Shape
    parameters: FloatArray
    linear: FloatArray
    residual: FloatArray
    white: FloatArray
    tangents: FloatArray
    covariance: FloatArray
    variance: float
    problem: Problem

    @property
    def paths(self) -> int:
        """How many columns answer the output."""
        return 2 if self.shape.zero else 1

    @property
    def unknowns(self) -> int:
        """How many numbers were fitted."""
        return int(self.parameters.size + self.linear.size)

    @property
    def criterion(self) -> float:
        """Bayesian information criterion, with the noise's colour in the likelihood."""
        return self._criterion(self.white, self.problem.whitening)

    @property
    def own_colour_criterion(self) -> float:
        """The criterion in the colour of this fit's own residual, whatever the fit was made for."""
        whitening = Whitening.of(self.problem.time, self.correlation)
        return self._criterion(whitening(self.residual), whitening)

    def _criterion(self, white: FloatArray, whitening: Whitening) -> float:
        count = white.size
        floor = 1e-14 * float(np.var(self.problem.value))
        power = float(white @ white) / count + floor
        looked_for = LOOKED_FOR if self.problem.upsets.load_at is not None else 0.0
        likelihood = count * np.log(power + TINY) - 2 * whitening.log_scale
        return float(likelihood + self.unknowns * np.log(count) + looked_for)

    @property
    def correlation(self) -> float:
        """Lag-one correlation of the residual."""
        return correlation_of(self.residual, self.unknowns)


def best_starts(problem: Problem, shape: Shape) -> list[FloatArray]:
    """The best places of the shape's grid on a thinned record, one for each valley that a search could miss.

    Parameters
    ----------
    problem : Problem
    shape : Shape

    Returns
    -------
    list of ndarray, shape (k,)
    """
    grid = shape.starts()
    stride = max(1, problem.time.size // THINNED)
    time, value = problem.time[::stride], problem.value[::stride]
    period = problem.period
    answers = answers_of(shape, start_poles(shape) / period, grid[:, 0] * period, problem.drive, time, period)
    answers = np.swapaxes(answers, -1, -2)
    columns = np.concatenate([answers, np.ones((*answers.shape[:-1], 1))], axis=-1)
    scale = np.sqrt(np.sum(columns**2, axis=-2, keepdims=True)) + TINY
    basis, triangle = np.linalg.qr(columns / scale)
    seen = np.swapaxes(basis, -1, -2) @ value
    costs = value @ value - np.sum(seen**2, axis=-1)
    if not shape.zero:
        if not (shape.lag and shape.pair):
            return [grid[int(np.argmin(costs))]]
        # A complex pair beside a lag and three real poles lie in different valleys.
        complex_pair = grid[:, -1] < 0.0
        return [grid[int(np.argmin(np.where(side, costs, np.inf)))] for side in (complex_pair, ~complex_pair)]
    sizes = np.linalg.solve(triangle + 1e-12 * np.eye(triangle.shape[-1]), seen[..., None])[..., 0] / scale[..., 0, :]
    positive = sizes[:, 0] * sizes[:, 1] > 0
    return [grid[int(np.argmin(np.where(side, costs, np.inf)))] for side in (positive, ~positive) if bool(np.any(side))]


def fit(problem: Problem, shape: Shape, start: FloatArray, steps: int = MOST_STEPS) -> Fit | None:
    """One structure fitted from a start.

    Parameters
    ----------
    problem : Problem
    shape : Shape
    start : ndarray, shape (k,)
        The shape's parameters; the load's time is taken from the problem where it is missing.
    steps : int

    Returns
    -------
    Fit or None
        None where no finite answer was found.
    """
    search = _Search(problem, shape)
    if problem.upsets.load_at is not None and start.size == shape.parameters:
        start = np.append(start, problem.upsets.load_at / problem.period)
    return search.run(start, steps)


class _Search:
    """Damped Gauss-Newton over the nonlinear parameters."""

    def __init__(self, problem: Problem, shape: Shape) -> None:
        self._problem = problem
        self._shape = shape
        self._value = problem.whitening(problem.value)
        middle, spread = shape.prior()
        loaded = problem.upsets.load_at is not None
        self._middle = np.append(middle, 0.0) if loaded else middle
        self._weight = 1.0 / np.append(spread, 1e6) ** 2 if loaded else 1.0 / spread**2
        self._largest = np.full(self._middle.size, LARGEST_STEP[1])
        self._largest[0] = LARGEST_STEP[0]
        if loaded:
            self._largest[-1] = LARGEST_STEP[0]
        self._exact = EXACT * float(np.var(self._value))
        self._share = 0.0

    def run(self, start: FloatArray, steps: int) -> Fit | None:
        here = self._at(start)
        if here is None:
            return None
        damping = 1e-3
        for _ in range(steps):
            there, damping = self._better(here, damping)
            if there is None:
                break
            here = there
            if here.variance < self._exact:
                break
        return here.fit(self._shape, self._problem, self._weight)

    def _better(self, here: _Place, damping: float) -> tuple[_Place | None, float]:
        """A place of less cost one step on, and the damping for the next; None where no step is worth taking."""
        gradient, normal, prior = self._slope(here)
        cost = self._cost(here, here.variance)
        for _ in range(MOST_DAMPINGS):
            step = self._step(here.parameters, gradient, normal + np.diag(damping * np.diag(normal) + prior))
            promised = -float(gradient @ step) / 2
            if promised < SETTLED * cost and float(np.max(np.abs(step))) < SETTLED_STEP:
                return None, damping
            there = self._at(self._bounded(here.parameters + step))
            if there is not None and self._cost(there, here.variance) < cost:
                return there, damping / 10.0
            damping = max(damping, 1e-4) * 8.0
        return None, damping

    def _step(self, parameters: FloatArray, gradient: FloatArray, normal: FloatArray) -> FloatArray:
        """The next step, no longer than allowed; a dead time at zero that would fall below it stays there."""
        normal = normal + 1e-30 * np.eye(normal.shape[0])
        step = np.linalg.solve(normal, -gradient)
        if parameters[0] <= 0.0 and step[0] < 0.0:
            step[0] = 0.0
            step[1:] = np.linalg.solve(normal[1:, 1:], -gradient[1:]) if step.size > 1 else step[1:]
        return np.asarray(step / max(1.0, float(np.max(np.abs(step) / self._largest))))

    def _bounded(self, parameters: FloatArray) -> FloatArray:
        bounded = parameters.copy()
        bounded[0] = min(max(float(bounded[0]), 0.0), 1.0)
        own = self._shape.parameters
        bounded[1:own] = np.clip(bounded[1:own], -9.0, 9.0)
        if bounded.size > own:
            time, period = self._problem.time, self._problem.period
            bounded[own] = np.clip(bounded[own], float(time[0]) / period, float(time[-1]) / period)
        return bounded

    def _at(self, parameters: FloatArray) -> _Place | None:
        columns = self._problem.columns(self._shape, parameters, self._share)
        white = self._problem.whitening(columns.matrix)
        scale = np.sqrt(np.sum(white**2, axis=0))
        if white.shape[0] <= white.shape[1] + parameters.size or not np.all(np.isfinite(scale)) or scale[0] <= 0:
            return None
        scale = np.where(scale > 0, scale, 1.0)
        basis, triangle = np.linalg.qr(white / scale)
        diagonal = np.abs(np.diag(triangle))
        if float(np.min(diagonal)) < 1e-10:
            triangle = triangle + 1e-10 * np.eye(triangle.shape[0])
        seen = basis.T @ self._value
        linear = np.linalg.solve(triangle, seen) / scale
        left = self._value - basis @ seen
        if self._shape.zero and linear[0] != 0.0:
            self._share = float(np.clip(linear[1] / linear[0], -1e3, 1e3))
        degrees = max(left.size - parameters.size - linear.size, 1)
        return _Place(parameters, columns, white, basis, linear, left, float(left @ left) / degrees)

    def _slope(self, here: _Place) -> tuple[FloatArray, FloatArray, FloatArray]:
        tangents = self._problem.whitening(here.columns.tangents(here.linear))
        tangents = tangents - here.basis @ (here.basis.T @ tangents)
        prior = here.variance * self._weight
        gradient = -(tangents.T @ here.left) + prior * (here.parameters - self._middle)
        return gradient, tangents.T @ tangents, prior

    def _cost(self, place: _Place, variance: float) -> float:
        return float(place.left @ place.left) + variance * float(self._weight @ (place.parameters - self._middle) ** 2)


@dataclass(frozen=True, slots=True, eq=False)
class _Place:
    """Where a search stands."""

    parameters: FloatArray
    columns: Columns
    white: FloatArray
    basis: FloatArray
    linear: FloatArray
    left: FloatArray
    variance: float

    def fit(self, shape: Shape, problem: Problem, weight: FloatArray) -> Fit | None:
        if self.linear[0] == 0.0 or not np.all(np.isfinite(self.left)):
            return None
        tangents = np.concatenate([problem.whitening(self.columns.tangents(self.linear)), self.white], axis=1)
        scale = np.sqrt(np.sum(tangents**2, axis=0)) + TINY
        prior = np.zeros(tangents.shape[1])
        prior[: weight.size] = weight * self.variance
        normal = (tangents / scale).T @ (tangents / scale) + np.diag(prior / scale**2)
        inverse = np.linalg.pinv(normal, rcond=1e-13, hermitian=True) / np.outer(scale, scale)
        residual = problem.value - self.columns.matrix @ self.linear
        return Fit(
            shape,
            self.parameters,
            self.linear,
            residual,
            self.left,
            tangents,
            self.variance * inverse,
            self.variance,
            problem,
        )


def _averaged(time: FloatArray, value: FloatArray, period: float) -> tuple[FloatArray, FloatArray]:
    """A long record in blocks, never longer than a small share of the period."""
    if time.size <= MOST_SAMPLES:
        return time, value
    longest = period / BLOCKS_PER_PERIOD
    size = max(1, min(time.size // MOST_SAMPLES, int(longest / float(np.median(np.diff(time))))))
    if size == 1:
        return time, value
    whole = time.size // size * size
    blocks = np.arange(0, whole, size)
    return np.add.reduceat(time[:whole], blocks) / size, np.add.reduceat(value[:whole], blocks) / size
