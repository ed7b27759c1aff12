"""The forecast as it is replied: predicted numbers, the plan's limits, and plain words on exit, stop and watchdog.

Moves nothing and opens no device.
"""

from __future__ import annotations

from gainwright_service.checklist import assemble, measure_before
from gainwright_service.checklist.before import heartbeat_of
from gainwright_service.checklist.items import NOTICE
from gainwright_service.errors import RequestError
from gainwright_service.planning import plan_with_defaults
from gainwright_service.prediction import Guess, History, Prediction, from_guess, from_history, from_limits
from gainwright_wire.analyses import AnalysisReply
from gainwright_wire.loops import Loop, WatchdogAction
from gainwright_wire.problems import FieldProblem
from gainwright_wire.tasks import Forecast, ForecastRequest, Plan, StartExperiment

LARGEST = 1e12
"""Largest number that a reply carries."""
_GUESS = ("static_gain", "time_constant_s", "dead_time_s")


def forecast(loop: Loop, request: ForecastRequest, *, last: AnalysisReply | None = None) -> Forecast:
    """Forecast a test of the loop: from the stated guess, else from its ``last`` usable analysis, else from limits.

    Raises
    ------
    RequestError
        The guess is incomplete or its gain contradicts the loop's declared output effect.
    PlanRefused
        No plan stays inside the limits.
    """
    start = StartExperiment(attended=True, resting_output=request.resting_output, reference=request.reference)
    plan = plan_with_defaults(loop, start)
    predicted = predict(loop, plan, request, last)
    _refuse_the_impossible(predicted)
    sheet = assemble(loop.loop_class, ("before",), measure_before(loop, plan, predicted=predicted), {})
    return Forecast(
        tag=loop.tag,
        basis=predicted.basis,
        plan=plan,
        worst_swing=predicted.worst_swing,
        worst_deviation=predicted.worst_deviation,
        period_s=predicted.period_s,
        time_to_finish_s=min(predicted.time_to_finish_s, plan.max_duration_s),
        switches=min(predicted.switches, plan.max_switches),
        output_travel=predicted.output_travel,
        integrated_deviation=predicted.integrated_deviation,
        cautions=cautions(loop, plan, predicted),
        exit_action=exit_in_words(loop),
        how_to_stop=HOW_TO_STOP,
        watchdog=watchdog_in_words(loop),
        checklist=sheet,
        notice=NOTICE,
    )


def predict(loop: Loop, plan: Plan, request: ForecastRequest, last: AnalysisReply | None) -> Prediction:
    """The best prediction that the given facts allow."""
    guess = _guess(loop, request)
    if guess is not None:
        return from_guess(plan, guess)
    history = history_of(last)
    return from_history(plan, history) if history is not None else from_limits(plan)


def _refuse_the_impossible(predicted: Prediction) -> None:
    """A guess far beyond any plant gives numbers that no reply can carry."""
    numbers = (
        predicted.worst_deviation,
        predicted.period_s,
        predicted.time_to_finish_s,
        predicted.integrated_deviation,
    )
    if any(n is not None and not 0 <= n <= LARGEST for n in numbers) or predicted.period_s == 0:
        problems = tuple(
            FieldProblem(field=name, problem="predicts numbers beyond any plant", allowed="a plausible guess")
            for name in (*_GUESS, "noise")
        )
        raise RequestError("the guess predicts numbers beyond any plant", problems)


def history_of(last: AnalysisReply | None) -> History | None:
    """What the last analysis lends to a forecast; None where it found nothing usable."""
    if last is None or last.ultimate_period_s is None or last.swing <= 0 or last.relay_amplitude <= 0:
        return None
    return History(last.swing / last.relay_amplitude, last.ultimate_period_s.value, last.noise)


def cautions(loop: Loop, plan: Plan, predicted: Prediction) -> tuple[str, ...]:
    """One line each, with what removes it."""
    pv, out = loop.process_variable, loop.controller_output
    found = []
    allowed = min(plan.deviation_up, plan.deviation_down)
    if predicted.basis == "limits":
        found.append(
            "Nothing is known of the process yet: these are the worst numbers that the limits allow. "
            "State a guess, "
            "or let the first test be the measurement."
        )
    elif predicted.worst_deviation > allowed:
        found.append(
            f"The forecast deviation of {predicted.worst_deviation:.3g} {pv.unit} exceeds the allowed "
            f"{allowed:.3g}: "
            "the test would be ended by its limit. Lower limits.max_amplitude or allow more deviation."
        )
    needed = predicted.amplitude_needed
    if needed is not None and needed > plan.max_amplitude:
        found.append(
            f"The noise asks for an amplitude of {needed:.3g} {out.unit}, more than the allowed "
            f"{plan.max_amplitude:.3g}: allow it, or filter the signal."
        )
    if predicted.no_crossing:
        found.append("Even the largest amplitude would not carry the process variable across the hysteresis.")
    if predicted.time_to_finish_s > plan.max_duration_s:
        found.append(
            f"The forecast time of {predicted.time_to_finish_s:.3g} s exceeds limits.max_duration_s "
            f"{plan.max_duration_s:.3g}: the test would be ended by it."
        )
    if predicted.basis != "limits" and predicted.switches > plan.max_switches:
        found.append(f"About {predicted.switches} switches are needed, limits.max_switches allows {plan.max_switches}.")
    if plan.max_amplitude > 0.1 * out.span:
        found.append("limits.max_amplitude is above 10 % of the output's span.")
    if loop.exit_action.kind == "as_found" and loop.integral_follows_in_manual is not True:
        found.append(
            "integral_follows_in_manual is not declared: a test of the loop in automatic is refused until it is "
            "proven. Put the loop into manual, or prove and declare it."
        )
    return tuple(found)


HOW_TO_STOP = (
    "POST /v1/experiments/{id}/stop, or the first Ctrl-C in the command, which then waits until the output has "
    "been handed back. Or take over at the device: change its mode or its output, and the test yields within two "
    "samples and writes nothing more. This stop is not an emergency stop."
)


def exit_in_words(loop: Loop) -> str:
    """What is done with the output when the test ends, in a sentence for the console."""
    action, unit = loop.exit_action, loop.controller_output.unit
    if action.kind == "fixed":
        return f"Writes {action.value:g} {unit}, leaves the loop in manual there, and says so."
    if action.kind == "resting":
        return "Writes the resting output, leaves the loop in manual there, and verifies output and mode."
    return (
        "Writes the resting output first. Found in manual: stays in manual. Found in automatic or "
        "cascade: waits for "
        "the process variable to come back, checks the setpoint, restores the mode as found and verifies that the "
        "output stays. A loop found in manual is never put into automatic."
    )


def watchdog_in_words(loop: Loop) -> str:
    """What the device does when the beats stop, in a sentence for the console."""
    beat = heartbeat_of(loop)
    unit = loop.controller_output.unit
    if loop.adapter.kind == "simulated":
        return "A simulated process: nothing is driven when the service is dead."
    if beat is None or beat.watchdog is WatchdogAction.NONE:
        return "The device has no watchdog: a dead service leaves the output driven until somebody acts. Stay there."
    if beat.watchdog is WatchdogAction.HOLD_LAST:
        return (
            f"The device holds its last output when the beats stop for {beat.timeout_s:g} s: a dead service leaves "
            "the output driven until somebody acts. Stay there."
        )
    where = f"{beat.fixed_value:g} {unit}" if beat.watchdog is WatchdogAction.FIXED else "the resting output"
    return f"When the beats stop for {beat.timeout_s:g} s, the device itself moves the output to {where}."


def _guess(loop: Loop, request: ForecastRequest) -> Guess | None:
    given = {name: getattr(request, name) for name in _GUESS}
    if all(value is None for value in given.values()):
        return None
    missing = [name for name, value in given.items() if value is None]
    problems = [
        FieldProblem(field=m, problem="is missing from the guess", allowed="all three, or none") for m in missing
    ]
    gain = request.static_gain
    raises = loop.output_effect == "raises"
    if gain is not None and (gain == 0 or (gain > 0) != raises):
        problems.append(
            FieldProblem(
                field="static_gain",
                problem=f"{gain:g} contradicts output_effect '{loop.output_effect}'",
                allowed="above 0" if raises else "below 0",
            )
        )
    if problems:
        raise RequestError("; ".join(f"{p.field}: {p.problem}" for p in problems), tuple(problems))
    assert request.static_gain is not None
    assert request.time_constant_s is not None
    assert request.dead_time_s is not None
    return Guess(request.static_gain, request.time_constant_s, request.dead_time_s, request.noise or 0.0)
