"""Records of tests recorded elsewhere, with their analyses."""

from __future__ import annotations

import uuid
from typing import Any

import numpy as np
from sqlalchemy import func, insert, select
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.errors import NotFound
from gainwright_service.store import journal
from gainwright_service.store.tables import records
from gainwright_wire.analyses import AnalysisReply, RecordReply, RecordUpload

COLUMNS = ("time_s", "process_variable", "controller_output")


async def keep(
    connection: AsyncConnection, upload: RecordUpload, analysis: dict[str, Any], *, by: str, at: str
) -> RecordReply:
    """Keep a record's columns, what was said of it, and its analysis."""
    record_id = uuid.uuid4().hex
    newest = (await connection.execute(select(func.max(records.c.number)))).scalar_one_or_none() or 0
    whole = np.array([upload.time_s, upload.process_variable, upload.controller_output], dtype="<f8")
    await connection.execute(
        insert(records).values(
            id=record_id,
            number=newest + 1,
            tag=upload.tag,
            by=by,
            at=at,
            samples=len(upload.time_s),
            columns=whole.tobytes(),
            request=upload.model_dump(mode="json", exclude=set(COLUMNS)),
            result=analysis,
        )
    )
    detail = {"record": record_id, "samples": len(upload.time_s), "grade": analysis.get("grade")}
    subject = upload.tag or record_id
    await journal.append(connection, at=at, person=by, act="record_analysed", subject=subject, detail=detail)
    return await get(connection, record_id)


async def get(connection: AsyncConnection, record_id: str) -> RecordReply:
    """A record's analysis. Raises `NotFound`."""
    row = (await connection.execute(select(records).where(records.c.id == record_id))).mappings().first()
    if row is None:
        raise NotFound(f"id: no record {record_id}")
    return RecordReply(
        id=row["id"],
        at=row["at"],
        by=row["by"],
        tag=row["tag"],
        samples=row["samples"],
        analysis=AnalysisReply.model_validate(row["result"]),
    )
