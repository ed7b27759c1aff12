"""Where the client looks for the service and its token."""

from __future__ import annotations

from pathlib import Path

from gainwright_client.finding import DEFAULT_FOLDER, DEFAULT_URL, FIRST_TOKEN, find_service
from gainwright_service.settings import Settings


def test_the_client_looks_where_the_service_keeps_its_data_and_listens() -> None:
    settings = Settings()
    assert settings.data_dir == Path(DEFAULT_FOLDER)
    assert settings.token_file == settings.data_dir / FIRST_TOKEN
    assert f"http://{settings.host}:{settings.port}" == DEFAULT_URL


def test_what_is_stated_comes_before_the_environment_and_that_before_the_first_token(tmp_path: Path) -> None:
    (tmp_path / FIRST_TOKEN).write_text("first\n")
    environment = {"GAINWRIGHT_DATA_DIR": str(tmp_path)}
    assert find_service(environment=environment).token == "first"
    environment |= {"GAINWRIGHT_TOKEN": "second", "GAINWRIGHT_URL": "http://b:1/"}
    assert find_service(environment=environment).token == "second"
    assert find_service("http://c:2", "third", environment).token == "third"
    assert find_service(environment=environment).url == "http://b:1"


def test_without_any_token_there_is_none(tmp_path: Path) -> None:
    assert find_service(environment={"GAINWRIGHT_DATA_DIR": str(tmp_path)}).token is None
