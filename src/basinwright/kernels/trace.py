"""Walks down the flow directions."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT
from basinwright.kernels.geometry import steps


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
    cells = np.empty(1024, np.int32)
    count = 0
    for i in range(n):
        c = starts[i]
        walking = c >= 0
        while walking:
            if count == cells.size:
                longer = np.empty(2 * count, np.int32)
                longer[:count] = cells
                cells = longer
            cells[count] = c
            count += 1
            walking = c != ends[i] and directions[c] < EXIT
            if walking:
                c += np.int64(o[directions[c]])
        bounds[i + 1] = count
    return bounds, cells[:count].copy()
