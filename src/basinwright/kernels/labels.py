"""Labels: the next outlet downstream of every cell, and the forest of outlets."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, NO_CELL
from basinwright.kernels.geometry import row_of, steps


@njit(cache=True, nogil=True)
def label_cells(
    directions: np.ndarray,
    order: np.ndarray,
    ncols: int,
    step_um: np.ndarray,
    outlets: np.ndarray,
    label: np.ndarray,
    distance_um: np.ndarray,
    parent: np.ndarray,
    parent_distance_um: np.ndarray,
) -> None:
    """Label every cell with the next outlet on its way down, and measure the way.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    order : int32 array, shape (data cells,)
        Every cell after all cells that drain into it.
    ncols : int
    step_um : int64 array, shape (nrows, 8) [micrometres]
        Length of a step out of a cell, by row and direction.
    outlets : int32 array, shape (n,)
        Outlet cells, no cell twice. Outlet i gives the label i, to its own cell too.
    label : int32 array, shape (cells,)
        Result; -1 where no outlet lies downstream.
    distance_um : int64 array, shape (cells,) [micrometres]
        Result: along the flow path to the outlet of the cell's label; 0 where there is none.
    parent : int32 array, shape (n,)
        Result: the next outlet downstream of each outlet, -1 for none.
    parent_distance_um : int64 array, shape (n,) [micrometres]
        Result: along the flow path to that outlet; 0 where there is none.
    """
    stride = ncols + 2
    per_stride = 1.0 / stride
    o = steps(stride)
    label[:] = NO_CELL
    distance_um[:] = 0
    for i in range(outlets.size):
        label[outlets[i]] = i
    for j in range(order.size - 1, -1, -1):
        c = np.uint64(order[j])
        code = int(directions[c])
        below = NO_CELL
        way = np.int64(0)
        if code < EXIT:
            n = c + o[code]
            below = label[n]
            if below >= 0:
                way = distance_um[n] + step_um[row_of(c, per_stride), code]
        own = label[c]
        if own >= 0:
            parent[own] = below
            parent_distance_um[own] = way
        else:
            label[c] = below
            distance_um[c] = way
