"""An exact relay test for the service's tests, as the columns of an upload."""

from __future__ import annotations

import math
from typing import Any


def relay_record(cycles: int = 6, interval_s: float = 0.05) -> dict[str, Any]:
    """The exact limit cycle of ``exp(-2 s)/(10 s + 1)`` under a relay of 5 about 50, begun at rest (Wang, Hang and
    Zou, Ind. Eng. Chem. Res. 36(2), 1997; equations from memory): half-period 3.66589493 s, swing 0.9063."""
    gain, lag, dead_time, amplitude = 1.0, 10.0, 2.0, 5.0
    half = lag * math.log(2 * math.exp(dead_time / lag) - 1)
    times, values, outputs = [], [], []
    value, delayed = 0.0, [0.0] * round(dead_time / interval_s)
    output, samples = amplitude, int((dead_time + 2 * cycles * half) / interval_s)
    decay = math.exp(-interval_s / lag)
    for k in range(samples):
        times.append(k * interval_s)
        values.append(60.0 + value)
        if value > 0:
            output = -amplitude
        elif value < 0:
            output = amplitude
        outputs.append(50.0 + output)
        delayed.append(output)
        value = gain * delayed.pop(0) * (1 - decay) + value * decay
    return {"time_s": times, "process_variable": values, "controller_output": outputs}
