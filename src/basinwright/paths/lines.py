"""Flow paths, segments and stream reaches as lines in map coordinates."""

from __future__ import annotations

import numpy as np

from basinwright.grid import Grid
from basinwright.paths.tracing import Paths
from basinwright.terrain import Terrain


def path_lines(grid: Grid, terrain: Terrain, paths: Paths) -> np.ndarray:
    """Flow paths as lines through the centres of their cells.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    paths : Paths

    Returns
    -------
    object array of shapely LineString, shape (n,)
        None where the path has fewer than two cells.
    """
    x, y = grid.xy(*terrain.rows_cols(paths.cells))
    return _lines(paths.bounds, np.column_stack([x, y]))


def segment_lines(grid: Grid, terrain: Terrain, paths: Paths, segments: dict[str, np.ndarray]) -> np.ndarray:
    """Segments as the parts of their paths between two distances from the divide.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    paths : Paths
    segments : dict of arrays, shape (segments,)
        ``outlet``, ``from_m`` and ``to_m``, as `cut_segments` gives them.

    Returns
    -------
    object array of shapely LineString, shape (segments,)
    """
    from basinwright.kernels.paths import cut_lines

    x, y = grid.xy(*terrain.rows_cols(paths.cells))
    bounds, xy = cut_lines(
        paths.bounds, paths.distance_m, x, y, segments["outlet"].astype(np.int64), segments["from_m"],
        segments["to_m"],
    )  # fmt: skip
    return _lines(bounds, xy)


def stream_reaches(grid: Grid, terrain: Terrain, stream_area_km2: float) -> dict[str, np.ndarray]:
    """The stream network of the whole raster, reach by reach.

    A reach runs from a channel head or a junction to the next junction or to where water leaves the raster;
    the junction's cell ends it and begins the next one.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    stream_area_km2 : float [km2]
        Contributing area at which channels begin.

    Returns
    -------
    dict of arrays, shape (reaches,)
        ``geometry`` (shapely LineString, downstream), ``length_m``, ``area_km2`` (contributing area at the
        lower end, just above the junction); in the order of the reaches' upper cells, row by row.
    """
    from basinwright.kernels import paths as kernel

    bounds, cells, lower_m2 = kernel.trace_reaches(
        terrain.directions, terrain.area_m2, terrain.nrows, terrain.ncols, round(stream_area_km2 * 1e6, 6)
    )
    away_m, _, _ = kernel.profile(
        bounds, cells, terrain.directions, terrain.ncols, terrain.step_um, terrain.conditioned_m, terrain.area_m2
    )
    x, y = grid.xy(*terrain.rows_cols(cells))
    return {
        "geometry": _lines(bounds, np.column_stack([x, y])),
        "length_m": away_m[bounds[1:] - 1],
        "area_km2": lower_m2 / 1e6,
    }


def _lines(bounds: np.ndarray, xy: np.ndarray) -> np.ndarray:
    """Lines from vertices in compressed rows; None where there are fewer than two."""
    import shapely

    counts = np.diff(bounds)
    drawn = counts >= 2
    lines = np.full(counts.size, None, object)
    keep = np.repeat(drawn, counts)
    lines[drawn] = shapely.linestrings(xy[keep], indices=np.repeat(np.arange(drawn.sum()), counts[drawn]))
    return lines
