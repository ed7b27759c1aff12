"""Margins of a loop and the ultimate point of a process, by frequency response with the dead time kept exact.

Owns crossovers, margins, sensitivity peaks and the Nyquist test of stability. Knows no rules and no forms. The
phase comes unwrapped from `phase`, so that stability is a count of the turns past -180 degrees while the loop's gain
is above 1; grids are refined until the phase turns little between neighbours, then crossings and peaks are polished.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from gainwright.errors import NoCrossover, OutOfDomain
from gainwright.gains import Gains
from gainwright.models import TransferFunction
from gainwright.phase import UnwrappedPhase

FloatArray = npt.NDArray[np.float64]
Loop = Callable[[FloatArray], npt.NDArray[np.complex128]]

POINTS_PER_DECADE = 60
DECADES_BELOW = 3.0
DECADES_ABOVE = 3.0
LARGEST_TURN_RAD = 0.1
MOST_POINTS = 40_000
NEGLIGIBLE_LOOP_GAIN = 0.02
"""Once the loop's gain stays below this and the phase has crossed, neither margins nor peaks can lie further up."""

NO_MARGIN = 0.0


@dataclass(frozen=True, slots=True)
class LoopMargins:
    """Margins of a feedback loop.

    An unstable loop has no margins: its gain, phase and delay margin are 0 and its peaks infinite, so that no bound
    can be met by mistake.

    Parameters
    ----------
    stable : bool
        Nyquist's test.
    gain_margin : float
        Smallest factor above 1 that destabilises; infinite where none does.
    phase_margin_deg : float, degrees
        Smallest further lag that destabilises; infinite where the loop's gain never is 1.
    delay_margin : float, seconds
        Smallest further delay that destabilises; infinite where the loop's gain never is 1.
    peak_sensitivity : float
        Largest ``abs(1/(1 + L))``, symbol Ms.
    peak_complementary_sensitivity : float
        Largest ``abs(L/(1 + L))``, symbol Mt.
    gain_crossover_rad_s, phase_crossover_rad_s : float
        Where the phase margin and the gain margin are read; NaN where there is none.
    """

    stable: bool
    gain_margin: float
    phase_margin_deg: float
    delay_margin: float
    peak_sensitivity: float
    peak_complementary_sensitivity: float
    gain_crossover_rad_s: float
    phase_crossover_rad_s: float


def ultimate_point(process: TransferFunction) -> tuple[float, float]:
    """Ultimate gain and period of a process: its first crossing of -180 degrees.

    ``Ku = 1/abs(G(j wu))``, ``Tu = 2 pi/wu`` with the phase unwrapped from zero frequency and the sign of the
    low-frequency gain taken out.

    Parameters
    ----------
    process : TransferFunction

    Returns
    -------
    tuple of float
        Ku (output units per PV unit, positive), Tu (seconds).

    Raises
    ------
    NoCrossover
        Where the phase never passes -180 degrees.
    OutOfDomain
        Where the numerator or the denominator is zero.

    Notes
    -----
    Source: Astrom & Hagglund, Automatica 20(5):645-651, 1984 (definition, from memory).

    Examples
    --------
    >>> gain, period = ultimate_point(TransferFunction((1.0,), (1.0, 3.0, 3.0, 1.0)))
    >>> round(gain, 6), round(period, 6)
    (8.0, 3.627599)
    """
    phase = UnwrappedPhase(process)
    omega = phase.grid(phase.slowest_crossing(), phase.fastest_crossing(), POINTS_PER_DECADE)
    passed = np.flatnonzero(phase.over(omega) < -math.pi)
    if passed.size == 0 or passed[0] == 0:
        raise NoCrossover("process", "its phase does not cross -180 degrees", "phase lag above 180 degrees")
    k = int(passed[0])
    crossing = _root(lambda w: phase.at(w) + math.pi, omega[k - 1], omega[k])
    crossing = _polished(process, crossing)
    return 1.0 / float(np.abs(process.response(crossing))), 2 * math.pi / crossing


def loop_margins(process: TransferFunction, gains: Gains, *, extra_delay: float = 0.0) -> LoopMargins:
    """Margins of the loop of a process and a controller in the ideal form.

    Parameters
    ----------
    process : TransferFunction
        No poles in the open right half-plane; its sign is taken out, as the controller's action does.
    gains : Gains
    extra_delay : float, seconds, >= 0
        Delay of the installed controller (hold, computation) added to the process's dead time.

    Returns
    -------
    LoopMargins

    Raises
    ------
    OutOfDomain
        For a process with poles in the open right half-plane, or a negative delay.

    Notes
    -----
    Source: Astrom & Hagglund, *PID Controllers*, ISA 1995 (definitions; from memory).
    """
    if not extra_delay >= 0:
        raise OutOfDomain("extra_delay", f"is {extra_delay}", "0 or more seconds")
    delayed = TransferFunction(process.numerator, process.denominator, process.dead_time + extra_delay)
    sign = UnwrappedPhase(process).sign
    phase = UnwrappedPhase(_with_controller(delayed, gains))
    if phase.unstable:
        raise OutOfDomain("process", "has a pole in the right half-plane", "stable or integrating processes")

    def loop(omega: FloatArray) -> npt.NDArray[np.complex128]:
        return sign * delayed.response(omega) * gains.response(omega)

    omega = _refined(phase, loop)
    log_gain = np.log(np.abs(loop(omega)))
    crossovers = [
        _root(lambda w: math.log(_size(loop, w)), omega[k], omega[k + 1])
        for k in np.flatnonzero(np.sign(log_gain[:-1]) * np.sign(log_gain[1:]) < 0)
    ]
    gain_margin, phase_crossover = _gain_margin(phase, loop, omega)
    if not _stable(phase, log_gain[0] > 0, crossovers):
        nowhere = crossovers[-1] if crossovers else math.nan
        return LoopMargins(False, NO_MARGIN, NO_MARGIN, NO_MARGIN, math.inf, math.inf, nowhere, phase_crossover)
    lags = [(phase.at(w) + math.pi) % (2 * math.pi) for w in crossovers]
    phase_margin, gain_crossover = min(zip(lags, crossovers, strict=True), default=(math.inf, math.nan))
    return LoopMargins(
        stable=True,
        gain_margin=gain_margin,
        phase_margin_deg=math.degrees(phase_margin),
        delay_margin=min((lag / w for lag, w in zip(lags, crossovers, strict=True)), default=math.inf),
        peak_sensitivity=_peak(lambda w: 1.0 / np.abs(1.0 + loop(w)), omega),
        peak_complementary_sensitivity=_peak(lambda w: np.abs(loop(w) / (1.0 + loop(w))), omega),
        gain_crossover_rad_s=gain_crossover,
        phase_crossover_rad_s=phase_crossover,
    )


def _with_controller(process: TransferFunction, gains: Gains) -> TransferFunction:
    """Process times controller as one transfer function; only its roots are used."""
    integral, derivative = gains.integral_time, gains.derivative_time
    filtered = np.array([derivative / gains.derivative_filter_n, 1.0])
    upper, lower = np.polyadd(filtered, [derivative, 0.0]), filtered
    if math.isfinite(integral):
        lower = np.polymul([integral, 0.0], filtered)
        upper = np.polyadd(np.polymul([integral, 0.0], upper), filtered)
    return TransferFunction(
        tuple(np.polymul(process.numerator, upper).tolist()),
        tuple(np.polymul(process.denominator, lower).tolist()),
        process.dead_time,
    )


def _refined(phase: UnwrappedPhase, loop: Loop) -> FloatArray:
    """Frequencies up to where the loop's gain stays negligible, close enough that the phase turns little."""
    rates = phase.rates.tolist() + ([1.0 / phase.dead_time] if phase.dead_time > 0 else [])
    low, high = min(rates, default=1.0) / 10**DECADES_BELOW, max(rates, default=1.0) * 10**DECADES_ABOVE
    if phase.origin_poles > 0:
        # However weak the controller, its integral's crossover is inside.
        low *= min(1.0, _size(loop, low) / 10.0) ** (1.0 / phase.origin_poles)
    omega = phase.grid(low, high, POINTS_PER_DECADE)
    gain, angle = np.abs(loop(omega)), phase.over(omega)
    relevant = np.flatnonzero(gain > NEGLIGIBLE_LOOP_GAIN)
    crossed = np.flatnonzero((angle < -math.pi) & (gain < 1.0))
    last = max(int(relevant[-1]) if relevant.size else 0, int(crossed[0]) if crossed.size else 0) + 2
    omega, angle = omega[:last], angle[:last]
    pieces = np.ceil(np.abs(np.diff(angle)) / LARGEST_TURN_RAD).astype(np.int64).clip(1)
    beyond = np.flatnonzero(np.cumsum(pieces) > MOST_POINTS)
    if beyond.size:
        omega, pieces = omega[: int(beyond[0]) + 1], pieces[: int(beyond[0])]
    starts = np.repeat(omega[:-1], pieces)
    widths = np.repeat(np.diff(omega) / pieces, pieces)
    within = np.arange(starts.size) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    return np.append(starts + widths * within, omega[-1])


def _half_turns(angle: float) -> int:
    """How many odd multiples of -180 degrees the angle (radians) has reached, counted from 0."""
    return math.floor((math.pi - angle) / (2 * math.pi))


def _stable(phase: UnwrappedPhase, large_at_start: bool, crossovers: list[float]) -> bool:
    """Nyquist's test: no net turn past -180 degrees while the loop's gain is above 1.

    The count starts at angle 0 on the positive real axis: where the gain is large at low frequency, the path there
    from s > 0 is part of it, so that poles at the origin need no special case.
    """
    edges = ([0] if large_at_start else []) + [_half_turns(phase.at(w)) for w in crossovers]
    if len(edges) % 2:
        return False  # The gain never falls below 1: an endless spiral or an improper loop.
    return sum(edges[1::2]) - sum(edges[0::2]) == 0


def _gain_margin(phase: UnwrappedPhase, loop: Loop, omega: FloatArray) -> tuple[float, float]:
    """Smallest factor above 1 at a crossing of -180 degrees, and where."""
    factors = [(1.0 / _size(loop, w), w) for w in _phase_crossings(phase, loop, omega)]
    return min(((factor, w) for factor, w in factors if factor > 1.0), default=(math.inf, math.nan))


def _phase_crossings(phase: UnwrappedPhase, loop: Loop, omega: FloatArray, most: int = 3) -> Iterator[float]:
    """Crossings of -180 degrees (and whole turns below) of the largest gains not far above 1."""
    turns = np.floor((math.pi - phase.over(omega)) / (2 * math.pi))
    cells = np.flatnonzero(np.diff(turns) != 0)
    gain = np.minimum(np.abs(loop(omega[cells])), np.abs(loop(omega[cells + 1]))) if cells.size else np.zeros(0)
    candidates = cells[gain < 1.0]
    order = np.argsort(-gain[gain < 1.0])[:most]
    for k in candidates[order]:
        level = math.pi - 2 * math.pi * max(turns[k], turns[k + 1])
        yield _root(lambda w, level=level: phase.at(w) - level, omega[k], omega[k + 1])  # type: ignore[misc]


def _root(function: Callable[[float], float], low: float, high: float) -> float:
    return float(brentq(function, low, high, xtol=1e-300, rtol=1e-13, maxiter=200))


def _polished(process: TransferFunction, crossing: float) -> float:
    """The crossing by the polynomials themselves, since roots of high multiplicity are only nearly right."""
    span = 1e-6 * crossing
    for _ in range(3):
        here, beyond = process.response([crossing, crossing + span])
        ends = np.angle(np.array([here, beyond]) * np.sign(here.real))
        slope = (ends[1] - ends[0]) / span
        if slope == 0:
            break
        crossing -= float(np.clip(ends[0] / slope, -span, span))
    return crossing


def _size(loop: Loop, omega: float) -> float:
    return float(np.abs(loop(np.array([omega])))[0])


def _peak(function: Callable[[FloatArray], FloatArray], omega: FloatArray) -> float:
    """Largest value, sought on ever finer grids about the three largest local maxima."""
    values = function(omega)
    padded = np.concatenate([[-math.inf], values, [-math.inf]])
    tops = np.flatnonzero((values >= padded[:-2]) & (values >= padded[2:]))
    best = float(np.max(values))
    for k in tops[np.argsort(-values[tops])[:3]]:
        low, high = omega[max(k - 1, 0)], omega[min(k + 1, omega.size - 1)]
        for _ in range(4):
            fine = np.linspace(low, high, 33)
            around = function(fine)
            i = int(np.argmax(around))
            best = max(best, float(around[i]))
            low, high = fine[max(i - 1, 0)], fine[min(i + 1, fine.size - 1)]
    return best
