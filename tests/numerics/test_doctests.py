"""The examples in the docstrings of the numerics run as they are printed."""

from __future__ import annotations

import doctest
import importlib
import pkgutil

import pytest

import gainwright

MODULES = [module.name for module in pkgutil.walk_packages(gainwright.__path__, "gainwright.")]


@pytest.mark.parametrize("name", MODULES)
def test_the_examples_of_the_module_run(name: str) -> None:
    assert doctest.testmod(importlib.import_module(name)).failed == 0
