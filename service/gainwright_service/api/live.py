"""The live stream of one experiment as server-sent events. An event's id is the sample's number, so it resumes."""

from __future__ import annotations

from collections.abc import AsyncIterator
from typing import Annotated

from fastapi import APIRouter, Header
from fastapi.responses import StreamingResponse

from gainwright_service import signing
from gainwright_service.api import tabulating
from gainwright_service.api.access import InPerson
from gainwright_service.api.context import Context, InContext
from gainwright_service.api.experiments import InId
from gainwright_service.api.problems import documented
from gainwright_service.replies import progress_now
from gainwright_service.store import tasks
from gainwright_wire.problems import ProblemCode

router = APIRouter(prefix="/v1", tags=["experiments"])

RECONNECT_MS = 1000


@router.get(
    "/experiments/{id}/stream",
    operation_id="streamExperiment",
    response_class=StreamingResponse,
    responses={
        **documented(ProblemCode.NOT_FOUND),
        200: {
            "description": "Events `sample` (id: the sample's number), `progress` and, last, `end`",
            "content": {"text/event-stream": {"schema": {"type": "string"}}},
        },
    },
)
async def stream(
    id: InId,
    context: InContext,
    person: InPerson,
    last_event_id: Annotated[str | None, Header(alias="Last-Event-ID", pattern=r"^[0-9]{1,9}$")] = None,
) -> StreamingResponse:
    """Follow an experiment live. Resumes after `Last-Event-ID`; ends with the finished experiment."""
    async with context.engine.connect() as connection:
        await tasks.get(connection, id)
    first = 0 if last_event_id is None else int(last_event_id) + 1
    headers = {"Cache-Control": "no-store", "X-Accel-Buffering": "no"}
    return StreamingResponse(_events(context, id, first), 200, headers, "text/event-stream")


async def _events(context: Context, task_id: str, first: int) -> AsyncIterator[str]:
    yield f"retry: {RECONNECT_MS}\n\n"
    told = ""
    async for news in context.follower.follow(task_id, first):
        lines = [
            f"id: {sample.number}\nevent: sample\ndata: {sample.model_dump_json()}\n\n"
            for sample in tabulating.stream_samples(news.first_number, news.columns)
        ]
        progress = progress_now(news.row).model_dump_json()
        lines.append(f"event: progress\ndata: {progress}\n\n" if progress != told else ": alive\n\n")
        told = progress
        yield "".join(lines)
        if news.over:
            async with context.engine.connect() as connection:
                ended = await signing.signed_experiment(connection, task_id)
            yield f"event: end\ndata: {ended.model_dump_json()}\n\n"
