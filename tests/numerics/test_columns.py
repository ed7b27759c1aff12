"""A fit's columns against the exact simulation, and their analytic slopes against finite differences."""

from __future__ import annotations

import numpy as np
import pytest

from gainwright.columns import Upsets, columns_of
from gainwright.modes import Drive, mode_answers
from gainwright.simulation import respond
from gainwright.structures import FAMILY, Shape

PERIOD = 3.0
DRIVE = Drive(np.array([1.0, 3.0, 4.5, 6.0, 7.0]), np.array([1.0, -1.0, 1.0, -1.0, 1.0]))
TIME = np.linspace(0.01, 8.0, 301)
STEP = 1e-6
TOLERANCE = 1e-7
"""Of central differences: truncation of the order STEP^2, rounding of the order 1e-16/STEP, curvature near ten."""


def cases() -> list[tuple[Shape, np.ndarray]]:
    found = []
    generator = np.random.default_rng(0)
    for shape in FAMILY:
        starts = shape.starts()
        for start in starts[[0, len(starts) // 2, -1]]:
            found.append((shape, start + np.append(0.0, generator.normal(size=start.size - 1) * 0.05)))
    return found


@pytest.mark.parametrize(("shape", "parameters"), cases(), ids=lambda value: getattr(value, "name", ""))
def test_the_columns_are_the_exact_answer(shape: Shape, parameters: np.ndarray) -> None:
    columns = columns_of(shape, parameters, PERIOD, DRIVE, TIME, Upsets())
    gains = np.array([1.7, 0.4])[: columns.paths]
    model = shape.model(parameters, gains, PERIOD)
    exact = respond(model.transfer_function(), DRIVE.times, DRIVE.levels, TIME)
    assert columns.matrix[:, : columns.paths] @ gains == pytest.approx(exact, abs=2e-6 * np.max(np.abs(exact)))


@pytest.mark.parametrize(("shape", "parameters"), cases(), ids=lambda value: getattr(value, "name", ""))
def test_slopes_agree_with_finite_differences(shape: Shape, parameters: np.ndarray) -> None:
    upsets = Upsets(drift=True, from_rest=False, load_at=2.7)
    whole = np.append(parameters, 0.9)

    def columns(values: np.ndarray) -> np.ndarray:
        return columns_of(shape, values, PERIOD, DRIVE, TIME, upsets, 0.3).matrix

    found = columns_of(shape, whole, PERIOD, DRIVE, TIME, upsets, 0.3)
    linear = np.random.default_rng(1).normal(size=found.matrix.shape[1])
    tangents = found.tangents(linear)
    for k in range(whole.size):
        step = np.zeros(whole.size)
        step[k] = STEP
        differences = (columns(whole + step) - columns(whole - step)) @ linear / (2 * STEP)
        # The median: at the very samples where a delayed change falls, a first order has no derivative.
        error = float(np.median(np.abs(differences - tangents[:, k])))
        assert error <= TOLERANCE * max(float(np.max(np.abs(differences))), 1.0)


@pytest.mark.parametrize("poles", [[-1.0, -1.3, -5.0], [-0.5 + 1j, -0.5 - 1j, -1e-8]])
def test_a_modes_derivative_by_its_pole_agrees_with_a_difference(poles: list[complex]) -> None:
    at = np.array(poles, dtype=np.complex128)
    answers, slopes = mode_answers(DRIVE, at, TIME)
    for k in range(at.size):
        moved = at.copy()
        step = 1e-6 * abs(at[k]) if abs(at[k]) > 1e-3 else 1e-6
        moved[k] += step
        # One pole alone: a pair that is no pair any more must not be taken for one.
        other = mode_answers(DRIVE, moved[k : k + 1], TIME)[0][0]
        scale = float(np.max(np.abs(slopes[k])))
        assert np.max(np.abs((other - answers[k]) / step - slopes[k])) <= 1e-5 * scale
