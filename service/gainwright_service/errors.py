"""The service's errors, one tree, arranged by whose fault it is.

ServiceError
+-- RequestError                     the request: it must change
|   +-- NotFound, AlreadyExists, VersionConflict, VersionRequired, IdempotencyConflict
|   +-- LoopBusy, GroupBusy, NotActive, ExitNotAcknowledged
|   +-- SafetyFunctionRefused, PlanRefused, ChecklistFailed, RecordRefused
|   +-- Unauthenticated, Forbidden
+-- AdapterError                     the link or the device
|   +-- DeviceUnreachable            no connection
|   +-- DeviceRefused                the device answered with an error
|   +-- DeviceTimedOut               no answer in time
|   +-- DeviceNonsensical            an answer that cannot be true
|   +-- WriteWithheld                not sent: the site's lock is too old to trust
+-- StoreError                       us: the store cannot be used now
|   +-- StoreUnavailable
|   +-- LockLost
+-- NoWorker                         us: no worker serves this site

Each class carries the stable `code` of `gainwright_wire.problems`; the HTTP status of a code stands in one table,
`gainwright_service.api.problems`.
"""

from __future__ import annotations

from typing import ClassVar

from gainwright_wire.problems import FieldProblem, ProblemCode


class ServiceError(Exception):
    """Base. ``detail`` is for people; ``errors`` name the fields at fault."""

    code: ClassVar[ProblemCode] = ProblemCode.INTERNAL

    def __init__(self, detail: str, errors: tuple[FieldProblem, ...] = ()) -> None:
        self.detail = detail
        self.errors = errors
        super().__init__(detail)


class RequestError(ServiceError):
    """The request must change."""

    code = ProblemCode.INVALID_REQUEST


class NotFound(RequestError):
    """No such thing."""

    code = ProblemCode.NOT_FOUND


class AlreadyExists(RequestError):
    """It is registered already."""

    code = ProblemCode.ALREADY_EXISTS


class VersionConflict(RequestError):
    """`If-Match` names another version than the one kept."""

    code = ProblemCode.VERSION_CONFLICT


class VersionRequired(RequestError):
    """A change to what can be edited needs `If-Match`."""

    code = ProblemCode.VERSION_REQUIRED


class IdempotencyConflict(RequestError):
    """The `Idempotency-Key` was used for another request."""

    code = ProblemCode.IDEMPOTENCY_CONFLICT


class LoopBusy(RequestError):
    """Another task drives the loop."""

    code = ProblemCode.LOOP_BUSY


class GroupBusy(RequestError):
    """Another loop of an interaction group is being driven."""

    code = ProblemCode.GROUP_BUSY


class NotActive(RequestError):
    """The task is over."""

    code = ProblemCode.NOT_ACTIVE


class ExitNotAcknowledged(RequestError):
    """A person must look at the loop and acknowledge before it is driven again."""

    code = ProblemCode.EXIT_NOT_ACKNOWLEDGED


class SafetyFunctionRefused(RequestError):
    """The loop is part of a safety function."""

    code = ProblemCode.SAFETY_FUNCTION


class PlanRefused(RequestError):
    """No plan stays inside the limits."""

    code = ProblemCode.PLAN_REFUSED


class ChecklistFailed(RequestError):
    """The checklist blocks the start."""

    code = ProblemCode.CHECKLIST_FAILED


class RecordRefused(RequestError):
    """An uploaded record is malformed."""

    code = ProblemCode.MALFORMED_RECORD


class Unauthenticated(RequestError):
    """No person stands behind the request."""

    code = ProblemCode.UNAUTHENTICATED


class Forbidden(RequestError):
    """The person may not do this."""

    code = ProblemCode.FORBIDDEN


class AdapterError(ServiceError):
    """The link or the device; base of all errors that an adapter may raise."""

    code = ProblemCode.DEVICE_UNREACHABLE


class DeviceUnreachable(AdapterError):
    """No connection to the device."""


class DeviceRefused(AdapterError):
    """The device answered with an error."""

    code = ProblemCode.DEVICE_REFUSED


class DeviceTimedOut(AdapterError):
    """No answer within the link's timeout."""

    code = ProblemCode.DEVICE_TIMED_OUT


class DeviceNonsensical(AdapterError):
    """The device gave a value that cannot be true."""

    code = ProblemCode.DEVICE_NONSENSICAL


class WriteWithheld(AdapterError):
    """A write that was not sent, since another worker may be at the device."""


class StoreError(ServiceError):
    """The store cannot be used now."""

    code = ProblemCode.STORE_UNAVAILABLE


class StoreUnavailable(StoreError):
    """The database does not answer or takes no more."""


class LockLost(StoreError):
    """This worker no longer holds its site."""


class NoWorker(ServiceError):
    """No worker serves this site."""

    code = ProblemCode.NO_WORKER
