"""Exact limit cycles of processes under a relay.

Owns the closed forms for first-order and integrating processes with dead time and the half-period condition of
any rational process with dead time. Strategy of the latter: in a symmetric limit cycle the state repeats with
opposite sign after half a period, which leaves one equation in the half-period; its largest root is the cycle that
a test started from rest settles in.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from gainwright.errors import NoCrossover, NoLimitCycle, OutOfDomain
from gainwright.margins import ultimate_point
from gainwright.models import TransferFunction
from gainwright.simulation import Realisation

SEARCHED_PERIODS = 12.0
"""Half-periods are sought up to this many times the process's own ultimate period."""
SEARCH_POINTS = 600


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
    time_constant, dead_time : float, seconds, > 0
        Symbols T, L.
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
        Unless ``(d - abs(mu0)) K > eps``.

    Notes
    -----
    Source: Wang, Hang & Zou, Ind. Eng. Chem. Res. 36(2):375-381, 1997 (equations from memory, verified by
    simulation in the tests).
    """
    _all_positive(static_gain=static_gain, time_constant=time_constant, dead_time=dead_time, amplitude=amplitude)
    k, t, d, e, mu = static_gain, time_constant, amplitude, hysteresis, bias
    if not (d - abs(mu)) * k > e:
        raise NoLimitCycle("amplitude", "cannot carry the process through the hysteresis", "(d - abs(bias)) K > eps")
    decay = math.exp(-dead_time / t)
    grow = 2.0 * d * k * math.exp(dead_time / t)
    return LimitCycle(
        highest=(mu + d) * k * (1 - decay) + e * decay,
        lowest=(mu - d) * k * (1 - decay) - e * decay,
        time_up=t * math.log((grow + mu * k - d * k + e) / (d * k + mu * k - e)),
        time_down=t * math.log((grow - mu * k - d * k + e) / (d * k - mu * k - e)),
    )


def integrating_limit_cycle(
    integrating_gain: float, dead_time: float, up: float, down: float, *, hysteresis: float = 0.0
) -> LimitCycle:
    """Limit cycle of ``Kv exp(-L s)/s`` under a relay with levels ``+up`` and ``-down`` about balance, exact.

    Parameters
    ----------
    integrating_gain : float, PV units per output unit and second, > 0
        Symbol Kv.
    dead_time : float, seconds, > 0
    up, down : float, output units, > 0
        Symbols d1, d2.
    hysteresis : float, PV units, >= 0
        Half-width.

    Returns
    -------
    LimitCycle

    Notes
    -----
    Derived; verified by simulation in the tests. ``d1 Ton = d2 Toff`` for any integrating process.
    """
    _all_positive(integrating_gain=integrating_gain, dead_time=dead_time, up=up, down=down)
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
    """
    k, d, e, mu = static_gain, amplitude, hysteresis, bias
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
    """
    integrating_gain = (cycle.highest - cycle.lowest) / (up * cycle.time_up)
    dead_time = (up * cycle.time_up - 2 * hysteresis / integrating_gain) / (up + down)
    return integrating_gain, dead_time


def symmetric_limit_cycle(process: TransferFunction, amplitude: float, *, hysteresis: float = 0.0) -> LimitCycle:
    """Limit cycle of any rational process with dead time under a symmetric relay, exact.

    With ``x' = A x + B u``, ``Phi = exp(A h)`` and ``Gamma`` the response over half a period h, the state at the
    switch up is ``-(I + Phi)^-1 Gamma d``; h solves ``y(h) = -eps`` at the switching instant. The largest root is
    taken: shorter ones exist for dead-time-dominant processes and are not reached from rest.

    Parameters
    ----------
    process : TransferFunction
        Positive low-frequency gain.
    amplitude : float, output units, > 0
    hysteresis : float, PV units, >= 0
        Half-width.

    Returns
    -------
    LimitCycle

    Raises
    ------
    NoLimitCycle

    Notes
    -----
    Source: Tsypkin, *Relay Control Systems*, 1984; Astrom, "Oscillations in systems with relay feedback", 1995
    (from memory, verified by simulation in the tests).
    """
    _all_positive(amplitude=amplitude)
    realisation = Realisation(process)
    longest = SEARCHED_PERIODS * _time_scale(process)
    halves = np.geomspace(longest, longest / 2000, SEARCH_POINTS)
    values = np.array([_switching_value(process, realisation, h, amplitude) + hysteresis for h in halves])
    for k in range(halves.size - 1):
        if np.isfinite(values[k]) and np.isfinite(values[k + 1]) and values[k] < 0 <= values[k + 1]:
            half = float(
                brentq(
                    lambda h: _switching_value(process, realisation, h, amplitude) + hysteresis,
                    halves[k + 1],
                    halves[k],
                    rtol=1e-14,
                )
            )
            highest = _highest(process, realisation, half, amplitude)
            return LimitCycle(highest, -highest, half, half)
    raise NoLimitCycle("process", "no half-period meets the switching condition", "phase lag above 180 degrees")


def _time_scale(process: TransferFunction) -> float:
    try:
        return ultimate_point(process)[1]
    except NoCrossover:
        roots = np.abs(np.roots(process.denominator))
        return 10.0 / float(min(roots[roots > 0], default=1.0)) + process.dead_time


def _start_state(realisation: Realisation, half: float, amplitude: float) -> np.ndarray:
    """State when the process's input goes up, in the symmetric cycle of half-period ``half``."""
    transition, gain = realisation.step(half)
    identity = np.eye(realisation.order)
    return np.asarray(-np.linalg.solve(identity + transition, gain * amplitude))


def _switching_value(process: TransferFunction, realisation: Realisation, half: float, amplitude: float) -> float:
    """The process variable at the instant when the relay goes up; minus eps where ``half`` is a limit cycle."""
    turns, rest = divmod(process.dead_time, half)
    state = _start_state(realisation, half, amplitude)
    # At the switch the input in force is that of one dead time ago: an odd number of half-periods flips it.
    transition, gain = realisation.step(half - rest)
    value = float(realisation.output_vector @ (transition @ state + gain * amplitude))
    return -value if int(turns) % 2 == 0 else value


def _highest(process: TransferFunction, realisation: Realisation, half: float, amplitude: float) -> float:
    """Largest value over half a period of the rational part's answer, polished."""
    state = _start_state(realisation, half, amplitude)

    def value(at: float) -> float:
        transition, gain = realisation.step(at)
        return float(realisation.output_vector @ (transition @ state + gain * amplitude))

    low, high = 0.0, half
    for _ in range(7):
        grid = np.linspace(low, high, 33)
        values = np.abs([value(float(at)) for at in grid])
        k = int(np.argmax(values))
        low, high = float(grid[max(k - 1, 0)]), float(grid[min(k + 1, 32)])
    return float(values[k])


def _all_positive(**values: float) -> None:
    for name, value in values.items():
        if not (value > 0 and math.isfinite(value)):
            raise OutOfDomain(name, f"is {value}", "a finite number above 0")
