"""What both shells tell httpx, and what they make of its errors. The one place where its exceptions are translated."""

from __future__ import annotations

from typing import Any

import httpx

from gainwright_client.errors import ServiceTimedOut, ServiceUnreachable
from gainwright_client.requests import Request

TIMEOUT_S = 10.0
ANALYSIS_TIMEOUT_S = 120.0
"""An uploaded record is analysed while its request waits."""


def settings(url: str, token: str | None, timeout_s: float) -> dict[str, Any]:
    """Arguments of httpx's clients. Proxies of the environment are not asked: the service is on this network."""
    headers = {"Accept": "application/json", "User-Agent": "gainwright"}
    if token:
        headers["Authorization"] = f"Bearer {token}"
    return {"base_url": url, "headers": headers, "timeout": timeout_s, "trust_env": False}


def arguments(request: Request[Any]) -> dict[str, Any]:
    """Arguments of httpx's `request` and `stream`."""
    found: dict[str, Any] = {
        "method": request.method,
        "url": request.path,
        "params": dict(request.query),
        "headers": dict(request.headers),
        "content": request.body,
    }
    if request.path == "/v1/records":
        found["timeout"] = ANALYSIS_TIMEOUT_S
    return found


_TRANSLATED: tuple[tuple[type[httpx.TransportError], type[ServiceUnreachable]], ...] = (
    (httpx.TimeoutException, ServiceTimedOut),
    (httpx.TransportError, ServiceUnreachable),
)


def translated(error: httpx.TransportError, url: str) -> ServiceUnreachable:
    """Our error for one of httpx's."""
    for theirs, ours in _TRANSLATED:
        if isinstance(error, theirs):
            return ours(url, str(error) or type(error).__name__)
    raise AssertionError(f"{type(error).__name__} is a TransportError")
