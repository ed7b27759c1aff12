"""Settings, read once from the environment, frozen and handed down."""

from __future__ import annotations

import getpass
from pathlib import Path

from pydantic import Field
from pydantic_settings import BaseSettings, SettingsConfigDict


class Settings(BaseSettings):
    """Where the service keeps its data and where it listens; each from ``GAINWRIGHT_`` and the name in capitals."""

    model_config = SettingsConfigDict(env_prefix="GAINWRIGHT_", frozen=True, extra="ignore")

    data_dir: Path = Path("gainwright-data")
    database_url: str = ""
    host: str = "127.0.0.1"
    port: int = Field(8765, ge=1, le=65535)
    site: str = "local"
    first_person: str = ""
    beat_fd: int = -1
    ended_worker: str = ""
    log_level: str = "INFO"

    @property
    def database(self) -> str:
        """The database's address; an SQLite file in the data folder where none is given."""
        return self.database_url or f"sqlite+aiosqlite:///{self.data_dir / 'gainwright.db'}"

    @property
    def embedded(self) -> bool:
        """Whether the database is a file of this machine."""
        return self.database.startswith("sqlite")

    @property
    def token_file(self) -> Path:
        """Where the first person's token is left."""
        return self.data_dir / "first-token"

    def person(self) -> str:
        """The first person: as set, else the name that the system knows the user by."""
        if self.first_person:
            return self.first_person
        try:
            return getpass.getuser()
        except (KeyError, OSError):
            return "first person"
