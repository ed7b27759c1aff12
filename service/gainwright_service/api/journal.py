"""The journal, and who one is."""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Query

from gainwright_service.api.access import InPerson
from gainwright_service.api.context import InContext
from gainwright_service.api.experiments import Cursor
from gainwright_service.api.loops import Limit
from gainwright_service.api.problems import documented
from gainwright_service.store import journal
from gainwright_wire.people import JournalPage, Person

router = APIRouter(prefix="/v1", tags=["people and journal"])


@router.get("/journal", operation_id="readJournal", response_model=JournalPage, responses=documented())
async def read_journal(
    context: InContext,
    person: InPerson,
    after: Cursor = None,
    limit: Limit = 100,
    subject: Annotated[str | None, Query(max_length=200, pattern=r"^[^\x00]*$")] = None,
) -> JournalPage:
    """Acts of people and of the service, oldest first, each chained to the one before."""
    async with context.engine.connect() as connection:
        return await journal.page(connection, after, limit, subject=subject)


@router.get("/me", operation_id="showMe", response_model=Person, responses=documented())
async def show_me(person: InPerson) -> Person:
    """The person whose token the request carries."""
    return Person(name=person)
