"""Reductions by label, over blocks of rows.

Every kernel takes the flat padded labels, the first row of a block and, where there is one, a block of
values of shape (rows, ncols); it adds to arrays by label. Cells with label -1 are passed over. The results
do not depend on how the raster is cut into blocks or tiles: areas are rounded so that their sums are exact,
other sums are taken in fixed point (see `quantum`), extremes break ties by the smallest cell index.
"""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def add_area(
    label: np.ndarray, ncols: int, row_area_m2: np.ndarray, first_row: int, end_row: int, area_m2: np.ndarray,
    cells: np.ndarray,
) -> None:  # fmt: skip
    """Area and number of cells by label.

    Parameters
    ----------
    label : int32 array, shape (cells,)
    ncols : int
    row_area_m2 : float64 array, shape (nrows,) [m2]
    first_row, end_row : int
        The block, end excluded.
    area_m2 : float64 array, shape (n,) [m2]
        Added to.
    cells : int64 array, shape (n,)
        Added to.
    """
    for row in range(first_row, end_row):
        area = row_area_m2[row]
        start = (row + 1) * (ncols + 2) + 1
        for c in range(start, start + ncols):
            i = label[c]
            if i >= 0:
                area_m2[i] += area
                cells[i] += 1


@njit(cache=True, nogil=True)
def add_values(
    label: np.ndarray, ncols: int, row_weight: np.ndarray, first_row: int, values: np.ndarray, quantum: float,
    weighted_sum: np.ndarray, weight: np.ndarray,
) -> None:  # fmt: skip
    """Weighted sum of values by label, and the weight of the cells that have a value.

    Parameters
    ----------
    label : int32 array, shape (cells,)
    ncols : int
    row_weight : float64 array, shape (nrows,)
        Weight of a cell of each row: its area, rounded so that sums are exact.
    first_row : int
    values : float64 array, shape (rows, ncols)
        NaN where a cell has none: it is passed over.
    quantum : float
        A power of two to whose multiples each product is rounded, from `terrain.summable.quantum`; the sum
        is then exact and independent of order.
    weighted_sum, weight : float64 arrays, shape (n,)
        Added to.
    """
    per_quantum = 1.0 / quantum
    for r in range(values.shape[0]):
        w = row_weight[first_row + r]
        start = (first_row + r + 1) * (ncols + 2) + 1
        for col in range(ncols):
            i = label[start + col]
            v = values[r, col]
            if i >= 0 and not np.isnan(v):
                weighted_sum[i] += np.rint(v * w * per_quantum) * quantum
                weight[i] += w


@njit(cache=True, nogil=True)
def add_classes(
    label: np.ndarray, ncols: int, row_area_m2: np.ndarray, first_row: int, classes: np.ndarray,
    area_m2: np.ndarray,
) -> None:  # fmt: skip
    """Area by label and class.

    Parameters
    ----------
    label : int32 array, shape (cells,)
    ncols : int
    row_area_m2 : float64 array, shape (nrows,) [m2]
    first_row : int
    classes : int32 array, shape (rows, ncols)
        0 to k - 1; negative where a cell has none: it is passed over.
    area_m2 : float64 array, shape (n, k) [m2]
        Added to.
    """
    for r in range(classes.shape[0]):
        area = row_area_m2[first_row + r]
        start = (first_row + r + 1) * (ncols + 2) + 1
        for col in range(ncols):
            i = label[start + col]
            k = classes[r, col]
            if i >= 0 and k >= 0:
                area_m2[i, k] += area


@njit(cache=True, nogil=True)
def add_class_values(
    label: np.ndarray, ncols: int, row_weight: np.ndarray, first_row: int, classes: np.ndarray, values: np.ndarray,
    quantum: float, weighted_sum: np.ndarray, weight: np.ndarray,
) -> None:  # fmt: skip
    """Weighted sum of values by label and class, and the weight of the cells that have a value.

    Parameters
    ----------
    label : int32 array, shape (cells,)
    ncols : int
    row_weight : float64 array, shape (nrows,)
    first_row : int
    classes : int32 array, shape (rows, ncols)
        0 to k - 1; negative where a cell has none: it is passed over.
    values : float64 array, shape (rows, ncols)
        NaN where a cell has none: it is passed over.
    quantum : float
        As in `add_values`.
    weighted_sum, weight : float64 arrays, shape (n, k)
        Added to.
    """
    per_quantum = 1.0 / quantum
    for r in range(values.shape[0]):
        w = row_weight[first_row + r]
        start = (first_row + r + 1) * (ncols + 2) + 1
        for col in range(ncols):
            i = label[start + col]
            k = classes[r, col]
            v = values[r, col]
            if i >= 0 and k >= 0 and not np.isnan(v):
                weighted_sum[i, k] += np.rint(v * w * per_quantum) * quantum
                weight[i, k] += w


@njit(cache=True, nogil=True)
def keep_extremes(
    label: np.ndarray, ncols: int, first_row: int, values: np.ndarray, lowest: np.ndarray, highest: np.ndarray,
    highest_cell: np.ndarray,
) -> None:  # fmt: skip
    """Lowest and highest value by label, and the cell of the highest.

    Parameters
    ----------
    label : int32 array, shape (cells,)
    ncols : int
    first_row : int
    values : float64 array, shape (rows, ncols)
        NaN is passed over.
    lowest, highest : float64 arrays, shape (n,)
        Updated; +inf and -inf at the start.
    highest_cell : int32 array, shape (n,)
        Updated; -1 at the start. Of equal values the smallest index.
    """
    for r in range(values.shape[0]):
        start = (first_row + r + 1) * (ncols + 2) + 1
        for col in range(ncols):
            c = start + col
            i = label[c]
            if i < 0:
                continue
            v = values[r, col]
            if v < lowest[i]:
                lowest[i] = v
            if v > highest[i] or (v == highest[i] and c < highest_cell[i]):
                highest[i] = v
                highest_cell[i] = c


@njit(cache=True, nogil=True)
def keep_farthest(
    label: np.ndarray, ncols: int, distance_um: np.ndarray, first_row: int, end_row: int,
    farthest_um: np.ndarray, farthest_cell: np.ndarray,
) -> None:  # fmt: skip
    """Cell of each label with the longest flow path to its outlet; of equal ones the smallest index.

    Parameters
    ----------
    label : int32 array, shape (cells,)
    ncols : int
    distance_um : int64 array, shape (cells,) [micrometres]
    first_row, end_row : int
    farthest_um : int64 array, shape (n,) [micrometres]
        Updated; -1 at the start.
    farthest_cell : int32 array, shape (n,)
        Updated; -1 at the start.
    """
    for row in range(first_row, end_row):
        start = (row + 1) * (ncols + 2) + 1
        for c in range(start, start + ncols):
            i = label[c]
            if i < 0:
                continue
            d = distance_um[c]
            if d > farthest_um[i] or (d == farthest_um[i] and c < farthest_cell[i]):
                farthest_um[i] = d
                farthest_cell[i] = c
