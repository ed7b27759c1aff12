"""Starting an experiment: what the person must have said, the plan, the checklist's gate, then the queued task.

Everything here is decided before a task exists; a refusal leaves nothing behind.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.checklist import ITEMS, Start, assemble, blocking, measure_before
from gainwright_service.errors import ChecklistFailed, NoWorker
from gainwright_service.forecasting import predict
from gainwright_service.planning import check_start, plan_with_defaults
from gainwright_service.replies import answers_of, last_analysis
from gainwright_service.store import loops, sites, tasks
from gainwright_wire.analyses import AnalysisReply, Checklist, Verdict
from gainwright_wire.loops import Loop
from gainwright_wire.problems import FieldProblem
from gainwright_wire.tasks import ForecastRequest, StartExperiment

WORKER_MISSED_S = 10.0
"""A worker confirms its site each second; a restart takes a few."""


async def start_experiment(
    connection: AsyncConnection, tag: str, request: StartExperiment, *, by: str, at: str, now_s: float
) -> Mapping[str, Any]:
    """Queue an experiment on a loop; returns the task's row.

    Raises
    ------
    NotFound, NoWorker, PlanRefused, SafetyFunctionRefused, ChecklistFailed
    LoopBusy, GroupBusy, ExitNotAcknowledged
    """
    kept = await loops.get(connection, tag)
    _refuse_unknown(request)
    await _require_worker(connection, kept.loop.site, now_s)
    last = last_analysis(await tasks.last_result(connection, tag))
    check_start(kept.loop, request, requested_by=by)
    refuse_blocked(sheet_at_start(kept.loop, request, by, last))
    document = request.model_dump(mode="json")
    task_id = await tasks.create(connection, kind="experiment", loop=kept.loop, request=document, by=by, at=at)
    return await tasks.get(connection, task_id)


def _refuse_unknown(request: StartExperiment) -> None:
    """An answer to an item that does not exist would be lost, and with it what somebody meant by it."""
    known = {item.id for item in ITEMS if item.id.startswith("B")}
    wrong = tuple(
        FieldProblem(field=f"answers.{item}", problem="no such item", allowed=", ".join(sorted(known)))
        for item in request.answers
        if item not in known
    )
    if wrong:
        raise ChecklistFailed("; ".join(f"{w.field}: {w.problem}" for w in wrong), wrong)


async def _require_worker(connection: AsyncConnection, site: str, now_s: float) -> None:
    confirmed_at = (await sites.confirmations(connection)).get(site)
    if confirmed_at is None or now_s - confirmed_at > WORKER_MISSED_S:
        since = "none serves it" if confirmed_at is None else f"the last word came {now_s - confirmed_at:.0f} s ago"
        raise NoWorker(f"site: no worker of '{site}' is there to run the test ({since}); nothing was queued")


def sheet_at_start(loop: Loop, request: StartExperiment, by: str, last: AnalysisReply | None) -> Checklist:
    """The before-items as they stand when the start is asked for. Raises `PlanRefused`."""
    plan = plan_with_defaults(loop, request)
    predicted = predict(loop, plan, ForecastRequest(), last)
    start = Start(
        requested_by=by,
        attended=request.attended,
        bench_sentence_signed=request.bench_sentence_signed,
        approver=request.approver,
        acknowledged_by=request.acknowledged_by,
        work_order=request.work_order,
    )
    measurements = measure_before(loop, plan, start=start, predicted=predicted)
    return assemble(loop.loop_class, ("before",), measurements, answers_of(request, by))


def refuse_blocked(sheet: Checklist) -> None:
    """Raise `ChecklistFailed`, naming every item in the way and what removes it, where the sheet blocks."""
    items = blocking(sheet)
    if not items:
        return
    errors = tuple(
        FieldProblem(
            field=f"answers.{item.id}",
            problem=f"{item.question} {_state(item.verdict)}{': ' + item.detail if item.detail else ''}",
            allowed="a measured fail of a starred item must be mended" if _fixed(item) else item.remedy,
        )
        for item in items
    )
    names = ", ".join(item.id for item in items)
    raise ChecklistFailed(
        f"{len(items)} checklist items block the start: {names}. Answer them under answers, each with "
        "a verdict, and "
        "a reason where it is 'caution'.",
        errors,
    )


def _state(verdict: Verdict) -> str:
    return "(caution without a reason)" if verdict is Verdict.CAUTION else "(fail)"


def _fixed(item: Any) -> bool:
    return bool(item.starred and item.basis == "measured" and item.verdict is Verdict.FAIL)
