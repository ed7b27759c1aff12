"""Whether the output column lies as stated: judged by the relay's own law at the switches.

Owns the comparison of two readings of the output column, a sample apart. A shift of the whole column is a dead time
and leaves no trace in any fit; but a relay switches at the first sample beyond its threshold, so that in the right
reading one threshold separates every switching sample from all samples before it, and in the wrong one noise and
start-up break that.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from gainwright.cycles import Cycles
from gainwright.record import Record

FloatArray = npt.NDArray[np.float64]


def contradictions(
    record: Record, cycles: Cycles, shift: int, reference: float | None, hysteresis: float | None
) -> float:
    """Share of scored switches that no threshold explains, if each was decided ``shift`` samples from its place.

    Parameters
    ----------
    record : Record
    cycles : Cycles
        With at least one scored cycle.
    shift : int
        0 for the column as it stands, -1 where the sample before decided, 1 where the one after did.
    reference, hysteresis : float or None, PV units
        The relay's own, where both are known; else the best threshold of each direction.

    Returns
    -------
    float, in [0, 1]
    """
    value = record.process_variable
    first, last = int(cycles.scored[0]), int(cycles.scored[-1])
    places = np.arange(max(first, 1), last + 1)
    deciding = cycles.switches[places] + shift
    kept = (deciding >= 1) & (deciding < value.size)
    places, deciding = places[kept], deciding[kept]
    if places.size < 2:
        return 0.0
    starts = cycles.switches[places - 1] + shift
    # Every second switch is of one direction: that with the higher values ends a rise.
    upward = places % 2 == 0
    if np.mean(value[deciding[upward]]) < np.mean(value[deciding[~upward]]):
        upward = ~upward
    broken = 0
    for side, sign in ((upward, 1.0), (~upward, -1.0)):
        decided = sign * value[deciding[side]]
        before = np.array(
            [
                np.max(sign * value[max(a, 0) + 1 : b])
                for a, b in zip(starts[side], deciding[side], strict=True)
                if b > a + 1
            ]
        )
        if decided.size == 0 or before.size != decided.size:
            continue
        if reference is not None and hysteresis is not None:
            thresholds = np.array([sign * reference + hysteresis])
        else:
            thresholds = np.concatenate([before, decided - 1e-12 * np.abs(decided)])
        wrong = (decided[None, :] <= thresholds[:, None]) | (before[None, :] > thresholds[:, None])
        broken += int(np.min(np.sum(wrong, axis=1)))
    return broken / places.size
