"""Replies of the service: parsed into the wire's models, or raised as the error of their problem code. No I/O."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeVar

from pydantic import BaseModel, ValidationError

from gainwright_client.errors import FAMILIES, UnexpectedReply
from gainwright_wire.problems import Problem as ProblemDetails

Model = TypeVar("Model", bound=BaseModel)

_EXCERPT = 200


@dataclass(frozen=True, slots=True)
class Reply:
    """One answer of the service, as it came."""

    status: int
    body: bytes

    @property
    def text(self) -> str:
        """The body as UTF-8 text."""
        return self.body.decode("utf-8", "replace")


def parse(model: type[Model], reply: Reply) -> Model:
    """The document of a reply.

    Raises
    ------
    Problem
        The class that `FAMILIES` names for the reply's code.
    UnexpectedReply
        Neither the document nor problem details.
    """
    check(reply)
    try:
        return model.model_validate_json(reply.body)
    except ValidationError as error:
        raise UnexpectedReply(reply.status, reply.text[:_EXCERPT]) from error


def text(reply: Reply) -> str:
    """The text of a reply. Raises as `parse` does."""
    check(reply)
    return reply.text


def check(reply: Reply) -> None:
    """Raise the error of a reply that is none of success."""
    if 200 <= reply.status < 300:
        return
    try:
        details = ProblemDetails.model_validate_json(reply.body)
    except ValidationError as error:
        raise UnexpectedReply(reply.status, reply.text[:_EXCERPT]) from error
    raise FAMILIES[details.code](details)
