"""Fitting the family of models to a whole record: baseline, start-up and every cycle.

Owns the structures' step responses and the least-squares fit. The output is a known zero-order hold, so each model's
answer is a sum of shifted step responses; gain, offset and drift are linear and projected out (variable projection,
Golub & Pereyra 1973, from memory), which leaves two or three nonlinear parameters, fitted in their logarithms.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import least_squares

from gainwright.models import ProcessModel, Structure
from gainwright.record import Record

FloatArray = npt.NDArray[np.float64]
StepResponse = Callable[[FloatArray, FloatArray], FloatArray]
"""Unit-gain step response at times (any shape, >= 0) for nonlinear parameters without the dead time."""

MOST_EVALUATIONS = 60
MOST_SAMPLES = 1500
TINY = 1e-12
NUDGE = 1e-6
ALL_BUT_REAL = 0.98


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """One structure fitted to a record.

    Parameters
    ----------
    structure : Structure
    parameters : ndarray
        Logarithms of the nonlinear parameters; the dead time first, seconds.
    linear : ndarray, shape (3,)
        Gain, offset, drift per second.
    time, residual : ndarray, shape (n,), seconds and PV units
        Thinned where the record is long.
    covariance : ndarray
        Of ``(parameters, log gain)``, for white residuals of the fit's own variance.
    criterion : float
        Bayesian information criterion.
    """

    structure: Structure
    parameters: FloatArray
    linear: FloatArray
    time: FloatArray
    residual: FloatArray
    covariance: FloatArray
    criterion: float

    def model(self, *, latency: float = 0.0) -> ProcessModel:
        """The process model, the link's latency (seconds) taken out of its dead time."""
        return model_of(self.structure, self.parameters, float(self.linear[0]), latency=latency)


def model_of(structure: Structure, parameters: FloatArray, gain: float, *, latency: float = 0.0) -> ProcessModel:
    """The process model of a structure's parameters.

    Parameters
    ----------
    structure : Structure
    parameters : ndarray
        Logarithms of dead time, then of the structure's own parameters.
    gain : float
    latency : float, seconds

    Returns
    -------
    ProcessModel
    """
    values = np.exp(parameters)
    dead_time = max(float(values[0]) - latency, 0.0)
    rest = [float(v) for v in values[1:]]
    if structure is Structure.SECOND_ORDER_COMPLEX:
        return ProcessModel(structure, gain, (), dead_time, 0.0, 1.0 / rest[0], rest[1])
    if structure is Structure.SECOND_ORDER:
        # Parametrised by the larger lag and the ratio of the smaller one to it.
        larger, ratio = rest[0], min(rest[1], 1.0)
        return ProcessModel(structure, gain, (larger, larger * ratio), dead_time)
    return ProcessModel(structure, gain, tuple(rest), dead_time)


def fit_family(record: Record, period: float) -> list[Fit]:
    """Every structure of the family fitted to a record, best first.

    Parameters
    ----------
    record : Record
    period : float, seconds
        The oscillation's period, from which all starts are taken.

    Returns
    -------
    list of Fit
    """
    data = _Data.of(record)
    fits = [_fit(data, structure, period) for structure in _STEPS]
    return sorted((fit for fit in fits if fit is not None), key=lambda fit: fit.criterion)


@dataclass(frozen=True, slots=True, eq=False)
class _Data:
    time: FloatArray
    value: FloatArray
    change_times: FloatArray
    changes: FloatArray

    @classmethod
    def of(cls, record: Record) -> _Data:
        places = np.flatnonzero(np.diff(record.controller_output) != 0) + 1
        stride = max(1, len(record) // MOST_SAMPLES)
        return cls(
            time=record.time[::stride],
            value=record.process_variable[::stride],
            change_times=record.time[places],
            changes=np.diff(record.controller_output)[places - 1],
        )

    def answer(self, step: StepResponse, parameters: FloatArray) -> FloatArray:
        """Unit-gain answer to the record's output, shape (n,)."""
        values = np.exp(parameters)
        since = self.time[:, None] - (self.change_times[None, :] + values[0])
        answers = np.where(since > 0, step(np.maximum(since, 0.0), values[1:]), 0.0)
        return np.asarray(answers @ self.changes)

    def projected(self, step: StepResponse, parameters: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Residual, linear parameters and their columns."""
        centred = (self.time - self.time[0]) / (self.time[-1] - self.time[0]) - 0.5
        columns = np.column_stack([self.answer(step, parameters), np.ones_like(centred), centred])
        scale = np.sqrt(np.sum(columns**2, axis=0)) + TINY
        solution, *_ = np.linalg.lstsq(columns / scale, self.value, rcond=1e-12)
        linear = solution / scale
        return self.value - columns @ linear, linear, columns


def _fit(data: _Data, structure: Structure, period: float) -> Fit | None:
    step = _STEPS[structure]
    starts = _STARTS[structure](period)
    bounds = np.log(period) + np.log([1e-4, 1e3])
    low = np.full(starts.shape[1], bounds[0])
    high = np.full(starts.shape[1], bounds[1])
    if structure in (Structure.SECOND_ORDER, Structure.SECOND_ORDER_COMPLEX):
        low[2], high[2] = np.log([0.02, 1.0])

    def residual(parameters: FloatArray) -> FloatArray:
        return data.projected(step, parameters)[0]

    costs = [float(np.sum(residual(start) ** 2)) for start in starts]
    best = np.clip(starts[int(np.argmin(costs))], low + 1e-6, high - 1e-6)
    found = least_squares(
        residual, best, bounds=(low, high), x_scale=0.3, max_nfev=MOST_EVALUATIONS, xtol=1e-10, ftol=1e-12
    )
    if structure is Structure.SECOND_ORDER_COMPLEX and found.x[2] > np.log(ALL_BUT_REAL):
        # Two equal real poles: the real structure says the same, with tangents that mean something.
        return None
    left, linear, columns = data.projected(step, found.x)
    if linear[0] == 0.0 or not np.all(np.isfinite(left)):
        return None
    count, unknown = left.size, found.x.size + 3
    variance = float(np.sum(left**2)) / max(count - unknown, 1)
    criterion = count * np.log(variance + TINY * float(np.var(data.value)) + 1e-300) + unknown * np.log(count)
    # Tangents with the linear parameters held, so that what gain and time constants trade between them is kept.
    tangents = [
        (data.answer(step, found.x + nudge) - columns[:, 0]) / NUDGE * linear[0]
        for nudge in NUDGE * np.eye(found.x.size)
    ]
    jacobian = np.column_stack([*tangents, columns[:, 0] * linear[0], columns[:, 1:]])
    scale = np.sqrt(np.sum(jacobian**2, axis=0)) + TINY
    normal = (jacobian / scale).T @ (jacobian / scale)
    inverse = np.linalg.pinv(normal + 1e-9 * np.eye(normal.shape[0])) / np.outer(scale, scale)
    size = found.x.size + 1
    return Fit(structure, found.x, linear, data.time, left, variance * inverse[:size, :size], float(criterion))


def _first_order(since: FloatArray, p: FloatArray) -> FloatArray:
    return np.asarray(-np.expm1(-since / p[0]))


def _second_order(since: FloatArray, p: FloatArray) -> FloatArray:
    slow = p[0]
    fast = slow * min(float(p[1]), 0.999)
    return np.asarray(1.0 - (slow * np.exp(-since / slow) - fast * np.exp(-since / fast)) / (slow - fast))


def _second_order_complex(since: FloatArray, p: FloatArray) -> FloatArray:
    omega, damping = 1.0 / p[0], min(float(p[1]), 0.9999)
    turning = omega * np.sqrt(1.0 - damping**2)
    decay = np.exp(-np.minimum(damping * omega * since, 700.0))
    return np.asarray(1.0 - decay * (np.cos(turning * since) + damping * omega / turning * np.sin(turning * since)))


def _integrating(since: FloatArray, p: FloatArray) -> FloatArray:
    return since


def _integrating_lag(since: FloatArray, p: FloatArray) -> FloatArray:
    return np.asarray(since + p[0] * np.expm1(-since / p[0]))


_STEPS: dict[Structure, StepResponse] = {
    Structure.FIRST_ORDER: _first_order,
    Structure.SECOND_ORDER: _second_order,
    Structure.SECOND_ORDER_COMPLEX: _second_order_complex,
    Structure.INTEGRATING: _integrating,
    Structure.INTEGRATING_LAG: _integrating_lag,
}


def _grid(*axes: tuple[float, ...]) -> FloatArray:
    return np.array(np.meshgrid(*axes, indexing="ij")).reshape(len(axes), -1).T


_STARTS: dict[Structure, Callable[[float], FloatArray]] = {
    Structure.FIRST_ORDER: lambda period: np.log(period * _grid((0.1, 0.2, 0.3, 0.45), (0.05, 0.3, 1.0, 4.0))),
    Structure.SECOND_ORDER: lambda period: np.log(
        _grid((0.03 * period, 0.1 * period, 0.25 * period), (0.15 * period, 0.6 * period, 3.0 * period), (0.1, 0.5))
    ),
    Structure.SECOND_ORDER_COMPLEX: lambda period: np.log(
        _grid((0.03 * period, 0.1 * period, 0.25 * period), (0.1 * period, 0.25 * period), (0.2, 0.7))
    ),
    Structure.INTEGRATING: lambda period: np.log(period * _grid((0.1, 0.15, 0.2, 0.25))),
    Structure.INTEGRATING_LAG: lambda period: np.log(period * _grid((0.03, 0.1, 0.2), (0.02, 0.1, 0.3))),
}
