"""Contributing area, and the order of cells from the divides downstream."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, FLAT, SINK, VOID
from basinwright.kernels.geometry import steps

# During the walk the high half of a direction byte counts the donors that are still to come; 15 marks a cell
# that is done.
_ONE_DONOR = 16
_DONE = 240
_CODE = 15


@njit(cache=True, nogil=True)
def _count_donors(directions: np.ndarray, nrows: int, ncols: int) -> None:
    """Add the number of neighbours that drain into each cell to the high half of its direction."""
    stride = ncols + 2
    for row in range(1, nrows + 1):
        start = row * stride
        above = directions[start - stride : start]
        here = directions[start : start + stride]
        below = directions[start + stride : start + 2 * stride]
        for i in range(1, ncols + 1):
            count = np.uint8((above[i - 1] & _CODE) == 3)
            count += np.uint8((above[i] & _CODE) == 4)
            count += np.uint8((above[i + 1] & _CODE) == 5)
            count += np.uint8((here[i - 1] & _CODE) == 2)
            count += np.uint8((here[i + 1] & _CODE) == 6)
            count += np.uint8((below[i - 1] & _CODE) == 1)
            count += np.uint8((below[i] & _CODE) == 0)
            count += np.uint8((below[i + 1] & _CODE) == 7)
            here[i] |= np.uint8(count << np.uint8(4))


@njit(cache=True, nogil=True)
def contributing_area(
    directions: np.ndarray,
    nrows: int,
    ncols: int,
    row_area_m2: np.ndarray,
    area_m2: np.ndarray,
    order: np.ndarray,
) -> int:
    """Area that drains through each cell, its own included, by walking down from every cell without donors.

    A walk ends where other donors are still to come; the last of them goes on.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
        Finished directions; changed during the walk and restored.
    nrows, ncols : int
    row_area_m2 : float64 array, shape (nrows,) [m2]
        Area of a cell of each row, rounded so that sums are exact (`terrain.summable`).
    area_m2 : float64 array, shape (cells,) [m2]
        Result; 0 in voids and halo.
    order : int32 array, shape (cells,) or more
        Result: cell indices, every cell after all cells that drain into it.

    Returns
    -------
    int
        Cells visited. Fewer than the cells with elevation mean a cycle.
    """
    stride = ncols + 2
    o = steps(stride)
    _count_donors(directions, nrows, ncols)
    for i in range(stride):
        area_m2[i] = 0.0
        area_m2[(nrows + 1) * stride + i] = 0.0
    for row in range(1, nrows + 1):
        own = row_area_m2[row - 1]
        for c in range(row * stride, (row + 1) * stride):
            area_m2[c] = 0.0 if directions[c] == VOID else own

    visited = 0
    for row in range(1, nrows + 1):
        first = row * stride + 1
        for start in range(np.uint64(first), np.uint64(first + ncols)):
            here = directions[start]
            if here > EXIT and here != SINK:
                continue
            c = start
            area = area_m2[c]
            while True:
                directions[c] = here | _DONE
                order[visited] = c
                visited += 1
                if here >= EXIT:
                    break
                c += o[here]
                area += area_m2[c]
                area_m2[c] = area
                here = directions[c] - np.uint8(_ONE_DONOR)
                if here > SINK:
                    directions[c] = here
                    break
    for c in range(directions.size):
        directions[c] &= _CODE
    return visited


@njit(cache=True, nogil=True)
def count_cells(directions: np.ndarray) -> tuple[int, int]:
    """Cells with elevation, and those of them that have no direction."""
    cells = 0
    undrained = 0
    for c in range(directions.size):
        cells += directions[c] != VOID
        undrained += directions[c] == FLAT
    return cells, undrained
