"""Who asks, and how a change is made: one transaction for the change, its journal entry and the kept answer.

Owns tokens on the way in, `Idempotency-Key`, `If-Match` and `ETag`. Knows no resource.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Awaitable, Callable, Mapping
from dataclasses import dataclass, field
from typing import Annotated

from fastapi import Depends, Header, Request, Response
from fastapi.security import HTTPAuthorizationCredentials, HTTPBearer
from pydantic import BaseModel
from sqlalchemy.ext.asyncio import AsyncConnection

from gainwright_service.api.context import Context, InContext
from gainwright_service.errors import RequestError, Unauthenticated, VersionRequired
from gainwright_service.store import answers, people
from gainwright_service.store.connect import writing
from gainwright_wire.problems import FieldProblem

_BEARER = HTTPBearer(auto_error=False, scheme_name="token", description="A person's token")
_ETAG = re.compile(r'^(?:W/)?"v(\d{1,9})"$')

Key = Annotated[
    str | None,
    Header(
        alias="Idempotency-Key",
        min_length=8,
        max_length=128,
        pattern=r"^[\x21-\x7e]+$",
        description="Chosen by the client for one change; the same key again gets the kept answer.",
    ),
]


async def person_of(context: InContext, token: Annotated[HTTPAuthorizationCredentials | None, Depends(_BEARER)]) -> str:
    """The person whose token the request carries."""
    if token is None:
        raise Unauthenticated("Authorization: Bearer TOKEN is missing; `gainwright token` makes one")
    async with context.engine.connect() as connection:
        person = await people.person_of(connection, token.credentials)
    if person is None:
        raise Unauthenticated("The token is unknown or revoked; `gainwright token` makes a new one")
    return person


InPerson = Annotated[str, Depends(person_of)]


@dataclass(frozen=True, slots=True)
class Reply:
    """What a change answers.

    Parameters
    ----------
    status : int
    document : pydantic model, rendered as JSON
    headers : mapping
    """

    status: int
    document: BaseModel
    headers: Mapping[str, str] = field(default_factory=dict)


Act = Callable[[AsyncConnection, str], Awaitable[Reply]]
"""Makes one change on the given connection at the given time."""


@dataclass(frozen=True, slots=True)
class Change:
    """One changing request: makes its change once, whatever is repeated."""

    context: Context
    person: str
    key: str | None
    request_hash: str

    async def __call__(self, act: Act) -> Response:
        """Run ``act`` in one transaction with the kept answer; a repeated key gets the answer kept."""
        at = self.context.now()
        async with writing(self.context.engine) as connection:
            kept = await self._kept(connection)
            if kept is not None:
                return kept
            reply = await act(connection, at)
            body = reply.document.model_dump_json(by_alias=True)
            if self.key is not None:
                await answers.keep(
                    connection,
                    person=self.person,
                    key=self.key,
                    request_hash=self.request_hash,
                    status=reply.status,
                    headers=dict(reply.headers),
                    body=body,
                    at=at,
                )
        return _response(reply.status, body, reply.headers)

    async def kept(self) -> Response | None:
        """The answer already kept for the key, before any long work; None where there is none."""
        if self.key is None:
            return None
        async with self.context.engine.connect() as connection:
            return await self._kept(connection)

    async def _kept(self, connection: AsyncConnection) -> Response | None:
        if self.key is None:
            return None
        kept = await answers.find(connection, person=self.person, key=self.key, request_hash=self.request_hash)
        if kept is None:
            return None
        return _response(kept.status, kept.body, {**kept.headers, "Idempotency-Replayed": "true"})


async def change_of(request: Request, context: InContext, person: InPerson, key: Key = None) -> Change:
    """The change that the request asks for."""
    digest = hashlib.sha256()
    for part in (request.method, request.url.path, request.url.query, request.headers.get("if-match", "")):
        digest.update(part.encode() + b"\0")
    digest.update(await request.body())
    return Change(context, person, key, digest.hexdigest())


InChange = Annotated[Change, Depends(change_of)]


def etag(version: int) -> str:
    """The entity tag of a version."""
    return f'"v{version}"'


def version_of(if_match: str | None) -> int:
    """The version that `If-Match` names."""
    if if_match is None:
        raise VersionRequired('A change needs If-Match with the ETag of the version read, e.g. If-Match: "v1"')
    found = _ETAG.match(if_match.strip())
    if found is None:
        wrong = FieldProblem(field="If-Match", problem="is not an ETag of this service", allowed='like "v1"')
        raise RequestError(f"{wrong.field}: {wrong.problem}", (wrong,))
    return int(found.group(1))


def _response(status: int, body: str, headers: Mapping[str, str]) -> Response:
    return Response(body, status, dict(headers), "application/json")
