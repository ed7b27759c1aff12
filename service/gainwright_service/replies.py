"""Stored rows become replies. Owns the mapping from a task's row to the wire's `Experiment`; reads no database."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, TypeVar

from gainwright_service.checklist import SignedAnswer, with_answers
from gainwright_service.checklist.items import NOTICE
from gainwright_wire.analyses import AnalysisReply, Checklist, Verdict
from gainwright_wire.base import Wire
from gainwright_wire.problems import ProblemCode
from gainwright_wire.tasks import (
    AsFound,
    Exit,
    Experiment,
    LimitMet,
    Phase,
    Plan,
    Progress,
    StartExperiment,
    StreamProgress,
    TaskProblem,
    TaskState,
)

Document = TypeVar("Document", bound=Wire)


def experiment(row: Mapping[str, Any], sign_offs: Mapping[str, SignedAnswer] | None = None) -> Experiment:
    """One task's row, with the sign-offs given since, as the wire's experiment."""
    result = row["result"] or {}
    analysis = AnalysisReply.model_validate(result["analysis"]) if result.get("analysis") else None
    sheet = Checklist.model_validate(result["checklist"]) if result.get("checklist") else None
    if sheet is not None and sign_offs:
        sheet = with_answers(sheet, sign_offs)
    return Experiment(
        id=row["id"],
        tag=row["tag"],
        site=row["site"],
        state=TaskState(row["state"]),
        phase=row["phase"],
        outcome=row["outcome"],
        exit=Exit(row["exit"]),
        exit_detail=row["exit_detail"],
        exit_acknowledged_by=row["exit_acknowledged_by"],
        requested_by=row["requested_by"],
        created_at=row["created_at"],
        started_at=row["started_at"],
        finished_at=row["finished_at"],
        stop_requested_by=row["stop_requested_by"],
        plan=known(Plan, row["plan"]),
        as_found=known(AsFound, row["as_found"]),
        progress=known(Progress, row["progress"]) or Progress(),
        limit=known(LimitMet, row["limit"]),
        ultimate_gain=analysis.ultimate_gain if analysis else None,
        ultimate_period_s=analysis.ultimate_period_s if analysis else None,
        model=analysis.model if analysis else None,
        findings=analysis.findings if analysis else (),
        grade=analysis.grade if analysis else None,
        proposals=analysis.proposals if analysis else (),
        refused_rules=analysis.refused_rules if analysis else (),
        checklist=sheet,
        analysis=analysis,
        problem=_problem(row["problem"], result.get("problem")),
        notice=NOTICE,
    )


def _problem(refused: Mapping[str, Any] | None, analysis: str | None) -> TaskProblem | None:
    """Why a task moved nothing, or why what it moved could not be analysed."""
    if refused:
        return TaskProblem(code=refused["code"], detail=refused["detail"])
    return TaskProblem(code=ProblemCode.INTERNAL.value, detail=analysis) if analysis else None


def answers_of(request: StartExperiment, person: str) -> dict[str, SignedAnswer]:
    """The answers that a start request carries, signed by the requester."""
    return {
        item: SignedAnswer(Verdict(answer.verdict), person, answer.reason) for item, answer in request.answers.items()
    }


def progress_now(row: Mapping[str, Any]) -> StreamProgress:
    """A task's progress and phase as they stand in its row."""
    progress = known(StreamProgress, row["progress"]) or StreamProgress()
    return progress.model_copy(update={"phase": Phase(row["phase"]) if row["phase"] else None})


def last_analysis(result: Mapping[str, Any] | None) -> AnalysisReply | None:
    """The analysis in a stored result; None where there is none."""
    if not result or not result.get("analysis"):
        return None
    return AnalysisReply.model_validate(result["analysis"])


def known(target: type[Document], document: Mapping[str, Any] | None) -> Document | None:
    """The wire document of a stored one, whose further fields are the experiment's own business."""
    if not document:
        return None
    return target.model_validate({name: document[name] for name in target.model_fields if name in document})
