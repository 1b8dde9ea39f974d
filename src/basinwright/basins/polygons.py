"""Basins as polygons, along the edges of their cells."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from basinwright.basins.delineation import Basins
from basinwright.grid import Grid
from basinwright.terrain import Terrain


def subbasin_polygons(grid: Grid, terrain: Terrain, basins: Basins) -> np.ndarray:
    """Polygon of every sub-basin, from the label raster.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    basins : Basins

    Returns
    -------
    object array of shapely Polygon or MultiPolygon, shape (labels,)
        In map coordinates, valid, in the order of the labels. Cells that touch at a corner only are
        separate parts, so that the area is exactly that of the cells.
    """
    import shapely
    from rasterio.features import shapes

    label = np.ascontiguousarray(terrain.grid(basins.label))
    found = shapes(label, mask=label >= 0, connectivity=4, transform=grid.transform)
    parts: list[shapely.Polygon] = []
    owner: list[int] = []
    for shape, value in found:
        shell, *holes = shape["coordinates"]
        parts.append(shapely.Polygon(shell, holes))
        owner.append(int(value))
    order = np.argsort(owner, kind="stable")
    owners = np.asarray(owner, np.int64)[order]
    polygons = shapely.multipolygons(np.asarray(parts, object)[order], indices=owners)
    single = shapely.get_num_geometries(polygons) == 1
    polygons[single] = shapely.get_geometry(polygons[single], 0)
    return polygons


def whole_basin_polygons(basins: Basins, subbasins: np.ndarray, labels: Iterable[int] | None = None) -> np.ndarray:
    """Polygons of whole basins, joined up the forest of outlets.

    Parameters
    ----------
    basins : Basins
    subbasins : object array, shape (labels,)
        From `subbasin_polygons`.
    labels : iterable of int, optional
        The labels asked for; default all.

    Returns
    -------
    object array, shape (labels,)
        None where not asked for.
    """
    import shapely

    asked = np.ones(basins.n_labels, bool)
    if labels is not None:
        asked[:] = False
        asked[np.fromiter(labels, np.int64)] = True
    needed = asked.copy()
    for label in basins.upstream_first[::-1]:
        needed[label] |= basins.parent[label] >= 0 and needed[basins.parent[label]]

    whole = np.full(basins.n_labels, None, object)
    inflow: dict[int, list[shapely.Geometry]] = {}
    for label in basins.upstream_first[needed[basins.upstream_first]]:
        above = inflow.pop(int(label), [])
        joined = shapely.union_all([subbasins[label], *above]) if above else subbasins[label]
        parent = int(basins.parent[label])
        if parent >= 0 and needed[parent]:
            inflow.setdefault(parent, []).append(joined)
        if asked[label]:
            whole[label] = joined
    return whole
