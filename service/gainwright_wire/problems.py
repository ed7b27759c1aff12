"""Problem details (RFC 9457) and the closed list of their codes."""

from __future__ import annotations

from enum import StrEnum

from pydantic import BaseModel, ConfigDict

from gainwright_wire.base import Wire


class ProblemCode(StrEnum):
    """Every code that a reply of the service can carry. Whose fault it is stands in the comment."""

    INVALID_REQUEST = "invalid_request"  # the request
    SAFETY_FUNCTION = "safety_function"  # the request: refused without override
    UNAUTHENTICATED = "unauthenticated"  # the request
    FORBIDDEN = "forbidden"  # the request
    NOT_FOUND = "not_found"  # the request
    METHOD_NOT_ALLOWED = "method_not_allowed"  # the request
    ALREADY_EXISTS = "already_exists"  # the request
    VERSION_CONFLICT = "version_conflict"  # the request
    VERSION_REQUIRED = "version_required"  # the request
    IDEMPOTENCY_CONFLICT = "idempotency_conflict"  # the request
    LOOP_BUSY = "loop_busy"  # the request: another driving task is active
    GROUP_BUSY = "group_busy"  # the request: the interaction group is taken
    NOT_ACTIVE = "not_active"  # the request
    EXIT_NOT_ACKNOWLEDGED = "exit_not_acknowledged"  # the request: a person must look first
    CHECKLIST_FAILED = "checklist_failed"  # the request
    PLAN_REFUSED = "plan_refused"  # the request: the plan cannot stay inside the limits
    MALFORMED_RECORD = "malformed_record"  # the data
    TOO_LARGE = "too_large"  # the request
    DEVICE_UNREACHABLE = "device_unreachable"  # the link
    DEVICE_REFUSED = "device_refused"  # the link
    DEVICE_TIMED_OUT = "device_timed_out"  # the link
    DEVICE_NONSENSICAL = "device_nonsensical"  # the plant
    NO_WORKER = "no_worker"  # us
    STORE_UNAVAILABLE = "store_unavailable"  # us
    INTERNAL = "internal"  # us


class FieldProblem(Wire):
    """One field at fault: its path, what is wrong, what is allowed."""

    field: str
    problem: str
    allowed: str = ""


class Problem(BaseModel):
    """RFC 9457 problem details with a stable code."""

    model_config = ConfigDict(extra="allow", frozen=True)

    type: str = "about:blank"
    title: str
    status: int
    detail: str
    instance: str | None = None
    code: ProblemCode
    errors: tuple[FieldProblem, ...] = ()
