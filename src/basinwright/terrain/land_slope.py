"""Land slope of the unconditioned terrain, in blocks of rows."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np


def horn_slope_blocks(
    elevation_m: np.ndarray, dx_m: np.ndarray, dy_m: np.ndarray, block_rows: int = 256
) -> Iterator[tuple[int, np.ndarray]]:
    """Slope of the land (Horn 1981) block by block, so that no second raster is held.

    Parameters
    ----------
    elevation_m : float array, shape (nrows, ncols) [m]
        NaN in voids.
    dx_m, dy_m : arrays, shape (nrows,) [m]
        Cell sizes of each row.
    block_rows : int
        Rows of a block; the values do not depend on it.

    Yields
    ------
    first_row : int
    slope_pct : float64 array, shape (rows, ncols) [percent]
        NaN in voids. The array is used again for the next block.
    """
    from basinwright.kernels.slope import horn_slope_pct

    nrows, ncols = elevation_m.shape
    dx = np.ascontiguousarray(dx_m, np.float64)
    dy = np.ascontiguousarray(dy_m, np.float64)
    window = np.empty((block_rows + 2, ncols + 2))
    slope = np.empty((block_rows, ncols))
    for first in range(0, nrows, block_rows):
        end = min(first + block_rows, nrows)
        window[:] = np.nan
        top = max(first - 1, 0)
        bottom = min(end + 1, nrows)
        window[top - first + 1 : bottom - first + 1, 1:-1] = elevation_m[top:bottom]
        rows = end - first
        horn_slope_pct(window[: rows + 2], dx[first:end], dy[first:end], slope[:rows])
        yield first, slope[:rows]
