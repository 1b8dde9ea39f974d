"""Contributing area, and the order of cells from the divides downstream."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, VOID
from basinwright.kernels.geometry import neighbour_offsets

_DONE = np.uint8(255)


@njit(cache=True, nogil=True)
def count_donors(directions: np.ndarray, nrows: int, ncols: int, donors: np.ndarray) -> None:
    """Number of neighbours that drain into each cell; 255 in voids and halo.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    nrows, ncols : int
    donors : uint8 array, shape (cells,)
        Result.
    """
    stride = ncols + 2
    donors[:stride] = _DONE
    donors[(nrows + 1) * stride :] = _DONE
    for row in range(1, nrows + 1):
        start = row * stride
        above = directions[start - stride : start]
        here = directions[start : start + stride]
        below = directions[start + stride : start + 2 * stride]
        out = donors[start : start + stride]
        out[0] = _DONE
        out[ncols + 1] = _DONE
        for i in range(1, ncols + 1):
            count = np.uint8(above[i - 1] == 3)
            count += np.uint8(above[i] == 4)
            count += np.uint8(above[i + 1] == 5)
            count += np.uint8(here[i - 1] == 2)
            count += np.uint8(here[i + 1] == 6)
            count += np.uint8(below[i - 1] == 1)
            count += np.uint8(below[i] == 0)
            count += np.uint8(below[i + 1] == 7)
            out[i] = _DONE if here[i] == VOID else count


@njit(cache=True, nogil=True)
def contributing_area(
    directions: np.ndarray,
    nrows: int,
    ncols: int,
    row_area_m2: np.ndarray,
    donors: np.ndarray,
    area_m2: np.ndarray,
    order: np.ndarray,
) -> int:
    """Area that drains through each cell, its own included, by walking down from every cell without donors.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    nrows, ncols : int
    row_area_m2 : float64 array, shape (nrows,) [m2]
        Area of a cell of each row, rounded so that sums are exact (`terrain.summable`).
    donors : uint8 array, shape (cells,)
        From `count_donors`; used up.
    area_m2 : float64 array, shape (cells,) [m2]
        Result; zero on entry.
    order : int32 array, shape (cells,) or more
        Result: cell indices, every cell after all cells that drain into it.

    Returns
    -------
    int
        Cells visited. Fewer than the cells with elevation mean a cycle.
    """
    stride = ncols + 2
    o = neighbour_offsets(stride)
    rows_down = (-1, -1, 0, 1, 1, 1, 0, -1)
    visited = 0
    for start_row in range(nrows):
        first = (start_row + 1) * stride + 1
        for start in range(first, first + ncols):
            if donors[start] != 0:
                continue
            c = start
            row = start_row
            while True:
                donors[c] = _DONE
                order[visited] = c
                visited += 1
                area = area_m2[c] + row_area_m2[row]
                area_m2[c] = area
                code = directions[c]
                if code >= EXIT:
                    break
                c += o[code]
                row += rows_down[code]
                area_m2[c] += area
                donors[c] -= np.uint8(1)
                if donors[c] != 0:
                    break
    return visited


@njit(cache=True, nogil=True)
def count_cells(directions: np.ndarray) -> tuple[int, int]:
    """Cells with elevation, and those of them that have no direction."""
    cells = 0
    undrained = 0
    for c in range(directions.size):
        cells += directions[c] != VOID
        undrained += directions[c] > VOID
    return cells, undrained
