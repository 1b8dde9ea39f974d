"""Land slope from the eight neighbours."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def _or_else(value: float, second: float, third: float) -> float:
    """The first that is a number."""
    if value == value:
        return value
    return second if second == second else third


@njit(cache=True, nogil=True)
def horn_slope_pct(z: np.ndarray, dx_m: np.ndarray, dy_m: np.ndarray, slope_pct: np.ndarray) -> None:
    """Slope of every cell of a block of rows by the third-order finite difference of Horn (1981).

    Parameters
    ----------
    z : float64 array, shape (rows + 2, ncols + 2) [m]
        Elevations with one row and column of neighbours on every side; NaN in voids and beyond the rim.
    dx_m, dy_m : float64 arrays, shape (rows,) [m]
        Cell sizes of each row.
    slope_pct : float64 array, shape (rows, ncols) [percent]
        Result; NaN in voids.

    Notes
    -----
    Horn, B. K. P. (1981), "Hill shading and the reflectance map", Proceedings of the IEEE 69(1), 14-47: the
    weights 1, 2, 1 on the differences between the outer rows and columns, over 8 cell sizes. A missing
    neighbour is put on the straight line through the opposite neighbour and the centre, so that a plane keeps
    its slope up to its rim. Where the opposite one is missing too, a neighbour along the row or the column
    takes the elevation of the centre, and a diagonal one is put on the plane through the centre and the two
    between which it lies.
    """
    rows, ncols = slope_pct.shape
    for r in range(rows):
        per_x = 1.0 / (8.0 * dx_m[r])
        per_y = 1.0 / (8.0 * dy_m[r])
        for i in range(ncols):
            centre = z[r + 1, i + 1]
            if np.isnan(centre):
                slope_pct[r, i] = np.nan
                continue
            nw, n, ne = z[r, i], z[r, i + 1], z[r, i + 2]
            w, e = z[r + 1, i], z[r + 1, i + 2]
            sw, s, se = z[r + 2, i], z[r + 2, i + 1], z[r + 2, i + 2]
            twice = centre + centre
            n, s = _or_else(n, twice - s, centre), _or_else(s, twice - n, centre)
            w, e = _or_else(w, twice - e, centre), _or_else(e, twice - w, centre)
            nw, se = _or_else(nw, twice - se, n + w - centre), _or_else(se, twice - nw, s + e - centre)
            ne, sw = _or_else(ne, twice - sw, n + e - centre), _or_else(sw, twice - ne, s + w - centre)
            east = ((ne - nw) + 2.0 * (e - w) + (se - sw)) * per_x
            south = ((sw - nw) + 2.0 * (s - n) + (se - ne)) * per_y
            slope_pct[r, i] = 100.0 * np.sqrt(east * east + south * south)
