"""Exact simulation of a process under a piecewise-constant output.

Owns the state of a rational process with dead time and its exact advance over any step. Knows nothing of devices
or clocks. Strategy: a balanced companion realisation, matrix exponentials kept per step length, and a queue of the
input's changes from which the dead time is served to a fraction of any step.
"""

from __future__ import annotations

from collections import deque

import numpy as np
import numpy.typing as npt
from scipy.linalg import expm, matrix_balance

from gainwright.errors import OutOfDomain
from gainwright.models import TransferFunction

FloatArray = npt.NDArray[np.float64]

KEPT_STEPS = 4096
"""Matrix exponentials kept per realisation: enough for any regular sampling, bounded for an irregular one."""


class Realisation:
    """State-space form of a transfer function's rational part, with its exact steps.

    Parameters
    ----------
    transfer_function : TransferFunction
        Proper; the dead time is not part of the realisation.

    Raises
    ------
    OutOfDomain
        Where the numerator's degree exceeds the denominator's.
    """

    def __init__(self, transfer_function: TransferFunction) -> None:
        denominator = np.trim_zeros(np.asarray(transfer_function.denominator, dtype=np.float64), "f")
        numerator = np.trim_zeros(np.asarray(transfer_function.numerator, dtype=np.float64), "f")
        if denominator.size == 0 or numerator.size > denominator.size:
            raise OutOfDomain("numerator", "has a higher degree than the denominator", "a proper transfer function")
        order = denominator.size - 1
        numerator = np.concatenate([np.zeros(denominator.size - numerator.size), numerator]) / denominator[0]
        denominator = denominator / denominator[0]
        self.order = order
        self.feedthrough = float(numerator[0])
        self.state_matrix = np.zeros((order, order))
        self.input_vector = np.zeros(order)
        self.output_vector = (numerator[1:] - numerator[0] * denominator[1:])[::-1].copy()
        if order:
            self.state_matrix[:-1, 1:] = np.eye(order - 1)
            self.state_matrix[-1] = -denominator[:0:-1]
            self.input_vector[-1] = 1.0
            balanced, scaling = matrix_balance(self.state_matrix, permute=False)
            weights = np.diag(scaling)
            self.state_matrix = balanced
            self.input_vector = self.input_vector / weights
            self.output_vector = self.output_vector * weights
        self._steps: dict[float, tuple[FloatArray, FloatArray]] = {}

    def step(self, duration: float) -> tuple[FloatArray, FloatArray]:
        """Transition matrix and input vector over ``duration`` (seconds) of constant input."""
        found = self._steps.get(duration)
        if found is None:
            augmented = np.zeros((self.order + 1, self.order + 1))
            augmented[:-1, :-1] = self.state_matrix * duration
            augmented[:-1, -1] = self.input_vector * duration
            whole = expm(augmented)
            found = np.ascontiguousarray(whole[:-1, :-1]), np.ascontiguousarray(whole[:-1, -1])
            if len(self._steps) < KEPT_STEPS:
                self._steps[duration] = found
        return found


class PlantSimulation:
    """A process advanced step by step under a piecewise-constant output.

    Deviations are about an operating point: at ``resting_output`` the process rests (self-regulating) or stands
    still (integrating) at ``resting_value``.

    Parameters
    ----------
    transfer_function : TransferFunction
        Output units to PV units.
    resting_output : float, output units
    resting_value : float, PV units
    load : float, output units
        Constant load, added to the output at the process's input from the start.
    """

    def __init__(
        self,
        transfer_function: TransferFunction,
        *,
        resting_output: float = 0.0,
        resting_value: float = 0.0,
        load: float = 0.0,
    ) -> None:
        if transfer_function.dead_time < 0:
            raise OutOfDomain("dead_time", "is negative", "0 or more seconds")
        self._realisation = Realisation(transfer_function)
        self._dead_time = float(transfer_function.dead_time)
        self._resting_output = resting_output
        self._resting_value = resting_value
        self.load = load
        self._state = np.zeros(self._realisation.order)
        self._now = 0.0
        # What arrives at the rational part, as (time of arrival, input); the first entry is in force now.
        self._arriving: deque[tuple[float, float]] = deque([(0.0, 0.0)])

    @property
    def now(self) -> float:
        """Simulated seconds since the start."""
        return self._now

    def value(self) -> float:
        """The process variable now, without noise, PV units."""
        deviation = float(self._realisation.output_vector @ self._state)
        return self._resting_value + deviation + self._realisation.feedthrough * self._arriving[0][1]

    def step(self, duration: float, output: float) -> float:
        """Advance ``duration`` (seconds, >= 0) with ``output`` (output units) in force; the new process variable."""
        drive = output - self._resting_output + self.load
        last = self._arriving[-1][1]
        if drive != last:
            self._arriving.append((self._now + self._dead_time, drive))
        end = self._now + duration
        at = self._now
        while len(self._arriving) > 1 and self._arriving[1][0] <= end:
            at = self._advance(at, self._arriving[1][0])
            self._arriving.popleft()
        self._advance(at, end)
        self._now = end
        return self.value()

    def _advance(self, start: float, end: float) -> float:
        duration = end - start
        if duration > 0 and self._realisation.order:
            # Rounded so that the steps of regular sampling are found again; a picosecond moves nothing.
            transition, gain = self._realisation.step(round(duration, 12))
            self._state = transition @ self._state + gain * self._arriving[0][1]
        return end


def simulate(
    transfer_function: TransferFunction,
    time: npt.ArrayLike,
    output: npt.ArrayLike,
    *,
    resting_output: float = 0.0,
    resting_value: float = 0.0,
) -> FloatArray:
    """The process variable at given times under a zero-order-held output.

    Parameters
    ----------
    transfer_function : TransferFunction
    time : array_like, shape (n,), seconds, increasing
    output : array_like, shape (n,), output units
        ``output[k]`` is in force on ``[time[k], time[k+1])``; before ``time[0]`` the process rests.
    resting_output, resting_value : float
        Operating point.

    Returns
    -------
    numpy.ndarray, shape (n,), PV units
    """
    times = np.asarray(time, dtype=np.float64)
    outputs = np.asarray(output, dtype=np.float64)
    plant = PlantSimulation(transfer_function, resting_output=resting_output, resting_value=resting_value)
    values = np.empty(times.size)
    values[0] = plant.value()
    for k in range(times.size - 1):
        values[k + 1] = plant.step(float(times[k + 1] - times[k]), float(outputs[k]))
    return values
