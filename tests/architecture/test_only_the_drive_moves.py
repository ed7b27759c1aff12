"""The source proves it: the drive is the only caller of an adapter's changing verbs."""

from __future__ import annotations

import ast
from pathlib import Path

SERVICE = Path(__file__).resolve().parents[2] / "service" / "gainwright_service"
CHANGING = {"write", "take_over", "hand_back", "heartbeat", "write_gains"}
# The drive itself; the adapters, which carry verbs to registers; the adapter check, run by a person on a loop that may
# be moved and by nothing of the service; the rig, which is the device.
MAY = {"drive.py", "testing.py"}
FOLDERS = {"adapters", "practice_rig"}
HARMLESS = {"sys.stderr", "sys.stdout", "file", "os", "self._drive", "drive"}


def test_nothing_but_the_drive_calls_a_changing_verb() -> None:
    found = []
    for path in SERVICE.rglob("*.py"):
        if path.name in MAY or FOLDERS & set(path.relative_to(SERVICE).parts):
            continue
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute) and node.func.attr in CHANGING:
                receiver = ast.unparse(node.func.value)
                if receiver not in HARMLESS:
                    found.append(f"{path.relative_to(SERVICE)}:{node.lineno} {receiver}.{node.func.attr}")
    assert found == []


def test_the_adapter_check_is_not_used_by_the_service() -> None:
    users = [p.name for p in SERVICE.rglob("*.py") if "gainwright_service.testing" in p.read_text()]
    assert users == []
