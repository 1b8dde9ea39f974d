"""Breaching of a terrain that is larger than memory, tile by tile: the bits of `breaching`.

A search reads only ground within its limits around its pit, and all cuts are made after all searches: so each tile
searches from the pits that begin in it, in a window that is wider by the limits, and knows nothing beyond. A pit whose
search would have to know more, such as a lake that crosses the rim of the window, is sought from again in a window of
its own, which grows until it is wide enough.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from basinwright.terrain.breaching import Pits
from basinwright.terrain.routing import Conditioning, pad
from basinwright.terrain.tiling import Tile
from basinwright.terrain.workspace import Scratch, Workers, padded_raster

_MARGIN = 3
"""Cells at the edge of a window where raising single cells may have gone wrong."""
_BEYOND = 8
"""How far a pit may reach beyond its tile before it gets a window of its own."""
_POOL_BEYOND = 64
"""The same for the pool of a pit."""

_NO_PIT = 255
"""What became of a pit that is none of this tile's."""

_NO_WALLS = np.zeros(1, np.uint8)


Boxes = dict[str, list[tuple[int, int, int, int] | None]]
"""By kind of cuts, the box around those of each tile, in first and last row and column of the padded raster."""


@dataclass(frozen=True)
class _Ground(Scratch):
    """What the searches need.

    Parameters
    ----------
    elevation : str
        File of the given elevations [m].
    raised : str
        File of the elevations with single cells raised [m], -inf in voids.
    breached : str
        File of the elevations after the cuts so far, likewise.
    conditioned : str
        File of these filled, flat and padded.
    depth_m, length_m : float [m]
    """

    elevation: str
    raised: str
    breached: str
    conditioned: str
    depth_m: float
    length_m: float

    @property
    def step_mm(self) -> np.ndarray:
        """Length of a step by row and direction [mm]."""
        step_um: np.ndarray = np.load(Path(self.scratch, "step_um.npy"), mmap_mode="r")
        return np.rint(step_um / 1000).astype(np.int32)

    @property
    def limit_mm(self) -> int:
        """Longest cut [mm]."""
        return int(self.length_m * 1000)


class _Window:
    """Ground around some cells of the raster, and what is beyond: -inf outside the raster, NaN where it goes on."""

    def __init__(self, elevation: np.ndarray, rows: slice, cols: slice, halo: int) -> None:
        nrows, ncols = elevation.shape
        self.top, self.left = max(rows.start - halo, 0), max(cols.start - halo, 0)
        bottom, right = min(rows.stop + halo, nrows), min(cols.stop + halo, ncols)
        flat, self.rounding_m = pad(elevation[self.top : bottom, self.left : right])
        self.shape = bottom - self.top, right - self.left
        self.stride, self.raster_stride = self.shape[1] + 2, ncols + 2
        self.z = flat
        self.mark = np.zeros(flat.size, np.uint8)
        self.grid = flat.reshape(-1, self.stride)
        self.goes_on = self.top > 0, bottom < nrows, self.left > 0, right < ncols
        self.hide(1)
        self.edges = np.array([-self.top, nrows + 1 - self.top, -self.left, ncols + 1 - self.left])
        self.rows = slice(self.top, bottom)

    def hide(self, width: int) -> None:
        """Forget the outermost cells, where the raster goes on beyond them."""
        north, south, west, east = self.goes_on
        inner_rows = slice(None if north else 1, None if south else -1)
        inner_cols = slice(None if west else 1, None if east else -1)
        for there, part in (
            (north, np.s_[:width, inner_cols]), (south, np.s_[-width:, inner_cols]),
            (west, np.s_[inner_rows, :width]), (east, np.s_[inner_rows, -width:]),
        ):  # fmt: skip
            if there:
                self.grid[part] = np.nan

    def in_raster(self, cells: np.ndarray) -> np.ndarray:
        """Padded indices on the raster, int64."""
        row, col = np.divmod(np.asarray(cells, np.int64), self.stride)
        return (row + self.top) * self.raster_stride + col + self.left

    def in_window(self, cells: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Padded indices on the window, int32, of those cells of the raster that lie in it, and which these are."""
        row, col = np.divmod(np.asarray(cells, np.int64), self.raster_stride)
        row, col = row - self.top, col - self.left
        inside = (row >= 1) & (row <= self.shape[0]) & (col >= 1) & (col <= self.shape[1])
        return (row[inside] * self.stride + col[inside]).astype(np.int32), inside

    def core(self, rows: slice, cols: slice) -> np.ndarray:
        """The elevations of some cells of the raster."""
        down, across = 1 - self.top, 1 - self.left
        return self.grid[rows.start + down : rows.stop + down, cols.start + across : cols.stop + across]


class _Told(NamedTuple):
    """What a tile says of its pits: how many of each state, and the box around its cuts (rows, columns)."""

    raised: int
    states: np.ndarray
    box: tuple[int, int, int, int] | None
    rounding_m: float


def breach_tiles(
    files: Scratch,
    elevation_file: str,
    breached_file: str,
    conditioned_file: str,
    step_um: np.ndarray,
    limits: Conditioning,
    workers: Workers,
    fill: Callable[[], Any],
) -> tuple[Pits, bool, float]:
    """Make the cuts of `breaching.breach`.

    Parameters
    ----------
    files : Scratch
    elevation_file : str
    breached_file : str
        A ``.npy`` file of float32 of the same shape [m]: the result, -inf in voids.
    conditioned_file : str
        Where `fill` writes.
    step_um : int64 array, shape (nrows, 8) [micrometres]
    limits : Conditioning
    workers : Workers
    fill : callable
        Fills what is in the breached file by then.

    Returns
    -------
    pits : Pits
    drains : bool
        Whether nothing is left to be filled.
    largest_rounding_m : float
    """
    from basinwright.kernels import breach as kernel

    raised_file = str(Path(files.scratch, "raised.npy"))
    shape = files.tiling.nrows, files.tiling.ncols
    np.lib.format.open_memmap(raised_file, mode="w+", shape=shape, dtype=np.float32)
    np.save(Path(files.scratch, "step_um.npy"), step_um)
    ground = _Ground(
        files.tiling, files.scratch, elevation_file, raised_file, breached_file, conditioned_file, limits.depth_m,
        limits.length_m,
    )  # fmt: skip
    tiles = list(files.tiling)
    first: list[_Told] = workers.map(_search, [(ground, tile) for tile in tiles])
    before = np.sum([told.states for told in first], axis=0)
    after = np.zeros_like(before)
    boxes: Boxes = {"cuts": [told.box for told in first]}
    workers.map(_cut, [(ground, tile, boxes) for tile in tiles])
    drains = before[kernel.FAILED] == 0
    if not drains:
        fill()
        second: list[_Told] = workers.map(_search_again, [(ground, tile, boxes) for tile in tiles])
        after = np.sum([told.states for told in second], axis=0)
        boxes["pool_cuts"] = [told.box for told in second]
        workers.map(_cut, [(ground, tile, boxes) for tile in tiles])
    for name in ("cuts", "pool_cuts", "failed"):
        files.drop(name)
    Path(raised_file).unlink()
    pits = Pits(
        raised_pits=sum(told.raised for told in first),
        pits=int(before.sum()),
        breached=int(before[kernel.BREACHED] + after[kernel.DRAINED]),
        breached_second=int(after[kernel.BREACHED_FROM_POOL]),
        failed=int(after[kernel.FAILED]),
    )
    return pits, bool(drains), max(told.rounding_m for told in first)


def _halo(ground: _Ground, rows: slice, beyond: int) -> int:
    """How much wider a window must be than the pits that begin in it, and may reach some cells beyond."""
    step_mm = ground.step_mm[max(rows.start - 1, 0) : rows.stop + 1]
    return beyond + ground.limit_mm // max(int(step_mm[:, [0, 2]].min()), 1) + 2 + _MARGIN


def _search(ground: _Ground, tile: Tile) -> _Told:
    """Search from the pits that begin in a tile; their cuts, and the pits that failed, are kept."""
    from basinwright.kernels import breach as kernel

    window = _raised(ground, tile.rows, tile.cols, _halo(ground, tile.rows, _BEYOND))
    core = window.core(tile.rows, tile.cols)
    given, _ = pad(np.load(ground.elevation, mmap_mode="r")[tile.rows, tile.cols])
    raised = int(np.count_nonzero(core > given.reshape(-1, tile.stride)[1:-1, 1:-1]))
    np.load(ground.raised, mmap_mode="r+")[tile.rows, tile.cols] = core
    cells, levels, seeds, states = _breached(ground, window, tile.rows, tile.cols)
    found = [(cells, levels)]
    for i in np.flatnonzero(states == kernel.OPEN):
        row, col = (np.array(divmod(int(seeds[i]), ground.tiling.stride)) - 1).tolist()
        halo = _halo(ground, tile.rows, 4 * _BEYOND)
        while states[i] == kernel.OPEN:
            rows, cols = slice(row, row + 1), slice(col, col + 1)
            cells, levels, _, state = _breached(ground, _raised(ground, rows, cols, halo), rows, cols)
            # It may begin elsewhere, or drain, beyond what was known before.
            states[i] = state[0] if state.size else _NO_PIT
            halo *= 2
        found.append((cells, levels))
    seeds, states = seeds[states != _NO_PIT], states[states != _NO_PIT]
    ground.keep(tile, "failed", seeds=seeds[states == kernel.FAILED])
    box = _keep_cuts(ground, tile, "cuts", found)
    return _Told(raised, np.bincount(states, minlength=8), box, window.rounding_m)


def _raised(ground: _Ground, rows: slice, cols: slice, halo: int) -> _Window:
    """A window with its single cells raised, and its pits marked."""
    from basinwright.kernels import breach as kernel

    window = _Window(np.load(ground.elevation, mmap_mode="r"), rows, cols, halo)
    kernel.find_low_cells(window.z, *window.shape, window.mark)
    kernel.raise_single_cells(window.z, window.mark, _NO_WALLS, False, *window.shape)
    window.hide(_MARGIN + 1)
    window.mark[np.isnan(window.z)] = 0
    return window


def _breached(
    ground: _Ground, window: _Window, rows: slice, cols: slice
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Cuts from the pits that begin in some cells of a window, those pits' first cells, and what became of them."""
    from basinwright.kernels import breach as kernel

    members = np.empty(window.z.size, np.int32)
    bounds, state = kernel.group_pits(window.z, window.mark, _NO_WALLS, False, *window.shape, members)
    row, col = np.divmod(members[bounds[:-1]].astype(np.int64), window.stride)
    row, col = row - 1 + window.top, col - 1 + window.left
    mine = (row >= rows.start) & (row < rows.stop) & (col >= cols.start) & (col < cols.stop)
    state[~mine] = kernel.FAILED
    if not mine.any():
        none = np.empty(0, np.int64)
        return none, np.empty(0, np.float32), none, np.empty(0, np.uint8)
    around = np.empty_like(window.z)
    kernel.lowest_around(window.z, *window.shape, around)
    cells, levels = kernel.breach_pits(
        window.z, window.mark, _NO_WALLS, False, False, window.shape[1],
        around, kernel.block_minima(window.z, *window.shape), members, bounds, 0, state.size,
        ground.step_mm[window.rows], ground.limit_mm, ground.depth_m, window.edges, state,
    )  # fmt: skip
    seeds = window.in_raster(members[bounds[:-1][mine]])
    return window.in_raster(cells), levels, seeds, state[mine]


def _keep_cuts(
    ground: _Ground, tile: Tile, name: str, found: list[tuple[np.ndarray, np.ndarray]]
) -> tuple[int, int, int, int] | None:
    """Keep cuts for the tiles on which they are made; returns the box around them, in padded rows and columns."""
    cells, levels = (np.concatenate(parts) for parts in zip(*found, strict=True))
    ground.keep(tile, name, cells=cells, levels=levels)
    if cells.size == 0:
        return None
    row, col = np.divmod(cells, ground.tiling.stride)
    return int(row.min()), int(row.max()), int(col.min()), int(col.max())


def _cuts_in(ground: _Ground, window: _Window, boxes: Boxes) -> tuple[np.ndarray, np.ndarray]:
    """Cuts that lie in a window: padded indices on it, and levels."""
    first_row, first_col = window.top + 1, window.left + 1
    last_row, last_col = window.top + window.shape[0], window.left + window.shape[1]
    cells, levels = [np.empty(0, np.int32)], [np.empty(0, np.float32)]
    for name, by_tile in boxes.items():
        for tile, box in zip(ground.tiling, by_tile, strict=True):
            if box is None or box[0] > last_row or box[1] < first_row or box[2] > last_col or box[3] < first_col:
                continue
            here, inside = window.in_window(ground.kept(tile, name, "cells"))
            cells.append(here)
            levels.append(ground.kept(tile, name, "levels")[inside])
    return np.concatenate(cells), np.concatenate(levels)


def _search_again(ground: _Ground, tile: Tile, boxes: Boxes) -> _Told:
    """Search from the pools of the pits of a tile that failed."""
    from basinwright.kernels import breach as kernel

    seeds = ground.kept(tile, "failed", "seeds")
    states = np.full(seeds.size, kernel.FAILED, np.uint8)
    found = [(np.empty(0, np.int64), np.empty(0, np.float32))]
    if seeds.size:
        halo = _halo(ground, tile.rows, _POOL_BEYOND)
        cells, levels, states = _breached_pools(ground, tile.rows, tile.cols, halo, seeds, boxes)
        found.append((cells, levels))
    for i in np.flatnonzero(states == kernel.OPEN):
        row, col = (np.array(divmod(int(seeds[i]), ground.tiling.stride)) - 1).tolist()
        halo = _halo(ground, tile.rows, 2 * _POOL_BEYOND)
        while states[i] == kernel.OPEN:
            rows, cols = slice(row, row + 1), slice(col, col + 1)
            cells, levels, state = _breached_pools(ground, rows, cols, halo, seeds[i : i + 1], boxes)
            states[i] = state[0]
            halo *= 2
        found.append((cells, levels))
    return _Told(0, np.bincount(states, minlength=8), _keep_cuts(ground, tile, "pool_cuts", found), 0.0)


def _breached_pools(
    ground: _Ground, rows: slice, cols: slice, halo: int, seeds: np.ndarray, boxes: Boxes
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cuts from the pools of some pits, and what became of these."""
    from basinwright.kernels import breach as kernel

    window = _Window(np.load(ground.raised, mmap_mode="r"), rows, cols, halo)
    filled = _Window(padded_raster(ground.conditioned, ground.tiling)[1:-1, 1:-1], rows, cols, halo).z
    cut_cell, cut_level = _cuts_in(ground, window, boxes)
    cut_before = np.unique(cut_cell)
    before = window.z[cut_before]
    kernel.make_cuts(window.z, window.mark, cut_cell, cut_level)
    members, _ = window.in_window(seeds)
    state = np.full(seeds.size, kernel.FAILED, np.uint8)
    number = np.arange(seeds.size + 1, dtype=np.int32)
    around = np.empty_like(filled)
    kernel.lowest_around(filled, *window.shape, around)
    cells, levels = kernel.breach_pools(
        window.z, filled, around, window.mark, _NO_WALLS, False, False, window.shape[1],
        kernel.block_minima(filled, *window.shape), members, number, number[:-1], 0, seeds.size,
        ground.step_mm[window.rows], ground.limit_mm, ground.depth_m, window.edges, cut_before, before, state,
    )  # fmt: skip
    return window.in_raster(cells), levels, state


def _cut(ground: _Ground, tile: Tile, boxes: Boxes) -> None:
    """Make all cuts on a tile."""
    from basinwright.kernels import breach as kernel

    window = _Window(np.load(ground.raised, mmap_mode="r"), tile.rows, tile.cols, 0)
    kernel.make_cuts(window.z, window.mark, *_cuts_in(ground, window, boxes))
    np.load(ground.breached, mmap_mode="r+")[tile.rows, tile.cols] = window.core(tile.rows, tile.cols)
