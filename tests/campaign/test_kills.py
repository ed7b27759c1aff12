"""Processes killed with `kill -9` in mid-swing, seen in the practice rig's own log; and a person who takes over.

Rows of the table of deaths in the contributors' guide.
"""

from __future__ import annotations

import time
from collections.abc import Iterator
from datetime import datetime
from pathlib import Path
from typing import Any

import httpx
import pytest

from live_site import Rig, Service, practice_rig, service, wait_for

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(240)]

TAG = "TIC-201"


@pytest.fixture
def rig(tmp_path: Path) -> Iterator[Rig]:
    (tmp_path / "rig").mkdir()
    with practice_rig(tmp_path / "rig") as running:
        yield running


@pytest.fixture
def running_service(tmp_path: Path) -> Iterator[Service]:
    (tmp_path / "service").mkdir()
    with service(tmp_path / "service") as running:
        yield running


def start(site: Service, rig: Rig, tag: str = TAG) -> str:
    """Register the rig's loop and start a test; the experiment's id."""
    with site.http() as http:
        reply = http.post("/v1/loops", json=rig.loop(tag)["definition"])
        assert reply.status_code in (201, 409), reply.text
        reply = http.post(f"/v1/loops/{tag}/experiments", json={"attended": True, "bench_sentence_signed": True})
        assert reply.status_code == 202, reply.text
        return str(reply.json()["id"])


def experiment(site: Service, identity: str) -> dict[str, Any]:
    """The experiment as the service tells it; empty while the service does not answer."""
    try:
        with site.http() as http:
            return dict(http.get(f"/v1/experiments/{identity}").raise_for_status().json())
    except httpx.HTTPError:
        return {}


def swinging(site: Service, identity: str) -> bool:
    """Whether the test has swung for at least three switches."""
    state = experiment(site, identity)
    assert state.get("state") != "finished", state
    return state.get("phase") == "swinging" and state["progress"]["switches"] >= 3


def finished(site: Service, identity: str) -> dict[str, Any] | None:
    """The finished experiment, or None."""
    state = experiment(site, identity)
    return state if state.get("state") == "finished" else None


def outputs(rig: Rig, tag: str = TAG, by: str | None = None) -> list[dict[str, Any]]:
    """Every movement of the output in the rig's log."""
    return [e for e in rig.entries(tag, "output") if by is None or e["by"] == by]


def stored_samples(site: Service, identity: str) -> dict[str, Any]:
    """All stored samples, as columns."""
    with site.http() as http:
        return dict(http.get(f"/v1/experiments/{identity}/samples", params={"format": "json"}).json())


def test_a_killed_worker_is_replaced_and_the_exit_is_verified_within_five_seconds(
    rig: Rig, running_service: Service
) -> None:
    site = running_service
    identity = start(site, rig)
    wait_for("the test swings", lambda: swinging(site, identity), 60)
    killed_at = time.time()
    site.kill("gainwright_service.worker_process")
    state = wait_for("the exit is verified", lambda: finished(site, identity), 5)
    took = time.time() - killed_at
    assert (state["outcome"], state["exit"]) == ("interrupted", "verified"), state
    resting = state["as_found"]["resting_output"]
    writes = [e for e in outputs(rig, by="client") if e["t"] > killed_at]
    assert writes, "the new worker writes the exit"
    assert writes[-1]["value"] == pytest.approx(resting, abs=0.2)
    assert len({round(e["value"], 3) for e in writes}) == 1, "nothing but the exit is written"
    samples = stored_samples(site, identity)
    rows = len(samples["number"])
    assert samples["number"] == list(range(rows))
    began = datetime.fromisoformat(state["started_at"]).timestamp()
    behind = killed_at - (began + samples["time_s"][-1])
    print(f"worker killed: exit verified {took:.2f} s later; {rows} samples, the last {behind:.2f} s before the kill")
    assert behind <= 1.0


def test_a_killed_api_leaves_the_test_running_to_its_end(rig: Rig, running_service: Service) -> None:
    site = running_service
    identity = start(site, rig)
    wait_for("the test swings", lambda: swinging(site, identity), 60)
    old = site.kill("gainwright_service.api")
    wait_for("a new api process", lambda: site.children("gainwright_service.api") not in ([], [old]), 20)
    state = wait_for("the test completes", lambda: finished(site, identity), 120)
    assert (state["outcome"], state["exit"]) == ("completed", "verified"), state
    assert state["grade"] in ("good", "fair")
    samples = stored_samples(site, identity)
    gaps = [b - a for a, b in zip(samples["time_s"], samples["time_s"][1:], strict=False)]
    assert max(gaps) < 1.0, "no sample is missing over the death of the api"


def test_when_everything_dies_the_watchdog_acts_and_the_restarted_service_reads_before_it_writes(
    rig: Rig, tmp_path: Path
) -> None:
    folder = tmp_path / "service"
    folder.mkdir()
    with service(folder) as site:
        identity = start(site, rig)
        wait_for("the test swings", lambda: swinging(site, identity), 60)
        killed_at = time.time()
        site.kill_everything()
    timeout = rig.loop(TAG)["definition"]["adapter"]["heartbeat"]["timeout_s"]
    fired = wait_for(
        "the watchdog moves the output",
        lambda: [e for e in outputs(rig, by="watchdog") if e["t"] > killed_at],
        timeout + 5,
    )
    assert fired[0]["t"] - killed_at < timeout + 1.5
    with service(folder) as site:
        state = wait_for("recovery ends the test", lambda: finished(site, identity), 10)
        assert state["outcome"] == "interrupted"
        assert state["exit"] == "verified", state["exit_detail"]
        resting = state["as_found"]["resting_output"]
        later = [e for e in outputs(rig) if e["t"] > killed_at]
        assert all(abs(e["value"] - resting) < 0.2 for e in later), later
        samples = stored_samples(site, identity)
        assert samples["number"] == list(range(len(samples["number"])))


def test_a_person_who_takes_the_output_over_is_yielded_to_and_nothing_moves_it(
    rig: Rig, running_service: Service
) -> None:
    site = running_service
    identity = start(site, rig)
    wait_for("the test swings", lambda: swinging(site, identity), 60)
    taken_at = time.time()
    rig.operate({"loop": TAG, "set": {"output": 52.5}})
    state = wait_for("the service yields", lambda: finished(site, identity), 10)
    assert (state["outcome"], state["exit"]) == ("yielded", "not_written"), state
    timeout = rig.loop(TAG)["definition"]["adapter"]["heartbeat"]["timeout_s"]
    until = time.time() + 3 * timeout
    wait_for("three watchdog times", lambda: time.time() > until, 3 * timeout + 5)
    moves = [e for e in outputs(rig) if e["t"] >= taken_at]
    person = [e for e in moves if e["by"] == "operator"]
    assert person, moves
    after = [e for e in moves if e["t"] > person[-1]["t"]]
    late = [e for e in after if e["t"] > person[-1]["t"] + 0.3]
    assert not late, f"nothing moves the output after the yield: {late}"
