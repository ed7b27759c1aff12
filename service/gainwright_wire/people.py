"""People, their tokens and the journal on the wire."""

from __future__ import annotations

from typing import Annotated, Any

from pydantic import Field

from gainwright_wire.base import HIDDEN, ShortText, Wire

PersonName = Annotated[str, Field(min_length=1, max_length=80, pattern=rf"^[^\x00-\x1f{HIDDEN}]+$")]


class Person(Wire):
    """Who stands behind a request."""

    name: PersonName


class JournalEntry(Wire):
    """One act of a person or of the service, chained to the one before by its hash."""

    number: int
    at: str
    person: str
    act: str
    subject: str
    detail: dict[str, Any]
    previous_hash: str
    hash: str


class JournalPage(Wire):
    """One page of the journal, oldest first."""

    items: tuple[JournalEntry, ...]
    next: str | None = None


class Health(Wire):
    """Liveness or readiness of the service."""

    status: ShortText
    detail: dict[str, str] = {}
