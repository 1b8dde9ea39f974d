"""What a formula can take at all: refuses NaN and impossible numbers, naming the argument and the row."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from basinwright.errors import RangeError

Floats = NDArray[np.float64]
"""An array of float64; a 0-d array or numpy scalar where the arguments were plain numbers."""


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
        row = int(np.flatnonzero(~np.atleast_1d(fine))[0])
        where = f"row {row}: " if array.ndim else ""
        raise RangeError(f"{where}{name} is {np.atleast_1d(array).flat[row]:g}: it must be {wanted}")
    return array
