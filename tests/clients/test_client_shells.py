"""The two shells: the same calls, the same requests; every problem code has its error."""

from __future__ import annotations

import inspect
from collections.abc import Callable
from typing import Any

import httpx
import pytest

from gainwright_client import errors, requests
from gainwright_client.aclient import AsyncClient
from gainwright_client.client import Client
from gainwright_client.flows import PAUSES_S
from gainwright_client.following import PATIENCE
from gainwright_client.replies import Reply, check, parse
from gainwright_wire.analyses import RecordUpload
from gainwright_wire.people import Person
from gainwright_wire.problems import Problem, ProblemCode
from gainwright_wire.tasks import Answer, ForecastRequest, StartExperiment, TaskState
from service_loops import a_loop

ID = "0" * 32
NO_SUCH_THING = Problem(title="t", status=404, detail="none", code=ProblemCode.NOT_FOUND).model_dump(mode="json")
UPLOAD = RecordUpload(time_s=[0, 1], process_variable=[1, 2], controller_output=[3, 4])
CALLS: dict[str, tuple[Any, ...]] = {
    "me": (),
    "register_loop": (a_loop(),),
    "loop": ("TIC-201",),
    "replace_loop": (a_loop(), 3),
    "loop_page": ("TIC-100", 7),
    "loops": (),
    "forecast": ("TIC-201", ForecastRequest(static_gain=2.0)),
    "start_experiment": ("TIC-201", StartExperiment(attended=True)),
    "experiment_page": ("TIC-201", TaskState.RUNNING, "12", 5),
    "experiment": (ID,),
    "stop_experiment": (ID,),
    "acknowledge_exit": (ID, "looked at it"),
    "samples": (ID, 12),
    "samples_csv": (ID,),
    "checklist": (ID,),
    "answer_checklist": (ID, {"B1": Answer(verdict="pass")}),
    "analyse_record": (UPLOAD,),
    "record": (ID,),
    "journal_page": ("3", 10, "TIC-201"),
}
OWN = {"close", "aclose", "follow"}


def _public(shell: type) -> set[str]:
    return {name for name, _ in inspect.getmembers(shell, inspect.isfunction) if not name.startswith("_")}


def test_both_shells_offer_the_same_calls_with_the_same_parameters() -> None:
    assert _public(Client) - OWN == _public(AsyncClient) - OWN == set(CALLS)
    for name in CALLS:
        assert inspect.signature(getattr(Client, name)) == inspect.signature(getattr(AsyncClient, name))


def _teapot(seen: list[httpx.Request]) -> Callable[[httpx.Request], httpx.Response]:
    def answer(request: httpx.Request) -> httpx.Response:
        seen.append(request)
        return httpx.Response(418, text="a pot")

    return answer


def _told(request: httpx.Request) -> tuple[Any, ...]:
    headers = {k: v for k, v in request.headers.items() if k != "idempotency-key"}
    return request.method, request.url, headers, request.content, "idempotency-key" in request.headers


@pytest.mark.parametrize("name", CALLS)
async def test_both_shells_send_the_same_request(name: str) -> None:
    seen: list[httpx.Request] = []
    transport = httpx.MockTransport(_teapot(seen))
    with Client("http://a", "t", transport=transport) as client, pytest.raises(errors.UnexpectedReply):
        getattr(client, name)(*CALLS[name])
    async with AsyncClient("http://a", "t", transport=transport) as aclient:
        with pytest.raises(errors.UnexpectedReply):
            await getattr(aclient, name)(*CALLS[name])
    assert _told(seen[0]) == _told(seen[1])
    assert seen[0].headers["authorization"] == "Bearer t"
    changing = seen[0].method != "GET" and name != "forecast"
    assert ("idempotency-key" in seen[0].headers) == changing


def test_every_changing_request_has_a_key_of_its_own() -> None:
    first, second = requests.stop_experiment(ID), requests.stop_experiment(ID)
    assert first.headers["Idempotency-Key"] != second.headers["Idempotency-Key"]


@pytest.mark.parametrize("code", list(ProblemCode))
def test_every_problem_code_is_raised_as_its_family_with_code_and_fields(code: ProblemCode) -> None:
    problem = Problem(title="t", status=409, detail="what is wrong", code=code, errors=())
    with pytest.raises(errors.FAMILIES[code]) as raised:
        check(Reply(409, problem.model_dump_json().encode()))
    assert raised.value.code is code
    assert raised.value.errors == ()
    assert str(raised.value) == "what is wrong"


def test_every_family_stands_in_the_table_and_in_the_tree() -> None:
    def leaves(kind: type) -> set[type]:
        below: list[type] = kind.__subclasses__()
        return {kind} if not below else set().union(*(leaves(k) for k in below))

    assert leaves(errors.Problem) == set(errors.FAMILIES.values())
    tree = errors.__doc__ or ""
    assert all(kind.__name__ in tree for kind in leaves(errors.ClientError))


@pytest.mark.parametrize("body", [b"", b"<html>", b'{"name": 3}'])
def test_an_answer_outside_the_contract_says_what_came(body: bytes) -> None:
    with pytest.raises(errors.UnexpectedReply) as raised:
        parse(Person, Reply(200, body))
    assert raised.value.excerpt == body.decode()


def _dead(request: httpx.Request) -> httpx.Response:
    raise httpx.ConnectError("refused", request=request)


def test_a_dead_service_is_named_after_all_repetitions() -> None:
    pauses: list[float] = []
    with (
        Client("http://a", "t", transport=httpx.MockTransport(_dead), pause=pauses.append) as client,
        pytest.raises(errors.ServiceUnreachable, match="http://a: the service cannot be reached: refused"),
    ):
        client.me()
    assert pauses == list(PAUSES_S)


def test_a_slow_service_is_named() -> None:
    def slow(request: httpx.Request) -> httpx.Response:
        raise httpx.ReadTimeout("", request=request)

    with (
        Client("http://a", transport=httpx.MockTransport(slow), pause=lambda s: None) as client,
        pytest.raises(errors.ServiceTimedOut, match="did not answer in time"),
    ):
        client.me()


def test_a_changing_request_is_repeated_with_its_key_after_a_broken_connection() -> None:
    keys: list[str] = []

    def broken_twice(request: httpx.Request) -> httpx.Response:
        keys.append(request.headers["idempotency-key"])
        if len(keys) < 3:
            raise httpx.ReadError("reset", request=request)
        return httpx.Response(
            404, json=Problem(title="", status=404, detail="", code=ProblemCode.NOT_FOUND).model_dump()
        )

    with (
        Client("http://a", transport=httpx.MockTransport(broken_twice), pause=lambda s: None) as client,
        pytest.raises(errors.NotFound),
    ):
        client.stop_experiment(ID)
    assert len(keys) == 3
    assert len(set(keys)) == 1


def test_following_gives_up_when_patience_is_over() -> None:
    pauses: list[float] = []
    with (
        Client("http://a", transport=httpx.MockTransport(_dead), pause=pauses.append) as client,
        pytest.raises(errors.ServiceUnreachable),
    ):
        list(client.follow(ID))
    assert len(pauses) == PATIENCE


def test_following_what_does_not_exist_is_raised_at_once() -> None:
    transport = httpx.MockTransport(lambda request: httpx.Response(404, json=NO_SUCH_THING))
    with Client("http://a", transport=transport) as client, pytest.raises(errors.NotFound):
        list(client.follow(ID))
