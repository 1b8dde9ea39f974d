"""At which return period a capacity is exceeded."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from basinwright.errors import RangeError
from basinwright.numbers import Floats, positive


def first_exceeded(capacity_m3s: ArrayLike, peak_m3s: ArrayLike) -> NDArray[np.int64]:
    """Return the first of rising return periods whose peak is over the capacity.

    Parameters
    ----------
    capacity_m3s : array, shape (n,)
        Capacities [m3/s].
    peak_m3s : array, shape (n, T)
        Peaks by rising return period [m3/s].

    Returns
    -------
    int array, shape (n,)
        Its place; T where none is.

    Examples
    --------
    >>> first_exceeded([5.0, 9.0], [[3.0, 6.0], [3.0, 6.0]]).tolist()
    [1, 2]
    """
    over = np.asarray(peak_m3s, dtype=np.float64) > np.asarray(capacity_m3s, dtype=np.float64)[..., None]
    return np.where(over.any(axis=-1), over.argmax(axis=-1), over.shape[-1]).astype(np.int64)


def crossing_years(capacity_m3s: ArrayLike, peak_m3s: ArrayLike, periods_yr: ArrayLike) -> Floats:
    """Return period at which the peak reaches a capacity, between tested ones only.

    Parameters
    ----------
    capacity_m3s : array, shape (...)
        Capacities [m3/s].
    peak_m3s : array, shape (..., T)
        Peaks by rising return period, which do not fall [m3/s].
    periods_yr : array, shape (T,)
        Return periods, rising [yr].

    Returns
    -------
    array, shape (...)
        Years; minus infinity where the first peak is already over the capacity, infinity where none is [yr].

    Raises
    ------
    RangeError
        Where return periods do not rise above zero.

    Notes
    -----
    Straight between two tested periods on logarithmic scales of both peak and return period; where the lower peak is
    zero the scale of the peak is linear.

    Examples
    --------
    Peaks that grow as the square root of the return period reach 2 m3/s at 4 years.

    >>> float(crossing_years(2.0, [1.0, 10.0**0.5], [1.0, 10.0]).round(12))
    4.0
    """
    years = positive("periods_yr", periods_yr)
    if (np.diff(years) <= 0).any():
        raise RangeError("periods_yr must rise")
    capacity, peak = np.asarray(capacity_m3s, dtype=np.float64), np.asarray(peak_m3s, dtype=np.float64)
    at = first_exceeded(capacity, peak)
    inside = (at > 0) & (at < years.size)
    upper = np.where(inside, at, min(1, years.size - 1))
    lower = np.maximum(upper - 1, 0)
    low, high = (np.take_along_axis(peak, place[..., None], axis=-1)[..., 0] for place in (lower, upper))
    with np.errstate(divide="ignore", invalid="ignore"):
        along_log = np.log(capacity / low) / np.log(high / low)
        along = np.where(low > 0, along_log, (capacity - low) / (high - low))
        between = np.exp(np.log(years[lower]) + along * np.log(years[upper] / years[lower]))
    return np.where(inside, between, np.where(at == 0, -np.inf, np.inf))
