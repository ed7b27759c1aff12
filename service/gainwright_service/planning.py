"""From a loop and a person's request to a plan, with every default taken, or a refusal that names the fields.

Owns the defaults per class and what needs more facts than one document tells. Opens no device and moves nothing.
The guard refuses a plan outside its limits once more.
"""

from __future__ import annotations

from gainwright_service.checklist.before import heartbeat_of
from gainwright_service.errors import PlanRefused, SafetyFunctionRefused
from gainwright_service.experiment.plan import Plan, PlanRefusedByGuard
from gainwright_wire.loops import Loop, LoopClass, ModbusTcp, WatchdogAction
from gainwright_wire.problems import FieldProblem
from gainwright_wire.tasks import BENCH_SENTENCE, StartExperiment
from gainwright_wire.tasks import Plan as WirePlan

EXIT_VALID_S = 600.0
SMALLEST_AMPLITUDE = 0.01
"""Share of span below which a relay is of no use."""

FIRST_WAIT_SAMPLES = 50
"""Samples without a crossing before the amplitude grows: people sample an oscillation 40 to 100 times a period."""
RETURN_SAMPLES = 600
LONGEST_RETURN_S = 300.0
"""Well inside what the parent waits at its end, and what a last command stays valid for."""
"""Samples that the process variable is given to come back before the mode is restored."""


class _Refusals:
    """Collects what is wrong, so that a person sees all of it at once."""

    def __init__(self) -> None:
        self._found: list[FieldProblem] = []

    def add(self, field: str, problem: str, allowed: str) -> None:
        self._found.append(FieldProblem(field=field, problem=problem, allowed=allowed))

    def done(self) -> None:
        if self._found:
            detail = "; ".join(f"{e.field}: {e.problem} (allowed: {e.allowed})" for e in self._found)
            raise PlanRefused(detail, tuple(self._found))


def plan_experiment(loop: Loop, request: StartExperiment) -> Plan:
    """The plan of one experiment.

    Raises
    ------
    SafetyFunctionRefused
        The loop is declared part of a safety function.
    PlanRefused
        No plan stays inside the limits; names every field at fault and what is allowed.
    """
    wire = plan_with_defaults(loop, request)
    adapter = loop.adapter
    beat = heartbeat_of(loop)
    interval_s = wire.sample_interval_s
    try:
        return Plan(
            **wire.model_dump(),
            effect=1 if loop.output_effect == "raises" else -1,
            range_low=loop.controller_output.low,
            range_high=loop.controller_output.high,
            output_quantum=_output_quantum(loop),
            resting_output=request.resting_output,
            reference=request.reference,
            reads_mode=adapter.mode is not None if isinstance(adapter, ModbusTcp) else True,
            setpoint_follows=loop.setpoint_follows_in_manual,
            integral_follows=loop.integral_follows_in_manual,
            watchdog=beat.watchdog.value if beat is not None else WatchdogAction.NONE.value,
            watchdog_timeout_s=beat.timeout_s if beat is not None else None,
            watchdog_value=beat.fixed_value if beat is not None else None,
            listening_samples=int(0.9 * wire.listening_s / interval_s),
            settle_s=max(1.0, 3 * interval_s),
            first_wait_s=max(1.0, FIRST_WAIT_SAMPLES * interval_s),
            return_time_s=min(max(30.0, RETURN_SAMPLES * interval_s), LONGEST_RETURN_S),
        )
    except PlanRefusedByGuard as error:
        field, _, problem = str(error).partition(": ")
        at_fault = FieldProblem(field=field, problem=problem, allowed="a plan inside the loop's ranges")
        raise PlanRefused(str(error), (at_fault,)) from error


def plan_with_defaults(loop: Loop, request: StartExperiment) -> WirePlan:
    """Every limit and default that the test will keep, in engineering units. Raises as `plan_experiment` does."""
    if loop.safety_function:
        raise SafetyFunctionRefused(
            "safety_function: a loop that is part of a safety function is never tested; there is no override"
        )
    refusals = _Refusals()
    bench = loop.loop_class is LoopClass.BENCH
    limits, out, pv = loop.limits, loop.controller_output, loop.process_variable
    half_band = (limits.output_high - limits.output_low) / 2
    max_amplitude = limits.max_amplitude if limits.max_amplitude is not None else min(0.05 * out.span, half_band)
    max_change = limits.max_output_change if limits.max_output_change is not None else 2 * max_amplitude
    room = _room(loop, request, min(half_band, max_change), refusals)
    smallest = min(SMALLEST_AMPLITUDE * out.span, max_amplitude)
    if room < smallest:
        refusals.add(
            "resting_output" if request.resting_output is not None else "limits",
            f"there is room for an amplitude of {max(room, 0.0):.4g} {out.unit} only inside the output band",
            f"at least {smallest:.4g} {out.unit} on both sides of the resting output",
        )
    max_amplitude = min(max_amplitude, max(room, smallest))
    deviation_up = _deviation(loop, "deviation_up", refusals)
    deviation_down = _deviation(loop, "deviation_down", refusals)
    _check_reference(loop, request, refusals)
    listening_s = _listening_s(loop, bench=bench)
    max_duration_s = limits.max_duration_s if limits.max_duration_s is not None else (600.0 if bench else 3600.0)
    if max_duration_s <= listening_s:
        refusals.add(
            "limits.max_duration_s",
            f"{max_duration_s:g} s ends before listening does",
            f"more than {listening_s:g} s",
        )
    refusals.done()
    return WirePlan(
        sample_interval_s=loop.sample_interval_s,
        listening_s=listening_s,
        start_amplitude=min((0.05 if bench else 0.02) * out.span, max_amplitude),
        max_amplitude=max_amplitude,
        growth=2.0 if bench else 1.5,
        output_low=limits.output_low,
        output_high=limits.output_high,
        max_output_change=max_change,
        output_rate_per_s=limits.output_rate_per_s,
        deviation_up=deviation_up,
        deviation_down=deviation_down,
        process_variable_low=max(limits.process_variable_low, pv.low),
        process_variable_high=min(limits.process_variable_high, pv.high),
        max_duration_s=max_duration_s,
        max_switches=limits.max_switches if limits.max_switches is not None else 40,
        min_dwell_s=limits.min_dwell_s,
        scored_cycles=request.scored_cycles if request.scored_cycles is not None else (3 if bench else 4),
        precision_percent=request.precision_percent
        if request.precision_percent is not None
        else (10.0 if bench else 5.0),
        exit_action=loop.exit_action.kind,
        exit_value=loop.exit_action.value,
        exit_valid_s=EXIT_VALID_S,
    )


def check_start(loop: Loop, request: StartExperiment, *, requested_by: str) -> None:
    """Refuse a start that lacks what the loop's class asks of the person. Raises `PlanRefused`."""
    refusals = _Refusals()
    if loop.loop_class is LoopClass.BENCH:
        _check_bench(request, refusals)
    else:
        _check_plant(loop, request, requested_by, refusals)
    refusals.done()


def _check_bench(request: StartExperiment, refusals: _Refusals) -> None:
    if not request.attended:
        refusals.add("attended", "a bench loop is never tested unattended", "true, with a stop in reach")
    if not request.bench_sentence_signed:
        refusals.add(
            "bench_sentence_signed",
            f"the bench sentence is not signed: {BENCH_SENTENCE}",
            "true, by a person who may say so",
        )


def _check_plant(loop: Loop, request: StartExperiment, requested_by: str, refusals: _Refusals) -> None:
    if not request.approver:
        refusals.add("approver", "class 'plant' needs an approver", "the name of another person")
    elif request.approver.strip().casefold() == requested_by.strip().casefold():
        refusals.add("approver", "the approver is the requester", "the name of another person")
    if not request.acknowledged_by:
        refusals.add("acknowledged_by", "the console operator has not acknowledged", "the operator's name")
    if not request.work_order:
        refusals.add("work_order", "class 'plant' needs a work-order or change number", "its number")
    if request.attended:
        return
    beat = heartbeat_of(loop)
    if beat is None or beat.watchdog in (WatchdogAction.NONE, WatchdogAction.HOLD_LAST):
        hold = "holds its last output" if beat is not None else "has no watchdog"
        refusals.add(
            "attended",
            f"unattended, and the device {hold}: a dead service would leave the output driven",
            "true, or a device watchdog that goes to the resting or a fixed output",
        )
        return
    proof = request.answers.get("B3")
    if proof is None or proof.verdict != "pass" or not proof.reason.strip():
        refusals.add(
            "answers.B3",
            "unattended without a proven device watchdog",
            "verdict 'pass' with the date of the proof as reason, or attended: true",
        )


def _room(loop: Loop, request: StartExperiment, room: float, refusals: _Refusals) -> float:
    """Largest amplitude that fits around the resting output, output units."""
    limits = loop.limits
    resting = request.resting_output
    if resting is None:
        return room
    if not limits.output_low < resting < limits.output_high:
        refusals.add(
            "resting_output",
            f"{resting:g} lies outside the output band",
            f"between limits.output_low {limits.output_low:g} and limits.output_high {limits.output_high:g}",
        )
        return room
    return min(room, resting - limits.output_low, limits.output_high - resting)


def _deviation(loop: Loop, name: str, refusals: _Refusals) -> float:
    """The allowed deviation; on `bench` it defaults to a tenth of the range, on `plant` it must be declared."""
    declared: float | None = getattr(loop.limits, name)
    room = loop.limits.process_variable_high - loop.limits.process_variable_low
    if declared is not None:
        return declared
    if loop.loop_class is LoopClass.PLANT:
        refusals.add(f"limits.{name}", "class 'plant' needs it declared", f"more than 0 {loop.process_variable.unit}")
    return min(0.1 * loop.process_variable.span, room / 2)


def _check_reference(loop: Loop, request: StartExperiment, refusals: _Refusals) -> None:
    limits = loop.limits
    reference = request.reference
    if reference is None:
        return
    if not limits.process_variable_low < reference < limits.process_variable_high:
        refusals.add(
            "reference",
            f"{reference:g} lies outside the limits",
            f"between limits.process_variable_low {limits.process_variable_low:g} and "
            f"limits.process_variable_high {limits.process_variable_high:g}",
        )


def _listening_s(loop: Loop, *, bench: bool) -> float:
    """Listening time: bench max(100 samples, 5 s) up to 30 s, plant max(200 samples, 30 s) up to 300 s; never below
    20 samples, which a noise estimate needs."""
    samples, least, most = (100, 5.0, 30.0) if bench else (200, 30.0, 300.0)
    wanted = min(most, max(samples * loop.sample_interval_s, least))
    return max(wanted, 20 * loop.sample_interval_s)


def _output_quantum(loop: Loop) -> float:
    """Smallest step of the output's register, output units; 0 for floating point."""
    if not isinstance(loop.adapter, ModbusTcp) or loop.adapter.controller_output.format == "float32":
        return 0.0
    return abs(loop.adapter.controller_output.scale)
