"""Snapping: from the points of the outlet layer to the cells that their basins drain through."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from basinwright.grid import Grid
from basinwright.kernels import NO_CELL
from basinwright.terrain import Terrain
from basinwright.terrain.network import channel_test

AREA_TOLERANCE = 0.10
"""Largest relative difference from the expected area; common practice."""
FAR_SHARE = 0.5
"""A point moved over this share of the search distance is doubtful."""
AMBIGUOUS_RATIO = 2.0
"""Another flow line is a doubt where its area is over this many times larger or smaller."""


@dataclass(frozen=True, eq=False)
class Snapped:
    """Outlets on their cells, one entry per outlet in the order of their layer.

    Attributes
    ----------
    cell : int32 array, shape (n,)
        Padded index of the outlet's cell; -1 where the outlet failed.
    x, y : float64 arrays, shape (n,)
        Centre of that cell in map coordinates; NaN where the outlet failed.
    snap_m : float64 array, shape (n,) [m]
        Distance from the point to that centre; 0 where the point lies in the cell, NaN where it failed.
    failed : object array of str, shape (n,)
        Why the outlet failed; empty where it did not.
    expected_met : bool array, shape (n,)
        The cell was found by its expected area.
    far : bool array, shape (n,)
        The point was moved over half of the search distance (SNAP_FAR).
    ambiguous : bool array, shape (n,)
        Another flow line with an area over 2 times different passes within the search distance
        (SNAP_AMBIGUOUS), whether or not the expected area was met.
    within_m : float [m]
        The search distance used.
    """

    cell: np.ndarray
    x: np.ndarray
    y: np.ndarray
    snap_m: np.ndarray
    failed: np.ndarray
    expected_met: np.ndarray
    far: np.ndarray
    ambiguous: np.ndarray
    within_m: float


def search_distance_m(grid: Grid) -> float:
    """Search distance by default: 3 cells or 30 m, whichever is more [m]."""
    return max(3.0 * grid.cell_size_m, 30.0)


def snap(
    grid: Grid,
    terrain: Terrain,
    x: ArrayLike,
    y: ArrayLike,
    *,
    stream_area_km2: float,
    channels: np.ndarray | None = None,
    within_m: float | None = None,
    expected_area_km2: ArrayLike | None = None,
) -> Snapped:
    """Move outlets onto their flow lines.

    With an expected area: to the nearest cell within the search distance whose contributing area is within 10 %
    of it. Without, or where there is none: down the point's own flow line to the first channel cell, as long
    as the line stays within the search distance of the point; else the outlet stays on the point's own cell.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
        Routed terrain on that grid.
    x, y : array-like, shape (n,)
        Points in the grid's map coordinates.
    stream_area_km2 : float [km2]
        Contributing area at which channels begin.
    channels : bool array, shape (cells,), optional
        The channels themselves; see `basinwright.terrain.network.channel_test`.
    within_m : float, optional [m]
        Search distance, in a straight line from the point to the centre of a cell; default
        `search_distance_m`.
    expected_area_km2 : array-like, shape (n,), optional [km2]
        NaN where none is expected.

    Returns
    -------
    Snapped

    Notes
    -----
    A flow line is told by its channel cells. An outlet's own line is its main stem, down from its cell and up
    over the largest donor at each step; any other channel cell within the search distance belongs to another line,
    a tributary that joins there included.
    """
    from basinwright.kernels import snapping

    within = search_distance_m(grid) if within_m is None else float(within_m)
    px = (np.atleast_1d(np.asarray(x, np.float64)) - grid.transform.c) / grid.transform.a
    py = (np.atleast_1d(np.asarray(y, np.float64)) - grid.transform.f) / grid.transform.e
    n = px.size
    expected_m2 = np.full(n, np.nan)
    if expected_area_km2 is not None:
        expected_m2[:] = np.asarray(expected_area_km2, np.float64) * 1e6
    channel_area_m2, stream_m2 = channel_test(terrain, stream_area_km2, channels)

    inside = (px >= 0) & (px < grid.ncols) & (py >= 0) & (py < grid.nrows)
    own = np.full(n, NO_CELL, np.int32)
    own[inside] = terrain.cells_at(np.floor(py[inside]), np.floor(px[inside]))
    void = inside & (terrain.area_m2[own] == 0)
    own[void] = NO_CELL
    failed = np.full(n, "", object)
    failed[~inside] = "the point lies outside the terrain: check its coordinates and CRS, or extend the terrain"
    failed[void] = "the point lies in a void of the terrain: move it, or fill the void"

    sizes = (terrain.ncols, grid.dx_m, grid.dy_m)
    lines = (terrain.directions, channel_area_m2)
    sought = np.where(own >= 0, expected_m2, np.nan)
    cell = snapping.nearest_with_area(py, px, sought, AREA_TOLERANCE, within, *sizes, terrain.area_m2)
    expected_met = cell >= 0
    walk_from = np.where(expected_met, np.int32(NO_CELL), own)
    channel = snapping.first_channel_below(py, px, walk_from, stream_m2, within, *sizes, *lines)
    cell = np.where(expected_met, cell, np.where(channel >= 0, channel, own))

    snap_m = snapping.cells_away_m(py, px, cell, *sizes)
    ambiguous = snapping.other_line_near(py, px, cell, AMBIGUOUS_RATIO, stream_m2, within, *sizes, *lines)
    centre_x, centre_y = grid.xy(*terrain.rows_cols(cell))
    return Snapped(
        cell=cell,
        x=np.where(cell >= 0, centre_x, np.nan),
        y=np.where(cell >= 0, centre_y, np.nan),
        snap_m=snap_m,
        failed=failed,
        expected_met=expected_met,
        far=np.nan_to_num(snap_m) > FAR_SHARE * within,
        ambiguous=ambiguous,
        within_m=within,
    )
