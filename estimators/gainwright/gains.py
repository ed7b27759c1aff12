"""One canonical set of gains: the ideal form in engineering units.

Owns the canonical set and its frequency response. `forms` turns it into a controller's own numbers.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from gainwright.errors import OutOfDomain


@dataclass(frozen=True, slots=True)
class Gains:
    """Gains of the ideal form ``K (1 + 1/(Ti s) + Td s/(1 + Td s/N))``.

    Parameters
    ----------
    proportional_gain : float, output units per PV unit, > 0
        Symbol K; the action (direct or reverse) is kept apart.
    integral_time : float, seconds, > 0; infinite without integral action
        Symbol Ti.
    derivative_time : float, seconds, >= 0
        Symbol Td.
    derivative_filter_n : float, > 0
        Symbol N; infinite without filter.

    Raises
    ------
    OutOfDomain
    """

    proportional_gain: float
    integral_time: float = math.inf
    derivative_time: float = 0.0
    derivative_filter_n: float = 10.0

    def __post_init__(self) -> None:
        if not (self.proportional_gain > 0 and math.isfinite(self.proportional_gain)):
            raise OutOfDomain("proportional_gain", f"is {self.proportional_gain}", "a finite number above 0")
        if not self.integral_time > 0:
            raise OutOfDomain("integral_time", f"is {self.integral_time}", "seconds above 0, or infinite")
        if not (self.derivative_time >= 0 and math.isfinite(self.derivative_time)):
            raise OutOfDomain("derivative_time", f"is {self.derivative_time}", "0 or more seconds")
        if not self.derivative_filter_n > 0:
            raise OutOfDomain("derivative_filter_n", f"is {self.derivative_filter_n}", "above 0")

    def response(self, omega_rad_s: npt.ArrayLike) -> npt.NDArray[np.complex128]:
        """Frequency response C(j omega), output units per PV unit, the shape of ``omega_rad_s`` (rad/s, > 0)."""
        s = 1j * np.asarray(omega_rad_s, dtype=np.float64)
        shape = np.ones_like(s)
        if math.isfinite(self.integral_time):
            shape = shape + 1.0 / (self.integral_time * s)
        if self.derivative_time > 0:
            filtered = 1.0 + (self.derivative_time / self.derivative_filter_n) * s
            shape = shape + self.derivative_time * s / filtered
        return np.asarray(self.proportional_gain * shape, dtype=np.complex128)
