"""The relay law."""

from __future__ import annotations

import ast
import math
import sys
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

import gainwright.relay
from gainwright.errors import OutOfDomain
from gainwright.relay import RelayLaw, Side


@pytest.mark.parametrize(
    ("side", "process_variable", "following"),
    [
        (Side.UP, 10.4, Side.UP),
        (Side.UP, 10.5, Side.UP),
        (Side.UP, 10.6, Side.DOWN),
        (Side.UP, 3.0, Side.UP),
        (Side.DOWN, 9.6, Side.DOWN),
        (Side.DOWN, 9.5, Side.DOWN),
        (Side.DOWN, 9.4, Side.UP),
        (Side.DOWN, 30.0, Side.DOWN),
    ],
)
def test_a_side_is_left_only_past_its_own_edge(side: Side, process_variable: float, following: Side) -> None:
    assert RelayLaw(10.0, 0.5).next_side(side, process_variable) is following


@given(st.sampled_from(Side), st.floats(-100, 100), st.floats(0, 10), st.floats(-50, 50))
def test_the_law_is_symmetric_about_the_reference(
    side: Side, deviation: float, hysteresis: float, reference: float
) -> None:
    law = RelayLaw(0.0, hysteresis)
    assert law.next_side(side, deviation) is law.next_side(side.opposite, -deviation).opposite


@given(st.sampled_from(Side), st.floats(-1, 1))
def test_nothing_inside_the_band_switches(side: Side, deviation: float) -> None:
    assert RelayLaw(0.0, 1.0).next_side(side, deviation) is side


def test_a_process_at_rest_on_the_reference_does_not_chatter_without_hysteresis() -> None:
    law = RelayLaw(55.0, 0.0)
    assert law.next_side(Side.UP, 55.0) is Side.UP
    assert law.next_side(Side.DOWN, 55.0) is Side.DOWN


@pytest.mark.parametrize(("effect", "up", "down"), [(1, 43.0, 37.0), (-1, 37.0, 43.0)])
def test_the_up_side_drives_the_process_variable_up_whatever_the_effect(effect: int, up: float, down: float) -> None:
    law = RelayLaw(0.0, 0.0, effect=effect)
    assert law.level(Side.UP, 40.0, 3.0) == up
    assert law.level(Side.DOWN, 40.0, 3.0) == down


@pytest.mark.parametrize(
    ("arguments", "field"),
    [
        ((math.nan, 0.1), "reference"),
        ((0.0, -0.1), "hysteresis"),
        ((0.0, math.nan), "hysteresis"),
        ((0.0, math.inf), "hysteresis"),
        ((0.0, 0.1, 0), "effect"),
    ],
)
def test_bad_settings_are_named(arguments: tuple[float, ...], field: str) -> None:
    with pytest.raises(OutOfDomain) as caught:
        RelayLaw(*arguments)
    assert caught.value.field == field


def test_the_law_needs_the_standard_library_and_our_errors_only() -> None:
    source = ast.parse(Path(gainwright.relay.__file__).read_text())
    imported = {node.module for node in ast.walk(source) if isinstance(node, ast.ImportFrom)}
    imported |= {alias.name for node in ast.walk(source) if isinstance(node, ast.Import) for alias in node.names}
    assert {name for name in imported if name and name.split(".")[0] not in sys.stdlib_module_names} == {
        "gainwright.errors"
    }
