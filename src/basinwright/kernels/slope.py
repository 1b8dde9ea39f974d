"""Land slope from the eight neighbours."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True, inline="always")
def _complete(a: float, centre: float, b: float) -> tuple[float, float]:
    """Two opposite neighbours, what is missing put in."""
    if a != a:
        b = b if b == b else centre
        a = centre + (centre - b)
    elif b != b:
        b = centre + (centre - a)
    return a, b


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
    neighbour lies on the straight line through the opposite neighbour and the centre, so that a plane keeps its
    slope up to its rim; where the opposite one is missing too, it takes the elevation of the centre.
    """
    rows, ncols = slope_pct.shape
    for r in range(rows):
        per_x = 1.0 / (8.0 * dx_m[r])
        per_y = 1.0 / (8.0 * dy_m[r])
        for i in range(ncols):
            centre = z[r + 1, i + 1]
            nw, n, ne = z[r, i], z[r, i + 1], z[r, i + 2]
            w, e = z[r + 1, i], z[r + 1, i + 2]
            sw, s, se = z[r + 2, i], z[r + 2, i + 1], z[r + 2, i + 2]
            nw, se = _complete(nw, centre, se)
            n, s = _complete(n, centre, s)
            ne, sw = _complete(ne, centre, sw)
            w, e = _complete(w, centre, e)
            east = ((ne - nw) + 2.0 * (e - w) + (se - sw)) * per_x
            south = ((sw - nw) + 2.0 * (s - n) + (se - ne)) * per_y
            slope_pct[r, i] = 100.0 * np.sqrt(east * east + south * south)
