"""Records: a test recorded elsewhere, analysed and kept."""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Path, Response
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.api.access import InChange, InPerson, Reply
from gainwright_service.api.context import InContext
from gainwright_service.api.problems import documented
from gainwright_service.proposals import analyse_upload
from gainwright_service.store import records
from gainwright_wire.analyses import RecordReply, RecordUpload
from gainwright_wire.problems import ProblemCode

router = APIRouter(prefix="/v1/records", tags=["records"])


@router.post(
    "",
    operation_id="analyseRecord",
    status_code=201,
    response_model=RecordReply,
    responses=documented(ProblemCode.MALFORMED_RECORD, ProblemCode.TOO_LARGE, ProblemCode.IDEMPOTENCY_CONFLICT),
)
async def analyse_record(upload: RecordUpload, change: InChange) -> Response:
    """Analyse a record of a relay test: three columns of equal length, times in seconds, controller output in force
    from each sample on. The record and its analysis are kept."""
    kept = await change.kept()
    if kept is not None:
        return kept
    document = upload.model_dump(mode="python")
    analysis = await change.context.analyses.run(analyse_upload, document)

    async def act(connection: AsyncConnection, at: str) -> Reply:
        stored = await records.keep(connection, upload, analysis, by=change.person, at=at)
        return Reply(201, stored, {"Location": f"/v1/records/{stored.id}"})

    return await change(act)


@router.get(
    "/{id}",
    operation_id="showRecord",
    response_model=RecordReply,
    responses=documented(ProblemCode.NOT_FOUND),
)
async def show_record(
    id: Annotated[str, Path(pattern=r"^[0-9a-f]{32}$")], context: InContext, person: InPerson
) -> RecordReply:
    """An uploaded record's analysis."""
    async with context.engine.connect() as connection:
        return await records.get(connection, id)
