"""The record of a relay test: three validated columns of equal length.

Owns what makes a record well-formed. Knows nothing of loops, files or units' names: time in seconds, process
variable in its own units, controller output in its own units.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from gainwright.errors import MalformedRecord

FloatArray = npt.NDArray[np.float64]

MINIMUM_SAMPLES = 8
LARGEST = 1e60
"""Beyond this, and below its reciprocal, squares leave the range of numbers."""


@dataclass(frozen=True, slots=True, eq=False)
class Record:
    """Columns of one relay test, validated and made read-only.

    Parameters
    ----------
    time : array_like, shape (n,), seconds
        Finite, strictly increasing; need not be even.
    process_variable : array_like, shape (n,), PV units
        Finite.
    controller_output : array_like, shape (n,), output units
        Finite; ``controller_output[k]`` is in force on ``[time[k], time[k+1])``.

    Raises
    ------
    MalformedRecord
        Naming the column, where one is not numeric, not one-dimensional, empty, shorter than 8 samples,
        unequal in length, not finite, or where time does not increase.
    """

    time: FloatArray
    process_variable: FloatArray
    controller_output: FloatArray

    def __init__(self, time: Any, process_variable: Any, controller_output: Any) -> None:
        columns = {
            "time": _column("time", time),
            "process_variable": _column("process_variable", process_variable),
            "controller_output": _column("controller_output", controller_output),
        }
        samples = columns["time"].size
        for name, column in columns.items():
            if column.size != samples:
                raise MalformedRecord(name, f"has {column.size} values where time has {samples}", "equal lengths")
        if samples < MINIMUM_SAMPLES:
            raise MalformedRecord("time", f"has {samples} samples", f"at least {MINIMUM_SAMPLES}")
        steps = np.diff(columns["time"])
        if not np.all(steps > 0):
            where = int(np.argmax(steps <= 0)) + 1
            raise MalformedRecord("time", f"does not increase at sample {where}", "strictly increasing seconds")
        for name, column in columns.items():
            largest, span = float(np.max(np.abs(column))), float(np.ptp(column))
            if largest > LARGEST or 0 < span < 1 / LARGEST:
                raise MalformedRecord(name, f"spans {span:.3g} about {largest:.3g}", "units in which it is near one")
            column.flags.writeable = False
            object.__setattr__(self, name, column)

    def __len__(self) -> int:
        return int(self.time.size)


def _column(name: str, values: Any) -> FloatArray:
    try:
        column = np.array(values, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise MalformedRecord(name, "is not a column of numbers", "a one-dimensional sequence of numbers") from error
    if column.ndim != 1:
        raise MalformedRecord(name, f"has {column.ndim} dimensions", "one dimension")
    if column.size == 0:
        raise MalformedRecord(name, "is empty", f"at least {MINIMUM_SAMPLES} values")
    finite = np.isfinite(column)
    if not np.all(finite):
        where = int(np.argmin(finite))
        raise MalformedRecord(name, f"is not finite at sample {where}", "finite numbers")
    return column
