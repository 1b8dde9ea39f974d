"""Basins as polygons, along the edges of their cells."""

from __future__ import annotations

import numpy as np

from basinwright.basins.delineation import Basins
from basinwright.grid import Grid
from basinwright.terrain import Terrain


def subbasin_polygons(grid: Grid, terrain: Terrain, basins: Basins) -> np.ndarray:
    """Polygon of every sub-basin.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    basins : Basins

    Returns
    -------
    object array of shapely Polygon or MultiPolygon, shape (labels,)
        In map coordinates, valid, in the order of the labels. Cells that touch at a corner only are separate
        parts, so that the area is exactly that of the cells.
    """
    labels = np.arange(basins.n_labels, dtype=np.int32)
    return _polygons(grid, terrain, basins.label, labels, labels)


def whole_basin_polygons(grid: Grid, terrain: Terrain, basins: Basins) -> np.ndarray:
    """Polygon of every whole basin: its sub-basin with those of all outlets upstream.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    basins : Basins

    Returns
    -------
    object array of shapely Polygon or MultiPolygon, shape (labels,)
        As `subbasin_polygons`. The vertices of nested basins add up: thousands of them along one river are large.
    """
    upstream = np.zeros(basins.n_labels, np.int32)
    for label in basins.upstream_first:
        parent = basins.parent[label]
        if parent >= 0:
            upstream[parent] += upstream[label] + 1
    # Numbered so that the labels upstream of one follow it: its whole basin is then an interval of numbers.
    number = np.zeros(basins.n_labels, np.int32)
    following = np.zeros(basins.n_labels + 1, np.int32)  # next free number below each label; last: of the roots
    for label in basins.upstream_first[::-1]:
        parent = basins.parent[label]  # -1 picks the last
        number[label] = following[parent]
        following[parent] += upstream[label] + 1
        following[label] = number[label] + 1
    numbered = np.append(number, np.int32(-1))[basins.label]
    return _polygons(grid, terrain, numbered, number, number + upstream)


def _polygons(grid: Grid, terrain: Terrain, number: np.ndarray, low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """Polygons of the regions whose cells have a number from `low` to `high`."""
    import shapely

    from basinwright.kernels.outlines import trace_rings

    stride = terrain.ncols + 2
    edges = stride + np.flatnonzero((number[stride:] != number[:-stride]) & (number[stride:] >= 0))
    edges = edges[np.argsort(number[edges], kind="stable")].astype(np.int32)
    edge_bounds = np.searchsorted(number[edges], np.arange(low.size + 1))
    region, shell_of, bounds, corners = trace_rings(number, terrain.ncols, low, high, edges, edge_bounds)
    x, y = grid.xy(corners[:, 0] - 0.5, corners[:, 1] - 0.5)
    owner = np.repeat(np.arange(region.size), np.diff(bounds))
    rings = np.asarray(shapely.linearrings(np.column_stack([x, y]), indices=owner))
    is_shell = shell_of == np.arange(region.size)
    part_of_shell = np.cumsum(is_shell) - 1
    parts = np.asarray(shapely.polygons(rings[is_shell]))
    holes = np.flatnonzero(~is_shell)
    holes = holes[np.argsort(shell_of[holes], kind="stable")]
    pierced, first = np.unique(shell_of[holes], return_index=True)
    for shell, inside in zip(pierced, np.split(holes, first[1:]), strict=False):
        parts[part_of_shell[shell]] = shapely.polygons(rings[shell], rings[inside])
    polygons = np.asarray(shapely.multipolygons(parts, indices=region[is_shell]))
    single = shapely.get_num_geometries(polygons) == 1
    polygons[single] = shapely.get_geometry(polygons[single], 0)
    return np.asarray(shapely.normalize(polygons))  # where the walk began depends on the other outlets
