"""The columns of a fit: what a process of given shape and parameters would show, with tangents.

Owns the linear part of a fit's model: the answers to the output (one path, two with a zero), the level, and the
disturbances that a record may hold - a drift, a start away from rest, a load that steps in - each a column whose
size is fitted. Knows no noise and no optimiser.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from gainwright.modes import UNDERFLOW, Drive, mode_answers
from gainwright.structures import Shape

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]


@dataclass(frozen=True, slots=True)
class Upsets:
    """Which disturbances are fitted besides the answer to the output.

    Parameters
    ----------
    drift, from_rest : bool
        A ramp of the process variable; whether the record begins at rest.
    load_at : float or None, seconds
        When a load at the process's input steps in; refined with the other parameters.
    """

    drift: bool = False
    from_rest: bool = True
    load_at: float | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Columns:
    """Columns at one set of parameters, and their change with each.

    Parameters
    ----------
    matrix : ndarray, shape (n, c)
        First the process's paths, then the level, then the disturbances.
    slopes : list of dict
        For each nonlinear parameter the derivative of each column that it moves, shape (n,).
    paths : int
        How many columns answer the output.
    """

    matrix: FloatArray
    slopes: list[dict[int, FloatArray]] = field(default_factory=list)
    paths: int = 1

    def tangents(self, linear: FloatArray) -> FloatArray:
        """Derivative of the whole answer by each nonlinear parameter, shape (n, k)."""
        tangents = np.zeros((self.matrix.shape[0], len(self.slopes)))
        for k, moved in enumerate(self.slopes):
            for column, slope in moved.items():
                tangents[:, k] += linear[column] * slope
        return tangents


def columns_of(
    shape: Shape,
    parameters: FloatArray,
    period: float,
    drive: Drive,
    time: FloatArray,
    upsets: Upsets,
    zero_share: float = 0.0,
) -> Columns:
    """The columns and their slopes.

    Parameters
    ----------
    shape : Shape
    parameters : ndarray, shape (k,)
        Of the shape; with a load its time over the period at the end.
    period : float, seconds
    drive : Drive
    time : ndarray, shape (n,), seconds
    upsets : Upsets
    zero_share : float
        Gain of the zero's path over the gain, for the load's own answer.

    Returns
    -------
    Columns
    """
    own = shape.parameters
    poles, pole_slopes = shape.poles(parameters[:own], period)
    shifted = time - parameters[0] * period
    answers, changes = _paths(shape, poles, pole_slopes, period, drive, shifted)
    matrix = [*answers, np.ones_like(time)]
    slopes: list[dict[int, FloatArray]] = [dict(enumerate(change)) for change in changes]
    if upsets.drift:
        matrix.append((time - time[0]) / (time[-1] - time[0]) - 0.5)
    if not upsets.from_rest:
        _add_initial(matrix, slopes, poles[: poles.size - int(shape.integrator)], pole_slopes, time - time[0], period)
    if upsets.load_at is not None:
        load = Drive(np.array([parameters[own] * period]), np.ones(1))
        answers_to_load, load_changes = _paths(shape, poles, pole_slopes, period, load, shifted)
        share = np.array([1.0, zero_share])[: len(answers_to_load)]
        place = len(matrix)
        matrix.append(share @ np.stack(answers_to_load))
        for k, change in enumerate(load_changes):
            slopes[k][place] = share @ np.stack(change)
        # A later load is a longer dead time, for the load alone.
        slopes.append({place: share @ np.stack(load_changes[0])})
    return Columns(np.stack(matrix, axis=1), slopes, len(answers))


def answers_of(
    shape: Shape, poles: ComplexArray, dead_time: FloatArray, drive: Drive, time: FloatArray, scale: float
) -> FloatArray:
    """The process's paths alone, for many parameter sets at once.

    Parameters
    ----------
    shape : Shape
    poles : ndarray of complex, shape (g, p), 1/s
    dead_time : ndarray, shape (g,), seconds
    drive : Drive
    time : ndarray, shape (n,) or (g, n), seconds
    scale : float, seconds
        Of the zero's path.

    Returns
    -------
    ndarray, shape (g, paths, n)
    """
    modes, _ = mode_answers(drive, poles, time - dead_time[:, None])
    weights = _weights(shape, poles)
    found = [np.sum(weights[..., None] * modes, axis=-2).real]
    if shape.zero:
        found.append(np.sum((weights * poles)[..., None] * modes, axis=-2).real * scale)
    return np.stack(found, axis=-2)


def _weights(shape: Shape, poles: ComplexArray) -> ComplexArray:
    """Weight of each mode in ``1/prod(1 - s/p)``; the integrator's pole counts as ``1/s``."""
    gaps = poles[..., :, None] - poles[..., None, :]
    gaps = gaps + np.eye(poles.shape[-1])
    lagging = poles[..., : poles.shape[-1] - int(shape.integrator)]
    return np.asarray(np.prod(-lagging, axis=-1, keepdims=True) / np.prod(gaps, axis=-1))


def _paths(
    shape: Shape, poles: ComplexArray, pole_slopes: ComplexArray, period: float, drive: Drive, shifted: FloatArray
) -> tuple[list[FloatArray], list[list[FloatArray]]]:
    """Answers of each path, shape (n,), and for each parameter of the shape their derivatives."""
    modes, by_pole = mode_answers(drive, poles, shifted)
    weights = _weights(shape, poles)
    count = poles.size
    gaps = poles[:, None] - poles[None, :] + np.eye(count)
    turn = 1.0 / gaps - np.eye(count)
    # Logarithmic slope of weight i by pole k.
    moved = turn - np.diag(turn.sum(axis=1))
    lagging = count - int(shape.integrator)
    moved[:, :lagging] += 1.0 / poles[None, :lagging]
    paths, free = 2 if shape.zero else 1, pole_slopes.shape[1]
    # Every answer and every slope is one row over the modes, their derivatives and the level in force.
    rows = np.zeros((paths, 2 + free, 2 * count + 1), dtype=np.complex128)
    for order in range(paths):
        scale = period**order
        whole = weights * poles**order * scale
        rows[order, 0, :count] = whole
        rows[order, 1, :count] = -whole * poles * period
        rows[order, 1, -1] = -whole.sum() * period
        by_modes = whole[:, None] * moved
        if order:
            by_modes = by_modes + np.diag(weights * scale)
        rows[order, 2:, :count] = pole_slopes.T @ by_modes.T
        rows[order, 2:, count : 2 * count] = pole_slopes.T * whole
    stacked = np.concatenate([modes, by_pole, drive.level(shifted)[None, :]])
    if stacked.dtype.kind == "c":
        found = (rows.reshape(-1, 2 * count + 1) @ stacked).real
    else:
        found = rows.real.reshape(-1, 2 * count + 1) @ stacked
    found = found.reshape(paths, 2 + free, -1)
    answers = [found[order, 0] for order in range(paths)]
    return answers, [[found[order, 1 + k] for order in range(paths)] for k in range(1 + free)]


def _add_initial(
    matrix: list[FloatArray],
    slopes: list[dict[int, FloatArray]],
    poles: ComplexArray,
    pole_slopes: ComplexArray,
    since: FloatArray,
    period: float,
) -> None:
    """What is left of a start away from rest: one decaying column for each pole; a pair's are kept real."""
    exponents = poles[:, None] * since
    decays = np.exp(np.where(exponents.real < UNDERFLOW, UNDERFLOW, exponents))
    if poles.size >= 2:
        first, second = decays[0], decays[1]
        gap = poles[0] - poles[1]
        total, rest = first + second, (first - second) / gap
        place = len(matrix)
        matrix.extend([total.real, rest.real / period])
        for k in range(pole_slopes.shape[1]):
            one, two = pole_slopes[0, k], pole_slopes[1, k]
            slopes[k + 1][place] = (one * since * first + two * since * second).real
            turned = (one * since * first - two * since * second) / gap - rest * (one - two) / gap
            slopes[k + 1][place + 1] = turned.real / period
    if poles.size in (1, 3):
        decay, place = decays[-1], len(matrix)
        matrix.append(decay.real)
        for k in range(pole_slopes.shape[1]):
            slopes[k + 1][place] = (pole_slopes[poles.size - 1, k] * since * decay).real
