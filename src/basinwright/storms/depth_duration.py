"""Storms built from a depth-duration table: balanced (alternating block) and nested; their areal reduction.

Depths between the durations of a table are interpolated on logarithmic scales of both, common practice: intensity
is close to a power of duration.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import InputRejected, Problem, RangeError
from basinwright.numbers import Floats, not_negative, positive
from basinwright.registry import Source, method
from basinwright.storms.storm import Storm
from basinwright.units import KM2_PER_MI2


@dataclass(frozen=True)
class DepthDurationFrequency:
    """Rainfall depth by duration and return period.

    Parameters
    ----------
    durations_h : array, shape (k,)
        Rising [h].
    return_periods : tuple of str, length T
        As written in the project [yr].
    depths_mm : array, shape (k, T)
        Depths [mm]: they do not fall with duration, their mean intensity does not rise with it, and they do not
        fall with the return period.
    """

    durations_h: Floats
    return_periods: tuple[str, ...]
    depths_mm: Floats

    def column(self, return_period: str) -> Floats:
        """Depths of one return period by duration [mm].

        Raises
        ------
        RangeError
            Where the table does not have it.
        """
        if return_period not in self.return_periods:
            raise RangeError(f"no return period {return_period!r} in the table: {', '.join(self.return_periods)}")
        return self.depths_mm[:, self.return_periods.index(return_period)]

    def depth_mm(self, duration_h: ArrayLike, return_period: str) -> Floats:
        """Depth of a duration [mm] (see `interpolated_depth_mm`)."""
        return interpolated_depth_mm(duration_h, self.durations_h, self.column(return_period))


def read_depth_duration_frequency(
    durations_h: Sequence[float] | Floats,
    return_periods: Sequence[str],
    depths_mm: Sequence[Sequence[float]] | Floats,
    file: str = "ddf",
) -> DepthDurationFrequency:
    """Check a depth-duration-frequency table and return it.

    Parameters
    ----------
    durations_h : sequence of float, length k
        Durations [h], one a row.
    return_periods : sequence of str, length T
        Return periods [yr], one a column.
    depths_mm : array, shape (k, T)
        Depths [mm].
    file : str
        What to call the table in messages.

    Returns
    -------
    DepthDurationFrequency

    Raises
    ------
    InputRejected
        With every fault; rows are counted as in a CSV file with one header row.
    """
    durations, depths = np.asarray(durations_h, dtype=np.float64), np.asarray(depths_mm, dtype=np.float64)
    periods = tuple(return_periods)
    problems: list[Problem] = []
    if durations.ndim != 1 or durations.size < 2 or depths.shape != (durations.size, len(periods)) or not periods:
        raise InputRejected.one(
            file,
            "table",
            "is not a table of durations by return periods",
            "give two or more rows, a depth in each cell",
        )
    try:
        years = [float(period) for period in periods]
    except ValueError:
        raise InputRejected.one(
            file, "header", f"return periods {', '.join(periods)} are not all numbers", "write years"
        ) from None
    if not all(before < after for before, after in zip([0.0, *years], years, strict=False)):
        problems.append(Problem(file, "header", f"return periods {', '.join(periods)} do not rise", "sort the columns"))
    for row, duration in enumerate(durations):
        before = durations[row - 1] if row else 0.0
        if not (np.isfinite(duration) and duration > before):
            problems.append(
                Problem(file, f"row {row + 2}, duration", f"is {duration:g}, after {before:g}", "durations must rise")
            )
    for row, column in np.ndindex(depths.shape):
        depth, where = depths[row, column], f"row {row + 2}, {periods[column]}"
        if not (np.isfinite(depth) and depth > 0.0):
            problems.append(Problem(file, where, f"is {depth:g}", "give a depth over zero"))
            continue
        shorter = depths[row - 1, column] if row else np.nan
        if depth < shorter:
            problems.append(Problem(file, where, "is less than for the shorter duration", "depths must not fall"))
        # A print rounded to its last digit may let intensity rise by a hair.
        elif shorter > 0.0 and depth / durations[row] > shorter / durations[row - 1] * 1.005:
            problems.append(
                Problem(file, where, "has a higher intensity than the shorter duration", "intensities must not rise")
            )
        if column and depth < depths[row, column - 1]:
            problems.append(
                Problem(file, where, "is less than for the smaller return period", "depths must not fall along a row")
            )
    if problems:
        raise InputRejected(problems)
    return DepthDurationFrequency(durations, periods, depths)


def interpolated_depth_mm(duration_h: ArrayLike, durations_h: ArrayLike, depths_mm: ArrayLike) -> Floats:
    """Depth of a duration between those of a table, linear in the logarithms of both.

    Parameters
    ----------
    duration_h : float or array
        Duration asked for [h].
    durations_h, depths_mm : array, shape (k,)
        The table, rising [h, mm].

    Returns
    -------
    float or array
        Depth [mm].

    Raises
    ------
    RangeError
        Where the duration is outside the table, or the table is not positive and rising.

    Examples
    --------
    >>> round(float(interpolated_depth_mm(2.0, [1.0, 4.0], [20.0, 40.0])), 3)
    28.284
    """
    asked = positive("duration_h", duration_h)
    durations, depths = positive("durations_h", durations_h), positive("depths_mm", depths_mm)
    if durations.ndim != 1 or durations.shape != depths.shape or (np.diff(durations) <= 0.0).any():
        raise RangeError("durations_h must rise, with one depth each")
    low, high = durations[0] * (1.0 - 1e-9), durations[-1] * (1.0 + 1e-9)
    if ((asked < low) | (asked > high)).any():
        worst = np.atleast_1d(asked)[np.argmax(np.atleast_1d((asked < low) | (asked > high)))]
        raise RangeError(
            f"duration_h is {worst:g}: the table runs from {durations[0]:g} to {durations[-1]:g} h; "
            "add that duration to it, or choose a storm and a step within it"
        )
    return np.exp(np.interp(np.log(asked), np.log(durations), np.log(depths)))


def _steps(duration_h: float, step_h: float) -> int:
    duration, step = float(positive("duration_h", duration_h)), float(positive("step_h", step_h))
    count = round(duration / step)
    if count < 1 or abs(count * step - duration) > 1e-9 * duration:
        raise RangeError(f"step_h is {step:g}: it must divide the storm's duration of {duration:g} h")
    return count


@method(
    "storm",
    "balanced",
    name="Balanced storm (alternating block)",
    form="increments of the depth-duration curve, largest in the middle, then right and left by turns",
    inputs=("duration_h", "step_h", "durations_h", "depths_mm"),
    source=Source(
        "V. T. Chow, D. R. Maidment and L. W. Mays, Applied Hydrology, McGraw-Hill",
        "1988",
        "sec. 14.4, example 14.4.1",
        "from memory; the example is reproduced in the tests",
    ),
    limits="any duration and step within the table; all intensities of one return period in one storm",
)
def balanced(duration_h: float, step_h: float, durations_h: ArrayLike, depths_mm: ArrayLike) -> Storm:
    """Return the storm whose every duration around the burst has the depth of the table.

    Parameters
    ----------
    duration_h : float
        Duration of the storm [h].
    step_h : float
        Length of a block [h]; divides the duration.
    durations_h, depths_mm : array, shape (k,)
        Depth by duration for one return period [h, mm]; from the step to the storm's duration at least.

    Returns
    -------
    Storm

    Raises
    ------
    RangeError
        Where the step does not divide the duration, or a duration needed is outside the table.

    Examples
    --------
    >>> balanced(3.0, 1.0, [1.0, 2.0, 3.0], [50.0, 70.0, 80.0]).fractions.round(9).tolist()
    [0.0, 0.125, 0.75, 1.0]
    """
    count = _steps(duration_h, step_h)
    hours = np.arange(count + 1, dtype=np.float64) * (duration_h / count)
    blocks = np.diff(interpolated_depth_mm(hours[1:], durations_h, depths_mm), prepend=0.0)
    fallen = np.concatenate(([0.0], np.cumsum(alternating_blocks_mm(blocks))))
    return Storm("balanced", hours, fallen / fallen[-1])


def alternating_blocks_mm(increments_mm: ArrayLike) -> Floats:
    """Arrange increments of depth with the largest in the middle, then right and left of it by turns.

    Parameters
    ----------
    increments_mm : array, shape (k,)
        Increments of the depth-duration curve over equal steps [mm], in any order.

    Returns
    -------
    array, shape (k,)
        The same, arranged; of an even number the left of the two middle places takes the largest.

    Raises
    ------
    RangeError
        Where an increment is negative or not finite.

    Examples
    --------
    >>> alternating_blocks_mm([6.0, 3.0, 2.0, 1.0]).tolist()
    [2.0, 6.0, 3.0, 1.0]
    """
    ranked = np.sort(np.atleast_1d(not_negative("increments_mm", increments_mm)))[::-1]
    # Ranks 1, 2, 3, 4 ... stand in the middle, one to its right, one to its left, two to its right ...
    turn = np.arange(ranked.size)
    place = (ranked.size - 1) // 2 + np.where(turn % 2 == 1, (turn + 1) // 2, -(turn // 2))
    arranged = np.empty_like(ranked)
    arranged[place] = ranked
    return arranged


@method(
    "storm",
    "nested",
    name="Nested storm, centred",
    form="fraction 0.5 -+ 0.5 P(d)/P(D) at d/2 before and after the middle",
    inputs=("duration_h", "step_h", "durations_h", "depths_mm"),
    source=Source(
        "U.S. Natural Resources Conservation Service, National Engineering Handbook Part 630, chapter 4",
        "2019",
        "rainfall distributions from precipitation-frequency data",
        "the rule from a secondary copy; depths between durations by our own interpolation, no smoothing of ratios",
    ),
    limits="any duration and step within the table; every duration lies symmetrically inside the longer ones",
)
def nested(duration_h: float, step_h: float, durations_h: ArrayLike, depths_mm: ArrayLike) -> Storm:
    """Return the storm in which each duration is centred within every longer one.

    Parameters
    ----------
    duration_h : float
        Duration of the storm [h].
    step_h : float
        Step of the ordinates [h]; divides the duration. The table's own durations are kept as well.
    durations_h, depths_mm : array, shape (k,)
        Depth by duration for one return period [h, mm]; the storm's duration must lie within. Rain within the shortest
        duration is even.

    Returns
    -------
    Storm

    Raises
    ------
    RangeError
        Where the step does not divide the duration, or the duration is outside the table.

    Examples
    --------
    >>> nested(4.0, 1.0, [1.0, 2.0, 4.0], [50.0, 60.0, 100.0]).fraction_at([1.0, 1.5, 2.5, 3.0]).round(9).tolist()
    [0.2, 0.25, 0.75, 0.8]
    """
    count = _steps(duration_h, step_h)
    durations = positive("durations_h", durations_h)
    half = 0.5 * duration_h
    # Distances from the middle: the ordinates asked for and half of each duration of the table.
    away = np.abs(np.arange(count + 1) * (duration_h / count) - half)
    away = np.unique(np.round(np.concatenate((away, durations / 2.0)), 9))
    away = away[(away >= durations[0] / 2.0 - 1e-9) & (away < half)]
    whole = float(interpolated_depth_mm(duration_h, durations_h, depths_mm))
    inside = interpolated_depth_mm(np.maximum(2.0 * away, durations[0]), durations_h, depths_mm) / whole
    hours = np.concatenate(([0.0], half - away[::-1], half + away, [duration_h]))
    fractions = np.concatenate(([0.0], 0.5 - 0.5 * inside[::-1], 0.5 + 0.5 * inside, [1.0]))
    return Storm("nested", hours, fractions)


def areal_reduction_leclerc_schaake(area_km2: ArrayLike, duration_h: ArrayLike) -> Floats:
    """Factor from point to areal rainfall depth.

    Parameters
    ----------
    area_km2 : float or array
        Drainage area [km2].
    duration_h : float or array
        Duration of the depth [h].

    Returns
    -------
    float or array
        Factor on the depth [-], 1 for a point.

    Raises
    ------
    RangeError
        Where an area is negative, or a duration not above zero, or either is not finite.

    Notes
    -----
    ``ARF = 1 - exp(-1.1 t^0.25) + exp(-1.1 t^0.25 - 0.01 A)``, t in h, A in **mi2**: G. Leclerc and J. C. Schaake, MIT
    Report 142, 1972, fitted to the curves of U.S. Weather Bureau Technical Paper 29. From memory. The paper's curves
    end at 400 mi2 and run from 0.5 to 24 h. Before a balanced or nested storm is built, reduce the depth of each
    duration by the factor of that duration; of any other storm, reduce its depth.

    Examples
    --------
    >>> round(float(areal_reduction_leclerc_schaake(100 * 2.589988110336, 24.0)), 3)
    0.945
    """
    area_mi2 = not_negative("area_km2", area_km2) / KM2_PER_MI2
    root = 1.1 * positive("duration_h", duration_h) ** 0.25
    return 1.0 - np.exp(-root) + np.exp(-root - 0.01 * area_mi2)


def critical_duration(durations_h: ArrayLike, peak_m3s: ArrayLike) -> tuple[Floats, np.ndarray]:
    """Duration whose storm gives the highest peak.

    Parameters
    ----------
    durations_h : array, shape (k,)
        Durations tried, rising [h].
    peak_m3s : array, shape (k, ...)
        Peaks of each duration [m3/s], by outlet or by outlet and return period.

    Returns
    -------
    duration_h : array, shape (...)
        The duration [h]; the shortest of equals.
    at_end : bool array, shape (...)
        Whether it is the first or the last one tried: a longer list may hold a higher peak.

    Raises
    ------
    RangeError
        Where durations do not rise, or a peak is negative or not finite.

    Examples
    --------
    >>> critical_duration([1.0, 3.0, 6.0], [[2.0], [5.0], [4.0]])[0].tolist()
    [3.0]
    """
    durations, peaks = positive("durations_h", durations_h), not_negative("peak_m3s", peak_m3s)
    if durations.ndim != 1 or (np.diff(durations) <= 0).any() or peaks.shape[:1] != durations.shape:
        raise RangeError("durations_h must rise, with one row of peaks each")
    best = np.argmax(peaks, axis=0)
    return durations[best], (best == 0) | (best == durations.size - 1)
