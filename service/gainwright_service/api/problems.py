"""Errors become problem details (RFC 9457). Owns the one table from a stable code to its HTTP status and title.

Nothing leaves the service as anything else: the service's own errors, bad input, unknown paths, wrong methods,
too large bodies and our own faults all pass through here.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse
from starlette.exceptions import HTTPException

from gainwright.errors import GainwrightError
from gainwright_service.api.fields import field_problems
from gainwright_service.errors import ServiceError
from gainwright_wire.problems import FieldProblem, Problem, ProblemCode

MEDIA_TYPE = "application/problem+json"

STATUS: dict[ProblemCode, tuple[int, str]] = {
    ProblemCode.INVALID_REQUEST: (422, "The request cannot be understood as it is"),
    ProblemCode.SAFETY_FUNCTION: (422, "The loop is part of a safety function"),
    ProblemCode.UNAUTHENTICATED: (401, "No person stands behind the request"),
    ProblemCode.FORBIDDEN: (403, "The person may not do this"),
    ProblemCode.NOT_FOUND: (404, "No such thing"),
    ProblemCode.METHOD_NOT_ALLOWED: (405, "The method does not apply here"),
    ProblemCode.ALREADY_EXISTS: (409, "It exists already"),
    ProblemCode.VERSION_CONFLICT: (412, "It has changed since it was read"),
    ProblemCode.VERSION_REQUIRED: (428, "If-Match is required"),
    ProblemCode.IDEMPOTENCY_CONFLICT: (422, "The Idempotency-Key was used for another request"),
    ProblemCode.LOOP_BUSY: (409, "The loop is being driven"),
    ProblemCode.GROUP_BUSY: (409, "A loop of the same interaction group is being driven"),
    ProblemCode.NOT_ACTIVE: (409, "It is over"),
    ProblemCode.EXIT_NOT_ACKNOWLEDGED: (409, "A person must look at the loop first"),
    ProblemCode.CHECKLIST_FAILED: (409, "The checklist blocks the start"),
    ProblemCode.PLAN_REFUSED: (422, "No plan stays inside the limits"),
    ProblemCode.MALFORMED_RECORD: (422, "The columns cannot be a record of a relay test"),
    ProblemCode.TOO_LARGE: (413, "The request is too large"),
    ProblemCode.DEVICE_UNREACHABLE: (502, "The device cannot be reached"),
    ProblemCode.DEVICE_REFUSED: (502, "The device refused"),
    ProblemCode.DEVICE_TIMED_OUT: (504, "The device did not answer in time"),
    ProblemCode.DEVICE_NONSENSICAL: (502, "The device answered with what cannot be true"),
    ProblemCode.NO_WORKER: (503, "No worker serves the loop's site"),
    ProblemCode.STORE_UNAVAILABLE: (503, "The store does not answer"),
    ProblemCode.INTERNAL: (500, "A fault of the service"),
}

_HTTP_CODES = {
    401: ProblemCode.UNAUTHENTICATED,
    403: ProblemCode.FORBIDDEN,
    404: ProblemCode.NOT_FOUND,
    405: ProblemCode.METHOD_NOT_ALLOWED,
    413: ProblemCode.TOO_LARGE,
}


def problem_reply(
    code: ProblemCode,
    detail: str,
    *,
    instance: str,
    errors: Iterable[FieldProblem] = (),
    headers: dict[str, str] | None = None,
) -> JSONResponse:
    """One problem as a reply."""
    status, title = STATUS[code]
    problem = Problem(
        type=f"urn:gainwright:problem:{code.value}",
        title=title,
        status=status,
        detail=detail,
        instance=instance,
        code=code,
        errors=tuple(errors),
    )
    extra = dict(headers or {})
    if code is ProblemCode.UNAUTHENTICATED:
        extra["WWW-Authenticate"] = "Bearer"
    if status == 503:
        extra["Retry-After"] = "1"
    return JSONResponse(problem.model_dump(mode="json"), status, extra, MEDIA_TYPE)


def documented(*codes: ProblemCode) -> dict[int | str, dict[str, Any]]:
    """The problem replies of a route for OpenAPI; those that every route under `/v1` can give are added."""
    always = (ProblemCode.UNAUTHENTICATED, ProblemCode.INVALID_REQUEST, ProblemCode.STORE_UNAVAILABLE)
    by_status: dict[int, list[ProblemCode]] = {}
    for code in dict.fromkeys((*always, *codes)):
        by_status.setdefault(STATUS[code][0], []).append(code)
    return {
        status: {
            "description": "; ".join(f"`{c.value}`: {STATUS[c][1]}" for c in sorted(found)),
            "content": {MEDIA_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}},
        }
        for status, found in sorted(by_status.items())
    }


def install(app: FastAPI) -> None:
    """Let every error of the app leave as a problem."""
    app.add_exception_handler(ServiceError, _service_error)
    app.add_exception_handler(GainwrightError, _numerics_error)
    app.add_exception_handler(RequestValidationError, _invalid)
    app.add_exception_handler(HTTPException, _http_error)
    app.add_exception_handler(Exception, _internal)


async def _service_error(request: Request, error: Exception) -> JSONResponse:
    assert isinstance(error, ServiceError)
    return problem_reply(error.code, error.detail, instance=request.url.path, errors=error.errors)


async def _numerics_error(request: Request, error: Exception) -> JSONResponse:
    assert isinstance(error, GainwrightError)
    at_fault = FieldProblem(field=error.field, problem=error.problem, allowed=error.allowed)
    return problem_reply(ProblemCode.MALFORMED_RECORD, str(error), instance=request.url.path, errors=(at_fault,))


async def _invalid(request: Request, error: Exception) -> JSONResponse:
    assert isinstance(error, RequestValidationError)
    found = error.errors()
    errors = field_problems(found)
    safety = any(e["type"] == ProblemCode.SAFETY_FUNCTION.value for e in found)
    code = ProblemCode.SAFETY_FUNCTION if safety else ProblemCode.INVALID_REQUEST
    detail = "; ".join(f"{e.field}: {e.problem}" if e.field else e.problem for e in errors[:8])
    return problem_reply(code, detail, instance=request.url.path, errors=errors)


async def _http_error(request: Request, error: Exception) -> JSONResponse:
    assert isinstance(error, HTTPException)
    code = _HTTP_CODES.get(error.status_code, ProblemCode.INVALID_REQUEST)
    if error.status_code >= 500:
        code = ProblemCode.INTERNAL
    detail = str(error.detail)
    if code is ProblemCode.NOT_FOUND:
        detail = f"{request.url.path} does not exist; the paths stand in /openapi.json"
    if code is ProblemCode.METHOD_NOT_ALLOWED:
        allowed = (error.headers or {}).get("Allow", "")
        detail = f"{request.method} does not apply to {request.url.path}; allowed: {allowed}"
    headers = dict(error.headers) if error.headers else None
    return problem_reply(code, detail, instance=request.url.path, headers=headers)


async def _internal(request: Request, error: Exception) -> JSONResponse:
    return problem_reply(
        ProblemCode.INTERNAL,
        "The service failed at this request and says why in its own log; nothing was changed.",
        instance=request.url.path,
    )
