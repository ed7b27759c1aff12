"""What happens to an experiment. Every event carries the time; the machine never asks for it."""

from __future__ import annotations

from dataclasses import dataclass

from gainwright_service.experiment.readings import Reading


@dataclass(frozen=True, slots=True)
class Trip:
    """A limit that was met or a person who acted: the item, the measured number and the bound.

    Parameters
    ----------
    item : str
        Item of the safety list, e.g. ``D1``.
    number, bound : float
    unit : str
    sentence : str
    yields : bool
        Somebody else has the output: nothing may be written any more.
    link : bool
        The device cannot be reached or trusted, so that an exit must read before it writes.
    """

    item: str
    number: float
    bound: float
    unit: str
    sentence: str
    yields: bool = False
    link: bool = False


@dataclass(frozen=True, slots=True)
class Event:
    """Base: when it happened, monotonic seconds."""

    now: float


@dataclass(frozen=True, slots=True)
class Sampled(Event):
    """A reading came, and the guard found nothing wrong with it."""

    reading: Reading


@dataclass(frozen=True, slots=True)
class Missed(Event):
    """A reading failed."""

    reason: str


@dataclass(frozen=True, slots=True)
class Tripped(Event):
    """The guard met a limit."""

    trip: Trip


@dataclass(frozen=True, slots=True)
class SomebodyActed(Event):
    """The guard saw another hand on the loop."""

    trip: Trip


@dataclass(frozen=True, slots=True)
class StopRequested(Event):
    """A person asked for the end."""

    by: str


@dataclass(frozen=True, slots=True)
class Interrupted(Event):
    """The service itself must let go: shutdown, store or lock lost, an internal error."""

    reason: str


@dataclass(frozen=True, slots=True)
class Secured(Event):
    """What recovery needs is stored durably."""


@dataclass(frozen=True, slots=True)
class NotSecured(Event):
    """What recovery needs could not be stored: nothing may be written."""

    reason: str


@dataclass(frozen=True, slots=True)
class TookOver(Event):
    """The loop is in manual."""


@dataclass(frozen=True, slots=True)
class WriteFailed(Event):
    """A changing verb failed; whether the device took it is unknown, unless it was withheld and never sent."""

    reason: str
    refused: bool
    withheld: bool = False


@dataclass(frozen=True, slots=True)
class HandedBack(Event):
    """The mode write was answered."""
