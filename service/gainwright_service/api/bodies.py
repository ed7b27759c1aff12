"""The bound on request bodies, as ASGI middleware: counted while they arrive, whatever the header claims."""

from __future__ import annotations

import json
from collections.abc import Awaitable, Callable

from starlette.types import ASGIApp, Message, Receive, Scope, Send

from gainwright_service.api.problems import problem_reply
from gainwright_wire.problems import ProblemCode

RECORD_BYTES = 16 * 1024 * 1024
OTHER_BYTES = 512 * 1024


class BodyBound:
    """Refuses bodies above the bound, reads none of somebody unknown, takes none that says a thing twice.

    Parameters
    ----------
    app : ASGIApp
    known : callable
        Whether a token is a person's.
    """

    def __init__(self, app: ASGIApp, known: Callable[[str], Awaitable[bool]]) -> None:
        self._app = app
        self._known = known

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        headers = dict(scope["headers"])
        if scope["method"] in ("POST", "PUT", "PATCH") and not await self._may_send(headers):
            # Not a byte of it is read or parsed: the routes answer that nobody is known.
            await self._app(scope, _nothing, send)
            return
        bound = RECORD_BYTES if scope["path"] == "/v1/records" else OTHER_BYTES
        declared = headers.get(b"content-length", b"0")
        if declared.isdigit() and int(declared) > bound:
            await _refuse(bound, scope, receive, send)
            return
        messages: list[Message] = []
        received, more = 0, True
        while more:
            message = await receive()
            messages.append(message)
            received += len(message.get("body", b""))
            if received > bound:
                await _refuse(bound, scope, receive, send)
                return
            more = message["type"] == "http.request" and message.get("more_body", False)
        twice = _said_twice(b"".join(m.get("body", b"") for m in messages)) if received <= OTHER_BYTES else None
        if twice is not None:
            detail = f"{twice}: the body gives it twice; give it once"
            reply = problem_reply(ProblemCode.INVALID_REQUEST, detail, instance=scope["path"])
            await reply(scope, receive, send)
            return
        arrived = iter(messages)

        async def replay() -> Message:
            for message in arrived:
                return message
            return await receive()

        await self._app(scope, replay, send)

    async def _may_send(self, headers: dict[bytes, bytes]) -> bool:
        kind, _, token = headers.get(b"authorization", b"").decode("latin-1").partition(" ")
        return kind.casefold() == "bearer" and await self._known(token.strip())


async def _nothing() -> Message:
    return {"type": "http.request", "body": b"", "more_body": False}


class _Twice(ValueError):
    """A name that an object holds twice."""


def _said_twice(body: bytes) -> str | None:
    """The name that some object of a JSON body holds twice; None where none does, or where it is no JSON."""

    def once(pairs: list[tuple[str, object]]) -> None:
        names = [name for name, _ in pairs]
        for name in names:
            if names.count(name) > 1:
                raise _Twice(name)

    try:
        json.loads(body or b"null", object_pairs_hook=once)
    except _Twice as found:
        return str(found)
    except (ValueError, RecursionError):
        return None
    return None


async def _refuse(bound: int, scope: Scope, receive: Receive, send: Send) -> None:
    reply = problem_reply(
        ProblemCode.TOO_LARGE,
        f"The body is larger than the {bound} bytes allowed at {scope['path']}.",
        instance=scope["path"],
        headers={"Connection": "close"},
    )
    await reply(scope, receive, send)
