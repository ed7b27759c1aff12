"""Experiments: start, list, follow, stop, acknowledge, samples, checklist."""

from __future__ import annotations

from typing import Annotated, Literal

from fastapi import APIRouter, Path, Query, Response
from fastapi.responses import StreamingResponse
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service import signing
from gainwright_service.api import tabulating
from gainwright_service.api.access import InChange, InPerson, Reply
from gainwright_service.api.context import InContext
from gainwright_service.api.loops import InTag, Limit, OfTag
from gainwright_service.api.problems import documented
from gainwright_service.replies import experiment
from gainwright_service.starting import start_experiment
from gainwright_service.store import samples, tasks
from gainwright_wire.analyses import Checklist
from gainwright_wire.problems import ProblemCode
from gainwright_wire.tasks import (
    Acknowledge,
    Answer,
    Experiment,
    ExperimentPage,
    Samples,
    StartExperiment,
    TaskState,
)

router = APIRouter(prefix="/v1", tags=["experiments"])

InId = Annotated[str, Path(pattern=r"^[0-9a-f]{32}$", description="The experiment's identifier")]
Cursor = Annotated[str | None, Query(pattern=r"^[0-9]{1,15}$", description="`next` of the page before")]
ItemId = Annotated[str, Path(pattern=r"^[ABD][0-9]{1,2}$")]
Answers = dict[Annotated[str, ItemId], Answer]
_STARTED = (
    ProblemCode.NOT_FOUND,
    ProblemCode.LOOP_BUSY,
    ProblemCode.GROUP_BUSY,
    ProblemCode.EXIT_NOT_ACKNOWLEDGED,
    ProblemCode.CHECKLIST_FAILED,
    ProblemCode.PLAN_REFUSED,
    ProblemCode.SAFETY_FUNCTION,
    ProblemCode.NO_WORKER,
    ProblemCode.IDEMPOTENCY_CONFLICT,
    ProblemCode.TOO_LARGE,
)


@router.post(
    "/loops/{tag}/experiments",
    operation_id="startExperiment",
    status_code=202,
    response_model=Experiment,
    responses=documented(*_STARTED),
)
async def start(tag: InTag, request: StartExperiment, change: InChange) -> Response:
    """Start a relay test. It is queued for the site's worker; follow it under `Location`."""

    async def act(connection: AsyncConnection, at: str) -> Reply:
        row = await start_experiment(connection, tag, request, by=change.person, at=at, now_s=change.context.now_s())
        return Reply(202, experiment(row), {"Location": f"/v1/experiments/{row['id']}"})

    return await change(act)


@router.get("/experiments", operation_id="listExperiments", response_model=ExperimentPage, responses=documented())
async def list_experiments(
    context: InContext,
    person: InPerson,
    tag: OfTag = None,
    state: TaskState | None = None,
    after: Cursor = None,
    limit: Limit = 50,
) -> ExperimentPage:
    """Experiments, newest first."""
    async with context.engine.connect() as connection:
        rows, following = await tasks.page(
            connection, kind="experiment", tag=tag, state=state, after=after, limit=limit
        )
        signed = await signing.signed_on(connection, [row["id"] for row in rows])
    return ExperimentPage(items=tuple(experiment(row, signed.get(row["id"])) for row in rows), next=following)


@router.get(
    "/experiments/{id}",
    operation_id="showExperiment",
    response_model=Experiment,
    responses=documented(ProblemCode.NOT_FOUND),
)
async def show(id: InId, context: InContext, person: InPerson) -> Experiment:
    """One experiment as it stands: progress while it runs, everything found once it has finished."""
    async with context.engine.connect() as connection:
        return await signing.signed_experiment(connection, id)


@router.post(
    "/experiments/{id}/stop",
    operation_id="stopExperiment",
    status_code=202,
    response_model=Experiment,
    responses=documented(ProblemCode.NOT_FOUND, ProblemCode.NOT_ACTIVE, ProblemCode.IDEMPOTENCY_CONFLICT),
)
async def stop(id: InId, change: InChange) -> Response:
    """Ask for a stop: the test ends through its exit action. This is not an emergency stop."""

    async def act(connection: AsyncConnection, at: str) -> Reply:
        await tasks.request_stop(connection, id, by=change.person, at=at)
        return Reply(202, experiment(await tasks.get(connection, id)))

    return await change(act)


@router.post(
    "/experiments/{id}/acknowledge",
    operation_id="acknowledgeExit",
    response_model=Experiment,
    responses=documented(ProblemCode.NOT_FOUND, ProblemCode.NOT_ACTIVE, ProblemCode.IDEMPOTENCY_CONFLICT),
)
async def acknowledge(id: InId, request: Acknowledge, change: InChange) -> Response:
    """State that a person has looked at the loop after an exit that could not be verified."""

    async def act(connection: AsyncConnection, at: str) -> Reply:
        await tasks.acknowledge(connection, id, by=change.person, at=at, remark=request.remark)
        return Reply(200, experiment(await tasks.get(connection, id)))

    return await change(act)


@router.get(
    "/experiments/{id}/samples",
    operation_id="readSamples",
    response_model=Samples,
    responses={
        **documented(ProblemCode.NOT_FOUND),
        200: {
            "description": "The samples in columns, or as CSV",
            "content": {"text/csv": {"schema": {"type": "string"}}},
        },
    },
)
async def read_samples(
    id: InId,
    context: InContext,
    person: InPerson,
    format: Literal["json", "csv"] = "json",
    from_number: Annotated[int, Query(ge=0, le=2**31 - 1)] = 0,
) -> Response:
    """The samples stored so far, at most one second behind the test."""
    async with context.engine.connect() as connection:
        row = await tasks.get(connection, id)
        columns = await samples.columns(connection, id, from_number)
    if format == "csv":
        name = f"{row['tag']}-{id[:8]}.csv"
        headers = {"Content-Disposition": f'attachment; filename="{name}"'}
        return StreamingResponse(tabulating.csv_lines(from_number, columns), 200, headers, "text/csv; charset=utf-8")
    document = tabulating.samples_document(from_number, columns)
    return Response(document.model_dump_json(), 200, media_type="application/json")


@router.get(
    "/experiments/{id}/checklist",
    operation_id="showChecklist",
    response_model=Checklist,
    responses=documented(ProblemCode.NOT_FOUND),
)
async def show_checklist(id: InId, context: InContext, person: InPerson) -> Checklist:
    """The checklist with everything measured and answered so far."""
    async with context.engine.connect() as connection:
        return await signing.sheet(connection, id)


@router.post(
    "/experiments/{id}/checklist",
    operation_id="answerChecklist",
    response_model=Checklist,
    responses=documented(ProblemCode.NOT_FOUND, ProblemCode.IDEMPOTENCY_CONFLICT, ProblemCode.TOO_LARGE),
)
async def answer_checklist(id: InId, answers: Answers, change: InChange) -> Response:
    """Answer items of the checklist in one's own name. A caution needs a reason."""

    async def act(connection: AsyncConnection, at: str) -> Reply:
        return Reply(200, await signing.sign(connection, id, answers, by=change.person, at=at))

    return await change(act)
