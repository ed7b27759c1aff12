"""What can go wrong between a client and the service, one tree, arranged by what the caller would do.

ClientError
+-- ServiceUnreachable               no connection: look at the address, or try again later
|   +-- ServiceTimedOut              connected, and no answer in time
+-- UnexpectedReply                  an answer outside the contract: another program, or another version
+-- Problem                          the service answered with problem details
    +-- RequestRefused               the request must change
    |   +-- InvalidRequest, NotAllowed, NotFound, Conflict, NotActive
    |   +-- PlanRefused, ChecklistBlocks, SafetyFunction, MalformedRecord
    +-- Busy                         the loop or its group is being driven: later
    +-- ExitNotAcknowledged          a person must look at the loop first
    +-- DeviceFailed                 the link or the device
    +-- ServiceFailed                the service itself: later, or look at its log

Every code of `gainwright_wire.problems` has its class in one table, `FAMILIES`.
"""

from __future__ import annotations

from gainwright_wire.problems import FieldProblem, ProblemCode
from gainwright_wire.problems import Problem as ProblemDetails


class ClientError(Exception):
    """Base of all."""


class ServiceUnreachable(ClientError):
    """No connection to the service."""

    def __init__(self, url: str, reason: str) -> None:
        self.url = url
        self.reason = reason
        super().__init__(f"{url}: {self.happened}: {reason}")

    happened = "the service cannot be reached"


class ServiceTimedOut(ServiceUnreachable):
    """The service did not answer in time."""

    happened = "the service did not answer in time"


class UnexpectedReply(ClientError):
    """The answer is none that the contract knows."""

    def __init__(self, status: int, excerpt: str) -> None:
        self.status = status
        self.excerpt = excerpt
        super().__init__(f"an answer outside the contract (status {status}): {excerpt}")


class Problem(ClientError):
    """The service answered with problem details.

    Parameters
    ----------
    details : gainwright_wire.problems.Problem
    """

    def __init__(self, details: ProblemDetails) -> None:
        self.details = details
        super().__init__(details.detail)

    @property
    def code(self) -> ProblemCode:
        """The stable code."""
        return self.details.code

    @property
    def errors(self) -> tuple[FieldProblem, ...]:
        """The fields at fault, with what is allowed."""
        return self.details.errors


class RequestRefused(Problem):
    """The request must change."""


class InvalidRequest(RequestRefused):
    """It cannot be understood as it is; `errors` name the fields."""


class NotAllowed(RequestRefused):
    """No person stands behind it, or the person may not do this."""


class NotFound(RequestRefused):
    """No such thing."""


class Conflict(RequestRefused):
    """It exists already, or has changed since it was read."""


class NotActive(RequestRefused):
    """The experiment is over."""


class PlanRefused(RequestRefused):
    """No plan stays inside the limits."""


class ChecklistBlocks(RequestRefused):
    """Checklist items block the start; `errors` name them."""


class SafetyFunction(RequestRefused):
    """The loop is part of a safety function: refused, with no override."""


class MalformedRecord(RequestRefused):
    """The columns cannot be a record of a relay test."""


class Busy(Problem):
    """The loop, or its interaction group, is being driven."""


class ExitNotAcknowledged(Problem):
    """A person must look at the loop and acknowledge first."""


class DeviceFailed(Problem):
    """The link to the device, or the device."""


class ServiceFailed(Problem):
    """The service itself."""


FAMILIES: dict[ProblemCode, type[Problem]] = {
    ProblemCode.INVALID_REQUEST: InvalidRequest,
    ProblemCode.SAFETY_FUNCTION: SafetyFunction,
    ProblemCode.UNAUTHENTICATED: NotAllowed,
    ProblemCode.FORBIDDEN: NotAllowed,
    ProblemCode.NOT_FOUND: NotFound,
    ProblemCode.METHOD_NOT_ALLOWED: InvalidRequest,
    ProblemCode.ALREADY_EXISTS: Conflict,
    ProblemCode.VERSION_CONFLICT: Conflict,
    ProblemCode.VERSION_REQUIRED: Conflict,
    ProblemCode.IDEMPOTENCY_CONFLICT: InvalidRequest,
    ProblemCode.LOOP_BUSY: Busy,
    ProblemCode.GROUP_BUSY: Busy,
    ProblemCode.NOT_ACTIVE: NotActive,
    ProblemCode.EXIT_NOT_ACKNOWLEDGED: ExitNotAcknowledged,
    ProblemCode.CHECKLIST_FAILED: ChecklistBlocks,
    ProblemCode.PLAN_REFUSED: PlanRefused,
    ProblemCode.MALFORMED_RECORD: MalformedRecord,
    ProblemCode.TOO_LARGE: InvalidRequest,
    ProblemCode.DEVICE_UNREACHABLE: DeviceFailed,
    ProblemCode.DEVICE_REFUSED: DeviceFailed,
    ProblemCode.DEVICE_TIMED_OUT: DeviceFailed,
    ProblemCode.DEVICE_NONSENSICAL: DeviceFailed,
    ProblemCode.NO_WORKER: ServiceFailed,
    ProblemCode.STORE_UNAVAILABLE: ServiceFailed,
    ProblemCode.INTERNAL: ServiceFailed,
}
