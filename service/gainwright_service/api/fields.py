"""Validation errors become field problems: the path as the client wrote it, what is wrong, what is allowed."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from typing import Any

from gainwright_wire.problems import FieldProblem

_PLACES = {"body", "query", "path", "header"}
_UNION_TAGS = {"modbus", "simulated"}
_NAME = re.compile(r"\b([a-z]+(?:[._][a-z]+)+(?:/[a-z_]+)?)\b|^([a-z]+) (?:is|must)\b")
_MOST = 50


def field_problems(errors: Sequence[Mapping[str, Any]]) -> tuple[FieldProblem, ...]:
    """Every error of a validation, at most 50."""
    return tuple(_problem(error) for error in errors[:_MOST])


def _problem(error: Mapping[str, Any]) -> FieldProblem:
    field = _path(error["loc"])
    kind, message, context = error["type"], error["msg"], error.get("ctx", {})
    if kind in ("union_tag_invalid", "union_tag_not_found"):
        discriminator = str(context.get("discriminator", "kind")).strip("'")
        field = f"{field}.{discriminator}" if field else discriminator
    elif "." not in kind and _is_ours(kind):
        field = _named(field, message)
    return FieldProblem(field=field, problem=message, allowed=_allowed(kind, message, context))


def _named(field: str, message: str) -> str:
    """The field that one of the wire's own sentences speaks of first, below ``field``."""
    found = _NAME.search(message)
    name = (found.group(1) or found.group(2)) if found else ""
    if not name or name == field:
        return field
    return f"{field}.{name}" if field and "." not in name else name


def _path(loc: Sequence[str | int]) -> str:
    parts = [str(part) for part in loc]
    if parts and parts[0] in _PLACES:
        parts = parts[1:]
    kept = [p for i, p in enumerate(parts) if not (p in _UNION_TAGS and i > 0 and parts[i - 1] == "adapter")]
    return ".".join(kept)


_PYDANTIC = (
    "missing",
    "extra_forbidden",
    "json_invalid",
    "literal_error",
    "enum",
    "greater_than",
    "less_than",
    "finite_number",
    "string_",
    "float_",
    "int_",
    "bool_",
    "too_long",
    "too_short",
    "union_",
    "model_",
    "dict_",
    "list_",
    "tuple_",
    "value_error",
)


def _is_ours(kind: str) -> bool:
    """Whether the error is one of the wire's own, whose sentence says both what is wrong and what is allowed."""
    return not kind.startswith(_PYDANTIC)


def _allowed(kind: str, message: str, context: Mapping[str, Any]) -> str:
    bounds = [
        f"{word} {context[key]}"
        for key, word in (("ge", "at least"), ("gt", "above"), ("le", "at most"), ("lt", "below"))
        if key in context
    ]
    if bounds:
        return " and ".join(bounds)
    for key, words in (
        ("expected_tags", "one of {}"),
        ("expected", "{}"),
        ("pattern", "text that matches {}"),
        ("max_length", "at most {} long"),
        ("min_length", "at least {} long"),
    ):
        if key in context:
            return words.format(context[key])
    if kind == "missing":
        return "a value"
    if kind == "extra_forbidden":
        return "only the documented fields"
    if kind == "finite_number":
        return "a finite number"
    if kind == "json_invalid":
        return "a JSON document"
    if kind.startswith(("float", "int")):
        return "a number"
    if kind.startswith("bool"):
        return "true or false"
    return message if _is_ours(kind) else ""
