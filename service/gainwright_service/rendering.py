"""A domain result becomes wire by equal names.

A wire field takes the domain attribute of its own name, or of its name without the unit that the wire adds
(`period_s` from ``period``). A complex response is split in its two parts, and a number that
is infinite for want of a bound is null where the wire allows it. Nothing is listed twice: a field added
on both sides under one name arrives by itself, and a test proves that every field of an analysis does.
"""

from __future__ import annotations

import math
import types
import typing
from collections.abc import Mapping
from typing import Any, TypeVar

from gainwright_wire.base import Wire

UNITS = ("_rad_s", "_s", "_deg")
PARTS = {"real": ("response", "real"), "imaginary": ("response", "imag")}

Document = TypeVar("Document", bound=Wire)


def render(target: type[Document], source: object, /, **given: Any) -> Document:
    """The wire document of a domain result; ``given`` overrides or adds fields.

    Raises
    ------
    AttributeError
        The domain result lacks a field that the wire needs and has no default for.
    """
    values: dict[str, Any] = {}
    for name, field in target.model_fields.items():
        if name in given:
            values[name] = given[name]
            continue
        attribute = attribute_of(source, name)
        if attribute is not None:
            values[name] = _convert(field.annotation, getattr(source, attribute))
        elif name in PARTS:
            owner, part = PARTS[name]
            values[name] = getattr(getattr(source, owner), part)
        elif field.is_required():
            raise AttributeError(f"{type(source).__name__} has no {name} for {target.__name__}")
    return target(**values)


def attribute_of(source: object, name: str) -> str | None:
    """The domain attribute that a wire field of this name is taken from; None when there is none."""
    candidates = [name, *(name.removesuffix(unit) for unit in UNITS if name.endswith(unit))]
    return next((c for c in candidates if hasattr(source, c)), None)


def _convert(annotation: Any, value: Any) -> Any:
    if isinstance(value, float) and not math.isfinite(value) and type(None) in typing.get_args(annotation):
        return None
    document = wire_class(annotation)
    if document is None or value is None or isinstance(value, Mapping):
        return value
    if isinstance(value, list | tuple):
        return tuple(render(document, item) for item in value)
    return render(document, value)


def wire_class(annotation: Any) -> type[Wire] | None:
    """The wire class inside an annotation (optional and tuples unwrapped); None for scalars."""
    if isinstance(annotation, type) and issubclass(annotation, Wire):
        return annotation
    if typing.get_origin(annotation) in (tuple, list, typing.Union, types.UnionType):
        found = (wire_class(argument) for argument in typing.get_args(annotation))
        return next((f for f in found if f is not None), None)
    return None
