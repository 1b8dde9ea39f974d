"""Texts of numbers against Python's own, which is the same definition from another hand."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.kernels.decimals import LONGEST, write_numbers


def texts(values: np.ndarray, function=write_numbers) -> list[str]:
    text = np.zeros(values.size * (LONGEST + 1), np.uint8)
    return text[: function(values, text)].tobytes().decode("ascii").split("\n")[:-1]


def expected(values: np.ndarray) -> list[str]:
    return ["" if np.isnan(value) else repr(value) for value in values.tolist()]


POWERS = 2.0 ** np.arange(-1074, 1024)
TENS = np.array([float(f"1e{power}") for power in range(-323, 309)])


@pytest.mark.parametrize(
    "values",
    [
        np.array([0.0, -0.0, 1.0, -1.5, 0.1, 2 / 3, 1200.0, 5e-324, np.inf, -np.inf, np.nan, 9007199254740993.0]),
        np.array([1e16, 9999999999999998.0, 123456789012345680.0, 1e15, 1e-4, 9.9e-5, 1.7976931348623157e308]),
        np.concatenate([POWERS, np.nextafter(POWERS[1:], 0), np.nextafter(POWERS, np.inf)]),
        np.concatenate([TENS, np.nextafter(TENS, 0), np.nextafter(TENS, np.inf)]),
        np.random.default_rng(1).integers(0, 2**64, 200_000, dtype=np.uint64).view(np.float64),
        np.random.default_rng(2).random(100_000) * 1e4,
        np.arange(50_000) * 2.0**-20,
    ],
    ids=["special", "limits", "powers of two", "powers of ten", "any bits", "uniform", "binary fractions"],
)
def test_texts_are_those_of_repr(values: np.ndarray) -> None:
    assert texts(values) == expected(values)


@settings(max_examples=200, deadline=None)
@given(st.lists(st.floats(), max_size=5))
def test_any_floats(values: list[float]) -> None:
    array = np.array(values, np.float64)
    assert texts(array) == expected(array)


def test_compiled_and_plain_agree() -> None:
    values = np.array([0.0, -1234.5678, 1e-7, 3e20, np.nan, 0.3, 5e-324, 2.0**60])
    with np.errstate(over="ignore"):
        assert texts(values, write_numbers.py_func) == texts(values)
