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


def time_area_curves(
    terrain: Terrain, basins: Basins, step_time_h: StepTime, space: Workspace = IN_MEMORY
) -> dict[str, np.ndarray]:
    """Curves of whole basins, from one sweep over the raster.

    Parameters
    ----------
    terrain : Terrain
    basins : Basins
    step_time_h : callable
        Given a block of rows: the rows, and arrays of shape (rows, ncols) with length and fall of the step out of each
        cell [m], contributing area [km2] and whether no cell drains into it (bool); returns the time of the step [h].
    space : Workspace
        With folders where the terrain was routed by tiles.

    Returns
    -------
    dict of arrays, shape (rows,)
        ``outlet``, ``travel_time_h`` (rising within an outlet) and ``area_km2`` (within that time; the last row of an
        outlet is its whole basin). Outlets that failed have none.

    Notes
    -----
    Times are whole microseconds and areas exact sums, so the curves do not depend on the other outlets of the run.
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
        time_us = add_down_tiles(terrain, time_us, space)
    else:
        travel.add_down_the_flow(terrain.directions, terrain.order, ncols, time_us)

    bin_us = round(BIN_H * _US_PER_H)
    away_us = time_us[basins.label_cell]
    first_bin = away_us // bin_us
    last_bin = first_bin.copy()
    travel.last_bins(basins.label, time_us, bin_us, last_bin)
    for i in basins.upstream_first.tolist():
        if (p := int(basins.parent[i])) != NO_CELL:
            last_bin[p] = max(last_bin[p], last_bin[i])
    bounds = np.concatenate([[0], np.cumsum(last_bin - first_bin + 1)]).astype(np.int64)
    area_m2 = np.zeros(bounds[-1])
    travel.add_areas_by_time(basins.label, time_us, ncols, terrain.row_area_m2, bin_us, first_bin, bounds, area_m2)
    travel.combine_curves(basins.parent, basins.upstream_first, first_bin, bounds, area_m2)
    return _curves(basins, bounds, area_m2, away_us % bin_us / _US_PER_H)


def _curves(basins: Basins, bounds: np.ndarray, area_m2: np.ndarray, offset_h: np.ndarray) -> dict[str, np.ndarray]:
    """Cumulate, thin and list the curves of the outlets."""
    outlet: list[np.ndarray] = []
    time: list[np.ndarray] = []
    area: list[np.ndarray] = []
    for i, label in enumerate(basins.outlet_label.tolist()):
        if label < 0:
            continue
        within = np.cumsum(area_m2[bounds[label] : bounds[label + 1]])
        stride = -(-within.size // MOST_ROWS)
        rows = np.arange(within.size - 1, -1, -stride)[::-1]
        time.append((rows + 1) * BIN_H - offset_h[label])
        area.append(within[rows] * 1e-6)
        outlet.append(np.full(rows.size, i, np.int64))
    if not outlet:
        return {"outlet": np.empty(0, np.int64), "travel_time_h": np.empty(0), "area_km2": np.empty(0)}
    return {"outlet": np.concatenate(outlet), "travel_time_h": np.concatenate(time), "area_km2": np.concatenate(area)}
