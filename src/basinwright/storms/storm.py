"""A design storm as a cumulative fraction of its depth over time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import InputRejected, Problem, RangeError
from basinwright.numbers import Floats, within
from basinwright.registry import Source, method


@dataclass(frozen=True)
class Storm:
    """A temporal distribution of rain: what fraction of the storm's depth has fallen by when.

    Parameters
    ----------
    name : str
        What it is called in messages.
    hours : array, shape (k,)
        Times from the storm's start, rising from 0 [h].
    fractions : array, shape (k,)
        Fraction of the depth fallen by then, from 0 to 1, never falling [-].

    Raises
    ------
    RangeError
        Where hours or fractions break these rules; names the row.

    Examples
    --------
    >>> Storm("even", [0.0, 6.0], [0.0, 1.0]).fraction_at([1.5, 7.0]).tolist()
    [0.25, 1.0]
    """

    name: str
    hours: Floats
    fractions: Floats

    def __post_init__(self) -> None:
        for column in ("hours", "fractions"):
            array = np.array(getattr(self, column), dtype=np.float64)
            array.flags.writeable = False
            object.__setattr__(self, column, array)
        for row, column, what in faults(self.hours, self.fractions):
            where = f"row {row}: " if row is not None else ""
            raise RangeError(f"storm {self.name}: {where}{column} {what}")

    @property
    def duration_h(self) -> float:
        """Duration [h]."""
        return float(self.hours[-1])

    @property
    def burst_step_h(self) -> float:
        """Step of the table where the storm is steepest [h]: it hides what happens within."""
        steps = np.diff(self.hours)
        return float(steps[np.argmax(np.diff(self.fractions) / steps)])

    def fraction_at(self, time_h: ArrayLike) -> Floats:
        """Fraction fallen by a time, linear between ordinates; 0 before the storm, 1 after it.

        Parameters
        ----------
        time_h : float or array
            Time from the storm's start [h].

        Returns
        -------
        float or array
            Fraction [-].

        Raises
        ------
        RangeError
            Where a time is not a number.
        """
        return np.interp(within("time_h", time_h, -np.inf, np.inf), self.hours, self.fractions)


def faults(hours: Floats, fractions: Floats) -> list[tuple[int | None, str, str]]:
    """List what keeps a table from being a storm: row (None: the whole table), column, what is wrong."""
    if hours.ndim != 1 or hours.shape != fractions.shape or hours.size < 2:
        return [(None, "table", "must have an hour and a fraction in each of at least two rows")]
    found: list[tuple[int | None, str, str]] = []
    for row in range(hours.size):
        for column, values in (("hour", hours), ("fraction", fractions)):
            value, before = values[row], values[row - 1] if row else np.nan
            if not np.isfinite(value):
                found.append((row, column, f"is {value:g}: it must be a finite number"))
            elif row == 0 and value != 0.0:
                found.append((row, column, f"is {value:g}: the first must be 0"))
            elif column == "hour" and value <= before:
                found.append((row, column, f"is {value:g}, after {before:g}: hours must rise"))
            elif column == "fraction" and value < before:
                found.append((row, column, f"is {value:g}, after {before:g}: fractions must not fall"))
    if np.isfinite(fractions[-1]) and fractions[-1] != 1.0:
        found.append((fractions.size - 1, "fraction", f"is {fractions[-1]:g}: the last must be 1"))
    return found


@method(
    "storm",
    "table",
    name="Storm of the user's own: cumulative fraction by hour",
    form="fraction fallen by each hour, linear between rows",
    inputs=("hour", "fraction"),
    source=Source("the user's table", "as supplied", "storm.table"),
    limits="any duration; the table must start at 0, end at 1 and never fall",
)
def table_storm(hour: Sequence[float] | Floats, fraction: Sequence[float] | Floats, file: str = "hyetograph") -> Storm:
    """Return the storm of a user's table.

    Parameters
    ----------
    hour : sequence of float, length k
        Times from the storm's start [h].
    fraction : sequence of float, length k
        Fraction of the depth fallen by then [-].
    file : str
        What to call the table in messages.

    Returns
    -------
    Storm

    Raises
    ------
    InputRejected
        With every fault of the table; rows are counted as in a CSV file with one header row.

    Examples
    --------
    >>> table_storm([0, 1, 2], [0, 0.7, 1]).duration_h
    2.0
    """
    hours, fractions = np.asarray(hour, dtype=np.float64), np.asarray(fraction, dtype=np.float64)
    if found := faults(hours, fractions):
        raise InputRejected(
            Problem(
                file,
                column if row is None else f"row {row + 2}, {column}",
                what.partition(": ")[0],
                what.partition(": ")[2] or "give cumulative fractions by hour",
            )
            for row, column, what in found
        )
    return Storm(file, hours, fractions)
