"""Travel time of every cell to where its water leaves the raster, and time-area curves of many outlets."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT
from basinwright.kernels.geometry import row_of, steps


@njit(cache=True, nogil=True)
def block_steps(
    directions: np.ndarray, surface_m: np.ndarray, receives: np.ndarray, ncols: int, step_um: np.ndarray,
    first_row: int, length_m: np.ndarray, fall_m: np.ndarray, source: np.ndarray,
) -> None:  # fmt: skip
    """Describe the step out of every cell of a block of rows.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    surface_m : float32 array, shape (cells,) [m]
        Conditioned elevations.
    receives : uint8 array, shape (cells,)
        1 where another cell drains into the cell, from `mark_receivers`.
    ncols : int
    step_um : int64 array, shape (nrows, 8) [micrometres]
    first_row : int
    length_m, fall_m : float64 arrays, shape (rows, ncols) [m]
        Results: of the step; 0 where water leaves the raster or there is none.
    source : uint8 array, shape (rows, ncols)
        Result: 1 where no cell drains into it.
    """
    stride = ncols + 2
    o = steps(stride)
    for r in range(length_m.shape[0]):
        row = first_row + r
        for col in range(ncols):
            c = np.uint64((row + 1) * stride + col + 1)
            code = int(directions[c])
            source[r, col] = 1 - receives[c]
            if code < EXIT:
                length_m[r, col] = step_um[row, code] * 1e-6
                fall_m[r, col] = np.float64(surface_m[c]) - np.float64(surface_m[c + o[code]])
            else:
                length_m[r, col] = 0.0
                fall_m[r, col] = 0.0


@njit(cache=True, nogil=True)
def mark_receivers(directions: np.ndarray, ncols: int, receives: np.ndarray) -> None:
    """Mark the cells that other cells drain into.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    ncols : int
    receives : uint8 array, shape (cells,)
        Result; must come in as zeros.
    """
    o = steps(ncols + 2)
    for c in range(np.uint64(directions.size)):
        code = int(directions[c])
        if code < EXIT:
            receives[c + o[code]] = 1


@njit(cache=True, nogil=True)
def add_down_the_flow(directions: np.ndarray, order: np.ndarray, ncols: int, time_us: np.ndarray) -> None:
    """Turn the time of each step into the time from each cell to where its water leaves the raster, in place.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    order : int32 array, shape (data cells,)
        Every cell after all cells that drain into it.
    ncols : int
    time_us : int64 array, shape (cells,) [microseconds]
        In: of the step out of the cell. Out: to the exit.
    """
    o = steps(ncols + 2)
    for j in range(order.size - 1, -1, -1):
        c = np.uint64(order[j])
        code = int(directions[c])
        if code < EXIT:
            time_us[c] += time_us[c + o[code]]


@njit(cache=True, nogil=True)
def last_bins(label: np.ndarray, time_us: np.ndarray, bin_us: int, last: np.ndarray) -> None:
    """Find the last bin of travel time that each label reaches, bins counted from the exit.

    Parameters
    ----------
    label : int32 array, shape (cells,)
    time_us : int64 array, shape (cells,) [microseconds]
    bin_us : int [microseconds]
    last : int64 array, shape (n,)
        Updated.
    """
    for c in range(label.size):
        i = label[c]
        if i >= 0:
            b = time_us[c] // bin_us
            if b > last[i]:
                last[i] = b


@njit(cache=True, nogil=True)
def add_areas_by_time(
    label: np.ndarray, time_us: np.ndarray, ncols: int, row_area_m2: np.ndarray, bin_us: int, first_bin: np.ndarray,
    bounds: np.ndarray, area_m2: np.ndarray,
) -> None:  # fmt: skip
    """Add the area of every cell to the bin of its travel time in the curve of its label.

    Parameters
    ----------
    label : int32 array, shape (cells,)
    time_us : int64 array, shape (cells,) [microseconds]
    ncols : int
    row_area_m2 : float64 array, shape (nrows,) [m2]
    bin_us : int [microseconds]
    first_bin : int64 array, shape (n,)
        Bin of the outlet's own cell: the first of the label's curve.
    bounds : int64 array, shape (n + 1,)
        Label i owns the bins ``bounds[i]`` up to ``bounds[i + 1]``.
    area_m2 : float64 array, shape (bins,) [m2]
        Added to.
    """
    per_stride = 1.0 / (ncols + 2)
    for c in range(label.size):
        i = label[c]
        if i >= 0:
            area_m2[bounds[i] + time_us[c] // bin_us - first_bin[i]] += row_area_m2[row_of(np.uint64(c), per_stride)]


@njit(cache=True, nogil=True)
def combine_curves(
    parent: np.ndarray, upstream_first: np.ndarray, first_bin: np.ndarray, bounds: np.ndarray, area_m2: np.ndarray
) -> None:
    """Add the curve of every outlet to that of the next one downstream, from sub-basins to whole basins, in place.

    Parameters
    ----------
    parent : int32 array, shape (n,)
    upstream_first : int array, shape (n,)
    first_bin, bounds : int64 arrays
        As in `add_areas_by_time`; the curve of an outlet reaches as far as those upstream of it.
    area_m2 : float64 array, shape (bins,) [m2]
    """
    for k in range(upstream_first.size):
        i = upstream_first[k]
        p = parent[i]
        if p >= 0:
            shift = bounds[p] + first_bin[i] - first_bin[p]
            for b in range(bounds[i + 1] - bounds[i]):
                area_m2[shift + b] += area_m2[bounds[i] + b]


@njit(cache=True, nogil=True)
def thinned(
    bounds: np.ndarray, area_m2: np.ndarray, labels: np.ndarray, most: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cumulate the curves of some labels and thin the long ones evenly; the last bin is kept.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
        Label i owns the bins ``bounds[i]`` up to ``bounds[i + 1]``.
    area_m2 : float64 array, shape (bins,) [m2]
    labels : int32 array, shape (m,)
    most : int
        Rows of a thinned curve.

    Returns
    -------
    curve : int64 array, shape (rows,)
        Position in `labels`.
    number : int64 array, shape (rows,)
        Of the bin, from 0 at the outlet.
    within_m2 : float64 array, shape (rows,) [m2]
        Area up to the end of the bin.
    """
    rows = 0
    for i in labels:
        size = bounds[i + 1] - bounds[i]
        stride = (size + most - 1) // most
        rows += (size + stride - 1) // stride
    curve, number, within_m2 = np.empty(rows, np.int64), np.empty(rows, np.int64), np.empty(rows, np.float64)
    row = 0
    for k in range(labels.size):
        first = bounds[labels[k]]
        size = bounds[labels[k] + 1] - first
        stride = (size + most - 1) // most
        within = 0.0
        for b in range(size):
            within += area_m2[first + b]
            if (size - 1 - b) % stride == 0:
                curve[row], number[row], within_m2[row] = k, b, within
                row += 1
    return curve, number, within_m2
