"""Flow paths, segments and stream reaches as lines in map coordinates."""

from __future__ import annotations

import numpy as np

from basinwright.grid import Grid
from basinwright.paths.tracing import Paths
from basinwright.terrain import Terrain
from basinwright.terrain.network import channel_reaches


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


def stream_reaches(
    grid: Grid, terrain: Terrain, stream_area_km2: float, channels: np.ndarray | None = None
) -> dict[str, np.ndarray]:
    """The stream network of the whole raster, reach by reach.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    stream_area_km2 : float [km2]
        Contributing area at which channels begin.
    channels : bool array, shape (cells,), optional
        The channels themselves; see `basinwright.terrain.network.channel_test`.

    Returns
    -------
    dict of arrays, shape (reaches,)
        ``geometry`` (shapely LineString, downstream), ``reach`` (1, 2, ...), ``to_reach`` (0 for none),
        ``strahler_order``, ``length_m``, ``drop_m``, ``top_area_km2``, ``area_km2``: see
        `basinwright.terrain.network.Reaches`.
    """
    reaches = channel_reaches(terrain, stream_area_km2, channels)
    x, y = grid.xy(*terrain.rows_cols(reaches.cells))
    return {
        "geometry": _lines(reaches.bounds, np.column_stack([x, y])),
        "reach": np.arange(1, reaches.strahler.size + 1),
        "to_reach": reaches.to_reach.astype(np.int64) + 1,
        "strahler_order": reaches.strahler.astype(np.int64),
        "length_m": reaches.length_m,
        "drop_m": reaches.drop_m,
        "top_area_km2": reaches.top_area_km2,
        "area_km2": reaches.area_km2,
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
