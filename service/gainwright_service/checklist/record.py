"""Before-items that the record itself decides once it is there: what was asked or forecast, as it turned out."""

from __future__ import annotations

from gainwright_service.checklist.after import Conclusion
from gainwright_service.checklist.sheet import Measurement, judge, worst
from gainwright_wire.analyses import AnalysisReply, Verdict
from gainwright_wire.loops import Loop
from gainwright_wire.tasks import Plan

_FINAL_ELEMENT = ("sticking", "backlash")
_COUNTS = (20.0, 10.0)
_SAMPLES_PER_PERIOD = (40.0, 20.0)


def measure_record(
    loop: Loop, plan: Plan, end: Conclusion, analysis: AnalysisReply, quantum: float
) -> dict[str, Measurement]:
    """Items B8, B10, B12, B14, B15 and B21 from the record of the test.

    Parameters
    ----------
    loop, plan, end, analysis
    quantum : float, PV units, >= 0
        Smallest step seen in the process variable; 0 where none stands out.
    """
    allowed = min(plan.deviation_up, plan.deviation_down)
    found = {
        "B8": judge("B8", end.worst_deviation / allowed, "as it turned out"),
        "B10": judge("B10", 100.0 * end.switches / plan.max_switches, f"{end.switches} of {plan.max_switches}"),
        "B21": judge("B21", 100.0 * end.elapsed_s / plan.max_duration_s, f"{end.elapsed_s:.3g} s"),
    }
    if analysis.swing > 0:
        found["B12"] = _clear_of_noise(plan, analysis, quantum)
    model = analysis.model
    gain = None if model is None else (model.static_gain if model.static_gain is not None else model.integrating_gain)
    if gain is not None:
        agrees = (gain > 0) == (loop.output_effect == "raises")
        found["B14"] = Measurement(
            Verdict.PASS if agrees else Verdict.FAIL,
            detail=f"measured {gain:+.3g}, declared '{loop.output_effect}'",
        )
    friction = [f for f in analysis.findings if f.name in _FINAL_ELEMENT]
    if friction:
        found["B15"] = Measurement(worst(f.verdict for f in friction), detail="; ".join(f.sentence for f in friction))
    return found


def _clear_of_noise(plan: Plan, analysis: AnalysisReply, quantum: float) -> Measurement:
    verdicts, notes = [], []
    over_noise = analysis.swing / analysis.noise if analysis.noise > 0 else None
    judged = judge("B12", over_noise) if over_noise is not None else Measurement(Verdict.PASS)
    verdicts.append(judged.verdict)
    if quantum > 0:
        counts = 2 * analysis.swing / quantum
        verdicts.append(_more_is_better(counts, _COUNTS))
        notes.append(f"{counts:.0f} counts")
    if analysis.ultimate_period_s is not None:
        samples = analysis.ultimate_period_s.value / plan.sample_interval_s
        verdicts.append(_more_is_better(samples, _SAMPLES_PER_PERIOD))
        notes.append(f"{samples:.0f} samples in a period")
    return Measurement(worst(verdicts), judged.value, judged.limit, ", ".join(notes))


def _more_is_better(value: float, bounds: tuple[float, float]) -> Verdict:
    if value >= bounds[0]:
        return Verdict.PASS
    return Verdict.CAUTION if value >= bounds[1] else Verdict.FAIL
