"""Where basins lose or keep water: at the raster's edge, beside voids, in sinks."""

from __future__ import annotations

import numpy as np

from basinwright.basins.delineation import Basins
from basinwright.grid import Grid
from basinwright.kernels import VOID
from basinwright.terrain import Terrain
from basinwright.terrain.hydrography import Sinks

SIDES = ("north", "east", "south", "west", "void")
_BLOCK_ROWS = 256


def contact_lengths_m(grid: Grid, terrain: Terrain, basins: Basins) -> dict[str, np.ndarray]:
    """Length of every outlet's basin boundary that lies on each edge of the raster, or against voids.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    basins : Basins

    Returns
    -------
    dict of float64 arrays, shape (n,) [m]
        By side: ``north``, ``east``, ``south``, ``west``, ``void``. Cells that touch at a corner only have none.
    """
    lengths_um = np.zeros((basins.n_labels, len(SIDES)))  # whole micrometres: sums are exact in any order
    label = basins.label.reshape(terrain.nrows + 2, terrain.ncols + 2)[1:-1, 1:-1]
    directions = terrain.directions.reshape(terrain.nrows + 2, terrain.ncols + 2)
    dx_um, dy_um = np.rint(grid.dx_m * 1e6), np.rint(grid.dy_m * 1e6)

    def add(side: str, labels: np.ndarray, um: np.ndarray) -> None:
        inside = labels >= 0
        np.add.at(lengths_um[:, SIDES.index(side)], labels[inside], um[inside])

    add("north", label[0], np.full(terrain.ncols, dx_um[0]))
    add("south", label[-1], np.full(terrain.ncols, dx_um[-1]))
    add("west", label[:, 0], dy_um)
    add("east", label[:, -1], dy_um)
    for first in range(0, terrain.nrows, _BLOCK_ROWS):
        rows = np.arange(first, min(first + _BLOCK_ROWS, terrain.nrows))
        here = label[rows[0] : rows[-1] + 1]
        void = directions[rows[0] : rows[-1] + 3] == VOID
        for drow, dcol, um in ((-1, 0, dx_um), (1, 0, dx_um), (0, -1, dy_um), (0, 1, dy_um)):
            beside = void[1 + drow : len(rows) + 1 + drow, 1 + dcol : terrain.ncols + 1 + dcol].copy()
            if drow and (edge := -rows[0] if drow < 0 else terrain.nrows - 1 - rows[0]) in range(len(rows)):
                beside[edge] = False  # off the raster, which is counted by its side
            if dcol:
                beside[:, 0 if dcol < 0 else -1] = False
            at = np.nonzero(beside & (here >= 0))
            add("void", here[at], um[rows][at[0]])
    whole = basins.whole_sums(lengths_um) / 1e6
    return {side: basins.by_outlet(whole[:, i]) for i, side in enumerate(SIDES)}


def sink_areas_km2(terrain: Terrain, basins: Basins, sinks: Sinks) -> np.ndarray:
    """Area that drains to sinks and would drain to each outlet if they spilt.

    Parameters
    ----------
    terrain : Terrain
    basins : Basins
    sinks : Sinks

    Returns
    -------
    float64 array, shape (n,) [km2]
        Not part of the basin. A sink that spills into what drains to another is followed on from where that spills.
        NaN for outlets that failed.
    """
    by_label = np.zeros((basins.n_labels, 1))
    for i in range(sinks.cells.size):
        area, sink = terrain.area_m2[sinks.cells[i]], i
        for _ in range(sinks.cells.size):  # sinks spill to where a flood came from earlier: no rings
            cell = int(sinks.spill_cells[sink])
            if cell < 0:
                break
            if basins.label[cell] >= 0:
                by_label[basins.label[cell], 0] += area
            sink = int(sinks.next_sink[sink])
            if sink < 0:
                break
    return basins.by_outlet(basins.whole_sums(by_label)[:, 0]) / 1e6
