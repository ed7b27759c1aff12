"""Samples in chunks of float64 columns. A missing number is not-a-number there, and None or empty outside."""

from __future__ import annotations

from array import array
from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt
from sqlalchemy import func, insert, select
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.store.tables import sample_chunks

COLUMNS = ("time_s", "process_variable", "controller_output", "commanded_output", "phase")
PHASES = ("listening", "probing", "swinging", "returning", "finished")
"""The phase column holds the place in this list."""

Columns = dict[str, npt.NDArray[np.float64]]


def packed(rows: Sequence[tuple[float, float, float, float, float]]) -> bytes:
    """Rows in the order of `COLUMNS` as one chunk's bytes, column after column, little-endian."""
    columns = array("d")
    for k in range(len(COLUMNS)):
        columns.extend(row[k] for row in rows)
    return columns.tobytes()


async def append_chunk(
    connection: AsyncConnection, task_id: str, *, first_number: int, rows: Sequence[tuple[float, ...]]
) -> None:
    """Keep rows as one chunk that begins with sample ``first_number``."""
    five = [(row[0], row[1], row[2], row[3], row[4]) for row in rows]
    await connection.execute(
        insert(sample_chunks).values(
            task_id=task_id, first_number=first_number, samples=len(five), columns=packed(five)
        )
    )


async def columns(connection: AsyncConnection, task_id: str, from_number: int = 0) -> Columns:
    """All samples from a number on, by column name."""
    query = (
        select(sample_chunks.c.first_number, sample_chunks.c.samples, sample_chunks.c.columns)
        .where(
            sample_chunks.c.task_id == task_id,
            sample_chunks.c.first_number + sample_chunks.c.samples > from_number,
        )
        .order_by(sample_chunks.c.first_number)
    )
    chunks = [
        np.frombuffer(row.columns, dtype="<f8").reshape(len(COLUMNS), row.samples)[
            :, max(from_number - row.first_number, 0) :
        ]
        for row in (await connection.execute(query)).all()
    ]
    whole = np.concatenate(chunks, axis=1) if chunks else np.empty((len(COLUMNS), 0))
    return dict(zip(COLUMNS, whole, strict=True))


async def stored(connection: AsyncConnection, task_id: str) -> int:
    """How many samples of a task are kept."""
    query = select(func.coalesce(func.sum(sample_chunks.c.samples), 0)).where(sample_chunks.c.task_id == task_id)
    return int((await connection.execute(query)).scalar_one())


def named(whole: Mapping[str, npt.NDArray[np.float64]]) -> list[str]:
    """The phase column as names."""
    return [PHASES[int(code)] for code in whole["phase"]]
