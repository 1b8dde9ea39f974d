"""Conditioning and routing of a terrain that is larger than memory, tile by tile.

In memory a terrain is one tile with nothing around it: `routing` runs the kernels over it in a straight line. Here the
same kernels run over each tile of a raster that lies in files, and the results are the same bits. Between the tiles
passes only what concerns their rims (after Barnes 2016, "Parallel Priority-Flood depression filling for trillion cell
digital elevation models on desktops or clusters", and 2017, "Parallel non-divergent flow accumulation for trillion cell
digital elevation models on desktops or clusters", Computers & Geosciences 96 and 92):

1. Each tile cuts its terrain into catchments and reduces the passes between them to a tree between those at its rim.
   The trees, joined across the rims, say at which level each of these spills; what lies inside follows.
2. Directions need one more cell around a tile, and are then known everywhere but on flats that cross a rim. The steps
   to lower and from higher ground of such flats are counted in each tile and exchanged until nothing changes.
3. Each tile sums its own area, and says where water from each cell of its rim leaves it. Down the forest of these ways
   the sums are added up; then each tile adds what enters it.

A step may be repeated: it reads only what earlier steps wrote.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import NamedTuple

import numpy as np

from basinwright.errors import TerrainError
from basinwright.kernels import FLAT, NO_CELL, VOID
from basinwright.terrain.breaching import Pits
from basinwright.terrain.routing import Conditioning, Terrain, measure_conditioning, pad, sizes_by_row, step_lengths_um
from basinwright.terrain.summable import summable_areas_m2
from basinwright.terrain.tiled_breaching import breach_tiles
from basinwright.terrain.tiling import (
    RimLines,
    Strips,
    Tile,
    Tiling,
    frame,
    pairs_across,
    set_around,
    strips_around,
    strips_of,
)
from basinwright.terrain.workspace import Scratch, Workers, Workspace, file_of, padded_raster

_FILL = Conditioning()


def write_tile(file: str, tiling: Tiling, tile: Tile, padded: np.ndarray) -> None:
    """Write a tile into a flat padded array, without its halo."""
    into = padded_raster(file, tiling, write=True)[1:-1, 1:-1]
    into[tile.rows, tile.cols] = padded.reshape(-1, tile.stride)[1:-1, 1:-1]


def read_tile(file: str, tiling: Tiling, tile: Tile, outside: float) -> np.ndarray:
    """Read a tile of a flat padded array, flat and padded itself, with a value of no meaning around it."""
    window = np.array(padded_raster(file, tiling)[tile.padded])
    window[0], window[-1], window[:, 0], window[:, -1] = outside, outside, outside, outside
    return window.reshape(-1)


@dataclass(frozen=True)
class Files(Scratch):
    """Where the arrays of one terrain lie.

    Parameters
    ----------
    elevation : str
        File of the elevations, shape (nrows, ncols) [m].
    conditioned, directions, area : str
        Files of the arrays of `Terrain`.
    """

    elevation: str
    conditioned: str
    directions: str
    area: str

    def sizes(self, tile: Tile) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Widths and heights of the cells [m] and their summable areas [m2], by row of the tile."""
        dx, dy, area = np.load(Path(self.scratch, "sizes.npy"))[:, tile.rows]
        return dx, dy, area


def condition_and_route_tiles(
    elevation_file: Path,
    dx_m: np.ndarray,
    dy_m: np.ndarray,
    cell_area_m2: np.ndarray,
    tiling: Tiling,
    space: Workspace,
    conditioning: Conditioning = _FILL,
) -> Terrain:
    """Do the work of `condition_and_route` on tiles: the same result, in files.

    Parameters
    ----------
    elevation_file : Path
        A ``.npy`` file of shape (nrows, ncols) [m], as `condition_and_route` takes it.
    dx_m, dy_m, cell_area_m2 : arrays, shape (nrows,) [m, m2]
    tiling : Tiling
    space : Workspace
        With both of its folders; the workers see the elevations too under the same path.
    conditioning : Conditioning

    Returns
    -------
    Terrain
        Its rasters are mapped files; its order runs tile by tile (`Terrain.order`).

    Raises
    ------
    TerrainError
        As `condition_and_route`.
    """
    if space.scratch is None:
        raise ValueError("tiles need a workspace with folders")
    scratch, workers = space.scratch, space.workers
    nrows, ncols = tiling.nrows, tiling.ncols
    dx, dy, cell_area = sizes_by_row(nrows, ncols, dx_m, dy_m, cell_area_m2)
    row_area = summable_areas_m2(cell_area, ncols)
    cells = (nrows + 2) * (ncols + 2)
    np.save(scratch / "sizes.npy", np.stack([dx, dy, row_area]))
    conditioned = space.result("terrain.conditioned_m", (cells,), np.float32)
    directions = space.result("terrain.directions", (cells,), np.uint8)
    area = space.result("terrain.area_m2", (cells,), np.float64)
    for array, outside in ((conditioned, np.inf), (directions, VOID), (area, 0.0)):
        halo = array.reshape(nrows + 2, ncols + 2)
        halo[0], halo[-1], halo[:, 0], halo[:, -1] = outside, outside, outside, outside

    files = Files(tiling, str(scratch), str(elevation_file), file_of(conditioned), file_of(directions), file_of(area))
    pits, step_um = Pits(), step_lengths_um(dx, dy)
    if conditioning.mode == "breach":
        given = np.load(elevation_file, mmap_mode="r").shape
        breached = file_of(space.temporary("breached", given, np.float32))
        cut = replace(files, elevation=breached)
        pits, drains, largest_rounding = breach_tiles(
            files, files.elevation, breached, files.conditioned, step_um, conditioning, workers,
            lambda: _fill(cut, workers),
        )  # fmt: skip
        if drains:
            data_cells = np.array(workers.map(_take_over, [(cut, tile) for tile in tiling]))
        else:
            data_cells, _ = _fill(cut, workers)
        space.discard("breached")
    else:
        data_cells, largest_rounding = _fill(files, workers)
    if data_cells.sum() == 0:
        raise TerrainError("no cell of the terrain has an elevation: is its nodata value right?")
    order = space.result("terrain.order", (int(data_cells.sum()),), np.int32)
    bounds = np.concatenate([[0], np.cumsum(data_cells)])
    flat_cells = _route(files, workers)
    _collect(files, workers, bounds, file_of(order))

    elevation = np.load(elevation_file, mmap_mode="r")
    return Terrain(
        nrows=nrows,
        ncols=ncols,
        conditioned_m=conditioned,
        directions=directions,
        area_m2=area,
        order=order,
        row_area_m2=row_area,
        step_um=step_um,
        data_cells=int(data_cells.sum()),
        flat_cells=flat_cells,
        **measure_conditioning(elevation, conditioned, row_area),
        **vars(pits),
        largest_rounding_m=largest_rounding,
        row_edges=np.array(tiling.row_edges),
        col_edges=np.array(tiling.col_edges),
        order_bounds=bounds,
    )


# 1. Filling


class _Rim(NamedTuple):
    """What a tile tells of its catchments: elevation and number of those along the rim, and the tree between them."""

    z: Strips
    terminal: Strips
    terminals: int
    edge: np.ndarray
    edge_level: np.ndarray
    data_cells: int
    largest_rounding_m: float


def _fill(files: Files, workers: Workers) -> tuple[np.ndarray, float]:
    """Fill every tile; returns the cells with elevation of each, and the largest rounding."""
    from basinwright.kernels.fill import spill_levels

    tiling = files.tiling
    rims: list[_Rim] = workers.map(_cut_into_catchments, [(files, tile) for tile in tiling])
    # The outside is number 0 of every tile, and of all.
    first = np.concatenate([[0], np.cumsum([rim.terminals - 1 for rim in rims])])
    z = RimLines(tiling, np.float32, -np.inf)
    number = RimLines(tiling, np.int64, 0)
    pairs, levels = [], []
    for tile, rim, base in zip(tiling, rims, first.tolist(), strict=False):
        z.put(tile, rim.z)
        number.put(tile, Strips(*(np.where(line > 0, line + base, 0) for line in rim.terminal)))
        a, b = rim.edge >> 32, rim.edge & 0xFFFFFFFF
        pairs.append(np.where(a > 0, a + base, 0) << 32 | np.where(b > 0, b + base, 0))
        levels.append(rim.edge_level)
    for (a, b), (za, zb) in zip(pairs_across(number), pairs_across(z), strict=True):
        differ = a != b
        pairs.append(a[differ] << 32 | b[differ])
        levels.append(np.maximum(za, zb)[differ])
    spill = spill_levels(int(first[-1]) + 1, np.concatenate(pairs), np.concatenate(levels).astype(np.float32))
    calls = [
        (files, tile, np.concatenate([spill[:1], spill[first[i] + 1 : first[i + 1] + 1]]))
        for i, tile in enumerate(tiling)
    ]
    workers.map(_raise, calls)
    files.drop("catchments")
    return np.array([rim.data_cells for rim in rims]), max(rim.largest_rounding_m for rim in rims)


def _padded_elevation(files: Files, tile: Tile) -> tuple[np.ndarray, float]:
    """Elevations of a tile, padded: -inf in voids and beyond the raster, +inf where another tile goes on."""
    elevation = np.load(files.elevation, mmap_mode="r")
    top, left = max(tile.rows.start - 1, 0), max(tile.cols.start - 1, 0)
    window = elevation[top : tile.rows.stop + 1, left : tile.cols.stop + 1]
    padded, rounding = pad(window)
    z = padded.reshape(window.shape[0] + 2, -1)
    # Where the tile lies at the raster's edge the padding is the ring around it, else the outermost cells are.
    z = z[tile.rows.start - top :, tile.cols.start - left :][: tile.shape[0] + 2, : tile.stride].copy()
    for line in (z[0], z[-1], z[:, 0], z[:, -1]):
        line[line > -np.inf] = np.inf
    return z.reshape(-1), rounding


def _cut_into_catchments(files: Files, tile: Tile) -> _Rim:
    from basinwright.kernels import fill, tiles

    nrows, ncols = tile.shape
    z, rounding = _padded_elevation(files, tile)
    ways = np.empty(z.size, np.uint8)
    label = np.empty(z.size, np.int32)
    stack = np.empty(z.size, np.int32)
    fill.ways_down(z, nrows, ncols, ways)
    labels = fill.label_catchments(z, ways, nrows, ncols, label, stack)
    del ways, stack
    pair, level = fill.find_passes(z, label, nrows, ncols)
    inside = level < np.inf
    pair, level = pair[inside], level[inside]
    label[label == NO_CELL] = 0  # around the tile
    core = label.reshape(nrows + 2, ncols + 2)[1:-1, 1:-1]
    height = z.reshape(nrows + 2, ncols + 2)[1:-1, 1:-1]
    terminal = np.zeros(labels, bool)
    terminal[0] = True
    for strip in strips_of(core):
        terminal[strip] = True
    spill, reached, edge, edge_level = tiles.join_catchments(terminal, pair, level, np.argsort(level))
    number = (np.cumsum(terminal) - 1).astype(np.int32)  # of the terminals alone
    files.keep(tile, "catchments", label=label, spill=spill, reached=number[reached])
    a, b = number[edge >> 32].astype(np.int64), number[edge & 0xFFFFFFFF].astype(np.int64)
    return _Rim(
        strips_of(height),
        Strips(*(number[strip].astype(np.int64) for strip in strips_of(core))),
        int(terminal.sum()),
        a << 32 | b,
        edge_level,
        int(np.count_nonzero(height > -np.inf)),
        rounding,
    )


def _raise(files: Files, tile: Tile, terminal_spill: np.ndarray) -> None:
    from basinwright.kernels.fill import raise_to_levels

    z, _ = pad(np.load(files.elevation, mmap_mode="r")[tile.rows, tile.cols])
    label = files.kept(tile, "catchments", "label")
    level = np.maximum(
        files.kept(tile, "catchments", "spill"), terminal_spill[files.kept(tile, "catchments", "reached")]
    )
    raise_to_levels(z, label, level)
    write_tile(files.conditioned, files.tiling, tile, z)


def _take_over(files: Files, tile: Tile) -> int:
    """Take a tile as it is, since it drains; returns its cells with elevation."""
    from basinwright.kernels.breach import close_voids

    z, _ = pad(np.load(files.elevation, mmap_mode="r")[tile.rows, tile.cols])
    close_voids(z)
    write_tile(files.conditioned, files.tiling, tile, z)
    return int(np.count_nonzero(z < np.inf))


# 2. Directions


class _Flats(NamedTuple):
    """Steps to lower and from higher ground along the rim of a tile, of the flats that cross it."""

    nearer: Strips
    away: Strips


def _route(files: Files, workers: Workers) -> int:
    """Give every cell of every tile its direction; returns the number of cells in flats."""
    from basinwright.kernels.tiles import NO_FLAT

    tiling = files.tiling
    tiles = list(tiling)
    found: list[tuple[int, int, _Flats | None]] = workers.map(_descend, [(files, tile) for tile in tiles])
    flat_cells = sum(cells for cells, _, _ in found)
    nearer, away = RimLines(tiling, np.int32, NO_FLAT), RimLines(tiling, np.int32, NO_FLAT)
    steps: dict[int, _Flats] = {tile.index: flats for tile, (_, _, flats) in zip(tiles, found, strict=True) if flats}
    told, known = dict(steps), dict[int, _Around]()
    while told:
        for i, flats in told.items():
            nearer.put(tiles[i], flats.nearer)
            away.put(tiles[i], flats.away)
        around = {i: _Around(nearer.around(tiles[i]), away.around(tiles[i])) for i in sorted(steps)}
        asked = [i for i, now in around.items() if i not in known or _differ_around(now, known[i])]
        answers = workers.map(_spread, [(files, tiles[i], *around[i]) for i in asked])
        known = around
        told = {
            i: flats
            for i, flats in zip(asked, answers, strict=True)
            if _differ(flats.nearer, steps[i].nearer) or _differ(flats.away, steps[i].away)
        }
        steps |= told
    open_tiles = [tiles[i] for i in sorted(steps)]
    undrained = sum(closed for _, closed, _ in found) + sum(
        workers.map(_drain, [(files, tile, nearer.around(tile), away.around(tile)) for tile in open_tiles])
    )
    if undrained:
        raise TerrainError(f"{undrained} cells do not drain after conditioning")
    files.drop("flats")
    return flat_cells


class _Around(NamedTuple):
    """The same of the cells around a tile."""

    nearer: Strips
    away: Strips


def _differ_around(one: _Around, other: _Around) -> bool:
    return _differ(one.nearer, other.nearer) or _differ(one.away, other.away)


def _differ(one: Strips, other: Strips) -> bool:
    return any((a != b).any() for a, b in zip(one, other, strict=True))


def _descend(files: Files, tile: Tile) -> tuple[int, int, _Flats | None]:
    """Directions of a tile but for open flats; returns flat cells, undrained cells, and the state of open flats."""
    from basinwright.kernels import directions, flats, tiles

    nrows, ncols = tile.shape
    stride = ncols + 4
    # The tile, a ring of cells around it whose directions are wanted too, and a ring that those need.
    wide = np.full((nrows + 4, stride), np.inf, np.float32)
    whole = padded_raster(files.conditioned, files.tiling)
    top, left = tile.rows.start - 1, tile.cols.start - 1
    rows = slice(max(top, 0), min(tile.rows.stop + 3, whole.shape[0]))
    cols = slice(max(left, 0), min(tile.cols.stop + 3, whole.shape[1]))
    wide[rows.start - top : rows.stop - top, cols.start - left : cols.stop - left] = whole[rows, cols]
    z = wide.reshape(-1)
    ring_rows = np.arange(tile.rows.start - 1, tile.rows.stop + 1).clip(0, files.tiling.nrows - 1)
    dx, dy, _ = np.load(Path(files.scratch, "sizes.npy"))[:, ring_rows]
    code = np.empty(z.size, np.uint8)
    directions.steepest_descent(z, nrows + 2, ncols + 2, dx, dy, code)
    core = code.reshape(nrows + 4, stride)[2:-2, 2:-2]
    flat_cells = int(np.count_nonzero(core == FLAT))
    of_ring, cells = 0, np.empty(0, np.int32)
    if flat_cells:
        queue = np.empty(z.size, np.int32)
        ring = frame(nrows + 4, stride, 1)
        of_ring, cells, towards, beside_higher = tiles.find_open_flats(z, code, stride, ring, queue)
        flats.resolve_flats(z, code, nrows + 2, ncols + 2, queue, np.empty(z.size, np.int32))
    undrained = int(np.count_nonzero(core == FLAT))
    padded_raster(files.directions, files.tiling, write=True)[1:-1, 1:-1][tile.rows, tile.cols] = core
    if cells.size == of_ring:
        return flat_cells, undrained, None
    rowwise = of_ring + np.argsort(cells[of_ring:])
    files.keep(tile, "flats", cells=cells[rowwise], towards=towards[rowwise], beside_higher=beside_higher[rowwise])
    _first_steps(files, tile)
    unknown = np.full((nrows + 4, ncols + 4), tiles.NO_FLAT, np.int32)
    unknown.reshape(-1)[cells[:of_ring]] = tiles.UNREACHED
    around = strips_around(unknown[1:-1, 1:-1])
    return flat_cells, undrained, _spread(files, tile, around, around, begin=True)


def _field(files: Files, tile: Tile, around: Strips, steps: np.ndarray) -> np.ndarray:
    """Steps of the open flats of a tile and of the cells around it, flat, two cells wider than the tile."""
    nrows, ncols = tile.shape
    field = np.zeros((nrows + 4, ncols + 4), np.int32)  # NO_FLAT
    set_around(field[1:-1, 1:-1], around)
    flat = field.reshape(-1)
    flat[files.kept(tile, "flats", "cells")] = steps
    return flat


def _first_steps(files: Files, tile: Tile) -> None:
    """Start counting: 1 where the open flats of a tile have lower or higher ground beside them."""
    from basinwright.kernels import tiles

    drains = files.kept(tile, "flats", "towards") != tiles.NO_CODE
    for name, begins in (("nearer", drains), ("away", files.kept(tile, "flats", "beside_higher"))):
        files.keep(tile, "flats", **{name: np.where(begins, 1, tiles.UNREACHED).astype(np.int32)})


def _spread(files: Files, tile: Tile, nearer: Strips, away: Strips, begin: bool = False) -> _Flats:
    """Begin counting, or go on, knowing what lies around; to do the same again changes nothing."""
    from basinwright.kernels import tiles

    nrows, ncols = tile.shape
    cells = files.kept(tile, "flats", "cells")
    queue = np.empty((nrows + 4) * (ncols + 4), np.int32)
    ring = frame(nrows + 4, ncols + 4, 1)
    told = []
    for name, around in (("nearer", nearer), ("away", away)):
        steps = files.kept(tile, "flats", name)
        flat = _field(files, tile, around, steps)
        known = ring[(flat[ring] != tiles.NO_FLAT) & (flat[ring] != tiles.UNREACHED)]
        sources = np.concatenate([cells[steps == 1], known]) if begin else known
        tiles.spread_steps(flat, ncols + 4, sources[np.argsort(flat[sources], kind="stable")].astype(np.int32), queue)
        files.keep(tile, "flats", **{name: flat[cells]})
        told.append(strips_of(flat.reshape(nrows + 4, -1)[2:-2, 2:-2]))
    return _Flats(*told)


def _drain(files: Files, tile: Tile, nearer: Strips, away: Strips) -> int:
    """Give the open flats of a tile their directions; returns the cells that got none."""
    from basinwright.kernels import tiles

    nrows, ncols = tile.shape
    cells = files.kept(tile, "flats", "cells")
    code = np.zeros((nrows + 4) * (ncols + 4), np.uint8)
    undrained = tiles.drain_open_flats(
        code, ncols + 4, cells, files.kept(tile, "flats", "towards"),
        _field(files, tile, nearer, files.kept(tile, "flats", "nearer")),
        _field(files, tile, away, files.kept(tile, "flats", "away")),
    )  # fmt: skip
    into = padded_raster(files.directions, files.tiling, write=True)[1:-1, 1:-1][tile.rows, tile.cols]
    row, col = np.divmod(cells, ncols + 4)
    into[row - 2, col - 2] = code[cells]
    return int(undrained)


# 3. Contributing area


class _Outflow(NamedTuple):
    """What a tile gives to the cells around it, and where the water of its rim leaves it; indices on the raster."""

    visited: int
    cells: np.ndarray
    area_m2: np.ndarray
    rim: np.ndarray
    rim_ends: np.ndarray


def _collect(files: Files, workers: Workers, bounds: np.ndarray, order_file: str) -> None:
    """Sum the contributing areas."""
    from basinwright.kernels import forest

    tiling = files.tiling
    given: list[_Outflow] = workers.map(
        _sum_own, [(files, tile, order_file, bounds[tile.index : tile.index + 2].tolist()) for tile in tiling]
    )
    undone = int(bounds[-1]) - sum(out.visited for out in given)
    # Nodes: the cells that water from another tile enters.
    entries = np.unique(np.concatenate([out.cells for out in given]))
    inflow = np.zeros((entries.size, 1))
    parent = np.full(entries.size, NO_CELL, np.int32)
    for out in given:
        np.add.at(inflow[:, 0], np.searchsorted(entries, out.cells), out.area_m2)
    for out in given:
        here = np.isin(out.rim, entries)
        goes_on = here & (out.rim_ends != NO_CELL)
        parent[np.searchsorted(entries, out.rim[goes_on])] = np.searchsorted(entries, out.rim_ends[goes_on])
    order = forest.upstream_first(parent)
    if undone or order.size != entries.size:
        raise TerrainError(f"{undone + entries.size - order.size} cells lie on or below a cycle of directions")
    forest.combine_sums(parent, order, inflow)
    tile_of = tiling.tile_of(entries)
    calls = [(files, tile, entries[tile_of == tile.index], inflow[tile_of == tile.index, 0]) for tile in tiling]
    workers.map(_add_inflow, calls)
    files.drop("area")


def _sum_own(files: Files, tile: Tile, order_file: str, bounds: list[int]) -> _Outflow:
    from basinwright.kernels import accumulate, tiles

    nrows, ncols = tile.shape
    code = read_tile(files.directions, files.tiling, tile, VOID)
    area = np.empty(code.size)
    order = np.empty(code.size, np.int32)
    _, _, row_area = files.sizes(tile)
    visited = accumulate.contributing_area(code, nrows, ncols, row_area, area, order)
    np.load(order_file, mmap_mode="r+")[slice(*bounds)] = order[: bounds[1] - bounds[0]]
    del order
    files.keep(tile, "area", own=area)
    around = frame(nrows + 2, tile.stride, 0)
    out = around[area[around] > 0]
    rim = frame(nrows + 2, tile.stride, 1)
    ends = tiles.ways_across(code, tile.stride, rim, np.zeros(code.size, np.int32))
    stride = files.tiling.stride
    rim_ends = np.where(ends == NO_CELL, NO_CELL, tile.in_raster(ends, stride))
    return _Outflow(visited, tile.in_raster(out, stride), area[out], tile.in_raster(rim, stride), rim_ends)


def _add_inflow(files: Files, tile: Tile, entries: np.ndarray, inflow: np.ndarray) -> None:
    from basinwright.kernels.tiles import pour_in

    area = files.kept(tile, "area", "own")
    if entries.size:
        code = read_tile(files.directions, files.tiling, tile, VOID)
        pour_in(
            code, tile.stride, tile.in_tile(entries, files.tiling.stride), inflow, area,
            np.zeros(code.size, np.uint8), np.zeros(code.size),
        )  # fmt: skip
    write_tile(files.area, files.tiling, tile, area)
