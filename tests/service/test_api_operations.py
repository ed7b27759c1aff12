"""Health, metrics, OpenAPI and the documentation page."""

from __future__ import annotations

import json
import re
from collections.abc import AsyncIterator
from pathlib import Path
from typing import Any

import pytest
from fastapi.routing import APIRoute
from sqlalchemy import text

from gainwright_service.api.app import ROUTERS
from gainwright_service.api.problems import MEDIA_TYPE, STATUS
from gainwright_service.store.connect import writing
from gainwright_wire.problems import ProblemCode
from service_app import Site, a_site, sqlite_url


@pytest.fixture
async def site(tmp_path: Path) -> AsyncIterator[Site]:
    async with a_site(sqlite_url(tmp_path)) as site:
        yield site


async def test_the_process_is_live_without_a_token(site: Site) -> None:
    assert (await site.nobody.get("/health/live")).json() == {"status": "live", "detail": {}}


async def test_readiness_needs_a_worker_that_confirmed_lately(site: Site) -> None:
    assert (await site.nobody.get("/health/ready")).status_code == 503
    await site.worker_confirms()
    assert (await site.nobody.get("/health/ready")).json()["status"] == "ready"
    site.clock.now_s += 6.0
    late = await site.nobody.get("/health/ready")
    assert (late.status_code, late.json()["detail"]["worker local"]) == (503, "last confirmed 6 s ago")


async def test_metrics_are_open_metrics_text(site: Site) -> None:
    await site.ada.get("/v1/me")
    await site.nobody.get("/v1/me")
    reply = await site.nobody.get("/metrics")
    assert reply.headers["content-type"].startswith("application/openmetrics-text")
    assert reply.text.endswith("# EOF\n")
    assert 'gainwright_requests_total{status="2xx"} 1' in reply.text
    assert 'gainwright_requests_total{status="4xx"} 1' in reply.text
    assert "gainwright_streams 0" in reply.text


async def test_every_route_has_an_operation_identifier_of_its_own() -> None:
    identifiers = [r.operation_id for router in ROUTERS for r in router.routes if isinstance(r, APIRoute)]
    assert None not in identifiers
    assert len(set(identifiers)) == len(identifiers)


async def test_the_interface_is_open_api_3_1_with_every_reference_resolved(site: Site) -> None:
    document = (await site.nobody.get("/openapi.json")).json()
    assert document["openapi"].startswith("3.1")
    wanted = set(re.findall(r'"#/components/schemas/([^"]+)"', json.dumps(document)))
    assert wanted <= set(document["components"]["schemas"])


async def test_every_problem_code_is_documented_at_a_route(site: Site) -> None:
    document = (await site.nobody.get("/openapi.json")).json()
    told = json.dumps(document["paths"])
    # A device is never asked while a request waits; a task that meets these says so in its own row. The last two
    # answer requests that no documented operation describes.
    elsewhere = {c for c in ProblemCode if c.value.startswith("device_")} | {
        ProblemCode.INTERNAL,
        ProblemCode.METHOD_NOT_ALLOWED,
        ProblemCode.FORBIDDEN,
    }
    assert {c for c in ProblemCode if f"`{c.value}`" not in told} <= elsewhere
    assert set(document["components"]["schemas"]["ProblemCode"]["enum"]) == {c.value for c in STATUS}


async def test_every_operation_under_v1_documents_its_problems_as_problem_documents(site: Site) -> None:
    document = (await site.nobody.get("/openapi.json")).json()
    for path, verbs in document["paths"].items():
        for verb, operation in verbs.items():
            if not path.startswith("/v1"):
                continue
            replies: dict[str, Any] = {s: r for s, r in operation["responses"].items() if s >= "400"}
            assert {"401", "422", "503"} <= set(replies), (verb, path)
            assert all(MEDIA_TYPE in reply["content"] for reply in replies.values()), (verb, path)


async def test_the_documentation_page_fetches_nothing(site: Site) -> None:
    reply = await site.nobody.get("/docs")
    assert reply.headers["content-type"].startswith("text/html")
    assert "<script" not in reply.text
    assert set(re.findall(r'(?:src|href|action)="([^"#][^"]*)"', reply.text)) == {"/openapi.json"}
    assert "url(" not in reply.text
    for operation in ("registerLoop", "startExperiment", "analyseRecord"):
        assert operation in reply.text


async def test_a_fault_of_ours_is_a_problem_that_tells_nothing_of_it(site: Site) -> None:
    site.app.state.counts = None
    reply = await site.nobody.get("/metrics")
    assert (reply.status_code, reply.json()["code"]) == (500, "internal")
    assert "AttributeError" not in reply.text


async def _wreck(site: Site) -> None:
    async with writing(site.engine) as connection:
        for table in ("tokens", "sites"):
            await connection.execute(text(f"DROP TABLE {table}"))


async def test_a_store_that_cannot_be_used_is_a_problem_with_a_time_to_retry(site: Site) -> None:
    await _wreck(site)
    reply = await site.ada.get("/v1/loops")
    assert (reply.status_code, reply.json()["code"]) == (503, "store_unavailable")
    assert reply.headers["retry-after"] == "1"
    assert (await site.nobody.get("/health/ready")).json()["status"] == "not ready"
