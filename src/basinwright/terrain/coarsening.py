"""Terrain on coarser cells: the mean of whole blocks of cells."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

_BLOCK_ROWS = 64


def block_means(elevation_m: NDArray[np.floating[Any]], cells: int) -> NDArray[np.floating[Any]]:
    """Average elevations over blocks of cells.

    Parameters
    ----------
    elevation_m : array, shape (nrows, ncols)
        Elevation [m], NaN in voids.
    cells : int
        Cells along a side of a block.

    Returns
    -------
    array, shape (ceil(nrows / cells), ceil(ncols / cells))
        Mean of the cells that are no voids [m], of the same type; NaN where over half of the block is void or outside.
    """
    nrows, ncols = elevation_m.shape
    coarse = np.full((-(-nrows // cells), -(-ncols // cells)), np.nan, dtype=elevation_m.dtype)
    for first in range(0, coarse.shape[0], _BLOCK_ROWS):
        rows = elevation_m[first * cells : (first + _BLOCK_ROWS) * cells].astype(np.float64)
        height = -(-rows.shape[0] // cells)
        whole = np.full((height * cells, coarse.shape[1] * cells), np.nan)
        whole[: rows.shape[0], :ncols] = rows
        blocks = whole.reshape(height, cells, coarse.shape[1], cells)
        known = np.isfinite(blocks)
        count = known.sum(axis=(1, 3))
        total = np.where(known, blocks, 0.0).sum(axis=(1, 3))
        enough = 2 * count >= cells * cells
        mean = np.full(count.shape, np.nan)
        np.divide(total, count, out=mean, where=enough)
        coarse[first : first + height] = mean
    return coarse
