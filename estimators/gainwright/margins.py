"""Margins of a loop and the ultimate point of a process, by frequency response with the dead time kept exact.

Owns crossovers, margins, sensitivity peaks and the Nyquist test of stability. Knows no rules and no forms.
Strategy: one frequency grid per loop, refined until neighbouring points of L and 1 + L differ little in angle and
size, so that resonances and dead-time spirals are not stepped over; crossings and peaks are then polished.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from gainwright.errors import NoCrossover, OutOfDomain
from gainwright.gains import Gains
from gainwright.models import TransferFunction

FloatArray = npt.NDArray[np.float64]
ComplexArray = npt.NDArray[np.complex128]
Response = Callable[[FloatArray], ComplexArray]

DECADES_BELOW = 4.0
DECADES_ABOVE = 3.0
POINTS_PER_DECADE = 60
LARGEST_TURN_RAD = 0.15
REFINEMENTS = 12
MOST_POINTS = 60_000
NEGLIGIBLE_LOOP_GAIN = 1e-3
"""Beyond the frequency where the loop's gain stays below this, neither margins nor peaks can lie."""


@dataclass(frozen=True, slots=True)
class LoopMargins:
    """Margins of a feedback loop.

    Parameters
    ----------
    stable : bool
        Nyquist's test; where False, the other fields describe the frequency response only and mean no margin.
    gain_margin : float
        Smallest factor above 1 that destabilises; infinite where none does.
    phase_margin_deg : float
        Infinite where the loop's gain never passes 1.
    delay_margin : float, seconds
    peak_sensitivity : float
        Symbol Ms.
    peak_complementary_sensitivity : float
        Symbol Mt.
    gain_crossover_rad_s, phase_crossover_rad_s : float
        NaN where there is none.
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
        Where the phase never reaches -180 degrees.

    Notes
    -----
    Source: Astrom & Hagglund, Automatica 20(5):645-651, 1984 (definition; value from memory).
    """
    sign = _low_frequency_sign(process)

    def response(omega: FloatArray) -> ComplexArray:
        return sign * process.response(omega)

    omega = _refined(response, _grid(process, None))
    phase = np.unwrap(np.angle(response(omega)))
    # The first points lie where the phase is within a few degrees of its limit -90 p; take out whole turns.
    integrators = _poles_at_origin(process.denominator)
    phase -= 2 * math.pi * round((phase[0] + integrators * math.pi / 2) / (2 * math.pi))
    below = np.flatnonzero(phase <= -math.pi)
    if below.size == 0 or below[0] == 0:
        raise NoCrossover("process", "its phase does not cross -180 degrees", "phase lag above 180 degrees")
    k = int(below[0])
    crossing = _root(lambda w: float(np.angle(-response(np.array([w])))[0]), omega[k - 1], omega[k])
    return 1.0 / abs(complex(process.response(crossing))), 2 * math.pi / crossing


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
        For a process with poles in the open right half-plane.

    Notes
    -----
    Source: Astrom & Hagglund, *PID Controllers*, ISA 1995 (definitions; from memory).
    """
    if np.any(np.real(np.roots(process.denominator)) > 1e-9 * _fastest(process)):
        raise OutOfDomain("process", "has a pole in the right half-plane", "stable or integrating processes")
    sign = _low_frequency_sign(process)

    def loop(omega: FloatArray) -> ComplexArray:
        return sign * process.response(omega) * gains.response(omega) * np.exp(-1j * omega * extra_delay)

    omega = _refined(loop, _grid(process, gains))
    response = loop(omega)
    integrators = _poles_at_origin(process.denominator) + int(math.isfinite(gains.integral_time))
    gain_crossings = _crossings(lambda w: float(np.log(np.abs(loop(np.array([w]))))[0]), omega, np.log(np.abs(response)))
    phase_margins = [math.pi + _wrapped_below(float(np.angle(loop(np.array([w])))[0])) for w in gain_crossings]
    phase_crossings = _negative_real_crossings(loop, omega, response)
    factors = [(1.0 / abs(complex(loop(np.array([w]))[0])), w) for w in phase_crossings]
    gain_margin, phase_crossover = min((f for f in factors if f[0] > 1.0), default=(math.inf, math.nan))
    worst = int(np.argmin(phase_margins)) if phase_margins else -1
    delays = [margin / w for margin, w in zip(phase_margins, gain_crossings, strict=True)]
    return LoopMargins(
        stable=_stable(response, integrators),
        gain_margin=gain_margin,
        phase_margin_deg=math.degrees(phase_margins[worst]) if phase_margins else math.inf,
        delay_margin=min(delays, default=math.inf),
        peak_sensitivity=_peak(lambda w: 1.0 / np.abs(1.0 + loop(w)), omega),
        peak_complementary_sensitivity=_peak(lambda w: np.abs(loop(w) / (1.0 + loop(w))), omega),
        gain_crossover_rad_s=gain_crossings[worst] if gain_crossings else math.nan,
        phase_crossover_rad_s=phase_crossover,
    )


def _low_frequency_sign(process: TransferFunction) -> float:
    denominator = np.trim_zeros(np.asarray(process.denominator), "b")
    numerator = np.trim_zeros(np.asarray(process.numerator), "b")
    if numerator.size == 0:
        raise OutOfDomain("process", "has no gain", "a numerator that is not zero")
    return float(np.sign(numerator[-1]) * np.sign(denominator[-1]))


def _poles_at_origin(denominator: tuple[float, ...]) -> int:
    return len(denominator) - np.trim_zeros(np.asarray(denominator), "b").size


def _fastest(process: TransferFunction) -> float:
    roots = np.concatenate([np.roots(process.denominator), np.roots(process.numerator)])
    sizes = np.abs(roots[np.abs(roots) > 0])
    rates = list(sizes) + ([1.0 / process.dead_time] if process.dead_time > 0 else [])
    return float(max(rates, default=1.0))


def _grid(process: TransferFunction, gains: Gains | None) -> FloatArray:
    roots = np.concatenate([np.roots(process.denominator), np.roots(process.numerator)])
    rates = [float(abs(root)) for root in roots if abs(root) > 0]
    if process.dead_time > 0:
        rates.append(1.0 / process.dead_time)
    if gains is not None:
        times = (gains.integral_time, gains.derivative_time)
        rates.extend(1.0 / t for t in times if 0 < t < math.inf)
    low = math.log10(min(rates, default=1.0)) - DECADES_BELOW
    high = math.log10(max(rates, default=1.0)) + DECADES_ABOVE
    if process.dead_time > 0:
        # The spiral of a dead time far above the other rates turns without end and says nothing new.
        high = min(high, math.log10(400.0 / process.dead_time) if gains is None else high)
    return np.logspace(low, high, int((high - low) * POINTS_PER_DECADE))


def _refined(response: Response, omega: FloatArray) -> FloatArray:
    """The grid, halved where the response turns or changes fast, up to where it stays negligible."""
    values = response(omega)
    relevant = np.flatnonzero(np.abs(values) > NEGLIGIBLE_LOOP_GAIN * max(1.0, float(np.median(np.abs(values)))))
    if relevant.size:
        omega = omega[: min(omega.size, int(relevant[-1]) + 2)]
    for _ in range(REFINEMENTS):
        values = response(omega)
        turn = np.abs(np.diff(np.unwrap(np.angle(values))))
        about = np.abs(np.diff(np.unwrap(np.angle(1.0 + values)))) * (np.abs(values[1:]) > NEGLIGIBLE_LOOP_GAIN)
        growth = np.abs(np.diff(np.log(np.abs(values) + 1e-300)))
        coarse = np.flatnonzero((np.maximum(turn, about) > LARGEST_TURN_RAD) | (growth > 0.7))
        if coarse.size == 0 or omega.size + coarse.size > MOST_POINTS:
            break
        middles = np.sqrt(omega[coarse] * omega[coarse + 1])
        omega = np.sort(np.concatenate([omega, middles]))
    return omega


def _root(function: Callable[[float], float], low: float, high: float) -> float:
    return float(brentq(function, low, high, xtol=1e-300, rtol=8.9e-16, maxiter=200))


def _crossings(function: Callable[[float], float], omega: FloatArray, values: FloatArray) -> list[float]:
    changes = np.flatnonzero(np.sign(values[:-1]) * np.sign(values[1:]) < 0)
    return [_root(function, omega[k], omega[k + 1]) for k in changes]


def _negative_real_crossings(loop: Response, omega: FloatArray, response: ComplexArray) -> list[float]:
    imaginary = np.imag(response)
    changes = np.flatnonzero((np.sign(imaginary[:-1]) * np.sign(imaginary[1:]) < 0) & (np.real(response[:-1]) < 0))
    return [_root(lambda w: float(np.angle(-loop(np.array([w])))[0]), omega[k], omega[k + 1]) for k in changes]


def _wrapped_below(angle: float) -> float:
    """The angle in (-2 pi, 0], so that pi plus it is the phase margin."""
    return angle - 2 * math.pi if angle > 0 else angle


def _stable(response: ComplexArray, integrators: int) -> bool:
    """Nyquist: from 0+ to infinity 1 + L turns by a quarter per pole at the origin, and by no more."""
    angle = np.unwrap(np.angle(1.0 + response))
    turned = float(angle[-1] - angle[0])
    return abs(turned - integrators * math.pi / 2) < math.pi / 2 and not np.any(np.abs(1.0 + response) < 1e-9)


def _peak(function: Callable[[FloatArray], FloatArray], omega: FloatArray) -> float:
    """Largest value, polished by a parabola through the best three points of an ever finer grid."""
    values = function(omega)
    k = int(np.argmax(values))
    low, high = omega[max(k - 1, 0)], omega[min(k + 1, omega.size - 1)]
    best = float(values[k])
    for _ in range(4):
        fine = np.linspace(low, high, 41)
        values = function(fine)
        k = int(np.argmax(values))
        best = max(best, float(values[k]))
        low, high = fine[max(k - 1, 0)], fine[min(k + 1, fine.size - 1)]
    return best
