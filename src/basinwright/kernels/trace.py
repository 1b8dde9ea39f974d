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
