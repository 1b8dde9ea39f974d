"""Time-area curves: how much of a basin's area has its water at the outlet within a time."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from basinwright.basins.by_tiles import add_down_tiles
from basinwright.basins.delineation import Basins
from basinwright.kernels import NO_CELL
from basinwright.terrain import Terrain
from basinwright.terrain.workspace import IN_MEMORY, Workspace

BIN_H = 0.01
"""Resolution of travel times [h]."""

MOST_ROWS = 100
"""Rows of one outlet's curve: longer ones are thinned evenly, the last row kept."""

_BLOCK_ROWS = 256
_US_PER_H = 3_600_000_000

StepTime = Callable[[slice, np.ndarray, np.ndarray, np.ndarray, np.ndarray], np.ndarray]
"""Time of a step [h] from rows, length [m], fall [m], contributing area [km2] and whether the cell is a source."""


def travel_times_us(terrain: Terrain, step_time_h: StepTime, space: Workspace = IN_MEMORY) -> np.ndarray:
    """Time from every cell to where its water leaves the raster.

    Parameters
    ----------
    terrain : Terrain
    step_time_h : callable
        Given a block of rows: the rows, and arrays of shape (rows, ncols) with length and fall of the step out of each
        cell [m], contributing area [km2] and whether no cell drains into it (bool); returns the time of the step [h].
    space : Workspace
        With folders where the terrain was routed by tiles.

    Returns
    -------
    int64 array, shape (cells,) [microseconds]
        Flat padded. Whole numbers: sums of them do not depend on their order.
    """
    from basinwright.kernels import travel

    ncols = terrain.ncols
    receives = space.temporary("receives", terrain.directions.shape, np.uint8)
    travel.mark_receivers(terrain.directions, ncols, receives)
    time_us = space.temporary("step_us", terrain.directions.shape, np.int64)
    for first in range(0, terrain.nrows, _BLOCK_ROWS):
        rows = slice(first, min(first + _BLOCK_ROWS, terrain.nrows))
        shape = (rows.stop - rows.start, ncols)
        length, fall, source = np.empty(shape), np.empty(shape), np.empty(shape, np.uint8)
        travel.block_steps(
            terrain.directions, terrain.conditioned_m, receives, ncols, terrain.step_um, first, length, fall, source
        )
        step_h = step_time_h(rows, length, fall, terrain.area_grid[rows] * 1e-6, source.astype(bool))
        terrain.grid(time_us)[rows] = np.rint(np.where(length > 0, step_h, 0.0) * _US_PER_H)
    if len(terrain.tiling) > 1:
        return add_down_tiles(terrain, time_us, space)
    travel.add_down_the_flow(terrain.directions, terrain.order, ncols, time_us)
    return time_us


def farthest_in_time(terrain: Terrain, basins: Basins, time_us: np.ndarray) -> np.ndarray:
    """Cells from which water takes longest to each outlet.

    Parameters
    ----------
    terrain : Terrain
    basins : Basins
    time_us : int64 array, shape (cells,) [microseconds]
        From `travel_times_us`.

    Returns
    -------
    int32 array, shape (labels,)
        Padded index for each whole basin; of equally far cells the one with the smallest index.
    """
    from basinwright.kernels import forest, reduce

    n = basins.n_labels
    farthest_us, farthest_cell = np.full(n, -1, np.int64), np.full(n, NO_CELL, np.int32)
    reduce.keep_farthest(basins.label, terrain.ncols, time_us, 0, terrain.nrows, farthest_us, farthest_cell)
    # Times count from the raster's exit, so that the way from outlet to outlet is in them already.
    forest.combine_farthest(basins.parent, basins.upstream_first, np.zeros(n, np.int64), farthest_us, farthest_cell)
    return farthest_cell


def time_area_curves(terrain: Terrain, basins: Basins, time_us: np.ndarray) -> dict[str, np.ndarray]:
    """Curves of whole basins.

    Parameters
    ----------
    terrain : Terrain
    basins : Basins
    time_us : int64 array, shape (cells,) [microseconds]
        From `travel_times_us`.

    Returns
    -------
    dict of arrays, shape (rows,)
        ``outlet``, ``travel_time_h`` (rising within an outlet) and ``area_km2`` (within that time; the last row of an
        outlet is its whole basin). Outlets that failed have none.

    Notes
    -----
    Times are whole microseconds and areas exact sums, so the curves do not depend on the other outlets of the run.
    """
    from basinwright.kernels import forest, travel

    bin_us = round(BIN_H * _US_PER_H)
    away_us = time_us[basins.label_cell]
    first_bin = away_us // bin_us
    last_bin = first_bin.copy()
    travel.last_bins(basins.label, time_us, bin_us, last_bin)
    forest.combine_largest(basins.parent, basins.upstream_first, last_bin)
    bounds = np.concatenate([[0], np.cumsum(last_bin - first_bin + 1)]).astype(np.int64)
    area_m2 = np.zeros(bounds[-1])
    travel.add_areas_by_time(
        basins.label, time_us, terrain.ncols, terrain.row_area_m2, bin_us, first_bin, bounds, area_m2
    )
    travel.combine_curves(basins.parent, basins.upstream_first, first_bin, bounds, area_m2)

    placed = np.flatnonzero(basins.outlet_label >= 0)
    outlet, number, within_m2 = travel.thinned(bounds, area_m2, basins.outlet_label[placed], MOST_ROWS)
    offset_h = (away_us % bin_us / _US_PER_H)[basins.outlet_label[placed]]
    return {
        "outlet": placed[outlet],
        "travel_time_h": (number + 1) * BIN_H - offset_h[outlet],
        "area_km2": within_m2 * 1e-6,
    }
