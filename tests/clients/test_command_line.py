"""The command: help that is quick, a closed list of exit codes, analyse, token, loop and the questions of tune."""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import pytest
import typer
from rich.console import Console
from typer.testing import CliRunner

from gainwright_client import errors
from gainwright_client.commands import app
from gainwright_client.commands.asking import ask_plant, bench_questions, read_answers
from gainwright_client.commands.exit_codes import MEANINGS, ExitCode, of_experiment
from gainwright_client.commands.failing import code_of
from gainwright_service.forecasting import forecast
from gainwright_wire.tasks import Answer, Exit, ForecastRequest, Outcome
from relay_records import relay_record
from service_loops import a_loop

ROOT = Path(__file__).resolve().parents[2]
HEAVY = ("httpx", "pydantic", "numpy", "scipy", "rich", "sqlalchemy", "fastapi", "pymodbus", "asyncio", "structlog")


def run(*arguments: str) -> tuple[int, str, str]:
    """Exit code, standard output, standard error of the command in process."""
    done = CliRunner().invoke(app, list(arguments))
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done.exit_code, done.stdout, done.stderr


def _commands() -> list[tuple[str, ...]]:
    found: list[tuple[str, ...]] = []

    def walk(command: Any, path: tuple[str, ...]) -> None:
        if hasattr(command, "commands"):
            for name, inner in command.commands.items():
                walk(inner, (*path, name))
        else:
            found.append(path)

    walk(typer.main.get_command(app), ())
    return found


COMMANDS = _commands()


def test_help_imports_nothing_heavy() -> None:
    program = (
        "import sys\nfrom gainwright_client.commands import app\n"
        f"print([name for name in {HEAVY!r} if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


@pytest.mark.parametrize("path", COMMANDS, ids=" ".join)
def test_every_command_has_json_and_a_help_text(path: Sequence[str]) -> None:
    code, told, _ = run(*path, "--help")
    assert code == 0
    assert "--json" in told


def test_the_commands_are_those_of_the_design() -> None:
    assert {path[0] for path in COMMANDS} == {
        "demo", "serve", "worker", "practice-rig", "loop", "tune", "analyse", "token",
    }  # fmt: skip


def test_every_exit_code_is_in_the_help_and_in_the_readme() -> None:
    _, told, _ = run("--help")
    readme = (ROOT / "README.md").read_text()
    assert set(MEANINGS) == set(ExitCode)
    for code, meaning in MEANINGS.items():
        assert f"{code.value:>3}  {meaning}" in told
        assert f"| {code.value} | {meaning} |" in readme


@pytest.mark.parametrize("outcome", list(Outcome))
@pytest.mark.parametrize("exit", list(Exit))
def test_only_a_completed_test_with_a_verified_exit_and_a_trusted_grade_is_done(outcome: Outcome, exit: Exit) -> None:
    good = of_experiment(outcome.value, exit.value, "good")
    assert (good is ExitCode.DONE) == (outcome is Outcome.COMPLETED and exit is Exit.VERIFIED)
    if exit is Exit.UNVERIFIED and outcome is not Outcome.LOST:
        assert good is ExitCode.EXIT_UNVERIFIED
    if good is ExitCode.DONE:
        assert of_experiment(outcome.value, exit.value, "unusable") is ExitCode.GRADE_UNUSABLE


def test_every_error_of_the_client_has_an_exit_code_of_its_own_kind() -> None:
    def below(kind: type[Exception]) -> list[type[Exception]]:
        return [kind, *(k for inner in kind.__subclasses__() for k in below(inner))]

    named = [kind for kind in below(errors.ClientError) if kind not in (errors.ClientError, errors.Problem)]
    for kind in named:
        assert code_of(kind.__new__(kind)) not in (ExitCode.DONE, ExitCode.FAULT, ExitCode.USAGE)


def test_an_unreachable_service_is_one_message_and_its_code() -> None:
    code, told, said = run("loop", "list", "--url", "http://127.0.0.1:9", "--json")
    assert (code, told) == (ExitCode.UNREACHABLE, "")
    document = json.loads(said)
    assert (document["code"], document["exit_code"]) == ("service_unreachable", 5)
    assert "http://127.0.0.1:9" in document["detail"]


@pytest.fixture(scope="module")
def csv_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    record = relay_record()
    path = tmp_path_factory.mktemp("csv") / "record.csv"
    rows = zip(*record.values(), strict=True)
    lines = [",".join(record), *(",".join(map(repr, row)) for row in rows)]
    path.write_text("\n".join(lines) + "\n")
    return path


def test_analyse_prints_the_analysis_under_the_names_of_the_wire(csv_file: Path) -> None:
    controller = '{"form": "parallel", "gain": "engineering", "integral_unit": "min"}'
    code, told, said = run("analyse", str(csv_file), "--json", "--controller", controller)
    assert (code, said) == (ExitCode.DONE, "")
    found = json.loads(told)
    assert found["ultimate_gain"]["low"] <= found["ultimate_gain"]["value"] <= found["ultimate_gain"]["high"]
    assert found["ultimate_period_s"]["value"] > 0
    assert found["model"]["dead_time_s"] > 0
    assert found["grade"] in ("good", "fair")
    assert {s["name"] for p in found["proposals"] for s in p["settings"]} >= {"Kp", "Ki"}


def test_analyse_says_it_in_words_too(csv_file: Path) -> None:
    code, told, _ = run("analyse", str(csv_file), "--unit", "degC", "--output-unit", "%")
    assert code == ExitCode.DONE
    for word in ("ultimate gain", "%/degC", "Model", "Findings", "Proposals", "not an emergency stop"):
        assert word in " ".join(told.split())


def test_analyse_refuses_a_malformed_file_by_line_and_column(tmp_path: Path) -> None:
    path = tmp_path / "record.csv"
    path.write_text("time_s,process_variable,controller_output\n0,1,2\n1,x,2\n")
    code, told, said = run("analyse", str(path))
    assert (code, told) == (ExitCode.MALFORMED_FILE, "")
    assert f"{path}, line 3, column process_variable: 'x' is not a number" in said
    path.write_text("time_s,process_variable,controller_output\n0,1,2\n1,1,2\n1,1,2\n")
    code, told, said = run("analyse", str(path), "--json")
    assert (code, told) == (ExitCode.MALFORMED_FILE, "")
    assert json.loads(said)["errors"][0]["field"] == "time_s"


def test_analyse_refuses_an_option_that_is_none(csv_file: Path) -> None:
    code, _, said = run("analyse", str(csv_file), "--reference", "nan", "--json")
    assert code == ExitCode.USAGE
    assert json.loads(said)["errors"][0]["field"] == "reference"
    code, _, said = run("analyse", str(csv_file), "--controller", '{"form": "cubic"}', "--json")
    assert code == ExitCode.USAGE
    assert "controller.form" in {e["field"] for e in json.loads(said)["errors"]}
    assert run("analyse", str(csv_file), "--confidence", "2")[0] == ExitCode.USAGE


def test_tokens_are_made_listed_by_shown_name_and_revoked(tmp_path: Path) -> None:
    place = ("--data-dir", str(tmp_path), "--json")
    code, told, _ = run("token", "create", "Ada Byron", "--label", "bench", *place)
    assert code == 0
    token = json.loads(told)["token"]
    listed = json.loads(run("token", "list", *place)[1])
    assert [(row["person"], row["label"], row["revoked_at"]) for row in listed] == [("Ada Byron", "bench", None)]
    assert token not in json.dumps(listed)
    code, told, _ = run("token", "revoke", listed[0]["token"], "--by", "Grace", *place)
    assert (code, json.loads(told)["person"]) == (0, "Ada Byron")
    assert json.loads(run("token", "list", *place)[1])[0]["revoked_at"]
    assert run("token", "revoke", "nonsense", "--by", "Grace", *place)[0] == ExitCode.REFUSED


@pytest.mark.parametrize(("text", "problem"), [("[]", "something else"), ("{", "Expecting"), ("[1]", "something else")])
def test_loop_add_refuses_a_file_that_holds_no_loops(tmp_path: Path, text: str, problem: str) -> None:
    path = tmp_path / "loop.json"
    path.write_text(text)
    code, _, said = run("loop", "add", str(path))
    assert code == ExitCode.MALFORMED_FILE
    assert problem in said


def test_plant_asks_for_every_item_that_nobody_answered_and_a_caution_for_its_reason() -> None:
    sheet = forecast(a_loop(loop_class="plant"), ForecastRequest()).checklist
    unanswered = [item.id for item in sheet.items if item.basis == "unanswered"]
    given = read_answers({unanswered[0]: {"verdict": "pass"}})
    found: dict[str, Answer] = {}
    asking = typer.Typer()

    @asking.command()
    def ask() -> None:
        found.update(ask_plant(sheet, given, Console()))

    said = "perhaps\npass\n" + "caution\npermit to be renewed at noon\n" + "fail\n" * len(unanswered)
    done = CliRunner().invoke(asking, [], input=said)
    assert done.exit_code == 0, done.output
    assert list(found) == unanswered
    assert [found[item].verdict for item in unanswered[:4]] == ["pass", "pass", "caution", "fail"]
    assert found[unanswered[2]].reason == "permit to be renewed at noon"


def test_a_bench_start_asks_five_questions_with_the_loops_own_numbers() -> None:
    loop = a_loop()
    questions = bench_questions(loop, forecast(loop, ForecastRequest()))
    assert len(questions) == 5
    told = " ".join(q.text for q in questions)
    for word in ("safety function", "20 … 95 degC", "10 … 90 %", "resting output", "stop in reach"):
        assert word in told
    assert all(q.barred for q in questions)
