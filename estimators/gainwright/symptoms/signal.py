"""Symptoms of the measurement: time stamps, frozen or spiking values, an oscillation from outside, filter, clock."""

from __future__ import annotations

import itertools

import numpy as np

from gainwright.findings import judge
from gainwright.results import Finding
from gainwright.symptoms.evidence import Evidence

SPIKE_SIGMAS = 8.0
SPIKE_SHARE = 0.25
"""A spike is also this share of the swing at least."""
LINE = 25.0
"""A spectral line of the whitened residual stands out from this multiple of the median power on; the largest of a
hundred lines of white noise lies near 8."""
FROZEN_QUANTA = 3.0
FROZEN_SIGMAS = 6.0


def signal(evidence: Evidence) -> list[Finding]:
    """Findings of the signal and its times.

    Parameters
    ----------
    evidence : Evidence

    Returns
    -------
    list of Finding
    """
    record, cycles, declared = evidence.record, evidence.cycles, evidence.declared
    steps = np.diff(record.time)
    found = [
        judge("gaps", float(np.max(steps)) / cycles.period - evidence.nominal / cycles.period),
        judge("jitter", float(np.percentile(steps, 95)) / evidence.nominal),
    ]
    if evidence.lead is not None:
        found += [
            judge("frozen", _frozen(evidence)),
            judge("spikes", float(_spikes(evidence))),
            judge("outside_oscillation", _line(evidence)),
        ]
    if declared.filter_time_s:
        found.append(judge("hidden_filter", cycles.period / declared.filter_time_s))
    if declared.clock_error is not None:
        found.append(judge("clock", abs(declared.clock_error)))
    if declared.latency > 0:
        found.append(judge("link_latency", declared.latency / cycles.period))
    return found


def _frozen(evidence: Evidence) -> float:
    """Longest time, in periods, over which the value stands while the fit moves by more than noise and quantum."""
    lead = evidence.lead
    if lead is None or lead.problem.time.size != len(evidence.record):
        return 0.0
    time, value = lead.problem.time, lead.problem.value
    fitted = value - lead.residual
    least = max(FROZEN_QUANTA * evidence.quantum, FROZEN_SIGMAS * evidence.noise, 0.05 * evidence.swing)
    bounds = np.flatnonzero(np.diff(value) != 0) + 1
    edges = np.concatenate([[0], bounds, [value.size]])
    longest = 0.0
    for begin, end in itertools.pairwise(edges.tolist()):
        if end - begin >= 4 and np.ptp(fitted[begin:end]) > least:
            longest = max(longest, float(time[end - 1] - time[begin]))
    return longest / evidence.cycles.period


def _spikes(evidence: Evidence) -> int:
    """Samples that leap out of the fit and back."""
    lead = evidence.lead
    if lead is None:
        return 0
    residual = lead.residual
    robust = 1.4826 * float(np.median(np.abs(residual - np.median(residual))))
    limit = max(SPIKE_SIGMAS * robust, SPIKE_SHARE * evidence.swing, 2 * evidence.quantum)
    out = np.abs(residual) > limit
    neighbours = np.zeros_like(residual)
    neighbours[1:-1] = (residual[:-2] + residual[2:]) / 2
    return int(np.count_nonzero(out & (np.abs(residual - neighbours) > limit)))


def _line(evidence: Evidence) -> float:
    """Power of the strongest regular oscillation in the residual away from the test's harmonics, over the test's own
    first harmonic's; 0 where none stands out of the noise."""
    lead = evidence.lead
    if lead is None:
        return 0.0
    time, period = lead.problem.time, evidence.cycles.period
    even = np.linspace(time[0], time[-1], time.size)
    seen = np.interp(even, time, lead.residual)
    white = np.interp(even, time, lead.white)
    window = np.hanning(even.size)
    power = np.abs(np.fft.rfft(seen * window)) ** 2
    clear = np.abs(np.fft.rfft((white - white.mean()) * window)) ** 2
    frequency = np.fft.rfftfreq(even.size, (even[-1] - even[0]) / (even.size - 1))
    order = frequency * period
    # Between the harmonics, above what drift leaves, below what sampling blurs.
    apart = np.abs(order - np.round(order)) > 0.2
    kept = apart & (order > 0.25) & (order < 0.4 * period / evidence.nominal)
    if np.count_nonzero(kept) < 8:
        return 0.0
    place = int(np.flatnonzero(kept)[np.argmax(clear[kept])])
    if clear[place] < LINE * float(np.median(clear[kept])):
        return 0.0
    # The line with its neighbours, which hold what the window spreads and what the relay's own pull blurs.
    near = power[max(place - 2, 0) : place + 3]
    squared = 4.0 * float(np.sum(near)) / float(np.sum(window)) ** 2 / 1.5
    return squared / evidence.swing**2
