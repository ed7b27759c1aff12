"""Exact limit cycles of processes under a relay.

Owns the closed forms for first-order and integrating processes with dead time and the half-period condition of
any rational process with dead time. Strategy of the latter: in a symmetric limit cycle the state repeats with
opposite sign after half a period, which leaves one equation in the half-period. It is scanned from far above every
time of the process downwards, since the longest solution is the cycle that a test started from rest settles in.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from gainwright.errors import NoCrossover, NoLimitCycle, OutOfDomain
from gainwright.margins import ultimate_point
from gainwright.models import TransferFunction
from gainwright.phase import UnwrappedPhase
from gainwright.realisation import Realisation

FloatArray = npt.NDArray[np.float64]

LONGEST_IN_LAGS = 40.0
"""The scan starts at this many times the sum of lags and dead time, where every transient has died out."""
SCAN_RATIO = 0.88
COARSE_SCAN_RATIO = 0.7
"""Ratio above the ultimate period, where solutions come from hysteresis and lie far apart."""
SHORTEST_IN_ULTIMATE_PERIODS = 0.02
SHORTEST_IN_LAGS = 1e-5
WAVE_POINTS = 128


@dataclass(frozen=True, slots=True)
class LimitCycle:
    """A limit cycle about the reference, in PV units and seconds.

    Parameters
    ----------
    highest, lowest : float
        Extremes of the process variable, as deviations from the reference.
    time_up, time_down : float
        Times on the side that raises and on the side that lowers the process variable.
    """

    highest: float
    lowest: float
    time_up: float
    time_down: float

    @property
    def swing(self) -> float:
        """Half of peak-to-peak, symbol a."""
        return (self.highest - self.lowest) / 2

    @property
    def period(self) -> float:
        """Period of the limit cycle, seconds."""
        return self.time_up + self.time_down


def first_order_limit_cycle(
    static_gain: float,
    time_constant: float,
    dead_time: float,
    amplitude: float,
    *,
    hysteresis: float = 0.0,
    bias: float = 0.0,
) -> LimitCycle:
    """Limit cycle of ``K exp(-L s)/(T s + 1)`` under a relay, exact.

    Parameters
    ----------
    static_gain : float, PV units per output unit, > 0
        Symbol K.
    time_constant : float, seconds, > 0
        Symbol T.
    dead_time : float, seconds, >= 0
        Symbol L; above 0 without hysteresis.
    amplitude : float, output units, > 0
        Symbol d.
    hysteresis : float, PV units, >= 0
        Half-width, symbol eps.
    bias : float, output units
        Mean of the two levels (or a constant load), symbol mu0.

    Returns
    -------
    LimitCycle

    Raises
    ------
    NoLimitCycle
        Unless ``(d - abs(mu0)) K > eps``, and without both dead time and hysteresis.
    OutOfDomain

    Notes
    -----
    Source: Wang, Hang & Zou, Ind. Eng. Chem. Res. 36(2):375-381, 1997 (equations from memory, verified by
    simulation in the tests).
    """
    _all_positive(static_gain=static_gain, time_constant=time_constant, amplitude=amplitude)
    _delays(dead_time, hysteresis)
    _finite("bias", bias)
    k, t, d, e, mu = static_gain, time_constant, amplitude, hysteresis, bias
    if not (d - abs(mu)) * k > e:
        raise NoLimitCycle("amplitude", "cannot carry the process through the hysteresis", "(d - abs(bias)) K > eps")
    decay = math.exp(-dead_time / t)
    return LimitCycle(
        highest=(mu + d) * k * (1 - decay) + e * decay,
        lowest=(mu - d) * k * (1 - decay) - e * decay,
        # The published logarithm with exp(L/T) taken out of it, which would overflow for a long dead time.
        time_up=dead_time + t * math.log((2 * d * k + (mu * k - d * k + e) * decay) / (d * k + mu * k - e)),
        time_down=dead_time + t * math.log((2 * d * k - (mu * k + d * k - e) * decay) / (d * k - mu * k - e)),
    )


def integrating_limit_cycle(
    integrating_gain: float, dead_time: float, up: float, down: float, *, hysteresis: float = 0.0
) -> LimitCycle:
    """Limit cycle of ``Kv exp(-L s)/s`` under a relay with levels ``+up`` and ``-down`` about balance, exact.

    Parameters
    ----------
    integrating_gain : float, PV units per output unit and second, > 0
        Symbol Kv.
    dead_time : float, seconds, >= 0
        Symbol L; above 0 without hysteresis.
    up, down : float, output units, > 0
        Symbols d1, d2.
    hysteresis : float, PV units, >= 0
        Half-width.

    Returns
    -------
    LimitCycle

    Raises
    ------
    NoLimitCycle
        Without both dead time and hysteresis.
    OutOfDomain

    Notes
    -----
    Derived; verified by simulation in the tests. ``d1 Ton = d2 Toff`` for any integrating process.
    """
    _all_positive(integrating_gain=integrating_gain, up=up, down=down)
    _delays(dead_time, hysteresis)
    kv, lag, e = integrating_gain, dead_time, hysteresis
    return LimitCycle(
        highest=e + kv * up * lag,
        lowest=-e - kv * down * lag,
        time_up=lag + (2 * e + kv * down * lag) / (kv * up),
        time_down=lag + (2 * e + kv * up * lag) / (kv * down),
    )


def first_order_from_limit_cycle(
    cycle: LimitCycle, static_gain: float, amplitude: float, *, hysteresis: float = 0.0, bias: float = 0.0
) -> tuple[float, float]:
    """Time constant and dead time of the first-order process with this limit cycle.

    Parameters
    ----------
    cycle : LimitCycle
    static_gain : float, PV units per output unit, > 0
    amplitude : float, output units, > 0
    hysteresis : float, PV units, >= 0
        Half-width.
    bias : float, output units

    Returns
    -------
    tuple of float
        T, L in seconds.

    Raises
    ------
    OutOfDomain
        Where no first-order process has this limit cycle.
    """
    k, d, e, mu = static_gain, amplitude, hysteresis, bias
    _all_positive(static_gain=k, amplitude=d, time_up=cycle.time_up)
    if not (mu + d) * k > cycle.highest > e:
        raise OutOfDomain(
            "cycle.highest", f"is {cycle.highest:g}", f"above eps {e:g} and below the final value {(mu + d) * k:g}"
        )
    ratio = math.log(((mu + d) * k - e) / ((mu + d) * k - cycle.highest))
    shape = (2.0 * d * k * math.exp(ratio) + mu * k - d * k + e) / (d * k + mu * k - e)
    time_constant = cycle.time_up / math.log(shape)
    return time_constant, ratio * time_constant


def integrating_from_limit_cycle(
    cycle: LimitCycle, up: float, down: float, *, hysteresis: float = 0.0
) -> tuple[float, float]:
    """Integrating gain and dead time of the integrating process with this limit cycle.

    ``Kv = (highest - lowest)/(d1 Ton)``, ``L = (d1 Ton - 2 eps/Kv)/(d1 + d2)``.

    Parameters
    ----------
    cycle : LimitCycle
    up, down : float, output units, > 0
        Symbols d1, d2.
    hysteresis : float, PV units, >= 0
        Half-width.

    Returns
    -------
    tuple of float
        Kv (PV units per output unit and second), L (seconds).

    Raises
    ------
    OutOfDomain
        Where no integrating process has this limit cycle.
    """
    _all_positive(up=up, down=down, time_up=cycle.time_up, swing=cycle.swing)
    if not 0 <= hysteresis < cycle.swing:
        raise OutOfDomain("hysteresis", f"is {hysteresis}", f"0 or more and below the swing {cycle.swing:g}")
    integrating_gain = (cycle.highest - cycle.lowest) / (up * cycle.time_up)
    dead_time = (up * cycle.time_up - 2 * hysteresis / integrating_gain) / (up + down)
    return integrating_gain, dead_time


def symmetric_limit_cycle(process: TransferFunction, amplitude: float, *, hysteresis: float = 0.0) -> LimitCycle:
    """Limit cycle of any rational process with dead time under a symmetric relay, exact.

    With ``x' = A x + B u``, ``Phi = exp(A h)`` and ``Gamma`` the answer to a unit input over half a period h, the
    state at the switch up is ``-(I + Phi)^-1 Gamma d``; h solves ``y = -eps`` at the switching instant. The longest
    such h in which the relay does not switch earlier is taken: shorter ones exist for dead-time-dominant processes
    and are not reached from rest.

    Parameters
    ----------
    process : TransferFunction
        Stable or integrating, strictly proper; the sign of its gain is taken out, as the relay's effect does.
    amplitude : float, output units, > 0
    hysteresis : float, PV units, >= 0
        Half-width.

    Returns
    -------
    LimitCycle

    Raises
    ------
    NoLimitCycle
    OutOfDomain

    Notes
    -----
    Source: Tsypkin, *Relay Control Systems*, 1984; Astrom, "Oscillations in systems with relay feedback", 1995
    (from memory, verified by simulation in the tests).
    """
    _all_positive(amplitude=amplitude)
    _finite("hysteresis", hysteresis)
    if hysteresis < 0:
        raise OutOfDomain("hysteresis", f"is {hysteresis}", "0 or more")
    cycle = _SymmetricCycle(process, amplitude, hysteresis)
    half, fine_below, shortest = _scanned(process, amplitude, hysteresis)
    excess = cycle.excess(half)
    if excess >= 0:
        raise NoLimitCycle("hysteresis", "is not passed by static gain times amplitude", "K d above eps")
    while half > shortest:
        following = half * (SCAN_RATIO if half < fine_below else COARSE_SCAN_RATIO)
        excess, before = cycle.excess(following), excess
        if before < 0 <= excess:
            found = float(brentq(cycle.excess, following, half, xtol=1e-300, rtol=1e-14))
            if cycle.switches_once(found):
                highest = cycle.highest(found)
                return LimitCycle(highest, -highest, found, found)
        half = following
    raise NoLimitCycle("process", "no half-period meets the switching condition", "phase lag above 180 degrees")


class _SymmetricCycle:
    """The process's answer to a square wave of any half-period, going up at time 0."""

    def __init__(self, process: TransferFunction, amplitude: float, hysteresis: float) -> None:
        self._realisation = Realisation(process)
        if self._realisation.feedthrough:
            raise OutOfDomain("process", "follows its input at once", "a strictly proper transfer function")
        self._dead_time = process.dead_time
        self._drive = amplitude * UnwrappedPhase(process).sign
        self._hysteresis = hysteresis

    def excess(self, half: float) -> float:
        """The process variable less minus eps at the switch up: 0 where ``half`` is a limit cycle's half-period."""
        turns, rest = divmod(self._dead_time, half)
        # One dead time ago the square wave was an odd or even number of half-periods further back.
        value = float(self._wave(half, half - rest, half - rest, 1)[0])
        return (value if int(turns) % 2 else -value) + self._hysteresis

    def switches_once(self, half: float) -> bool:
        """Whether the process variable stays below plus eps until the half-period is over."""
        lags = np.linspace(0.0, half, WAVE_POINTS, endpoint=False)
        turns, at = np.divmod(lags + self._dead_time, half)
        values = self._wave(half, 0.0, half, WAVE_POINTS) * np.where(turns % 2, -1.0, 1.0)
        inside = (at > 0.02 * half) & (at < 0.95 * half)
        return bool(np.all(values[inside] <= self._hysteresis + 1e-9 * np.max(np.abs(values))))

    def highest(self, half: float) -> float:
        """Largest size of the process variable, polished on ever finer grids."""
        low, high = 0.0, half
        for _ in range(6):
            values = np.abs(self._wave(half, low, high, 32))
            step, k = (high - low) / 32, int(np.argmax(values))
            low, high = max(low + (k - 1) * step, 0.0), min(low + (k + 1) * step, half)
        return float(values[k])

    def _wave(self, half: float, low: float, high: float, points: int) -> FloatArray:
        """The undelayed answer at ``points`` times from ``low``, evenly to before ``high``, all in [0, half]."""
        transition, gain = self._realisation.exponential(half)
        identity = np.eye(self._realisation.order)
        state = -np.linalg.solve(identity + transition, gain * self._drive)
        transition, gain = self._realisation.exponential(low)
        state = transition @ state + gain * self._drive
        values = np.empty(points)
        if points > 1:
            transition, gain = self._realisation.exponential((high - low) / points)
        for k in range(points):
            values[k] = self._realisation.output_vector @ state
            state = transition @ state + gain * self._drive
        return values


def _scanned(process: TransferFunction, amplitude: float, hysteresis: float) -> tuple[float, float, float]:
    """Where the scan of half-periods starts, becomes fine, and ends, seconds."""
    phase = UnwrappedPhase(process)
    if phase.unstable or phase.origin_poles > 1:
        raise OutOfDomain("process", "does not come to rest or to a steady slope", "a stable or integrating process")
    lags = float(np.sum(1.0 / phase.rates)) + process.dead_time
    longest = LONGEST_IN_LAGS * lags
    if phase.origin_poles == 1:
        slope = abs(np.trim_zeros(process.numerator, "b")[-1] / np.trim_zeros(process.denominator, "b")[-1])
        longest += LONGEST_IN_LAGS * hysteresis / (slope * amplitude)
    try:
        period = ultimate_point(process)[1]
    except NoCrossover as error:
        if hysteresis == 0:
            raise NoLimitCycle("process", "has no phase crossover", "phase lag above 180 degrees") from error
        return longest, 0.0, SHORTEST_IN_LAGS * longest
    return longest, period, SHORTEST_IN_ULTIMATE_PERIODS * period


def _all_positive(**values: float) -> None:
    for name, value in values.items():
        if not (value > 0 and math.isfinite(value)):
            raise OutOfDomain(name, f"is {value}", "a finite number above 0")


def _finite(name: str, value: float) -> None:
    if not math.isfinite(value):
        raise OutOfDomain(name, f"is {value}", "a finite number")


def _delays(dead_time: float, hysteresis: float) -> None:
    for name, value in (("dead_time", dead_time), ("hysteresis", hysteresis)):
        if not 0 <= value < math.inf:
            raise OutOfDomain(name, f"is {value}", "a finite number, 0 or more")
    if dead_time == 0 and hysteresis == 0:
        raise NoLimitCycle("dead_time, hysteresis", "are both 0", "one of them above 0")
