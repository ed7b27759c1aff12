"""Laws of the source that no linter knows: who may move a device, who may read a clock, what stays quiet."""

from __future__ import annotations

import ast
from collections import Counter
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
PACKAGES = {
    "gainwright": ROOT / "estimators" / "gainwright",
    "gainwright_wire": ROOT / "service" / "gainwright_wire",
    "gainwright_service": ROOT / "service" / "gainwright_service",
    "gainwright_client": ROOT / "clients" / "gainwright_client",
}
MODULES = sorted(path for folder in PACKAGES.values() for path in folder.rglob("*.py"))


def _calls(tree: ast.AST) -> Iterator[tuple[str, int]]:
    for node in ast.walk(tree):
        if isinstance(node, ast.Call):
            yield ast.unparse(node.func), node.lineno


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(ROOT)))
def test_every_module_opens_with_a_docstring(path: Path) -> None:
    assert ast.get_docstring(ast.parse(path.read_text())), "say what the module owns and must not know"


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(ROOT)))
def test_no_module_outgrows_four_hundred_lines(path: Path) -> None:
    assert len(path.read_text().splitlines()) <= 400


def test_the_numerics_read_no_clock_print_nothing_and_open_no_file() -> None:
    forbidden = {"print", "open", "time.time", "time.monotonic", "time.perf_counter", "datetime.now", "input"}
    found = [
        f"{path.name}:{line} {name}"
        for path in MODULES
        if path.is_relative_to(PACKAGES["gainwright"])
        for name, line in _calls(ast.parse(path.read_text()))
        if name in forbidden or name.startswith("logging.")
    ]
    assert not found


def test_the_service_reads_the_clocks_in_one_file_only() -> None:
    forbidden = {"time.time", "time.monotonic", "time.clock_gettime", "datetime.now", "datetime.utcnow"}
    # The parent uses the standard library only and times its own beats; the practice rig stands in for a plant,
    # whose time is its own.
    exempt = {"clock.py", "supervisor.py"}
    found = [
        f"{path.relative_to(ROOT)}:{line} {name}"
        for path in MODULES
        if path.is_relative_to(PACKAGES["gainwright_service"])
        and path.name not in exempt
        and "practice_rig" not in path.parts
        for name, line in _calls(ast.parse(path.read_text()))
        if name in forbidden
    ]
    assert not found


def test_no_broad_or_silent_catch_outside_the_last_resort() -> None:
    """Broad catches are allowed where an output or a task would be forgotten otherwise, and nowhere else: the runner's
    exit path, the ticks that bring it to its end, and the worker's keeping of a task that broke outside its runner."""
    last_resorts = {"service/gainwright_service/runner.py": 2, "service/gainwright_service/worker.py": 2}
    found = []
    for path in MODULES:
        for node in ast.walk(ast.parse(path.read_text())):
            if not isinstance(node, ast.ExceptHandler):
                continue
            names = ast.unparse(node.type) if node.type else "everything"
            if names in {"everything", "Exception", "BaseException"}:
                found.append(str(path.relative_to(ROOT)))
    assert Counter(found) == last_resorts
