"""Server-sent events: bytes to events, by the rules of the HTML standard's event stream. No I/O.

Lines are split at LF, CR and CRLF only: other characters that Python takes for the end of a line may stand in data.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Event:
    """One event: its kind, its data, and the last id seen so far."""

    kind: str
    data: str
    id: str | None


class EventParser:
    """Takes the stream in pieces of any length and gives the events that they complete."""

    def __init__(self) -> None:
        self._rest = b""
        self._kind = ""
        self._data: list[str] = []
        self._id: str | None = None
        self.retry_s: float | None = None
        """The pause before a new connection, as the service last asked for it."""

    def take(self, piece: bytes) -> list[Event]:
        """The events that this piece completes."""
        *lines, self._rest = self._lines(self._rest + piece)
        return [event for line in lines if (event := self._line(line.decode("utf-8", "replace"))) is not None]

    @staticmethod
    def _lines(text: bytes) -> list[bytes]:
        held = text.endswith(b"\r")
        if held:
            text = text[:-1]
        lines = text.replace(b"\r\n", b"\n").replace(b"\r", b"\n").split(b"\n")
        if held:
            # Its LF may come with the next piece.
            lines[-1] += b"\r"
        return lines

    def _line(self, line: str) -> Event | None:
        if not line:
            return self._dispatch()
        name, _, value = line.partition(":")
        value = value.removeprefix(" ")
        if name == "event":
            self._kind = value
        elif name == "data":
            self._data.append(value)
        elif name == "id" and "\0" not in value:
            self._id = value
        elif name == "retry" and value.isdecimal():
            self.retry_s = int(value) / 1000
        return None

    def _dispatch(self) -> Event | None:
        kind, data = self._kind or "message", self._data
        self._kind, self._data = "", []
        return Event(kind, "\n".join(data), self._id) if data else None
