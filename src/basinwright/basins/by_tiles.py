"""What runs along the flow paths of a whole raster, on terrain that was routed by tiles.

Within a tile everything is known as far as to the outlets in it and to the cells beyond its rim into which its water
flows. Those cells, the entries of other tiles, are nodes like outlets: each lies upstream of an outlet or of another
entry, at a distance that its own tile knows. The forest of all nodes then says what lies below each entry.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from basinwright.kernels import NO_CELL, VOID
from basinwright.terrain import Terrain
from basinwright.terrain.tiled import read_tile, write_tile
from basinwright.terrain.tiling import Tile, frame
from basinwright.terrain.workspace import Scratch, Workspace, file_of


@dataclass(frozen=True)
class _Files(Scratch):
    directions: str
    order: str
    order_bounds: tuple[int, ...]

    def read(self, tile: Tile) -> tuple[np.ndarray, np.ndarray]:
        """Directions and order of a tile."""
        mine = slice(*self.order_bounds[tile.index : tile.index + 2])
        order = np.array(np.load(self.order, mmap_mode="r")[mine])
        return read_tile(self.directions, self.tiling, tile, VOID), order


def _files(terrain: Terrain, space: Workspace) -> _Files:
    if terrain.order_bounds is None or space.scratch is None:
        raise ValueError("the terrain was not routed by tiles, or the workspace has no folders")
    bounds = tuple(terrain.order_bounds.tolist())
    return _Files(terrain.tiling, str(space.scratch), file_of(terrain.directions), file_of(terrain.order), bounds)


def _around(tile: Tile) -> np.ndarray:
    """Cells of the halo, as padded indices on the tile."""
    return frame(tile.shape[0] + 2, tile.stride, 0)


def _rim(tile: Tile) -> np.ndarray:
    """Outermost cells of a tile, likewise."""
    return frame(tile.shape[0] + 2, tile.stride, 1)


class _Labelled(NamedTuple):
    """What a tile tells; labels are positions among its outlets, then among the cells around it."""

    parent: np.ndarray
    parent_um: np.ndarray
    rim_label: np.ndarray
    rim_um: np.ndarray
    farthest_um: np.ndarray
    farthest_cell: np.ndarray


def label_tiles(
    terrain: Terrain, outlets: np.ndarray, space: Workspace
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Label every cell with its next outlet, and find the farthest cell of each whole basin.

    Parameters
    ----------
    terrain : Terrain
        Routed by tiles.
    outlets : int32 array, shape (n,)
        Padded indices, rising.
    space : Workspace

    Returns
    -------
    label, parent, farthest_um, farthest_cell : arrays
        As in `Basins`.
    """
    from basinwright.kernels import forest

    files, tiling, n = _files(terrain, space), terrain.tiling, outlets.size
    tiles = list(tiling)
    tile_of = tiling.tile_of(outlets)
    mine = [np.flatnonzero(tile_of == tile.index) for tile in tiles]
    calls = [
        (files, tile, tile.in_tile(outlets[own], tiling.stride), terrain.step_um[tile.rows])
        for tile, own in zip(tiles, mine, strict=True)
    ]
    told: list[_Labelled] = space.workers.map(_label, calls)

    # Numbers: the outlets, then the entries by cell.
    around = [tile.in_raster(_around(tile), tiling.stride) for tile in tiles]
    used = []
    for cells, own, out in zip(around, mine, told, strict=True):
        used += [cells[out.farthest_um[own.size :] >= 0], cells[out.parent[out.parent >= own.size] - own.size]]
    entries = np.unique(np.concatenate(used))
    numbers = []
    for cells, own in zip(around, mine, strict=True):
        place = np.searchsorted(entries, cells).clip(max=max(entries.size - 1, 0))
        known = entries[place] == cells if entries.size else np.zeros(cells.size, bool)
        numbers.append(np.concatenate([own, np.where(known, n + place, NO_CELL), [NO_CELL]]))  # the last serves -1
    total = n + entries.size
    parent, parent_um = np.full(total, NO_CELL, np.int32), np.zeros(total, np.int64)
    farthest_um, farthest_cell = np.full(total, -1, np.int64), np.full(total, NO_CELL, np.int32)
    for tile, own, out, number in zip(tiles, mine, told, numbers, strict=True):
        parent[own], parent_um[own] = number[out.parent], out.parent_um
        rim = tile.in_raster(_rim(tile), tiling.stride)
        entered = np.isin(rim, entries)
        node = n + np.searchsorted(entries, rim[entered])
        parent[node], parent_um[node] = number[out.rim_label[entered]], out.rim_um[entered]
        _keep_farthest(farthest_um, farthest_cell, number[:-1], out)
    # An entry that is an outlet's own cell lies at that outlet, at no distance.
    order = forest.upstream_first(parent)
    forest.combine_farthest(parent, order, parent_um, farthest_um, farthest_cell)
    below = _first_outlet(parent, n)
    label = space.result("basins.label", (terrain.directions.size,), np.int32)
    halo = label.reshape(terrain.nrows + 2, -1)
    halo[0], halo[-1], halo[:, 0], halo[:, -1] = NO_CELL, NO_CELL, NO_CELL, NO_CELL
    final = [below[number] for number in numbers]
    space.workers.map(_relabel, [(files, tile, file_of(label), f) for tile, f in zip(tiles, final, strict=True)])
    files.drop("labels")
    return label, below[parent[:n]], farthest_um[:n], farthest_cell[:n]


def _keep_farthest(farthest_um: np.ndarray, farthest_cell: np.ndarray, number: np.ndarray, out: _Labelled) -> None:
    """Take over what is farther, or as far and a cell with a smaller index."""
    some = out.farthest_um >= 0
    node, um, cell = number[some], out.farthest_um[some], out.farthest_cell[some]
    better = (um > farthest_um[node]) | ((um == farthest_um[node]) & (cell < farthest_cell[node]))
    farthest_um[node[better]], farthest_cell[node[better]] = um[better], cell[better]


def _first_outlet(parent: np.ndarray, n: int) -> np.ndarray:
    """First outlet on the way down from each node, an outlet itself; -1 for none, as the entry after the last."""
    below = np.append(parent, np.int32(NO_CELL))
    below[:n] = np.arange(n)
    while True:
        further = below[below]
        if np.array_equal(further, below):
            return below
        below = further


def _label(files: _Files, tile: Tile, outlets: np.ndarray, step_um: np.ndarray) -> _Labelled:
    from basinwright.kernels import labels, reduce

    nrows, ncols = tile.shape
    directions, order = files.read(tile)
    nodes = np.concatenate([outlets, _around(tile)])
    label, distance_um = np.empty(directions.size, np.int32), np.empty(directions.size, np.int64)
    parent, parent_um = np.full(nodes.size, NO_CELL, np.int32), np.zeros(nodes.size, np.int64)
    labels.label_cells(directions, order, ncols, step_um, nodes, label, distance_um, parent, parent_um)
    farthest_um, farthest_cell = np.full(nodes.size, -1, np.int64), np.full(nodes.size, NO_CELL, np.int32)
    reduce.keep_farthest(label, ncols, distance_um, 0, nrows, farthest_um, farthest_cell)
    files.keep(tile, "labels", node=label)
    k, rim = outlets.size, _rim(tile)
    found = farthest_cell >= 0
    cell = np.where(found, tile.in_raster(farthest_cell, files.tiling.stride), NO_CELL).astype(np.int32)
    return _Labelled(parent[:k], parent_um[:k], label[rim], distance_um[rim], farthest_um, cell)


def _relabel(files: _Files, tile: Tile, label_file: str, final: np.ndarray) -> None:
    write_tile(label_file, files.tiling, tile, final[files.kept(tile, "labels", "node")])


def add_down_tiles(terrain: Terrain, time_us: np.ndarray, space: Workspace) -> np.ndarray:
    """Add up the times of the steps from every cell to where its water leaves the raster.

    Parameters
    ----------
    terrain : Terrain
        Routed by tiles.
    time_us : int64 array, shape (cells,) [microseconds]
        Of the step out of each cell, in a file.
    space : Workspace

    Returns
    -------
    int64 array, shape (cells,) [microseconds]
        In a file of the workspace, ``time_to_exit_us``.
    """
    files, tiling = _files(terrain, space), terrain.tiling
    tiles = list(tiling)
    told: list[tuple[np.ndarray, np.ndarray]] = space.workers.map(
        _add_down, [(files, tile, file_of(time_us)) for tile in tiles]
    )
    # Every rim cell with the cell beyond the rim to which its water goes.
    rims = [tile.in_raster(_rim(tile), tiling.stride) for tile in tiles]
    ends = [tile.in_raster(end, tiling.stride) for tile, (end, _) in zip(tiles, told, strict=True)]
    goes_on = np.concatenate([end != NO_CELL for end, _ in told])
    entries = np.unique(np.concatenate(ends)[goes_on])
    rim, end, time = np.concatenate(rims), np.concatenate(ends), np.concatenate([time for _, time in told])
    here = np.isin(rim, entries)
    place = np.searchsorted(entries, rim[here])
    below = np.full(entries.size + 1, entries.size)
    below[place] = np.where(goes_on[here], np.searchsorted(entries, end[here]), entries.size)
    to_exit = np.zeros(entries.size + 1, np.int64)
    to_exit[place] = time[here]
    while (below < entries.size).any():
        to_exit, below = to_exit + to_exit[below], below[below]
    out = space.temporary("time_to_exit_us", time_us.shape, np.int64)
    calls = []
    for tile in tiles:
        cells = tile.in_raster(_around(tile), tiling.stride)
        known = np.isin(cells, entries)
        around_us = np.zeros(cells.size, np.int64)
        around_us[known] = to_exit[np.searchsorted(entries, cells[known])]
        calls.append((files, tile, file_of(time_us), around_us, file_of(out)))
    space.workers.map(_add_down_further, calls)
    return out


def _add_down(files: _Files, tile: Tile, time_file: str) -> tuple[np.ndarray, np.ndarray]:
    """Where the water of each rim cell leaves the tile, and the time until then."""
    from basinwright.kernels import tiles, travel

    directions, order = files.read(tile)
    time_us = read_tile(time_file, files.tiling, tile, 0)
    travel.add_down_the_flow(directions, order, tile.shape[1], time_us)
    rim = _rim(tile)
    return tiles.ways_across(directions, tile.stride, rim, np.zeros(directions.size, np.int32)), time_us[rim]


def _add_down_further(files: _Files, tile: Tile, time_file: str, around_us: np.ndarray, out_file: str) -> None:
    from basinwright.kernels import travel

    directions, order = files.read(tile)
    time_us = read_tile(time_file, files.tiling, tile, 0)
    time_us[_around(tile)] = around_us
    travel.add_down_the_flow(directions, order, tile.shape[1], time_us)
    write_tile(out_file, files.tiling, tile, time_us)
