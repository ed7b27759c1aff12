"""The bound on request bodies, as ASGI middleware: counted while they arrive, whatever the header claims."""

from __future__ import annotations

from starlette.types import ASGIApp, Message, Receive, Scope, Send

from gainwright_service.api.problems import problem_reply
from gainwright_wire.problems import ProblemCode

RECORD_BYTES = 64 * 1024 * 1024
OTHER_BYTES = 512 * 1024


class BodyBound:
    """Refuses bodies above the bound with `too_large` before they are parsed."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        bound = RECORD_BYTES if scope["path"] == "/v1/records" else OTHER_BYTES
        declared = dict(scope["headers"]).get(b"content-length", b"0")
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
        arrived = iter(messages)

        async def replay() -> Message:
            for message in arrived:
                return message
            return await receive()

        await self._app(scope, replay, send)


async def _refuse(bound: int, scope: Scope, receive: Receive, send: Send) -> None:
    reply = problem_reply(
        ProblemCode.TOO_LARGE,
        f"The body is larger than the {bound} bytes allowed at {scope['path']}.",
        instance=scope["path"],
        headers={"Connection": "close"},
    )
    await reply(scope, receive, send)
