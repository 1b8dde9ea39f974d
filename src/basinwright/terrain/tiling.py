"""How a raster is cut into tiles, and what the cells along their rims tell each other.

Rasters lie whole in files, flat and padded as in memory; a tile is a window of them. Nothing here opens a file.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import NamedTuple

import numpy as np


@dataclass(frozen=True)
class Tile:
    """One tile.

    Parameters
    ----------
    index : int
        Its place in the order of the tiling.
    rows, cols : slice
        Its cells on the raster proper.
    """

    index: int
    rows: slice
    cols: slice

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns."""
        return self.rows.stop - self.rows.start, self.cols.stop - self.cols.start

    @property
    def stride(self) -> int:
        """From one row to the next of the tile as a padded array."""
        return self.shape[1] + 2

    @property
    def padded(self) -> tuple[slice, slice]:
        """The tile with one cell of halo, as a window of the padded raster."""
        return slice(self.rows.start, self.rows.stop + 2), slice(self.cols.start, self.cols.stop + 2)

    def in_raster(self, cells: np.ndarray, stride: int) -> np.ndarray:
        """Padded indices on the raster, int64, of padded indices on the tile; `stride` is the raster's."""
        row, col = np.divmod(np.asarray(cells, np.int64), self.stride)
        return (row + self.rows.start) * stride + col + self.cols.start

    def in_tile(self, cells: np.ndarray, stride: int) -> np.ndarray:
        """Padded indices on the tile, int32, of padded indices on the raster."""
        row, col = np.divmod(np.asarray(cells, np.int64), stride)
        return ((row - self.rows.start) * self.stride + col - self.cols.start).astype(np.int32)


def frame(nrows: int, ncols: int, margin: int) -> np.ndarray:
    """Indices, int32, of the outermost cells of a window but for a margin, row by row.

    Parameters
    ----------
    nrows, ncols : int
        Shape of the whole window.
    margin : int
        Rows and columns left out on every side.
    """
    rows = np.arange(margin, nrows - margin) * ncols
    cols = np.arange(margin, ncols - margin)
    lines = (rows[0] + cols, rows[-1] + cols, rows + cols[0], rows + cols[-1])
    return np.unique(np.concatenate(lines)).astype(np.int32)


class Strips(NamedTuple):
    """Values of the first and last row and the first and last column of a tile."""

    top: np.ndarray
    bottom: np.ndarray
    left: np.ndarray
    right: np.ndarray


def strips_of(values: np.ndarray) -> Strips:
    """Outermost values of a tile, shape (rows, cols), as copies."""
    return Strips(values[0].copy(), values[-1].copy(), values[:, 0].copy(), values[:, -1].copy())


@dataclass(frozen=True)
class Tiling:
    """A raster cut along rows and columns.

    Parameters
    ----------
    row_edges, col_edges : tuple of int
        From 0 to the number of rows and columns, rising.
    """

    row_edges: tuple[int, ...]
    col_edges: tuple[int, ...]

    @classmethod
    def of_side(cls, nrows: int, ncols: int, side: int) -> Tiling:
        """Tiles of about so many cells a side, alike in size."""
        edges = [np.linspace(0, size, -(-size // side) + 1).astype(int).tolist() for size in (nrows, ncols)]
        return cls(tuple(edges[0]), tuple(edges[1]))

    @property
    def nrows(self) -> int:
        """Rows of the raster."""
        return self.row_edges[-1]

    @property
    def ncols(self) -> int:
        """Columns of the raster."""
        return self.col_edges[-1]

    @property
    def stride(self) -> int:
        """From one row to the next of the raster as a padded array."""
        return self.ncols + 2

    @property
    def tiles_across(self) -> int:
        """Tiles side by side."""
        return len(self.col_edges) - 1

    def __len__(self) -> int:
        return (len(self.row_edges) - 1) * self.tiles_across

    def __iter__(self) -> Iterator[Tile]:
        index = 0
        for top, bottom in pairwise(self.row_edges):
            for left, right in pairwise(self.col_edges):
                yield Tile(index, slice(top, bottom), slice(left, right))
                index += 1

    def tile_of(self, cells: np.ndarray) -> np.ndarray:
        """Index of the tile that holds each cell, int64, by padded index on the raster."""
        row, col = np.divmod(np.asarray(cells, np.int64), self.stride)
        down = np.searchsorted(self.row_edges, row - 1, side="right") - 1
        return down * self.tiles_across + np.searchsorted(self.col_edges, col - 1, side="right") - 1


class RimLines:
    """Values of all cells along the rims of a tiling, so that each tile can ask for those around it.

    Parameters
    ----------
    tiling : Tiling
    dtype : type
    outside : int or float
        The value beyond the raster.
    """

    def __init__(self, tiling: Tiling, dtype: type, outside: float) -> None:
        self.tiling = tiling
        self.outside = outside
        # Two lines for each row and column of tiles, and one of outside on either side of them; the same beyond the
        # ends of a line.
        down, across = len(tiling.row_edges) - 1, tiling.tiles_across
        self.rows: np.ndarray = np.full((2 * down + 2, tiling.ncols + 2), outside, dtype)
        self.cols: np.ndarray = np.full((2 * across + 2, tiling.nrows + 2), outside, dtype)

    def _place(self, tile: Tile) -> tuple[int, int]:
        """First line of the tile among the rows, and among the columns."""
        down, across = divmod(tile.index, self.tiling.tiles_across)
        return 2 * down + 1, 2 * across + 1

    def put(self, tile: Tile, strips: Strips) -> bool:
        """Set the values of one tile; says whether any changed."""
        row, col = self._place(tile)
        along_row = slice(tile.cols.start + 1, tile.cols.stop + 1)
        along_col = slice(tile.rows.start + 1, tile.rows.stop + 1)
        lines = (
            self.rows[row, along_row], self.rows[row + 1, along_row],
            self.cols[col, along_col], self.cols[col + 1, along_col],
        )  # fmt: skip
        changed = any((line != strip).any() for line, strip in zip(lines, strips, strict=True))
        for line, strip in zip(lines, strips, strict=True):
            line[:] = strip
        return changed

    def around(self, tile: Tile) -> Strips:
        """Values of the cells around a tile: rows above and below with their corners, columns without."""
        row, col = self._place(tile)
        along_row = slice(tile.cols.start, tile.cols.stop + 2)
        along_col = slice(tile.rows.start + 1, tile.rows.stop + 1)
        return Strips(
            self.rows[row - 1, along_row].copy(), self.rows[row + 2, along_row].copy(),
            self.cols[col - 1, along_col].copy(), self.cols[col + 2, along_col].copy(),
        )  # fmt: skip


def strips_around(window: np.ndarray) -> Strips:
    """The outermost ring of a window, as `RimLines.around` gives it."""
    return Strips(window[0].copy(), window[-1].copy(), window[1:-1, 0].copy(), window[1:-1, -1].copy())


def set_around(window: np.ndarray, strips: Strips) -> None:
    """Write the values around a tile into the outermost ring of a window, shape (rows + 2, cols + 2)."""
    window[0], window[-1] = strips.top, strips.bottom
    window[1:-1, 0], window[1:-1, -1] = strips.left, strips.right


def pairs_across(one: RimLines) -> Iterator[tuple[np.ndarray, np.ndarray]]:
    """Values on either side of every rim between tiles, neighbour by neighbour: straight and both diagonals.

    Yields
    ------
    here, there : arrays
        Views; pairs that lie beyond the raster's ends are among them, as outside.
    """
    for lines in (one.rows, one.cols):
        last = lines.shape[1] - 1
        for i in range(2, lines.shape[0] - 2, 2):
            here, there = lines[i], lines[i + 1]
            yield here, there
            yield here[:last], there[1:]
            yield here[1:], there[:last]
