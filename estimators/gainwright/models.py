"""Process models: a rational transfer function with dead time, and the small named family fitted to records.

Owns the structures of the family and their parameters. Does not fit, simulate or judge.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt

ComplexArray = npt.NDArray[np.complex128]


@dataclass(frozen=True, slots=True)
class TransferFunction:
    """Rational transfer function with dead time, ``N(s)/D(s) exp(-dead_time s)``.

    Parameters
    ----------
    numerator, denominator : tuple of float
        Coefficients in descending powers of s; the denominator's degree is at least the numerator's.
    dead_time : float, seconds, >= 0
        Symbol L.
    """

    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    dead_time: float = 0.0

    def response(self, omega_rad_s: npt.ArrayLike) -> ComplexArray:
        """Frequency response G(j omega).

        Parameters
        ----------
        omega_rad_s : array_like, any shape, rad/s, > 0

        Returns
        -------
        numpy.ndarray of complex128, the shape of ``omega_rad_s``, PV units per output unit
        """
        s = 1j * np.asarray(omega_rad_s, dtype=np.float64)
        rational = np.polyval(self.numerator, s) / np.polyval(self.denominator, s)
        return np.asarray(rational * np.exp(-self.dead_time * s), dtype=np.complex128)


class Structure(StrEnum):
    """The named family of process models."""

    FIRST_ORDER = "first_order_dead_time"
    SECOND_ORDER = "second_order_dead_time"
    SECOND_ORDER_COMPLEX = "second_order_complex_dead_time"
    THIRD_ORDER = "third_order_dead_time"
    THIRD_ORDER_ZERO = "third_order_zero_dead_time"
    INTEGRATING = "integrating_dead_time"
    INTEGRATING_LAG = "integrating_lag_dead_time"


@dataclass(frozen=True, slots=True)
class ProcessModel:
    """One member of the family.

    ``gain (1 + zero_time s) exp(-dead_time s) / (s^p  prod(1 + T_i s) (1 + 2 z s/w + (s/w)^2))`` with p = 1 for
    integrating structures and the quadratic only where ``natural_frequency`` is given.

    Parameters
    ----------
    structure : Structure
    gain : float
        Signed. Static gain (PV units per output unit), or integrating gain (PV units per output unit and
        second) for integrating structures.
    time_constants : tuple of float, seconds, > 0, descending
        Real lags.
    dead_time : float, seconds, >= 0
    zero_time : float, seconds
        0 without a zero; negative for inverse response.
    natural_frequency : float or None, rad/s
    damping : float or None, dimensionless
    """

    structure: Structure
    gain: float
    time_constants: tuple[float, ...] = ()
    dead_time: float = 0.0
    zero_time: float = 0.0
    natural_frequency: float | None = None
    damping: float | None = None

    @property
    def integrating(self) -> bool:
        """Whether the process has a pole at the origin."""
        return self.structure in (Structure.INTEGRATING, Structure.INTEGRATING_LAG)

    @property
    def static_gain(self) -> float | None:
        """Signed static gain, PV units per output unit; None for integrating structures."""
        return None if self.integrating else self.gain

    @property
    def integrating_gain(self) -> float | None:
        """Signed integrating gain, PV units per output unit and second; None for self-regulating structures."""
        return self.gain if self.integrating else None

    def transfer_function(self) -> TransferFunction:
        """The model as numerator, denominator and dead time."""
        numerator = np.array([self.gain * self.zero_time, self.gain] if self.zero_time else [self.gain])
        denominator = np.array([1.0, 0.0]) if self.integrating else np.array([1.0])
        for lag in self.time_constants:
            denominator = np.polymul(denominator, [lag, 1.0])
        if self.natural_frequency is not None and self.damping is not None:
            w = self.natural_frequency
            denominator = np.polymul(denominator, [1.0 / w**2, 2.0 * self.damping / w, 1.0])
        return TransferFunction(
            tuple(float(c) for c in numerator), tuple(float(c) for c in denominator), self.dead_time
        )
