"""Walks down the flow directions."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, NO_CELL
from basinwright.kernels.geometry import row_of, steps


@njit(cache=True, nogil=True)
def trace_paths(
    directions: np.ndarray, ncols: int, starts: np.ndarray, ends: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Cells from each start down to its end, both included.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    ncols : int
    starts, ends : int32 arrays, shape (n,)
        A walk that leaves the raster before it meets its end stops at the exit; a negative start gives an
        empty path.

    Returns
    -------
    bounds : int64 array, shape (n + 1,)
        Path i is ``cells[bounds[i]:bounds[i + 1]]``.
    cells : int32 array
    """
    o = steps(ncols + 2)
    n = starts.size
    bounds = np.zeros(n + 1, np.int64)
    for i in range(n):
        c = starts[i]
        count = 0
        if c >= 0:
            count = 1
            while c != ends[i] and directions[c] < EXIT:
                c += np.int64(o[directions[c]])
                count += 1
        bounds[i + 1] = bounds[i] + count
    cells = np.empty(bounds[n], np.int32)
    for i in range(n):
        c = starts[i]
        for j in range(bounds[i], bounds[i + 1]):
            cells[j] = c
            if directions[c] < EXIT:
                c += np.int64(o[directions[c]])
    return bounds, cells


@njit(cache=True, nogil=True)
def walk_to_area(
    directions: np.ndarray,
    ncols: int,
    step_um: np.ndarray,
    area_m2: np.ndarray,
    starts: np.ndarray,
    least_area_m2: float,
    limit_um: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Walk down from each start to the first cell with at least the given contributing area.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    ncols : int
    step_um : int64 array, shape (nrows, 8) [micrometres]
    area_m2 : float64 array, shape (cells,) [m2]
    starts : int32 array, shape (n,)
    least_area_m2 : float
    limit_um : int64 array, shape (n,) [micrometres]
        Longest walk along the flow line.

    Returns
    -------
    cell : int32 array, shape (n,)
        -1 where the walk reaches the limit or leaves the raster first.
    distance_um : int64 array, shape (n,) [micrometres]
        Walked along the flow line; 0 where there is no cell.
    """
    stride = ncols + 2
    o = steps(stride)
    found = np.full(starts.size, NO_CELL, np.int32)
    distance_um = np.zeros(starts.size, np.int64)
    for i in range(starts.size):
        c = starts[i]
        way = np.int64(0)
        while area_m2[c] < least_area_m2 and directions[c] < EXIT and way <= limit_um[i]:
            way += step_um[row_of(c, 1.0 / stride), directions[c]]
            c += np.int64(o[directions[c]])
        if area_m2[c] >= least_area_m2 and way <= limit_um[i]:
            found[i] = c
            distance_um[i] = way
    return found, distance_um


@njit(cache=True, nogil=True)
def path_distances(cells: np.ndarray, directions: np.ndarray, ncols: int, step_um: np.ndarray) -> np.ndarray:
    """Distance of each cell of one path from the path's first cell.

    Parameters
    ----------
    cells : int32 array, shape (n,)
        Downstream order, as `trace_paths` gives them.
    directions : uint8 array, shape (cells,)
    ncols : int
    step_um : int64 array, shape (nrows, 8) [micrometres]

    Returns
    -------
    int64 array, shape (n,) [micrometres]
    """
    per_stride = 1.0 / (ncols + 2)
    distance_um = np.zeros(cells.size, np.int64)
    for j in range(1, cells.size):
        c = cells[j - 1]
        distance_um[j] = distance_um[j - 1] + step_um[row_of(c, per_stride), directions[c]]
    return distance_um
