"""The noise of a record: its colour, and what makes it white.

Owns the noise model, a first-order autoregression over uneven time stamps: neighbours `h` seconds apart correlate by
``correlation**(h/interval)``. Whitened columns and residuals let ordinary least squares be efficient and its
covariance honest.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

LARGEST_CORRELATION = 0.97
LONGEST_LAG = 40


@dataclass(frozen=True, slots=True, eq=False)
class Whitening:
    """Turns noise of a given colour into white noise of the same innovation's size.

    Parameters
    ----------
    kept : ndarray, shape (n,)
        Share of the sample before that each sample's noise repeats; 0 for the first.
    scale : ndarray, shape (n,)
        What brings each difference to equal variance.
    """

    kept: FloatArray
    scale: FloatArray

    @classmethod
    def of(cls, time: FloatArray, correlation: float) -> Whitening:
        """For samples at ``time`` (seconds) of lag-one correlation ``correlation`` at the median interval."""
        kept = np.zeros(time.size)
        if correlation > 0:
            steps = np.diff(time)
            kept[1:] = correlation ** (steps / float(np.median(steps)))
        return cls(kept, 1.0 / np.sqrt(1.0 - kept**2))

    @property
    def log_scale(self) -> float:
        """Logarithm of the transformation's determinant, which a likelihood needs."""
        return float(np.sum(np.log(self.scale)))

    def __call__(self, columns: FloatArray) -> FloatArray:
        """Whitened columns, shape (n,) or (n, c)."""
        kept, scale = (self.kept, self.scale) if columns.ndim == 1 else (self.kept[:, None], self.scale[:, None])
        white = columns.astype(np.float64, copy=True)
        white[1:] -= kept[1:] * columns[:-1]
        return np.asarray(white * scale)


def correlation_of(residual: FloatArray, fitted: int) -> float:
    """Lag-one correlation of a fit's residual, corrected for what ``fitted`` parameters take out of it; 0 or more.

    Parameters
    ----------
    residual : ndarray, shape (n,)
    fitted : int

    Returns
    -------
    float, in [0, 0.97]
        0 where it is not beyond what white noise shows.

    Notes
    -----
    The bias ``-(1 + 4 rho)/n`` of the lag-one estimate: Kendall 1954 (from memory). The parameters' share is common
    practice, no source.
    """
    count = residual.size
    power = float(residual @ residual)
    if power <= 0 or count < 16:
        return 0.0
    raw = float(residual[1:] @ residual[:-1]) / power
    if raw < 2.0 / np.sqrt(count):
        return 0.0
    return float(min(raw + (1.0 + 4.0 * raw + fitted) / count, LARGEST_CORRELATION))


def inflation_of(residual: FloatArray) -> float:
    """What a residual that is still coloured adds to variances: the sum of its first lags' correlations, at least 1."""
    count = residual.size
    power = float(residual @ residual)
    if power <= 0 or count < 16:
        return 1.0
    total = 1.0
    for lag in range(1, min(LONGEST_LAG, count // 4)):
        correlation = float(residual[lag:] @ residual[: count - lag]) / power
        if correlation < 2.0 / np.sqrt(count):
            break
        total += 2.0 * correlation
    return total
