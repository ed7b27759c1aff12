"""Health, metrics and the documentation page: what runs beside `/v1`, without a token."""

from __future__ import annotations

from fastapi import APIRouter, Request, Response
from fastapi.responses import HTMLResponse, JSONResponse

from gainwright_service.api import documentation
from gainwright_service.api.context import Context, InContext
from gainwright_service.errors import StoreError
from gainwright_service.store import sites, tasks
from gainwright_wire.people import Health

router = APIRouter(tags=["operations"])

CONFIRMED_WITHIN_S = 5.0
OPEN_METRICS = "application/openmetrics-text; version=1.0.0; charset=utf-8"


@router.get("/health/live", operation_id="healthLive", response_model=Health)
async def live() -> Health:
    """Whether this process answers."""
    return Health(status="live")


@router.get(
    "/health/ready",
    operation_id="healthReady",
    response_model=Health,
    responses={503: {"model": Health, "description": "The store does not answer, or no worker has confirmed lately"}},
)
async def ready(context: InContext) -> Response:
    """Whether the store answers and every known site's worker has confirmed within five seconds."""
    health = await _readiness(context)
    return JSONResponse(health.model_dump(), 200 if health.status == "ready" else 503)


@router.get(
    "/metrics",
    operation_id="metrics",
    response_class=Response,
    responses={200: {"content": {OPEN_METRICS: {"schema": {"type": "string"}}}, "description": "OpenMetrics text"}},
)
async def metrics(request: Request, context: InContext) -> Response:
    """Counts for a monitoring system, in OpenMetrics text."""
    counts = request.app.state.counts
    async with context.engine.connect() as connection:
        by_state = await tasks.count_by_state(connection)
    lines = [
        "# TYPE gainwright_requests counter",
        "# HELP gainwright_requests Requests answered by this process, by status class.",
        *(f'gainwright_requests_total{{status="{status}"}} {n}' for status, n in sorted(counts.by_status.items())),
        "# TYPE gainwright_streams gauge",
        "# HELP gainwright_streams Live streams open in this process.",
        f"gainwright_streams {context.follower.listeners}",
        "# TYPE gainwright_tasks gauge",
        "# HELP gainwright_tasks Tasks in the store, by state.",
        *(f'gainwright_tasks{{state="{state}"}} {n}' for state, n in sorted(by_state.items())),
        "# EOF",
    ]
    return Response("\n".join(lines) + "\n", 200, media_type=OPEN_METRICS)


@router.get("/docs", operation_id="documentation", response_class=HTMLResponse)
async def docs(request: Request) -> HTMLResponse:
    """This interface as a page that fetches nothing."""
    return HTMLResponse(documentation.page(request.app.openapi()))


async def _readiness(context: Context) -> Health:
    now = context.now_s()
    try:
        async with context.engine.connect() as connection:
            known = await sites.confirmations(connection)
    except StoreError as error:
        return Health(status="not ready", detail={"store": error.detail})
    detail = {"store": "answers"}
    ok = bool(known)
    for site, confirmed_at in known.items():
        age = now - confirmed_at
        fresh = age <= CONFIRMED_WITHIN_S
        ok = ok and fresh
        detail[f"worker {site}"] = "confirmed" if fresh else f"last confirmed {age:.0f} s ago"
    if not known:
        detail["worker"] = "none has ever served"
    return Health(status="ready" if ok else "not ready", detail=detail)
