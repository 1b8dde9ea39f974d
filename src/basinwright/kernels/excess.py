"""Rain and excess rain by time step, many outlets of different steps at once."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True, error_model="numpy")
def _add_runoff(
    rain_mm: np.ndarray, weight: float, abstraction_mm: float, retention_mm: float, total: np.ndarray
) -> None:
    """Add the runoff of one patch to the total of its outlet, by step."""
    # Without a branch and with numpy's division the loop runs on whole vectors.
    for k in range(rain_mm.size):
        effective = rain_mm[k] - abstraction_mm
        runoff = weight * (effective * effective / (effective + retention_mm))
        total[k] += runoff if effective > 0.0 else 0.0


@njit(cache=True, nogil=True)
def _cumulative_rain(hours: np.ndarray, fractions: np.ndarray, depth_mm: float, rain_mm: np.ndarray) -> None:
    """Rain fallen by the end of each of equal steps, the storm's depth by the last."""
    steps = rain_mm.size
    duration = hours[-1]
    at = 0
    slope = (fractions[1] - fractions[0]) / (hours[1] - hours[0])
    for step in range(steps):
        time = duration * (step + 1) / steps
        moved = False
        while hours[at + 1] < time and at + 2 < hours.size:
            at += 1
            moved = True
        if moved:
            slope = (fractions[at + 1] - fractions[at]) / (hours[at + 1] - hours[at])
        rain_mm[step] = depth_mm * (fractions[at] + slope * (time - hours[at]))
    rain_mm[steps - 1] = depth_mm


@njit(cache=True, nogil=True)
def excess_increments(
    hours: np.ndarray,
    fractions: np.ndarray,
    storm_offsets: np.ndarray,
    depth_mm: np.ndarray,
    retention_offsets: np.ndarray,
    weight: np.ndarray,
    retention_mm: np.ndarray,
    ratio: float,
    row_offsets: np.ndarray,
    rain_mm: np.ndarray,
    excess_mm: np.ndarray,
    runoff_mm: np.ndarray,
) -> None:
    """Increments of rain and of curve-number runoff over equal steps of each outlet's own length.

    Parameters
    ----------
    hours, fractions : float64 arrays, shape (ordinates,)
        The storms, one after another: cumulative fraction by hour. All have the same duration.
    storm_offsets : int64 array, shape (storms + 1,)
    depth_mm : float64 array, shape (n, storms)
    retention_offsets : int64 array, shape (n + 1,)
    weight, retention_mm : float64 arrays, shape (patches,)
        Share of each patch in its outlet's area, and its retention.
    ratio : float
        Initial abstraction over retention.
    row_offsets : int64 array, shape (n + 1,)
        Each outlet has one row for each of its steps.
    rain_mm, excess_mm : float64 arrays, shape (rows, storms)
        Result.
    runoff_mm : float64 array, shape (n, storms)
        Result: the whole excess.
    """
    longest = 0
    for i in range(row_offsets.size - 1):
        longest = max(longest, row_offsets[i + 1] - row_offsets[i])
    fallen_mm, runs_off_mm = np.empty(longest), np.empty(longest)
    for i in range(row_offsets.size - 1):
        first, steps = row_offsets[i], row_offsets[i + 1] - row_offsets[i]
        cumulative, total = fallen_mm[:steps], runs_off_mm[:steps]
        for storm in range(depth_mm.shape[1]):
            table = slice(storm_offsets[storm], storm_offsets[storm + 1])
            _cumulative_rain(hours[table], fractions[table], depth_mm[i, storm], cumulative)
            total[:] = 0.0
            for p in range(retention_offsets[i], retention_offsets[i + 1]):
                abstraction = ratio * retention_mm[p]
                dry = 0
                while dry < steps and cumulative[dry] <= abstraction:
                    dry += 1
                _add_runoff(cumulative[dry:], weight[p], abstraction, retention_mm[p], total[dry:])
            fallen = 0.0
            run_off = 0.0
            for step in range(steps):
                # Rounding must not make rain or excess go backwards.
                rain = max(cumulative[step], fallen)
                excess = max(total[step], run_off)
                rain_mm[first + step, storm] = rain - fallen
                excess_mm[first + step, storm] = excess - run_off
                fallen = rain
                run_off = excess
            runoff_mm[i, storm] = run_off
