"""What can be measured or is stated of the before-items. Knows no database, no device and no wording of questions.

An item that is missing from the result is asked of a person.
"""

from __future__ import annotations

from dataclasses import dataclass

from gainwright_service.checklist.sheet import Measurement, judge, worst
from gainwright_service.prediction import Prediction, planned_switches
from gainwright_wire.analyses import Verdict
from gainwright_wire.loops import HeartbeatRegister, Loop, LoopClass, ModbusTcp, SimulatedPlant, WatchdogAction
from gainwright_wire.tasks import AsFound, Plan

CLEAR_OF_ENDS = 0.02
"""Share of the output's span that the band keeps clear at each end (safety list, B9)."""


@dataclass(frozen=True, slots=True)
class Start:
    """What the person who starts the test states.

    Parameters
    ----------
    requested_by : str
    attended, bench_sentence_signed : bool
    approver, acknowledged_by, work_order : str or None
    """

    requested_by: str
    attended: bool
    bench_sentence_signed: bool = False
    approver: str | None = None
    acknowledged_by: str | None = None
    work_order: str | None = None


@dataclass(frozen=True, slots=True)
class Listening:
    """What listening to the untouched loop showed.

    Parameters
    ----------
    noise : float, PV units
        Standard deviation.
    drift_per_s : float, PV units per second
    regularity : float, 0 to 1
        Of an oscillation in the baseline.
    late_ratio : float
        95th percentile of the sample interval over the nominal one.
    in_range : bool
        Every value inside the signal's range with the margin of a healthy transmitter.
    """

    noise: float
    drift_per_s: float
    regularity: float
    late_ratio: float
    in_range: bool


def measure_before(
    loop: Loop,
    plan: Plan,
    *,
    start: Start | None = None,
    predicted: Prediction | None = None,
    listening: Listening | None = None,
    as_found: AsFound | None = None,
) -> dict[str, Measurement]:
    """Measure every before-item that the given facts decide, keyed by item."""
    found: dict[str, Measurement] = {
        "B3": _watchdog(loop, attended=start is not None and start.attended),
        "B9": _amplitude(loop, plan),
        "B10": _switches(plan, predicted),
    }
    found |= _declared_on_bench(loop, start)
    if start is not None:
        found |= _stated(start)
    if predicted is not None:
        found |= _predicted(plan, predicted)
    if listening is not None:
        found |= _listened(loop, plan, listening)
    if as_found is not None:
        found["B20"] = _as_found(loop, as_found)
    if isinstance(loop.adapter, SimulatedPlant):
        found["B25"] = Measurement(Verdict.PASS, detail="simulated: nothing wears")
    return found


def heartbeat_of(loop: Loop) -> HeartbeatRegister | None:
    """The loop's heartbeat register, where its device has one."""
    return loop.adapter.heartbeat if isinstance(loop.adapter, ModbusTcp) else None


def _declared_on_bench(loop: Loop, start: Start | None) -> dict[str, Measurement]:
    """On `bench` the declarations and the signed sentence answer what a plant's people are asked."""
    if loop.loop_class is not LoopClass.BENCH:
        return {}
    found = {
        "B1": Measurement(Verdict.PASS, detail="declared: not part of a safety function"),
        "B2": Measurement(Verdict.PASS, detail=f"declared: {loop.exit_action.kind}"),
    }
    if start is not None:
        attended = Verdict.PASS if start.attended else Verdict.FAIL
        found["B4"] = Measurement(attended, detail="stated: there, with a stop in reach" if start.attended else "")
    return found


def _watchdog(loop: Loop, *, attended: bool) -> Measurement:
    beat = heartbeat_of(loop)
    if beat is None or beat.watchdog is WatchdogAction.NONE:
        if loop.loop_class is LoopClass.BENCH and attended:
            return Measurement(Verdict.CAUTION, detail="no device watchdog: a dead service leaves the output driven")
        return Measurement(Verdict.FAIL, detail="no device watchdog")
    if beat.watchdog is WatchdogAction.HOLD_LAST:
        return Measurement(
            Verdict.CAUTION if attended else Verdict.FAIL,
            detail="the device holds its last output: a dead service leaves it driven",
        )
    verdict = Verdict.CAUTION if attended else Verdict.FAIL
    return Measurement(verdict, detail=f"declared ({beat.watchdog.value} after {beat.timeout_s:g} s), not proven")


def _amplitude(loop: Loop, plan: Plan) -> Measurement:
    out = loop.controller_output
    share = judge("B9", 100.0 * plan.max_amplitude / out.span)
    clear = min(plan.output_low - out.low, out.high - plan.output_high) >= CLEAR_OF_ENDS * out.span
    if clear:
        return share
    detail = "the band reaches to less than 2 % of span from an end of the output"
    return Measurement(worst((share.verdict, Verdict.CAUTION)), share.value, share.limit, detail)


def _switches(plan: Plan, predicted: Prediction | None) -> Measurement:
    known = predicted is not None and predicted.basis != "limits"
    planned = predicted.switches if predicted is not None and known else planned_switches(plan)
    result = judge("B10", 100.0 * planned / plan.max_switches, f"{planned} of {plan.max_switches}")
    period = predicted.period_s if predicted is not None else None
    if period is not None and plan.min_dwell_s > period / 2:
        return Measurement(
            Verdict.FAIL,
            result.value,
            result.limit,
            f"half a period is about {period / 2:.3g} s, shorter than the dwell of {plan.min_dwell_s:g} s",
        )
    return result


def _stated(start: Start) -> dict[str, Measurement]:
    found = {
        "B23": Measurement(
            Verdict.PASS if start.attended else Verdict.CAUTION,
            detail="stated: attended" if start.attended else "stated: remote, relying on the device's watchdog",
        )
    }
    if start.acknowledged_by:
        found["B5"] = Measurement(Verdict.PASS, detail=f"acknowledged by {start.acknowledged_by}")
    if start.approver:
        same = start.approver.strip().casefold() == start.requested_by.strip().casefold()
        found["B6"] = Measurement(
            Verdict.FAIL if same else Verdict.PASS,
            detail="approver and requester are the same person" if same else f"approved by {start.approver}",
        )
    if start.work_order:
        found["B27"] = Measurement(Verdict.PASS, detail=start.work_order)
    return found


def _predicted(plan: Plan, predicted: Prediction) -> dict[str, Measurement]:
    found = {}
    if predicted.basis != "limits":
        allowed = min(plan.deviation_up, plan.deviation_down)
        found["B8"] = judge("B8", predicted.worst_deviation / allowed, f"forecast from {predicted.basis}")
        found["B21"] = judge("B21", 100.0 * predicted.time_to_finish_s / plan.max_duration_s)
    return found


def _listened(loop: Loop, plan: Plan, heard: Listening) -> dict[str, Measurement]:
    allowed = min(plan.deviation_up, plan.deviation_down)
    horizon = min(plan.max_duration_s, 10.0 * plan.listening_s)
    data = judge("B16", heard.late_ratio)
    if not heard.in_range:
        data = Measurement(Verdict.FAIL, heard.late_ratio, data.limit, "the signal left its range")
    return {
        "B11": judge("B11", abs(heard.drift_per_s) * horizon / allowed, f"over {horizon:.3g} s"),
        "B13": judge("B13", heard.regularity),
        "B16": data,
    }


def _as_found(loop: Loop, as_found: AsFound) -> Measurement:
    missing = []
    if as_found.setpoint is None:
        missing.append("setpoint")
    if as_found.mode == "unknown":
        missing.append("mode")
    if loop.controller is None:
        missing.append("controller form and units")
    if as_found.gains is None:
        missing.append("gains")
    if missing:
        return Measurement(Verdict.CAUTION, detail="not read: " + ", ".join(missing))
    return Measurement(Verdict.PASS, detail="mode, setpoint, output, form, units and gains")
