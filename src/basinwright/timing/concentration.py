"""Time of concentration by every registered method, for many outlets at once."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from basinwright.numbers import Floats
from basinwright.registry import Method, find, methods

Input = ArrayLike | Callable[[Floats], Floats]
"""A column of the outlets, or a function such as an intensity by duration."""


@dataclass(frozen=True)
class MethodResult:
    """One method's times of concentration.

    Parameters
    ----------
    method : Method
        The registered method.
    tc_h : array, shape (outlets,)
        Time of concentration [h]; NaN where it could not be computed.
    applicable : array of bool, shape (outlets,)
        Computed, and every input that the published range names lies inside it.
    reason : array of str, shape (outlets,)
        Why not applicable or not computed; empty where applicable.
    """

    method: Method
    tc_h: Floats
    applicable: NDArray[np.bool_]
    reason: NDArray[Any]


def time_of_concentration(inputs: Mapping[str, Input], only: str | None = None) -> dict[str, MethodResult]:
    """Evaluate every registered timing method over arrays of outlets.

    Parameters
    ----------
    inputs : mapping
        Columns by the names that the methods' ``inputs`` and ranges use, shape (outlets,), NaN where missing; a
        plain number holds for all outlets; ``intensity_mm_per_h`` is a function of duration [h]. What no entry
        gives, the methods that need it go without.
    only : str, optional
        Key of the one method wanted.

    Returns
    -------
    dict of str to MethodResult
        By key of the method, in order of registration.

    Notes
    -----
    A method is applicable where it could be computed and no input lies outside the range that was published with
    it; a range in a column that is not known cannot be checked and does not exclude.

    Examples
    --------
    >>> results = time_of_concentration({"path_length_m": [300.0], "path_slope_pct": [5.0], "area_km2": [0.1]})
    >>> results["kirpich"].applicable.tolist()
    [True]
    >>> results["nrcs_lag"].reason.tolist()
    ['needs curve_number, basin_slope_pct']
    """
    columns = {name: value for name, value in inputs.items() if not callable(value)}
    arrays = {name: np.atleast_1d(np.asarray(value, dtype=np.float64)) for name, value in columns.items()}
    size = max((array.size for array in arrays.values()), default=0)
    arrays = {name: np.broadcast_to(array, (size,)) for name, array in arrays.items()}
    functions = {name: value for name, value in inputs.items() if callable(value)}
    wanted = methods("timing") if only is None else {only: find("timing", only)}
    return {key: _evaluate(entry, arrays, functions, size) for key, entry in wanted.items()}


def spread(results: Mapping[str, MethodResult]) -> Floats:
    """Ratio of the longest to the shortest time among the applicable methods.

    Parameters
    ----------
    results : mapping
        What `time_of_concentration` returned.

    Returns
    -------
    array, shape (outlets,)
        Ratio [-], 1 or more; NaN where no method is applicable.

    Examples
    --------
    >>> results = time_of_concentration({"path_length_m": 300.0, "path_slope_pct": 5.0, "travel_time_h": 0.2})
    >>> bool(spread(results)[0] > 2)
    True
    """
    times = np.array([np.where(result.applicable, result.tc_h, np.nan) for result in results.values()])
    none = np.isnan(times).all(axis=0)
    longest = np.where(np.isnan(times), -np.inf, times).max(axis=0)
    shortest = np.where(np.isnan(times), np.inf, times).min(axis=0)
    return np.where(none, np.nan, longest / np.where(none, 1.0, shortest))


def _evaluate(
    entry: Method, arrays: Mapping[str, Floats], functions: Mapping[str, Callable[[Floats], Floats]], size: int
) -> MethodResult:
    """Compute one method where its inputs are there, and say of every other outlet why not."""
    lacks = _Reasons(size)
    numbers = []
    for name in entry.inputs:
        if name in functions:
            continue
        if name not in arrays:
            lacks.add(np.ones(size, dtype=bool), name)
            continue
        numbers.append(name)
        lacks.add(~np.isfinite(arrays[name]), name)
        lacks.add(arrays[name] <= 0, f"{name} above zero")
    ready = ~lacks.any
    tc_h = np.full(size, np.nan)
    if ready.any():
        given: dict[str, Any] = {name: arrays[name][ready] for name in numbers}
        given |= {name: functions[name] for name in entry.inputs if name in functions}
        tc_h[ready] = entry.function(**given)

    outside = _Reasons(size)
    for name, bounds in entry.valid_range.items():
        if name in arrays:
            values = arrays[name]
            text = f"{name} outside {bounds.printed or f'{bounds.low:g} to {bounds.high:g}'}"
            outside.add(ready & np.isfinite(values) & ((values < bounds.low) | (values > bounds.high)), text)
    no_time = ready & np.isnan(tc_h)
    outside.add(no_time, "the formula gives no time for these inputs")
    reason = np.where(ready, outside.texts("; "), lacks.texts(", ", "needs "))
    return MethodResult(entry, tc_h, ready & ~outside.any, reason)


class _Reasons:
    """Reasons by outlet, held as bits; only the combinations that occur become text."""

    def __init__(self, size: int) -> None:
        self._bits = np.zeros(size, dtype=np.int64)
        self._words: list[str] = []

    def add(self, mask: NDArray[np.bool_], words: str) -> None:
        """Add a reason to the outlets of a mask."""
        self._bits |= mask.astype(np.int64) << len(self._words)
        self._words.append(words)

    @property
    def any(self) -> NDArray[np.bool_]:
        """Where at least one reason holds."""
        return self._bits != 0

    def texts(self, separator: str, opening: str = "") -> NDArray[Any]:
        """Return the reasons of each outlet as one text, empty where there is none."""
        combinations, of_row = np.unique(self._bits, return_inverse=True)
        texts = [
            opening + separator.join(words for bit, words in enumerate(self._words) if code >> bit & 1) if code else ""
            for code in combinations.tolist()
        ]
        return np.array(texts, dtype=object)[of_row] if texts else np.empty(0, dtype=object)
