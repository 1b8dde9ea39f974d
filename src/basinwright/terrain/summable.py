"""Numbers rounded so that their sums are exact, and so the same in every order and every tiling.

A float64 holds every multiple of a power of two q up to 2**53 q. Terms that are multiples of one q whose sum
stays below that bound are therefore added without any rounding, in whatever order.
"""

from __future__ import annotations

import math

import numpy as np


def quantum(bound: float) -> float:
    """Power of two whose multiples add up exactly as long as the sum of their magnitudes is within `bound`.

    Parameters
    ----------
    bound : float
        Largest possible sum of magnitudes, in any unit; at least 0.

    Examples
    --------
    >>> quantum(2.0**52)
    1.0
    """
    if not math.isfinite(bound) or bound < 0:
        raise ValueError(f"the bound of a sum must be finite and not negative, not {bound}")
    if bound == 0:
        return 1.0
    # One binary digit is kept in reserve for the rounding of the terms themselves.
    return math.ldexp(1.0, math.ceil(math.log2(bound)) - 52)


def summable_areas_m2(cell_area_m2: np.ndarray, ncols: int) -> np.ndarray:
    """Cell areas by row, rounded so that the area of any set of cells of the raster is an exact sum.

    Parameters
    ----------
    cell_area_m2 : array, shape (nrows,) [m2]
    ncols : int

    Returns
    -------
    float64 array, shape (nrows,) [m2]
        The relative change of a cell's area is at most the number of cells / 2**52, where all are alike:
        4e-9 for 16 million cells.
    """
    area = np.asarray(cell_area_m2, np.float64)
    q = quantum(float(area.sum()) * ncols)
    return np.rint(area / q) * q
