"""Reading many curves at once."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def areas_within(
    offsets: np.ndarray, time_h: np.ndarray, area_km2: np.ndarray, at_offsets: np.ndarray, at_h: np.ndarray,
    within_km2: np.ndarray,
) -> None:  # fmt: skip
    """Area of every outlet whose water has arrived by given times, linear between the rows of its time-area curve.

    Parameters
    ----------
    offsets : int64 array, shape (n + 1,)
        Outlet i owns the rows ``offsets[i]`` up to ``offsets[i + 1]``: at least one.
    time_h, area_km2 : float64 arrays, shape (rows,)
        Rising times from the outlet; none of the area has arrived at time 0 unless the first row says so.
    at_offsets : int64 array, shape (n + 1,)
    at_h : float64 array, shape (times,)
        Times, never falling within an outlet.
    within_km2 : float64 array, shape (times,)
        Result.
    """
    for i in range(offsets.size - 1):
        following, end = offsets[i], offsets[i + 1]
        before_h, before_km2 = 0.0, 0.0
        for k in range(at_offsets[i], at_offsets[i + 1]):
            while following < end and time_h[following] <= at_h[k]:
                before_h, before_km2 = time_h[following], area_km2[following]
                following += 1
            if following == end or before_h == at_h[k]:
                within_km2[k] = before_km2
            else:
                slope = (area_km2[following] - before_km2) / (time_h[following] - before_h)
                within_km2[k] = slope * (at_h[k] - before_h) + before_km2
