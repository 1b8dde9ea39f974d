"""From a point to the cell that its basin drains through."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, NO_CELL
from basinwright.kernels.geometry import row_of, steps


@njit(cache=True, nogil=True)
def _away_m(row: int, col: int, y: float, x: float, dx_m: np.ndarray, dy_m: np.ndarray) -> float:
    """Distance from a point to a cell: to its centre, and 0 to the cell that holds the point."""
    if np.floor(y) == row and np.floor(x) == col:
        return 0.0
    east = (col + 0.5 - x) * dx_m[row]
    south = (row + 0.5 - y) * dy_m[row]
    return np.sqrt(east * east + south * south)


@njit(cache=True, nogil=True)
def cells_away_m(
    y: np.ndarray, x: np.ndarray, cells: np.ndarray, ncols: int, dx_m: np.ndarray, dy_m: np.ndarray
) -> np.ndarray:
    """Distance from each point to its cell's centre; 0 where the cell holds the point.

    Parameters
    ----------
    y, x : float64 arrays, shape (n,)
        Points in cells from the upper left corner of the raster.
    cells : int32 array, shape (n,)
        NaN is returned where it is -1.
    ncols : int
    dx_m, dy_m : float64 arrays, shape (nrows,) [m]

    Returns
    -------
    float64 array, shape (n,) [m]
    """
    stride = ncols + 2
    away = np.full(cells.size, np.nan)
    for i in range(cells.size):
        if cells[i] >= 0:
            row = row_of(cells[i], 1.0 / stride)
            away[i] = _away_m(row, cells[i] - (row + 1) * stride - 1, y[i], x[i], dx_m, dy_m)
    return away


@njit(cache=True, nogil=True)
def nearest_with_area(
    y: np.ndarray, x: np.ndarray, expected_m2: np.ndarray, tolerance: float, within_m: float, ncols: int,
    dx_m: np.ndarray, dy_m: np.ndarray, area_m2: np.ndarray,
) -> np.ndarray:  # fmt: skip
    """Nearest cell to each point whose contributing area is about the expected one.

    Parameters
    ----------
    y, x : float64 arrays, shape (n,)
        Points in cells from the upper left corner of the raster, inside it.
    expected_m2 : float64 array, shape (n,) [m2]
        NaN where none is expected.
    tolerance : float
        Largest relative difference.
    within_m : float [m]
    ncols : int
    dx_m, dy_m : float64 arrays, shape (nrows,) [m]
    area_m2 : float64 array, shape (cells,) [m2]
        0 in voids.

    Returns
    -------
    int32 array, shape (n,)
        -1 where there is none. Of equally near cells the one closest in area, then the first row by row.
    """
    stride = ncols + 2
    found = np.full(x.size, NO_CELL, np.int32)
    for i in range(x.size):
        if not expected_m2[i] > 0.0:
            continue
        here = int(y[i])
        nearest, closest = np.inf, np.inf
        rows = int(within_m / dy_m[here]) + 2
        for row in range(max(here - rows, 0), min(here + rows + 1, dx_m.size)):
            cols = int(within_m / dx_m[row]) + 2
            for col in range(max(int(x[i]) - cols, 0), min(int(x[i]) + cols + 1, ncols)):
                c = (row + 1) * stride + col + 1
                off = abs(area_m2[c] - expected_m2[i])
                if off > tolerance * expected_m2[i]:
                    continue
                away = _away_m(row, col, y[i], x[i], dx_m, dy_m)
                if away <= within_m and (away < nearest or (away == nearest and off < closest)):
                    nearest, closest = away, off
                    found[i] = c
    return found


@njit(cache=True, nogil=True)
def first_channel_below(
    y: np.ndarray, x: np.ndarray, starts: np.ndarray, stream_area_m2: float, within_m: float, ncols: int,
    dx_m: np.ndarray, dy_m: np.ndarray, directions: np.ndarray, area_m2: np.ndarray,
) -> np.ndarray:  # fmt: skip
    """First channel cell on each point's own flow line, as long as the line stays near the point.

    Parameters
    ----------
    y, x : float64 arrays, shape (n,)
        Points in cells from the upper left corner of the raster.
    starts : int32 array, shape (n,)
        The cells that hold the points; -1 for none.
    stream_area_m2 : float [m2]
    within_m : float [m]
        The walk ends at the first cell whose centre is farther from the point in a straight line.
    ncols : int
    dx_m, dy_m : float64 arrays, shape (nrows,) [m]
    directions : uint8 array, shape (cells,)
    area_m2 : float64 array, shape (cells,) [m2]

    Returns
    -------
    int32 array, shape (n,)
        -1 where there is none.
    """
    stride = ncols + 2
    o = steps(stride)
    found = np.full(starts.size, NO_CELL, np.int32)
    for i in range(starts.size):
        c = int(starts[i])
        while c >= 0:
            row = row_of(c, 1.0 / stride)
            if _away_m(row, c - (row + 1) * stride - 1, y[i], x[i], dx_m, dy_m) > within_m:
                break
            if area_m2[c] >= stream_area_m2:
                found[i] = c
                break
            c = c + o[directions[c]] if directions[c] < EXIT else NO_CELL
    return found


@njit(cache=True, nogil=True)
def other_line_near(
    y: np.ndarray, x: np.ndarray, cells: np.ndarray, ratio: float, stream_area_m2: float, within_m: float,
    ncols: int, dx_m: np.ndarray, dy_m: np.ndarray, directions: np.ndarray, area_m2: np.ndarray,
) -> np.ndarray:  # fmt: skip
    """Whether another flow line with a much different area passes near each point.

    A flow line is told by its channel cells. The outlet's own line is its main stem: the way down from its cell,
    and the way up over the neighbour with the largest contributing area at each step, followed within a
    square twice as large as the search.

    Parameters
    ----------
    y, x : float64 arrays, shape (n,)
        Points in cells from the upper left corner of the raster, inside it.
    cells : int32 array, shape (n,)
        The outlets' cells; -1 for none.
    ratio : float
        Areas more than this many times larger or smaller than the outlet's are much different.
    stream_area_m2 : float [m2]
    within_m : float [m]
    ncols : int
    dx_m, dy_m : float64 arrays, shape (nrows,) [m]
    directions : uint8 array, shape (cells,)
    area_m2 : float64 array, shape (cells,) [m2]

    Returns
    -------
    bool array, shape (n,)
    """
    stride = ncols + 2
    o = steps(stride)
    near = np.zeros(cells.size, np.bool_)
    for i in range(cells.size):
        if cells[i] < 0:
            continue
        here_row, here_col = int(y[i]), int(x[i])
        rows = int(within_m / dy_m[here_row]) + 2
        cols = int(within_m / dx_m[here_row]) + 2
        own = np.zeros((4 * rows + 1, 4 * cols + 1), np.bool_)
        top, left = here_row - 2 * rows, here_col - 2 * cols
        for upward in (False, True):
            c = int(cells[i])
            while c >= 0:
                row = row_of(c, 1.0 / stride)
                r, k = row - top, c - (row + 1) * stride - 1 - left
                if r < 0 or r >= own.shape[0] or k < 0 or k >= own.shape[1]:
                    break
                own[r, k] = True
                if upward:
                    c = _largest_donor(c, o, directions, area_m2)
                else:
                    c = c + o[directions[c]] if directions[c] < EXIT else NO_CELL
        area = area_m2[cells[i]]
        for row in range(max(here_row - rows, 0), min(here_row + rows + 1, dx_m.size)):
            for col in range(max(here_col - cols, 0), min(here_col + cols + 1, ncols)):
                other = area_m2[(row + 1) * stride + col + 1]
                if other < stream_area_m2 or own[row - top, col - left]:
                    continue
                if other <= ratio * area and area <= ratio * other:
                    continue
                if _away_m(row, col, y[i], x[i], dx_m, dy_m) <= within_m:
                    near[i] = True
    return near


@njit(cache=True, nogil=True)
def _largest_donor(c: int, o: np.ndarray, directions: np.ndarray, area_m2: np.ndarray) -> int:
    """The neighbour with the largest contributing area of those that drain into a cell; -1 for none."""
    largest = NO_CELL
    for code in range(8):
        n = c + o[code]
        if directions[n] == (code + 4) % 8 and (largest < 0 or area_m2[n] > area_m2[largest]):
            largest = n
    return largest
