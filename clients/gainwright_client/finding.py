"""Where the service is and which token to show it: stated, else from the environment, else the first token's file."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

DEFAULT_URL = "http://127.0.0.1:8765"
DEFAULT_FOLDER = "gainwright-data"
FIRST_TOKEN = "first-token"


@dataclass(frozen=True, slots=True)
class Place:
    """The service's address and a person's token."""

    url: str
    token: str | None


def find_service(
    url: str | None = None, token: str | None = None, environment: Mapping[str, str] = os.environ
) -> Place:
    """The stated values, completed from `GAINWRIGHT_URL`, `GAINWRIGHT_TOKEN` and the data folder's first token."""
    url = url or environment.get("GAINWRIGHT_URL") or DEFAULT_URL
    token = token or environment.get("GAINWRIGHT_TOKEN") or _first_token(data_folder(environment))
    return Place(url.rstrip("/"), token)


def data_folder(environment: Mapping[str, str] = os.environ) -> Path:
    """Where `serve`, started from here, keeps its data."""
    return Path(environment.get("GAINWRIGHT_DATA_DIR") or DEFAULT_FOLDER)


def _first_token(folder: Path) -> str | None:
    try:
        return (folder / FIRST_TOKEN).read_text(encoding="utf-8").strip() or None
    except (OSError, UnicodeDecodeError):
        return None
