"""D8 flow directions by steepest descent."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, FLAT, NE, NW, SE, SW, VOID, E, N, S, W


@njit(cache=True, nogil=True)
def steepest_descent(
    z: np.ndarray, nrows: int, ncols: int, dx_m: np.ndarray, dy_m: np.ndarray, directions: np.ndarray
) -> None:
    """Direction of the steepest of the eight descents; the first clockwise from north where several tie.

    A cell at the rim or beside a void drains inward if it has a lower neighbour, else it is an EXIT; any
    other cell without a lower neighbour is FLAT. The distances of a cell's descents are those of its own row.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Filled elevations, +inf in voids and halo.
    nrows, ncols : int
    dx_m, dy_m : float64 arrays, shape (nrows,) [m]
        Cell sizes along and across each row.
    directions : uint8 array, shape (cells,)
        Result.
    """
    stride = ncols + 2
    for i in range(stride):
        directions[i] = VOID
        directions[(nrows + 1) * stride + i] = VOID
    zero = np.float32(0.0)
    for row in range(1, nrows + 1):
        # Weights of at least 1, so that the product of a positive drop is never zero.
        dx = dx_m[row - 1]
        dy = dy_m[row - 1]
        diagonal = np.sqrt(dx * dx + dy * dy)
        wx = np.float32(diagonal / dx)
        wy = np.float32(diagonal / dy)
        start = row * stride
        above = z[start - stride : start]
        here = z[start : start + stride]
        below = z[start + stride : start + 2 * stride]
        out = directions[start : start + stride]
        out[0] = VOID
        out[ncols + 1] = VOID
        for i in range(1, ncols + 1):
            c = here[i]
            best = zero
            code = np.int32(FLAT)
            drop = (c - above[i]) * wy
            if drop > best:
                best = drop
                code = np.int32(N)
            drop = c - above[i + 1]
            if drop > best:
                best = drop
                code = np.int32(NE)
            drop = (c - here[i + 1]) * wx
            if drop > best:
                best = drop
                code = np.int32(E)
            drop = c - below[i + 1]
            if drop > best:
                best = drop
                code = np.int32(SE)
            drop = (c - below[i]) * wy
            if drop > best:
                best = drop
                code = np.int32(S)
            drop = c - below[i - 1]
            if drop > best:
                best = drop
                code = np.int32(SW)
            drop = (c - here[i - 1]) * wx
            if drop > best:
                best = drop
                code = np.int32(W)
            drop = c - above[i - 1]
            if drop > best:
                best = drop
                code = np.int32(NW)
            highest = max(
                above[i - 1], above[i], above[i + 1], here[i - 1], here[i + 1], below[i - 1], below[i], below[i + 1]
            )
            if code == FLAT and highest == np.inf:
                code = np.int32(EXIT)
            if c == np.inf:
                code = np.int32(VOID)
            out[i] = np.uint8(code)
