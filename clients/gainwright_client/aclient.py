"""The async shell: performs the steps of the core's flows with httpx. Holds no logic of its own."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator, Awaitable, Callable, Mapping
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


class AsyncClient:
    """A client of the service; use it in an `async with` block.

    A request whose connection fails is repeated as it is, its `Idempotency-Key` included. Raises the errors of
    `gainwright_client.errors`.

    Parameters
    ----------
    url, token : str or None
        As `find_service` completes them.
    timeout_s : float
        For each answer.
    transport : httpx.AsyncBaseTransport or None
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
        transport: httpx.AsyncBaseTransport | None = None,
        pause: Callable[[float], Awaitable[None]] = asyncio.sleep,
    ) -> None:
        place = find_service(url, token)
        self.url = place.url
        self._http = httpx.AsyncClient(**settings(place.url, place.token, timeout_s), transport=transport)
        self._pause = pause

    async def __aenter__(self) -> Self:
        return self

    async def __aexit__(self, *raised: object) -> None:
        await self.aclose()

    async def aclose(self) -> None:
        """Close the connections."""
        await self._http.aclose()

    async def me(self) -> Person:
        """Who the token's person is."""
        return await self._run(exchange(requests.me()))

    async def register_loop(self, loop: Loop | Mapping[str, Any]) -> RegisteredLoop:
        """Register a loop; a mapping is sent as it is, and judged by the service."""
        return await self._run(exchange(requests.register_loop(loop)))

    async def loop(self, tag: str) -> RegisteredLoop:
        """One loop."""
        return await self._run(exchange(requests.show_loop(tag)))

    async def replace_loop(self, loop: Loop | Mapping[str, Any], version: int) -> RegisteredLoop:
        """Replace the definition that was read as ``version``."""
        return await self._run(exchange(requests.replace_loop(loop, version)))

    async def loop_page(self, after: str | None = None, limit: int = 100) -> LoopPage:
        """One page of loops by tag."""
        return await self._run(exchange(requests.list_loops(after, limit)))

    async def loops(self) -> list[RegisteredLoop]:
        """All loops by tag."""
        return await self._run(every(requests.list_loops))

    async def forecast(self, tag: str, guess: ForecastRequest | None = None) -> Forecast:
        """Forecast a test; moves nothing."""
        return await self._run(exchange(requests.forecast(tag, guess)))

    async def start_experiment(self, tag: str, start: StartExperiment) -> Experiment:
        """Start a test."""
        return await self._run(exchange(requests.start_experiment(tag, start)))

    async def experiment_page(
        self, tag: str | None = None, state: TaskState | None = None, after: str | None = None, limit: int = 50
    ) -> ExperimentPage:
        """One page of experiments, newest first."""
        return await self._run(exchange(requests.list_experiments(tag, state, after, limit)))

    async def experiment(self, id: str) -> Experiment:
        """One experiment as it stands."""
        return await self._run(exchange(requests.show_experiment(id)))

    async def stop_experiment(self, id: str) -> Experiment:
        """Ask for a stop: the test ends through its exit action. This is not an emergency stop."""
        return await self._run(exchange(requests.stop_experiment(id)))

    async def acknowledge_exit(self, id: str, remark: str) -> Experiment:
        """Say that a person has looked at the loop."""
        return await self._run(exchange(requests.acknowledge_exit(id, remark)))

    async def samples(self, id: str, from_number: int = 0) -> Samples:
        """The samples in columns."""
        return await self._run(exchange(requests.samples(id, from_number)))

    async def samples_csv(self, id: str, from_number: int = 0) -> str:
        """The samples as CSV text."""
        return await self._run(exchange(requests.samples_csv(id, from_number)))

    async def checklist(self, id: str) -> Checklist:
        """The checklist with everything known so far."""
        return await self._run(exchange(requests.show_checklist(id)))

    async def answer_checklist(self, id: str, answers: Mapping[str, Answer]) -> Checklist:
        """Answer items of the checklist in one's own name."""
        return await self._run(exchange(requests.answer_checklist(id, answers)))

    async def analyse_record(self, upload: RecordUpload) -> RecordReply:
        """Have a record of a test analysed and kept."""
        return await self._run(exchange(requests.analyse_record(upload)))

    async def record(self, id: str) -> RecordReply:
        """An uploaded record's analysis."""
        return await self._run(exchange(requests.show_record(id)))

    async def journal_page(self, after: str | None = None, limit: int = 100, subject: str | None = None) -> JournalPage:
        """One page of the journal, oldest first."""
        return await self._run(exchange(requests.journal(after, limit, subject)))

    async def follow(self, id: str, after: int | None = None) -> AsyncIterator[Told]:
        """Follow an experiment live, from the sample after ``after`` on, over broken connections.

        Yields samples and progress as they come, and last the finished experiment.
        """
        following = Following(id, after)
        while True:
            broken: ServiceUnreachable | None = None
            try:
                async with self._http.stream(**arguments(following.request())) as response:
                    if response.status_code != httpx.codes.OK:
                        following.refused(Reply(response.status_code, await response.aread()))
                    else:
                        async for piece in response.aiter_bytes():
                            for told in following.take(piece):
                                yield told
            except httpx.TransportError as error:
                broken = translated(error, self.url)
            if following.over:
                return
            await self._pause(following.broken(broken))

    async def _run(self, flow: Flow[Result]) -> Result:
        came: Came = None
        while True:
            try:
                step = flow.send(came)
            except StopIteration as done:
                return done.value  # type: ignore[no-any-return]
            came = await self._perform(step)

    async def _perform(self, step: Step) -> Came:
        if isinstance(step, Pause):
            await self._pause(step.seconds)
            return None
        try:
            response = await self._http.request(**arguments(step))
        except httpx.TransportError as error:
            return translated(error, self.url)
        return Reply(response.status_code, response.content)
