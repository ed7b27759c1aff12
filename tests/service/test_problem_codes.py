"""Every stable code has one status and one title, and every error of the service carries a known code."""

from __future__ import annotations

import pytest

from gainwright_service import errors
from gainwright_service.api.problems import STATUS, documented, problem_reply
from gainwright_wire.problems import Problem, ProblemCode


def _service_errors(base: type[errors.ServiceError] = errors.ServiceError) -> list[type[errors.ServiceError]]:
    return [base, *(e for child in base.__subclasses__() for e in _service_errors(child))]


def test_every_code_is_mapped_to_a_status_and_a_title() -> None:
    assert set(STATUS) == set(ProblemCode)
    assert all(400 <= status < 600 and title for status, title in STATUS.values())


@pytest.mark.parametrize("error", _service_errors(), ids=lambda e: e.__name__)
def test_every_error_of_the_service_carries_a_mapped_code(error: type[errors.ServiceError]) -> None:
    assert error.code in STATUS


def test_every_code_is_carried_by_an_error_or_by_the_surface_itself() -> None:
    by_surface = {ProblemCode.METHOD_NOT_ALLOWED, ProblemCode.TOO_LARGE}
    carried = {error.code for error in _service_errors()}
    assert carried | by_surface == set(ProblemCode)


@pytest.mark.parametrize("code", list(ProblemCode))
def test_a_problem_reply_is_a_problem_document(code: ProblemCode) -> None:
    reply = problem_reply(code, "because", instance="/v1/loops")
    problem = Problem.model_validate_json(bytes(reply.body))
    assert reply.media_type == "application/problem+json"
    assert (problem.code, problem.status, problem.detail) == (code, reply.status_code, "because")
    assert problem.type == f"urn:gainwright:problem:{code.value}"


def test_what_every_route_can_answer_is_documented_with_it() -> None:
    assert {401, 422, 503, 404} <= set(documented(ProblemCode.NOT_FOUND))
