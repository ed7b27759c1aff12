"""The demo, five runs in a row: within 5 % of the rig's true values, each interval no wider than 10 %, within 60 s."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

pytestmark = [pytest.mark.campaign, pytest.mark.timeout(400)]


def test_five_demos_in_a_row_find_the_rigs_true_values(tmp_path: Path) -> None:
    for run in range(5):
        command = [sys.executable, "-m", "gainwright_client", "demo", "--json", "--data-dir", str(tmp_path / str(run))]
        done = subprocess.run(command, capture_output=True, text=True, timeout=100, stdin=subprocess.DEVNULL)
        assert done.returncode == 0, done.stderr
        told = json.loads(done.stdout)
        found = told["experiment"]
        print(f"run {run}: errors {told['errors_percent']} %, {told['elapsed_s']} s, grade {found['grade']}")
        assert told["elapsed_s"] < 60
        for name in ("ultimate_gain", "ultimate_period_s"):
            estimate = found[name]
            assert abs(told["errors_percent"][name]) < 5
            assert estimate["high"] - estimate["low"] < 0.1 * estimate["value"]
