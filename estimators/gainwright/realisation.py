"""State-space form of a transfer function's rational part, and its exact advance over a constant input.

Owns the realisation and its matrix exponentials; knows nothing of dead time, relays or records. A balanced
companion form, so that repeated and complex poles and integrators need no special case.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.linalg import expm, matrix_balance

from gainwright.errors import OutOfDomain
from gainwright.models import TransferFunction

FloatArray = npt.NDArray[np.float64]

KEPT_STEPS = 4096
"""Matrix exponentials kept per realisation: plenty for regular sampling, bounded for irregular."""

STEP_DECIMALS = 12
"""Step lengths equal to a picosecond share one matrix exponential."""


class Realisation:
    """``x' = A x + b u``, ``y = c x + f u`` for a proper rational transfer function.

    Parameters
    ----------
    transfer_function : TransferFunction
        Proper; its dead time is left to the caller.

    Attributes
    ----------
    order : int
    state_matrix : numpy.ndarray, shape (order, order), 1/s
    input_vector, output_vector : numpy.ndarray, shape (order,)
    feedthrough : float

    Raises
    ------
    OutOfDomain
        Where the numerator's degree exceeds the denominator's, or the denominator is zero.
    """

    def __init__(self, transfer_function: TransferFunction) -> None:
        denominator = np.trim_zeros(np.asarray(transfer_function.denominator, dtype=np.float64), "f")
        numerator = np.trim_zeros(np.asarray(transfer_function.numerator, dtype=np.float64), "f")
        if denominator.size == 0 or numerator.size > denominator.size:
            raise OutOfDomain("numerator", "has a higher degree than the denominator", "a proper transfer function")
        numerator = np.concatenate([np.zeros(denominator.size - numerator.size), numerator]) / denominator[0]
        denominator = denominator / denominator[0]
        self.order = order = denominator.size - 1
        self.feedthrough = float(numerator[0])
        self.state_matrix = np.zeros((order, order))
        self.input_vector = np.zeros(order)
        self.output_vector = (numerator[1:] - numerator[0] * denominator[1:])[::-1].copy()
        if order:
            self.state_matrix[:-1, 1:] = np.eye(order - 1)
            self.state_matrix[-1] = -denominator[:0:-1]
            self.input_vector[-1] = 1.0
            balanced, transformation = matrix_balance(self.state_matrix, permute=False)
            weights = np.diag(transformation)
            self.state_matrix = balanced
            self.input_vector = self.input_vector / weights
            self.output_vector = self.output_vector * weights
        self._steps: dict[float, tuple[FloatArray, FloatArray]] = {}

    def step(self, duration: float) -> tuple[FloatArray, FloatArray]:
        """Transition matrix and input vector over ``duration`` (seconds) of constant input, kept for reuse."""
        key = round(duration, STEP_DECIMALS)
        found = self._steps.get(key)
        if found is None:
            if len(self._steps) >= KEPT_STEPS:
                self._steps.clear()
            found = self._steps[key] = self.exponential(duration)
        return found

    def exponential(self, duration: float) -> tuple[FloatArray, FloatArray]:
        """``exp(A h)`` and ``int_0^h exp(A s) ds b`` for h = ``duration`` (seconds)."""
        augmented = np.zeros((self.order + 1, self.order + 1))
        augmented[:-1, :-1] = self.state_matrix * duration
        augmented[:-1, -1] = self.input_vector * duration
        whole = expm(augmented)
        return np.ascontiguousarray(whole[:-1, :-1]), np.ascontiguousarray(whole[:-1, -1])
