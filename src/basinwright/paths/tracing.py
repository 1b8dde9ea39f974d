"""The longest flow path of every outlet, and the measures of its profile."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from basinwright.basins import Basins
from basinwright.grid import Grid
from basinwright.kernels import NO_CELL
from basinwright.terrain import Terrain

DEEP_FILL_M = 2.0
"""Conditioning that moved the terrain by more than this under the path is a doubt (DEEP_FILL)."""


LengthCorrection = Literal["none", "straight"]
"""Whether the staircase of the grid's steps is taken out of lengths; see `along`."""


@dataclass(frozen=True, eq=False)
class Paths:
    """Longest flow paths, from the divide to the outlet, one per outlet.

    Path i lies in ``[bounds[i], bounds[i + 1])`` of every other array; it is empty where the outlet failed.

    Attributes
    ----------
    bounds : int64 array, shape (n + 1,)
    cells : int32 array, shape (path cells,)
        Padded indices.
    distance_m : float64 array, shape (path cells,) [m]
        From the divide, along the path, corrected where that was asked for.
    raw_m : float64 array, shape (path cells,) [m]
        The same along the steps from cell to cell.
    elevation_m : float64 array, shape (path cells,) [m]
        Conditioned terrain; never rising.
    area_km2 : float64 array, shape (path cells,) [km2]
        Contributing area.
    """

    bounds: np.ndarray
    cells: np.ndarray
    distance_m: np.ndarray
    raw_m: np.ndarray
    elevation_m: np.ndarray
    area_km2: np.ndarray

    @property
    def n(self) -> int:
        """Number of paths."""
        return int(self.bounds.size - 1)

    @property
    def length_m(self) -> np.ndarray:
        """Length of every path, float64, shape (n,) [m]; NaN where it is empty."""
        return self.at_ends(self.distance_m)[1]

    def at_ends(self, values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Values at the divide and at the outlet of every path, each of shape (n,); NaN where it is empty."""
        first, last = np.full(self.n, np.nan), np.full(self.n, np.nan)
        some = np.diff(self.bounds) > 0
        first[some] = values[self.bounds[:-1][some]]
        last[some] = values[self.bounds[1:][some] - 1]
        return first, last


def along(
    terrain: Terrain, bounds: np.ndarray, cells: np.ndarray, length_correction: LengthCorrection = "none"
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Distance, elevation and contributing area along paths.

    Steps to eight neighbours overstate the length of a straight line by up to 8.2 %, 1 / cos(22.5 degrees), depending
    on its direction. With the correction "straight" a path is cut into the longest pieces whose cells could be those
    of one straight line, and each piece is as long as that line (Debled-Rennesson & Reveillès 1995; the estimate
    converges to the true length as cells get smaller, Coeurjolly & Klette 2004). Pieces in one of the eight directions
    and bends keep their length: only what cannot be told from a straight line is made one.

    Parameters
    ----------
    terrain : Terrain
    bounds : int64 array, shape (n + 1,)
    cells : int32 array, shape (path cells,)
    length_correction : {"none", "straight"}

    Returns
    -------
    distance_m, raw_m, elevation_m, area_km2 : float64 arrays, shape (path cells,)
        As in `Paths`. The elevation is the profile nearest to the conditioned terrain that never rises: that terrain
        itself where it was conditioned for these directions.

    References
    ----------
    Ayer, M., Brunk, H. D., Ewing, G. M., Reid, W. T., & Silverman, E. (1955). An empirical distribution function for
    sampling with incomplete information. Annals of Mathematical Statistics, 26(4), 641-647.

    Coeurjolly, D., & Klette, R. (2004). A comparative evaluation of length estimators of digital curves. IEEE
    Transactions on Pattern Analysis and Machine Intelligence, 26(2), 252-258.

    Debled-Rennesson, I., & Reveillès, J.-P. (1995). A linear algorithm for segmentation of digital curves.
    International Journal of Pattern Recognition and Artificial Intelligence, 9(4), 635-662.
    """
    from basinwright.kernels import paths as kernel
    from basinwright.kernels import straight

    raw_m, elevation_m, area_km2 = kernel.profile(
        bounds, cells, terrain.directions, terrain.ncols, terrain.step_um, terrain.conditioned_m, terrain.area_m2
    )
    distance_m = raw_m
    if length_correction == "straight":
        distance_m = straight.straight_distances(bounds, cells, terrain.directions, terrain.ncols, terrain.step_um)
    return distance_m, raw_m, straight.falling(bounds, raw_m, elevation_m), area_km2


def trace(
    terrain: Terrain,
    basins: Basins,
    length_correction: LengthCorrection = "none",
    farthest_cell: np.ndarray | None = None,
) -> Paths:
    """Trace the longest flow path of every outlet.

    Parameters
    ----------
    terrain : Terrain
    basins : Basins
    length_correction : {"none", "straight"}
        Of the distances along it (`along`); which path is the longest is decided without.
    farthest_cell : int32 array, shape (labels,), optional
        Padded indices of the cells where the paths start, for each whole basin, -1 for no path; the cells farthest in
        length where not given.

    Returns
    -------
    Paths
    """
    from basinwright.kernels.trace import trace_paths

    starts = basins.by_outlet(basins.farthest_cell if farthest_cell is None else farthest_cell, failed=NO_CELL)
    ends = basins.by_outlet(basins.label_cell, failed=NO_CELL)
    bounds, cells = trace_paths(terrain.directions, terrain.ncols, starts, ends)
    return Paths(bounds, cells, *along(terrain, bounds, cells, length_correction))


def profile_measures(
    grid: Grid,
    terrain: Terrain,
    elevation_m: np.ndarray,
    paths: Paths,
    centroid_x: np.ndarray,
    centroid_y: np.ndarray,
) -> dict[str, np.ndarray]:
    """Slopes of the longest flow paths, the length to the point opposite the centroid, and the fill under them.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    elevation_m : float array, shape (nrows, ncols) [m]
        Unconditioned.
    paths : Paths
    centroid_x, centroid_y : float64 arrays, shape (n,)
        Centroids of the whole basins in map coordinates.

    Returns
    -------
    dict of arrays, shape (n,)
        ``path_length_m``; ``path_length_raw_m``, before correction; ``centroid_length_m``, along the path from the
        outlet to the point of the path that is nearest to the centroid; ``path_slope_pct``, fall over
        length; ``path_slope_1085_pct``, between 10 and 85 % of the length from the outlet, on the profile interpolated
        between cell centres; ``deepest_fill_m`` and ``deepest_cut_m``, by which conditioning raised and cut the terrain
        under the path, outlet included. NaN where the path is empty, slopes also where it is a single cell.
    """
    from basinwright.kernels import paths as kernel

    bounds, distance = paths.bounds, paths.distance_m
    length = paths.length_m
    top, bottom = paths.at_ends(paths.elevation_m)
    upper = kernel.interpolate(bounds, distance, paths.elevation_m, 0.15 * length)
    lower = kernel.interpolate(bounds, distance, paths.elevation_m, 0.90 * length)
    with np.errstate(invalid="ignore", divide="ignore"):
        slope_pct = 100.0 * (top - bottom) / length
        slope_1085_pct = 100.0 * (upper - lower) / (0.75 * length)

    # A plane with the cell size at the centroid's parallel is true enough to say which point is nearest.
    row = (centroid_y - grid.transform.f) / grid.transform.e - 0.5
    col = (centroid_x - grid.transform.c) / grid.transform.a - 0.5
    parallel = np.clip(np.nan_to_num(row).astype(np.int64), 0, grid.nrows - 1)
    nearest = kernel.nearest_on_path(
        bounds, paths.cells, terrain.ncols, distance, grid.dx_m[parallel], grid.dy_m[parallel], row, col
    )

    rows, cols = terrain.rows_cols(paths.cells)
    raised = paths.elevation_m - elevation_m[rows, cols]
    deepest_fill, deepest_cut = np.full(paths.n, np.nan), np.full(paths.n, np.nan)
    some = np.diff(bounds) > 0
    if some.any():
        deepest_fill[some] = np.maximum.reduceat(np.maximum(raised, 0.0), bounds[:-1][some])
        deepest_cut[some] = np.maximum.reduceat(np.maximum(-raised, 0.0), bounds[:-1][some])
    return {
        "path_length_m": length,
        "path_length_raw_m": paths.at_ends(paths.raw_m)[1],
        "centroid_length_m": length - nearest,
        "path_slope_pct": slope_pct,
        "path_slope_1085_pct": slope_1085_pct,
        "deepest_fill_m": deepest_fill,
        "deepest_cut_m": deepest_cut,
    }
