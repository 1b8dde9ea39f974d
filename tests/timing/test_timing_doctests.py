"""The handbook examples in the docstrings of the timing room run; every public function has one."""

import doctest
import importlib
import inspect
import pkgutil

import pytest

import basinwright.timing as room

MODULES = [module.name for module in pkgutil.walk_packages(room.__path__, f"{room.__name__}.")]


@pytest.mark.parametrize("name", MODULES)
def test_examples(name: str) -> None:
    result = doctest.testmod(importlib.import_module(name))
    assert result.failed == 0


def test_public_functions_have_an_example() -> None:
    functions = [getattr(room, name) for name in room.__all__ if inspect.isfunction(getattr(room, name))]
    without = [function.__name__ for function in functions if ">>>" not in (function.__doc__ or "")]
    assert without == ["bankfull_regions"]
