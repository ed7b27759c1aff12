"""The app: routers, middleware and OpenAPI put together from parts that the caller owns."""

from __future__ import annotations

from collections import Counter
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from typing import Any

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from gainwright_service.api import experiments, journal, live, loops, operations, problems, records
from gainwright_service.api.bodies import BodyBound
from gainwright_service.api.context import Context
from gainwright_wire.problems import Problem

TITLE = "Gainwright"
VERSION = "1"
DESCRIPTION = (
    "Relay-feedback tuning of live PID loops. The software limits, the software watchdog and the stop are no "
    "protection layer; no risk reduction may be claimed for them, and the stop is not an emergency stop."
)
ROUTERS = (loops.router, experiments.router, live.router, records.router, journal.router, operations.router)


@dataclass(slots=True)
class Counts:
    """Requests answered, by status class."""

    by_status: Counter[str] = field(default_factory=Counter)


def create_app(context: Context) -> FastAPI:
    """The HTTP surface over a context; the context's parts are opened and closed by the caller."""

    @asynccontextmanager
    async def lifespan(app: FastAPI) -> AsyncIterator[None]:
        yield
        await context.follower.close()

    app = FastAPI(
        title=TITLE,
        version=VERSION,
        description=DESCRIPTION,
        docs_url=None,
        redoc_url=None,
        lifespan=lifespan,
        redirect_slashes=False,
        separate_input_output_schemas=False,
    )
    app.state.context = context
    app.state.counts = Counts()
    for router in ROUTERS:
        app.include_router(router)
    problems.install(app)
    app.add_middleware(BodyBound, known=context.knows)
    app.add_middleware(_Counting, counts=app.state.counts)
    app.openapi = lambda: _openapi(app)  # type: ignore[method-assign]
    return app


class _Counting:
    """Counts replies by status class."""

    def __init__(self, app: ASGIApp, counts: Counts) -> None:
        self._app = app
        self._counts = counts

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        async def counted(message: Message) -> None:
            if message["type"] == "http.response.start":
                self._counts.by_status[f"{message['status'] // 100}xx"] += 1
            await send(message)

        await self._app(scope, receive, counted if scope["type"] == "http" else send)


def _openapi(app: FastAPI) -> dict[str, Any]:
    """OpenAPI 3.1 with the problem document, which no route returns as its own model, among the schemas."""
    if app.openapi_schema is None:
        document = get_openapi(title=app.title, version=app.version, description=app.description, routes=app.routes)
        schema = Problem.model_json_schema(ref_template="#/components/schemas/{model}")
        schemas = document["components"]["schemas"]
        schemas.update(schema.pop("$defs", {}))
        schemas["Problem"] = schema
        for name in ("HTTPValidationError", "ValidationError"):
            schemas.pop(name, None)
        app.openapi_schema = document
    return app.openapi_schema
