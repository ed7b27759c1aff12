"""Analyses as they are replied: of a finished experiment with its checklist, and of an uploaded record.

Runs in an analysis process on plain documents and columns; opens nothing and reads no clock.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from pydantic import ValidationError

import gainwright
from gainwright.errors import GainwrightError
from gainwright.results import Analysis
from gainwright_service.checklist import (
    Conclusion,
    SignedAnswer,
    Start,
    assemble,
    measure_after,
    measure_before,
    measure_during,
    measure_record,
)
from gainwright_service.checklist.items import NOTICE
from gainwright_service.errors import RecordRefused
from gainwright_service.listened import FloatArray, listened, quantum_of
from gainwright_service.rendering import render
from gainwright_service.replies import answers_of, known
from gainwright_wire.analyses import AnalysisReply, Grade, RecordUpload, Verdict
from gainwright_wire.loops import Loop
from gainwright_wire.problems import FieldProblem
from gainwright_wire.tasks import AsFound, Exit, LimitMet, Outcome, Phase, Plan, Progress, StartExperiment

LARGEST = 1e12
"""Largest number that a column or a reply carries."""
UNREPORTABLE = "the estimates leave the range of numbers that a reply carries"


def conclude_experiment(facts: dict[str, Any]) -> dict[str, Any]:
    """Analyse a finished experiment, propose gains and fill its checklist.

    Parameters
    ----------
    facts : dict
        ``loop``, ``request``, ``plan``, ``as_found``, ``ended``, ``progress`` documents; ``columns`` with
        ``time_s``, ``process_variable``, ``controller_output`` (echo), ``commanded_output``, ``phase`` (names, or
        the codes that samples are stored with);
        ``latency_s``, ``requested_by`` and ``sign_offs`` (item to verdict, person, reason).

    Returns
    -------
    dict
        ``analysis`` and ``checklist``, the wire's documents.
    """
    loop = Loop.model_validate(facts["loop"])
    request = StartExperiment.model_validate(facts["request"])
    plan = known(Plan, facts["plan"])
    if plan is None:
        raise ValueError("facts.plan: a concluded experiment has a plan")
    as_found = known(AsFound, facts.get("as_found"))
    columns = {name: np.asarray(column) for name, column in facts["columns"].items()}
    columns["phase"] = _phase_names(columns["phase"])
    latency_s = float(facts.get("latency_s") or 0.0)
    progress = known(Progress, facts.get("progress")) or Progress()
    analysis = _analysed(loop, columns, as_found, progress, latency_s)
    end = _conclusion(loop, facts["ended"], columns, as_found, progress, latency_s, _gain_found(loop, as_found))
    start = Start(
        requested_by=facts["requested_by"],
        attended=request.attended,
        bench_sentence_signed=request.bench_sentence_signed,
        approver=request.approver,
        acknowledged_by=request.acknowledged_by,
        work_order=request.work_order,
    )
    baseline = (columns["phase"] == "listening") & np.isfinite(columns["process_variable"])
    heard = listened(
        columns["time_s"][baseline],
        columns["process_variable"][baseline],
        nominal_interval_s=plan.sample_interval_s,
        signal=loop.process_variable,
    )
    measurements = measure_before(loop, plan, start=start, listening=heard, as_found=as_found)
    measurements |= measure_record(loop, plan, end, analysis, quantum_of(_finite(columns["process_variable"])))
    measurements |= measure_during(plan, end)
    measurements |= measure_after(loop, plan, end, analysis)
    signed = {
        item: SignedAnswer(Verdict(answer["verdict"]), answer["person"], answer["reason"])
        for item, answer in (facts.get("sign_offs") or {}).items()
    }
    answers = answers_of(request, facts["requested_by"]) | signed
    sheet = assemble(loop.loop_class, ("before", "during", "after"), measurements, answers)
    return {
        "analysis": analysis.model_dump(mode="json", by_alias=True),
        "checklist": sheet.model_dump(mode="json", by_alias=True),
    }


def analyse_upload(document: dict[str, Any]) -> dict[str, Any]:
    """Analyse an uploaded record.

    Parameters
    ----------
    document : dict
        The wire's `RecordUpload`.

    Returns
    -------
    dict
        The wire's `AnalysisReply`.

    Raises
    ------
    RecordRefused
        Naming the column at fault and what is allowed.
    """
    upload = RecordUpload.model_validate(document)
    _refuse_the_immense(upload)
    try:
        record = gainwright.Record(
            time=upload.time_s,
            process_variable=upload.process_variable,
            controller_output=upload.controller_output,
        )
        analysis = gainwright.analyse(
            record,
            reference=upload.reference,
            hysteresis=upload.hysteresis,
            output_is=upload.output_is,
            latency_s=upload.latency_s,
            confidence=upload.confidence,
        )
    except GainwrightError as error:
        raise record_refused(error) from error
    target = {"controller": upload.controller, "output_effect": None}
    try:
        reply = _reply(analysis, target)
    except ValidationError as error:
        at_fault = FieldProblem(field="process_variable", problem=UNREPORTABLE, allowed="columns in units near one")
        raise RecordRefused(f"process_variable: {UNREPORTABLE}", (at_fault,)) from error
    return reply.model_dump(mode="json", by_alias=True)


def _refuse_the_immense(upload: RecordUpload) -> None:
    """Raise `RecordRefused` for finite numbers so large that arithmetic on them means nothing."""
    for name in ("time_s", "process_variable", "controller_output"):
        column = np.asarray(getattr(upload, name), dtype=np.float64)
        beyond = np.flatnonzero(np.isfinite(column) & (np.abs(column) > LARGEST))
        if beyond.size:
            problem = f"is {column[beyond[0]]:.3g} at sample {beyond[0]}"
            at_fault = FieldProblem(field=name, problem=problem, allowed=f"at most {LARGEST:g} in size")
            raise RecordRefused(f"{name}: {problem}; allowed: {at_fault.allowed}", (at_fault,))


def record_refused(error: GainwrightError) -> RecordRefused:
    """The numerics' refusal of a record under the names of the wire."""
    field = "time_s" if error.field == "time" else error.field
    at_fault = FieldProblem(field=field, problem=error.problem, allowed=error.allowed)
    return RecordRefused(f"{field}: {error.problem}; allowed: {error.allowed}", (at_fault,))


def _finite(column: FloatArray) -> FloatArray:
    return column[np.isfinite(column)]


def _phase_names(column: Any) -> Any:
    if column.dtype.kind == "f":
        return np.array([*Phase])[column.astype(int)]
    return column


def _analysed(
    loop: Loop, columns: Mapping[str, Any], as_found: AsFound | None, progress: Progress, latency_s: float
) -> AnalysisReply:
    """The analysis of everything up to the return; a record that carries none is unusable and says why."""
    tested = np.isin(columns["phase"], ("listening", "probing", "swinging"))
    commanded = columns["commanded_output"]
    in_force = np.where(np.isfinite(commanded), commanded, columns["controller_output"])
    usable = tested & np.isfinite(in_force) & np.isfinite(columns["process_variable"])
    try:
        record = gainwright.Record(
            time=columns["time_s"][usable],
            process_variable=columns["process_variable"][usable],
            controller_output=in_force[usable],
        )
        analysis = gainwright.analyse(
            record,
            reference=as_found.reference if as_found is not None else None,
            hysteresis=progress.hysteresis,
            latency_s=latency_s,
            effect=1 if loop.output_effect == "raises" else -1,
            commanded_amplitude=progress.amplitude or None,
        )
    except GainwrightError as error:
        return _nothing(str(error))
    try:
        return _reply(analysis, _target(loop))
    except ValidationError:
        return _nothing(UNREPORTABLE)


def _target(loop: Loop) -> dict[str, Any]:
    return {
        "controller": loop.controller,
        "output_effect": loop.output_effect,
        "input_unit": loop.process_variable.unit,
        "output_unit": loop.controller_output.unit,
        "output_span": loop.controller_output.span,
    }


def _gain_found(loop: Loop, as_found: AsFound | None) -> float | None:
    from gainwright_service.proposing import Target, proportional_gain_of

    if as_found is None or as_found.gains is None:
        return None
    return proportional_gain_of(as_found.gains, Target(**_target(loop)))


def _reply(analysis: Analysis, target: Mapping[str, Any]) -> AnalysisReply:
    # Imported here, since the API imports this module and has no use for the numerics that margins bring in.
    from gainwright_service.proposing import Target, propose

    proposals, refused = propose(analysis, Target(**target))
    return render(AnalysisReply, analysis, proposals=proposals, refused_rules=refused, notice=NOTICE)


def _nothing(reason: str) -> AnalysisReply:
    return AnalysisReply(
        ultimate_gain=None,
        ultimate_period_s=None,
        describing_function=None,
        fourier=None,
        model_crossover=None,
        response_points=(),
        model=None,
        findings=(),
        grade=Grade.UNUSABLE,
        reasons=(reason,),
        swing=0.0,
        relay_amplitude=0.0,
        hysteresis=0.0,
        noise=0.0,
        scored_cycles=0,
        confidence=0.95,
        dominant_uncertainty="",
        remedy="",
        notice=NOTICE,
    )


def _conclusion(
    loop: Loop,
    ended: Mapping[str, Any],
    columns: Mapping[str, Any],
    as_found: AsFound | None,
    progress: Progress,
    latency_s: float,
    gain_found: float | None,
) -> Conclusion:
    values = _finite(columns["process_variable"])
    commanded = _finite(columns["commanded_output"])
    reference = as_found.reference if as_found is not None else None
    off = np.abs(values - reference) if reference is not None else np.zeros(0)
    scan_s = loop.controller.sample_interval_s if loop.controller is not None else None
    return Conclusion(
        outcome=Outcome(ended["outcome"]),
        exit=Exit(ended["exit"]),
        exit_detail=ended.get("exit_detail", ""),
        limit=known(LimitMet, ended.get("limit")),
        differences=tuple(ended.get("differences", ())),
        lowest=float(values.min()) if values.size else 0.0,
        highest=float(values.max()) if values.size else 0.0,
        worst_deviation=float(off.max()) if off.size else 0.0,
        last_deviation=float(off[-1]) if off.size else 0.0,
        lowest_command=float(commanded.min()) if commanded.size else None,
        highest_command=float(commanded.max()) if commanded.size else None,
        resting_output=as_found.resting_output if as_found is not None else None,
        elapsed_s=progress.elapsed_s,
        switches=progress.switches,
        scan_s=scan_s if scan_s is not None else loop.sample_interval_s,
        latency_s=latency_s,
        gain_found=gain_found,
    )
