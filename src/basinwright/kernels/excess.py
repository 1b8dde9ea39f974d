"""Rain and excess rain by time step, many outlets of different steps at once."""

from __future__ import annotations

import numpy as np
from numba import njit


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
    duration = hours[storm_offsets[1] - 1]
    for i in range(row_offsets.size - 1):
        steps = row_offsets[i + 1] - row_offsets[i]
        patches = range(retention_offsets[i], retention_offsets[i + 1])
        least = np.inf
        for p in patches:
            least = min(least, ratio * retention_mm[p])
        for storm in range(depth_mm.shape[1]):
            at = storm_offsets[storm]
            fallen = 0.0
            run_off = 0.0
            for step in range(steps):
                time = duration * (step + 1) / steps
                while hours[at + 1] < time and at + 2 < storm_offsets[storm + 1]:
                    at += 1
                slope = (fractions[at + 1] - fractions[at]) / (hours[at + 1] - hours[at])
                fraction = fractions[at] + slope * (time - hours[at])
                rain = depth_mm[i, storm] * (1.0 if step == steps - 1 else fraction)
                total = 0.0
                if rain > least:
                    for p in patches:
                        effective = rain - ratio * retention_mm[p]
                        if effective > 0.0:
                            total += weight[p] * (effective * effective / (effective + retention_mm[p]))
                # Rounding must not make rain or excess go backwards.
                rain = max(rain, fallen)
                total = max(total, run_off)
                rain_mm[row_offsets[i] + step, storm] = rain - fallen
                excess_mm[row_offsets[i] + step, storm] = total - run_off
                fallen = rain
                run_off = total
            runoff_mm[i, storm] = run_off
