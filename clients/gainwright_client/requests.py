"""Requests to the service, one builder per operation, each with the parser of its reply. No I/O.

A changing request carries an `Idempotency-Key` of its own from the moment it is built, so that sending the same
request again, after a broken connection, changes nothing twice.
"""

from __future__ import annotations

import json
import uuid
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import partial
from typing import Any, Generic, TypeVar
from urllib.parse import quote

from gainwright_client.replies import Reply, parse, text
from gainwright_wire.analyses import Checklist, RecordReply, RecordUpload
from gainwright_wire.base import Wire
from gainwright_wire.loops import Loop, LoopPage, RegisteredLoop
from gainwright_wire.people import JournalPage, Person
from gainwright_wire.tasks import (
    Acknowledge,
    Answer,
    Experiment,
    ExperimentPage,
    Forecast,
    ForecastRequest,
    Samples,
    StartExperiment,
    TaskState,
)

Result = TypeVar("Result")
Result_co = TypeVar("Result_co", covariant=True)


@dataclass(frozen=True, slots=True)
class Request(Generic[Result_co]):
    """One request and how its reply is read.

    Parameters
    ----------
    method, path : str
    read : callable
        The reply's document; raises the reply's error.
    query, headers : mapping
    body : bytes or None
        JSON.
    """

    method: str
    path: str
    read: Callable[[Reply], Result_co]
    query: Mapping[str, str] = field(default_factory=dict)
    headers: Mapping[str, str] = field(default_factory=dict)
    body: bytes | None = None


def me() -> Request[Person]:
    """Who the token's person is."""
    return Request("GET", "/v1/me", partial(parse, Person))


def register_loop(loop: Loop | Mapping[str, Any]) -> Request[RegisteredLoop]:
    """Register a loop; a mapping is sent as it is, and judged by the service."""
    return _change("POST", "/v1/loops", partial(parse, RegisteredLoop), loop)


def show_loop(tag: str) -> Request[RegisteredLoop]:
    """One loop."""
    return Request("GET", f"/v1/loops/{_part(tag)}", partial(parse, RegisteredLoop))


def replace_loop(loop: Loop | Mapping[str, Any], version: int) -> Request[RegisteredLoop]:
    """Replace the definition that was read as ``version``."""
    tag = loop.tag if isinstance(loop, Loop) else str(loop.get("tag", ""))
    return _change(
        "PUT", f"/v1/loops/{_part(tag)}", partial(parse, RegisteredLoop), loop, {"If-Match": f'"v{version}"'}
    )


def list_loops(after: str | None = None, limit: int = 100) -> Request[LoopPage]:
    """One page of loops by tag."""
    return Request("GET", "/v1/loops", partial(parse, LoopPage), _query(after=after, limit=limit))


def forecast(tag: str, guess: ForecastRequest | None = None) -> Request[Forecast]:
    """Forecast a test; moves nothing."""
    body = _json(guess or ForecastRequest())
    return Request("POST", f"/v1/loops/{_part(tag)}/forecast", partial(parse, Forecast), {}, _JSON, body)


def start_experiment(tag: str, start: StartExperiment) -> Request[Experiment]:
    """Start a test."""
    return _change("POST", f"/v1/loops/{_part(tag)}/experiments", partial(parse, Experiment), start)


def list_experiments(
    tag: str | None = None, state: TaskState | None = None, after: str | None = None, limit: int = 50
) -> Request[ExperimentPage]:
    """One page of experiments, newest first."""
    query = _query(tag=tag, state=state, after=after, limit=limit)
    return Request("GET", "/v1/experiments", partial(parse, ExperimentPage), query)


def show_experiment(id: str) -> Request[Experiment]:
    """One experiment as it stands."""
    return Request("GET", f"/v1/experiments/{_part(id)}", partial(parse, Experiment))


def stop_experiment(id: str) -> Request[Experiment]:
    """Ask for a stop: the test ends through its exit action."""
    return _change("POST", f"/v1/experiments/{_part(id)}/stop", partial(parse, Experiment))


def acknowledge_exit(id: str, remark: str) -> Request[Experiment]:
    """Say that a person has looked at the loop."""
    return _change(
        "POST", f"/v1/experiments/{_part(id)}/acknowledge", partial(parse, Experiment), Acknowledge(remark=remark)
    )


def samples(id: str, from_number: int = 0) -> Request[Samples]:
    """The samples in columns."""
    query = _query(format="json", from_number=from_number)
    return Request("GET", f"/v1/experiments/{_part(id)}/samples", partial(parse, Samples), query)


def samples_csv(id: str, from_number: int = 0) -> Request[str]:
    """The samples as CSV text."""
    query = _query(format="csv", from_number=from_number)
    return Request("GET", f"/v1/experiments/{_part(id)}/samples", text, query)


def show_checklist(id: str) -> Request[Checklist]:
    """The checklist with everything known so far."""
    return Request("GET", f"/v1/experiments/{_part(id)}/checklist", partial(parse, Checklist))


def answer_checklist(id: str, answers: Mapping[str, Answer]) -> Request[Checklist]:
    """Answer items of the checklist in one's own name."""
    document = {item: answer.model_dump(mode="json") for item, answer in answers.items()}
    return _change("POST", f"/v1/experiments/{_part(id)}/checklist", partial(parse, Checklist), document)


def analyse_record(upload: RecordUpload) -> Request[RecordReply]:
    """Have a record of a test analysed and kept."""
    return _change("POST", "/v1/records", partial(parse, RecordReply), upload)


def show_record(id: str) -> Request[RecordReply]:
    """An uploaded record's analysis."""
    return Request("GET", f"/v1/records/{_part(id)}", partial(parse, RecordReply))


def journal(after: str | None = None, limit: int = 100, subject: str | None = None) -> Request[JournalPage]:
    """One page of the journal, oldest first."""
    query = _query(after=after, limit=limit, subject=subject)
    return Request("GET", "/v1/journal", partial(parse, JournalPage), query)


def stream(id: str, last_event_id: int | None) -> Request[None]:
    """The live stream, from the sample after ``last_event_id`` on."""
    headers = {"Accept": "text/event-stream", "Cache-Control": "no-store"}
    if last_event_id is not None:
        headers["Last-Event-ID"] = str(last_event_id)
    return Request("GET", f"/v1/experiments/{_part(id)}/stream", lambda reply: None, {}, headers)


_JSON = {"Content-Type": "application/json"}


def _change(
    method: str,
    path: str,
    read: Callable[[Reply], Result],
    document: Wire | Mapping[str, Any] | None = None,
    headers: Mapping[str, str] | None = None,
) -> Request[Result]:
    key = {"Idempotency-Key": uuid.uuid4().hex}
    if document is None:
        return Request(method, path, read, {}, {**key, **(headers or {})})
    return Request(method, path, read, {}, {**_JSON, **key, **(headers or {})}, _json(document))


def _json(document: Wire | Mapping[str, Any]) -> bytes:
    """JSON in UTF-8. A number that is none goes out as it is, so that the service names the field at fault."""
    if isinstance(document, Wire):
        document = document.model_dump(mode="json", by_alias=True)
    return json.dumps(document, ensure_ascii=False).encode()


def _query(**values: Any) -> dict[str, str]:
    return {name: str(value) for name, value in values.items() if value is not None}


def _part(text: str) -> str:
    return quote(text, safe="")
