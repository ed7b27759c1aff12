"""Loops: register, list, show, replace, forecast."""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Header, Path, Query, Response
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.api.access import InChange, InPerson, Reply, etag, version_of
from gainwright_service.api.context import InContext
from gainwright_service.api.problems import documented
from gainwright_service.errors import RequestError
from gainwright_service.forecasting import forecast
from gainwright_service.replies import last_analysis
from gainwright_service.store import loops, tasks
from gainwright_wire.loops import Loop, LoopPage, RegisteredLoop
from gainwright_wire.problems import FieldProblem, ProblemCode
from gainwright_wire.tasks import Forecast, ForecastRequest

router = APIRouter(prefix="/v1/loops", tags=["loops"])

_TAG = r"^[A-Za-z0-9][A-Za-z0-9._-]{0,63}$"
InTag = Annotated[str, Path(pattern=_TAG, description="The loop's tag")]
OfTag = Annotated[str | None, Query(pattern=_TAG, description="Only of the loop with this tag")]
After = Annotated[str | None, Query(pattern=_TAG, description="Cursor: `next` of the page before")]
Limit = Annotated[int, Query(ge=1, le=500, description="Most items on the page")]


@router.post(
    "",
    operation_id="registerLoop",
    status_code=201,
    response_model=RegisteredLoop,
    responses=documented(
        ProblemCode.ALREADY_EXISTS,
        ProblemCode.SAFETY_FUNCTION,
        ProblemCode.IDEMPOTENCY_CONFLICT,
        ProblemCode.TOO_LARGE,
    ),
)
async def register_loop(loop: Loop, change: InChange) -> Response:
    """Register a loop. Its device is not contacted."""

    async def act(connection: AsyncConnection, at: str) -> Reply:
        kept = await loops.register(connection, loop, by=change.person, at=at)
        return Reply(201, kept, {"Location": f"/v1/loops/{loop.tag}", "ETag": etag(kept.version)})

    return await change(act)


@router.get("", operation_id="listLoops", response_model=LoopPage, responses=documented())
async def list_loops(context: InContext, person: InPerson, after: After = None, limit: Limit = 100) -> LoopPage:
    """The registered loops by tag."""
    async with context.engine.connect() as connection:
        return await loops.page(connection, after, limit)


@router.get(
    "/{tag}",
    operation_id="showLoop",
    response_model=RegisteredLoop,
    responses=documented(ProblemCode.NOT_FOUND),
)
async def show_loop(tag: InTag, context: InContext, person: InPerson, response: Response) -> RegisteredLoop:
    """One loop; its `ETag` is what a change must name."""
    async with context.engine.connect() as connection:
        kept = await loops.get(connection, tag)
    response.headers["ETag"] = etag(kept.version)
    return kept


@router.put(
    "/{tag}",
    operation_id="replaceLoop",
    response_model=RegisteredLoop,
    responses=documented(
        ProblemCode.NOT_FOUND,
        ProblemCode.LOOP_BUSY,
        ProblemCode.VERSION_CONFLICT,
        ProblemCode.VERSION_REQUIRED,
        ProblemCode.SAFETY_FUNCTION,
        ProblemCode.IDEMPOTENCY_CONFLICT,
        ProblemCode.TOO_LARGE,
    ),
)
async def replace_loop(
    tag: InTag,
    loop: Loop,
    change: InChange,
    if_match: Annotated[str | None, Header(alias="If-Match", max_length=64)] = None,
) -> Response:
    """Replace a loop's definition. Needs `If-Match` with the `ETag` that was read."""
    version = version_of(if_match)
    if loop.tag != tag:
        wrong = FieldProblem(field="tag", problem=f"'{loop.tag}' is not the tag of the path", allowed=tag)
        raise RequestError(f"{wrong.field}: {wrong.problem}", (wrong,))

    async def act(connection: AsyncConnection, at: str) -> Reply:
        kept = await loops.replace(connection, tag, loop, version=version, by=change.person, at=at)
        return Reply(200, kept, {"ETag": etag(kept.version)})

    return await change(act)


@router.post(
    "/{tag}/forecast",
    operation_id="forecastExperiment",
    response_model=Forecast,
    responses=documented(ProblemCode.NOT_FOUND, ProblemCode.PLAN_REFUSED, ProblemCode.TOO_LARGE),
)
async def forecast_experiment(
    tag: InTag, context: InContext, person: InPerson, request: ForecastRequest | None = None
) -> Forecast:
    """Predict swing, time, switches and cost of a test, and show the checklist so far. Moves nothing."""
    async with context.engine.connect() as connection:
        kept = await loops.get(connection, tag)
        last = await tasks.last_result(connection, tag)
    return forecast(kept.loop, request or ForecastRequest(), last=last_analysis(last))
