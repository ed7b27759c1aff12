"""What a client does for one call, as generators without I/O: they yield what is to be done and are told what came.

A flow yields a `Request` to be sent, and is sent a `Reply` or the `ServiceUnreachable` that came in its place; or it
yields a `Pause` to be waited for, and is sent None. Both shells run the same flows, so that retrying and paging are
written once.
"""

from __future__ import annotations

from collections.abc import Callable, Generator
from dataclasses import dataclass
from typing import Any, Protocol, TypeVar

from gainwright_client.errors import ServiceUnreachable
from gainwright_client.replies import Reply
from gainwright_client.requests import Request

Result = TypeVar("Result")
Item_co = TypeVar("Item_co", covariant=True)
Item = TypeVar("Item")

PAUSES_S = (0.2, 0.5, 1.0)
"""Before each repetition of a request whose connection failed; long enough for the service's restart of its `api`."""


@dataclass(frozen=True, slots=True)
class Pause:
    """A time to wait before the next step."""

    seconds: float


Step = Request[Any] | Pause
Came = Reply | ServiceUnreachable | None
Flow = Generator[Step, Came, Result]


class Page(Protocol[Item_co]):
    """Any page of the contract."""

    @property
    def items(self) -> tuple[Item_co, ...]:
        """What is on the page."""
        ...

    @property
    def next(self) -> str | None:
        """The cursor of the following page."""
        ...


def exchange(request: Request[Result]) -> Flow[Result]:
    """Send a request until a reply comes, repeating it as it is, its key included, after a failed connection.

    Raises
    ------
    ServiceUnreachable
        After the last repetition.
    """
    for pause_s in (*PAUSES_S, None):
        came = yield request
        if isinstance(came, Reply):
            return request.read(came)
        assert came is not None
        if pause_s is None:
            raise came
        yield Pause(pause_s)
    raise AssertionError("the last repetition returns or raises")


def every(page_after: Callable[[str | None], Request[Page[Item]]]) -> Flow[list[Item]]:
    """The items of all pages."""
    found: list[Item] = []
    after: str | None = None
    while True:
        page = yield from exchange(page_after(after))
        found.extend(page.items)
        if page.next is None:
            return found
        after = page.next
