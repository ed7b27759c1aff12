"""The whole chain over real HTTP and Modbus TCP: the command and the examples as processes, on the practice rig."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import httpx
import pytest

from gainwright_client.client import Client
from gainwright_client.commands.exit_codes import ExitCode
from gainwright_wire.tasks import Experiment, StartExperiment
from live_site import Rig, Service, practice_rig, processes_of, service, wait_for

EXAMPLES = Path(__file__).resolve().parents[2] / "clients" / "examples"
GAINWRIGHT = [sys.executable, "-m", "gainwright_client"]
START = StartExperiment(attended=True, bench_sentence_signed=True)


@pytest.fixture(scope="module")
def rig(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Rig]:
    with practice_rig(tmp_path_factory.mktemp("rig")) as running:
        yield running


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory, rig: Rig) -> Iterator[Service]:
    with service(tmp_path_factory.mktemp("service")) as running:
        with Client(running.url, running.token) as client:
            for loop in rig.announced["loops"]:
                client.register_loop(loop["definition"])
        yield running


def _environment(site: Service) -> dict[str, str]:
    return {**os.environ, "GAINWRIGHT_URL": site.url, "GAINWRIGHT_TOKEN": site.token}


def _run(site: Service, *command: str, folder: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        command,
        env=_environment(site),
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=90,
        stdin=subprocess.DEVNULL,
    )


def _errors(found: dict[str, Any], true: dict[str, float]) -> list[float]:
    return [abs(found[name]["value"] / true[name] - 1.0) for name in ("ultimate_gain", "ultimate_period_s")]


def test_the_demo_tunes_a_loop_keeps_the_record_and_leaves_nothing_running(tmp_path: Path) -> None:
    marker = f"GAINWRIGHT_TEST_DEMO={tmp_path}"
    # The marker's name is not one of the service's settings, which the demo keeps from its own processes.
    environment = {**os.environ, "DEMO_MARKER": marker, "GAINWRIGHT_DATABASE_URL": "sqlite+aiosqlite:////nowhere"}
    done = subprocess.run(
        [*GAINWRIGHT, "demo", "--loop", "SIC-410", "--data-dir", str(tmp_path / "record"), "--json"],
        env=environment,
        capture_output=True,
        text=True,
        timeout=100,
        stdin=subprocess.DEVNULL,
    )
    assert done.returncode == ExitCode.DONE, done.stderr
    told = json.loads(done.stdout)
    found = told["experiment"]
    assert (found["outcome"], found["exit"]) == ("completed", "verified")
    assert max(_errors(found, told["true"])) < 0.05
    assert any(p["recommended"] for p in found["proposals"])
    assert {"samples.csv", "experiment.json", "loop.json", "rig.jsonl"} <= {
        p.name for p in (tmp_path / "record").iterdir()
    }
    kept = Experiment.model_validate_json((tmp_path / "record" / "experiment.json").read_text())
    assert kept.id == found["id"]
    assert processes_of(marker) == {}


def test_loops_are_added_listed_shown_and_replaced_by_the_command(site: Service, rig: Rig, tmp_path: Path) -> None:
    definition = {**rig.loop("LIC-310")["definition"], "tag": "LIC-311", "description": "added by hand"}
    (tmp_path / "loop.json").write_text(json.dumps(definition))
    added = _run(site, *GAINWRIGHT, "loop", "add", "loop.json", "--json", folder=tmp_path)
    assert added.returncode == ExitCode.DONE, added.stderr
    assert json.loads(added.stdout)[0]["version"] == 1
    again = _run(site, *GAINWRIGHT, "loop", "add", "loop.json", folder=tmp_path)
    assert again.returncode == ExitCode.REFUSED
    assert "LIC-311" in again.stderr
    replaced = _run(site, *GAINWRIGHT, "loop", "add", "loop.json", "--replace", folder=tmp_path)
    assert "version 2" in replaced.stdout, replaced.stderr
    listed = _run(site, *GAINWRIGHT, "loop", "list", folder=tmp_path)
    assert "LIC-311" in listed.stdout
    shown = _run(site, *GAINWRIGHT, "loop", "show", "LIC-311", "--json", folder=tmp_path)
    assert json.loads(shown.stdout)["loop"]["description"] == "added by hand"
    _run(site, *GAINWRIGHT, "loop", "show", "LIC-311", "--answers-to", "answers.json", folder=tmp_path)
    answers = json.loads((tmp_path / "answers.json").read_text())
    assert {answer["verdict"] for answer in answers.values()} == {"fail"}
    unknown = _run(site, *GAINWRIGHT, "loop", "show", "XXX-999", folder=tmp_path)
    assert unknown.returncode == ExitCode.REFUSED


def test_the_dashboard_page_relays_the_stream_without_the_token(site: Service, tmp_path: Path) -> None:
    with Client(site.url, site.token) as client:
        started = client.start_experiment("LIC-310", START)
        command = [sys.executable, str(EXAMPLES / "lab_dashboard.py"), "LIC-310", "--page", "0"]
        serving = subprocess.Popen(command, env=_environment(site), stdout=subprocess.PIPE, text=True)
        assert serving.stdout is not None
        try:
            address = serving.stdout.readline().strip()
            page = httpx.get(address, timeout=5)
            assert "LIC-310" in page.text
            assert site.token not in page.text
            wait_for("the test listens", lambda: client.experiment(started.id).progress.samples > 5, 30)
            client.stop_experiment(started.id)
            with httpx.stream("GET", f"{address}/stream", timeout=30) as stream:
                told = [line.removeprefix("event: ") for line in stream.iter_lines() if line.startswith("event: ")]
        finally:
            serving.send_signal(signal.SIGINT)
            serving.wait(10)
            serving.stdout.close()
    assert "sample" in told
    assert told[-1] == "end"


def test_the_first_interrupt_of_tune_stops_the_test_and_waits_for_the_exit(
    site: Service, rig: Rig, tmp_path: Path
) -> None:
    command = [*GAINWRIGHT, "tune", "TIC-201", "--yes", "--attended", "--json", "--save", str(tmp_path / "saved")]
    running = subprocess.Popen(
        command, env=_environment(site), stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, cwd=tmp_path
    )
    with Client(site.url, site.token) as client:
        wait_for("the test drives the output", lambda: _switched(client), 60)
    running.send_signal(signal.SIGINT)
    told, said = running.communicate(timeout=60)
    assert running.returncode == ExitCode.STOPPED, said
    found = json.loads(told)
    assert (found["outcome"], found["exit"]) == ("stopped", "verified")
    last = [e for e in rig.entries("TIC-201", "output") if e["by"] == "client"][-1]
    assert last["value"] == pytest.approx(found["as_found"]["resting_output"], abs=0.1)
    assert (tmp_path / "saved" / "samples.csv").read_text().count("\n") == found["progress"]["samples"] + 1


def _switched(client: Client) -> bool:
    found = client.experiment_page("TIC-201").items
    return bool(found) and found[0].progress.switches >= 1


def test_the_bench_example_tests_a_loop_and_prints_its_gains(site: Service, rig: Rig, tmp_path: Path) -> None:
    (tmp_path / "loop.json").write_text(json.dumps(rig.loop("SIC-410")["definition"]))
    done = _run(site, sys.executable, str(EXAMPLES / "bench_rig.py"), "loop.json", folder=tmp_path)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "completed, exit verified" in done.stdout
    assert "ultimate gain" in done.stdout
    assert "\n* " in done.stdout


def test_the_dashboard_example_tells_a_test_from_its_first_sample_to_its_end(site: Service, tmp_path: Path) -> None:
    none = _run(site, sys.executable, str(EXAMPLES / "lab_dashboard.py"), "FIC-105", folder=tmp_path)
    assert none.returncode == 1
    with Client(site.url, site.token) as client:
        started = client.start_experiment("PIC-620", START)
        command = [sys.executable, str(EXAMPLES / "lab_dashboard.py"), "PIC-620"]
        running = subprocess.Popen(command, env=_environment(site), stdout=subprocess.PIPE, text=True)
        wait_for("the test listens", lambda: client.experiment(started.id).progress.samples > 20, 30)
        client.stop_experiment(started.id)
        told = [json.loads(line) for line in running.communicate(timeout=60)[0].splitlines()]
    numbers = [line["sample"]["number"] for line in told if "sample" in line]
    assert numbers == list(range(len(numbers)))
    assert len(numbers) > 20
    assert told[-1]["end"]["outcome"] == "stopped"


def test_the_fleet_example_tunes_each_loop_once_a_day(site: Service, tmp_path: Path) -> None:
    script = str(EXAMPLES / "fleet_maintenance.py")
    (tmp_path / "round.csv").write_text("tag,area\nFIC-105,circulation\nXXX-999,nowhere\n")
    options = ("--attended", "--sign-bench-sentence", "--report", "report.json")
    first = _run(site, sys.executable, script, "round.csv", *options, folder=tmp_path)
    report = {line["tag"]: line for line in json.loads((tmp_path / "report.json").read_text())}
    assert report["FIC-105"]["result"] == "tuned", first.stdout + first.stderr
    assert report["FIC-105"]["settings"]
    assert report["XXX-999"]["result"] == "refused"
    assert first.returncode == 1
    (tmp_path / "round.csv").write_text("tag\nFIC-105\n")
    again = _run(site, sys.executable, script, "round.csv", *options, folder=tmp_path)
    assert again.returncode == 0, again.stdout + again.stderr
    repeated = json.loads((tmp_path / "report.json").read_text())[0]
    assert (repeated["result"], repeated["experiment"]) == ("tuned today", report["FIC-105"]["experiment"])
    wrong = _run(site, sys.executable, script, "missing.csv", folder=tmp_path)
    assert wrong.returncode == 2
