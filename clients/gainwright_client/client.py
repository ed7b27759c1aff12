"""The sync shell: performs the steps of the core's flows with httpx. Holds no logic of its own."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Mapping
from typing import Any, Self

import httpx

from gainwright_client import requests
from gainwright_client.connecting import TIMEOUT_S, arguments, settings, translated
from gainwright_client.errors import ServiceUnreachable
from gainwright_client.finding import find_service
from gainwright_client.flows import Came, Flow, Pause, Result, Step, every, exchange
from gainwright_client.following import Following, Told
from gainwright_client.replies import Reply
from gainwright_wire.analyses import Checklist, RecordReply, RecordUpload
from gainwright_wire.loops import Loop, LoopPage, RegisteredLoop
from gainwright_wire.people import JournalPage, Person
from gainwright_wire.tasks import (
    Answer,
    Experiment,
    ExperimentPage,
    Forecast,
    ForecastRequest,
    Samples,
    StartExperiment,
    TaskState,
)


class Client:
    """A client of the service; use it in a `with` block.

    A request whose connection fails is repeated as it is, its `Idempotency-Key` included. Raises the errors of
    `gainwright_client.errors`.

    Parameters
    ----------
    url, token : str or None
        As `find_service` completes them.
    timeout_s : float
        For each answer.
    transport : httpx.BaseTransport or None
        In place of the network, for tests.
    pause : callable
        Waits for some seconds.
    """

    def __init__(
        self,
        url: str | None = None,
        token: str | None = None,
        *,
        timeout_s: float = TIMEOUT_S,
        transport: httpx.BaseTransport | None = None,
        pause: Callable[[float], None] = time.sleep,
    ) -> None:
        place = find_service(url, token)
        self.url = place.url
        self._http = httpx.Client(**settings(place.url, place.token, timeout_s), transport=transport)
        self._pause = pause

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *raised: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the connections."""
        self._http.close()

    def me(self) -> Person:
        """Who the token's person is."""
        return self._run(exchange(requests.me()))

    def register_loop(self, loop: Loop | Mapping[str, Any]) -> RegisteredLoop:
        """Register a loop; a mapping is sent as it is, and judged by the service."""
        return self._run(exchange(requests.register_loop(loop)))

    def loop(self, tag: str) -> RegisteredLoop:
        """One loop."""
        return self._run(exchange(requests.show_loop(tag)))

    def replace_loop(self, loop: Loop | Mapping[str, Any], version: int) -> RegisteredLoop:
        """Replace the definition that was read as ``version``."""
        return self._run(exchange(requests.replace_loop(loop, version)))

    def loop_page(self, after: str | None = None, limit: int = 100) -> LoopPage:
        """One page of loops by tag."""
        return self._run(exchange(requests.list_loops(after, limit)))

    def loops(self) -> list[RegisteredLoop]:
        """All loops by tag."""
        return self._run(every(requests.list_loops))

    def forecast(self, tag: str, guess: ForecastRequest | None = None) -> Forecast:
        """Forecast a test; moves nothing."""
        return self._run(exchange(requests.forecast(tag, guess)))

    def start_experiment(self, tag: str, start: StartExperiment) -> Experiment:
        """Start a test."""
        return self._run(exchange(requests.start_experiment(tag, start)))

    def experiment_page(
        self, tag: str | None = None, state: TaskState | None = None, after: str | None = None, limit: int = 50
    ) -> ExperimentPage:
        """One page of experiments, newest first."""
        return self._run(exchange(requests.list_experiments(tag, state, after, limit)))

    def experiment(self, id: str) -> Experiment:
        """One experiment as it stands."""
        return self._run(exchange(requests.show_experiment(id)))

    def stop_experiment(self, id: str) -> Experiment:
        """Ask for a stop: the test ends through its exit action. This is not an emergency stop."""
        return self._run(exchange(requests.stop_experiment(id)))

    def acknowledge_exit(self, id: str, remark: str) -> Experiment:
        """Say that a person has looked at the loop."""
        return self._run(exchange(requests.acknowledge_exit(id, remark)))

    def samples(self, id: str, from_number: int = 0) -> Samples:
        """The samples in columns."""
        return self._run(exchange(requests.samples(id, from_number)))

    def samples_csv(self, id: str, from_number: int = 0) -> str:
        """The samples as CSV text."""
        return self._run(exchange(requests.samples_csv(id, from_number)))

    def checklist(self, id: str) -> Checklist:
        """The checklist with everything known so far."""
        return self._run(exchange(requests.show_checklist(id)))

    def answer_checklist(self, id: str, answers: Mapping[str, Answer]) -> Checklist:
        """Answer items of the checklist in one's own name."""
        return self._run(exchange(requests.answer_checklist(id, answers)))

    def analyse_record(self, upload: RecordUpload) -> RecordReply:
        """Have a record of a test analysed and kept."""
        return self._run(exchange(requests.analyse_record(upload)))

    def record(self, id: str) -> RecordReply:
        """An uploaded record's analysis."""
        return self._run(exchange(requests.show_record(id)))

    def journal_page(self, after: str | None = None, limit: int = 100, subject: str | None = None) -> JournalPage:
        """One page of the journal, oldest first."""
        return self._run(exchange(requests.journal(after, limit, subject)))

    def follow(self, id: str, after: int | None = None) -> Iterator[Told]:
        """Follow an experiment live, from the sample after ``after`` on, over broken connections.

        Yields samples and progress as they come, and last the finished experiment.
        """
        following = Following(id, after)
        while True:
            broken: ServiceUnreachable | None = None
            try:
                with self._http.stream(**arguments(following.request())) as response:
                    if response.status_code != httpx.codes.OK:
                        following.refused(Reply(response.status_code, response.read()))
                    else:
                        for piece in response.iter_bytes():
                            yield from following.take(piece)
            except httpx.TransportError as error:
                broken = translated(error, self.url)
            if following.over:
                return
            self._pause(following.broken(broken))

    def _run(self, flow: Flow[Result]) -> Result:
        came: Came = None
        while True:
            try:
                step = flow.send(came)
            except StopIteration as done:
                return done.value  # type: ignore[no-any-return]
            came = self._perform(step)

    def _perform(self, step: Step) -> Came:
        if isinstance(step, Pause):
            self._pause(step.seconds)
            return None
        try:
            response = self._http.request(**arguments(step))
        except httpx.TransportError as error:
            return translated(error, self.url)
        return Reply(response.status_code, response.content)
