"""What a formula can take at all: refuses NaN and impossible numbers, naming the argument and the row."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from basinwright.errors import RangeError

Floats = NDArray[np.float64]
"""An array of float64; a 0-d array or numpy scalar where the arguments were plain numbers."""

Integers = NDArray[np.int64]


def positive(name: str, values: ArrayLike) -> Floats:
    """Return the values as float64; refuse what is not finite and above zero.

    Raises
    ------
    RangeError
        Naming the argument, the first row at fault and its value.
    """
    array = np.asarray(values, dtype=np.float64)
    return _checked(name, array, (array > 0) & np.isfinite(array), "a finite number above zero")


def not_negative(name: str, values: ArrayLike) -> Floats:
    """Return the values as float64; refuse what is not finite or is below zero (see `positive`)."""
    array = np.asarray(values, dtype=np.float64)
    return _checked(name, array, (array >= 0) & np.isfinite(array), "a finite number, zero or above")


def within(name: str, values: ArrayLike, low: float, high: float) -> Floats:
    """Return the values as float64; refuse what is not between two bounds, both included (see `positive`)."""
    array = np.asarray(values, dtype=np.float64)
    return _checked(name, array, (array >= low) & (array <= high), f"between {low:g} and {high:g}")


def _checked(name: str, array: Floats, fine: NDArray[np.bool_], wanted: str) -> Floats:
    if not fine.all():
        at = np.argwhere(~np.atleast_1d(fine))[0]
        where = f"row {at[0]}: " if array.ndim else ""
        raise RangeError(f"{where}{name} is {np.atleast_1d(array)[tuple(at)]:g}: it must be {wanted}")
    return array


def check_offsets(name: str, offsets: ArrayLike, rows: int) -> Integers:
    """Return row offsets as int64: item i owns the rows ``offsets[i]`` up to ``offsets[i + 1]``.

    Raises
    ------
    RangeError
        Where they do not start at 0, do not end at the number of rows, or fall.
    """
    array = np.asarray(offsets, dtype=np.int64)
    if array.ndim != 1 or array.size == 0 or array[0] != 0 or array[-1] != rows or (np.diff(array) < 0).any():
        raise RangeError(f"{name} must run from 0 to the number of rows ({rows}) without falling")
    return array


def three_figures(value: float) -> str:
    """Return a number as an engineer signs it: three significant figures, no powers of ten.

    Examples
    --------
    >>> [three_figures(value) for value in (1529.2, 999.6, 59.14, 0.8224, 0.0000772, 0.0)]
    ['1,530', '1,000', '59.1', '0.822', '0.0000772', '0']
    """
    if value == 0:
        return "0"
    rounded = float(f"{value:.2e}")
    decimals = 2 - int(f"{rounded:e}".rpartition("e")[2])
    text = f"{rounded:,.{max(decimals, 0)}f}"
    return text.rstrip("0").rstrip(".") if decimals > 3 else text
