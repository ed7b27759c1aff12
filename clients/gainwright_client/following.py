"""Following an experiment live over connections that may break. Owns where to resume and when to give up; no I/O.

The stream's event id is the sample's number: after a broken connection it resumes with the next sample, so that
none is missed or told twice.
"""

from __future__ import annotations

from pydantic import ValidationError

from gainwright_client import requests
from gainwright_client.errors import ClientError, ServiceFailed, ServiceUnreachable, UnexpectedReply
from gainwright_client.events import Event, EventParser
from gainwright_client.replies import Reply, check
from gainwright_client.requests import Request
from gainwright_wire.tasks import Experiment, StreamProgress, StreamSample

Told = StreamSample | StreamProgress | Experiment
"""What a live stream tells: samples, progress, and last the finished experiment."""

_MODELS: dict[str, type[Told]] = {"sample": StreamSample, "progress": StreamProgress, "end": Experiment}
RETRY_S = 1.0
PATIENCE = 30
"""Connections in a row that may bring nothing before following gives up."""


class Following:
    """One listener of one experiment.

    Parameters
    ----------
    id : str
        The experiment.
    after : int or None
        The last sample already known; None for all from the first.
    """

    def __init__(self, id: str, after: int | None = None) -> None:
        self._id = id
        self._last = after
        self._parser = EventParser()
        self._in_vain = 0
        self._reason: ClientError | None = None
        self.over = False

    def request(self) -> Request[None]:
        """The request of the next connection, which resumes where the last one broke."""
        self._parser = EventParser()
        return requests.stream(self._id, self._last)

    def refused(self, reply: Reply) -> None:
        """A connection that was answered with something else: raised, unless the service may get over it."""
        try:
            check(reply)
        except ServiceFailed as error:
            self._reason = error
        else:
            raise UnexpectedReply(reply.status, reply.text[:200])

    def take(self, piece: bytes) -> list[Told]:
        """What a piece of the stream tells."""
        told: list[Told] = []
        for event in self._parser.take(piece):
            found = self._read(event)
            if found is not None:
                told.append(found)
                self._in_vain = 0
            if isinstance(found, StreamSample):
                self._last = found.number
            self.over = self.over or isinstance(found, Experiment)
        return told

    def broken(self, reason: ServiceUnreachable | None) -> float:
        """The pause in seconds before the next connection; raises the last reason when patience is over."""
        self._reason = reason or self._reason
        self._in_vain += 1
        if self._in_vain > PATIENCE:
            raise self._reason or UnexpectedReply(200, "a live stream that ends without telling anything")
        return self._parser.retry_s or RETRY_S

    def _read(self, event: Event) -> Told | None:
        model = _MODELS.get(event.kind)
        if model is None:
            return None
        try:
            return model.model_validate_json(event.data)
        except ValidationError as error:
            raise UnexpectedReply(200, event.data[:200]) from error
