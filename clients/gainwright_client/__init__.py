"""Clients of Gainwright's HTTP interface: two thin shells, sync and async, on one core; and the `gainwright` command.

Names are imported on first use, so that the command's `--help` stays quick.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from gainwright_client.aclient import AsyncClient as AsyncClient
    from gainwright_client.client import Client as Client
    from gainwright_client.errors import ClientError as ClientError
    from gainwright_client.finding import find_service as find_service

_HOMES = {
    "AsyncClient": "gainwright_client.aclient",
    "Client": "gainwright_client.client",
    "ClientError": "gainwright_client.errors",
    "find_service": "gainwright_client.finding",
}

__all__ = ["AsyncClient", "Client", "ClientError", "find_service"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(importlib.import_module(_HOMES[name]), name)
