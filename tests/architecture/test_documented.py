"""Every public function and class of the numerics documents its parameters."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

NUMERICS = Path(__file__).resolve().parents[2] / "estimators" / "gainwright"


def _public_definitions() -> list[tuple[str, ast.FunctionDef | ast.ClassDef]]:
    found: list[tuple[str, ast.FunctionDef | ast.ClassDef]] = []
    for path in sorted(NUMERICS.rglob("*.py")):
        if path.name.startswith("_"):
            continue
        for node in ast.parse(path.read_text()).body:
            if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_"):
                found.append((f"{path.relative_to(NUMERICS)}:{node.name}", node))
    return found


DEFINITIONS = _public_definitions()


@pytest.mark.parametrize(("name", "node"), DEFINITIONS, ids=[name for name, _ in DEFINITIONS])
def test_every_public_name_of_the_numerics_has_a_docstring_that_names_its_parameters(
    name: str, node: ast.FunctionDef | ast.ClassDef
) -> None:
    text = ast.get_docstring(node)
    assert text, f"{name} has no docstring"
    if isinstance(node, ast.ClassDef):
        return
    arguments = [*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs]
    missing = [a.arg for a in arguments if a.arg not in text]
    assert not missing, f"{name} does not document {missing}"
