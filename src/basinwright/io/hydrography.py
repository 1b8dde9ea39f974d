"""Mapped hydrography: layers of lines and polygons, and a raster of directions, as arrays on the grid."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.errors import InputRejected, Problem
from basinwright.io.rasters import Location, cells_of, crs_label, horizontal_crs, on_lattice, read_header, short_name
from basinwright.io.vectors import as_text, layer_of_kind

if TYPE_CHECKING:
    import geopandas as gpd
    from numpy.typing import NDArray

    from basinwright.grid import Grid


@dataclass(frozen=True, eq=False)
class LineTable:
    """The lines of a layer, in cells of a grid.

    Attributes
    ----------
    x, y : float64 arrays, shape (vertices,)
        Columns to the right and rows down from the grid's upper left corner.
    bounds : int64 array, shape (lines + 1,)
        Where the vertices of each line begin; the last is where they end. A feature of several lines is several.
    values : float64 array, shape (lines,)
        The column that was asked for, NaN where empty or none was.
    record : dict
        How the layer was brought onto the grid, for the manifest.
    """

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    bounds: NDArray[np.int64]
    values: NDArray[np.float64]
    record: dict[str, Any]


def read_lines(
    path: Location, grid: Grid, column: str | None = None, limits: tuple[float, float] = (-np.inf, np.inf)
) -> LineTable:
    """Read the lines of a layer of any CRS; edges run straight between vertices in the grid's CRS.

    Parameters
    ----------
    path : Path or str
        The file.
    grid : Grid
    column : str, optional
        A column of numbers that must be there.
    limits : (low, high)
        Between which its numbers must lie.

    Returns
    -------
    LineTable

    Raises
    ------
    InputRejected
        With every problem: file, layer, CRS, column, its numbers, geometry, a layer wholly off the grid.
    """
    import shapely

    frame, record = _read(path, grid, column, "lines")
    numbers, problems = _numbers(str(path), frame, column, limits)
    parts, feature = shapely.get_parts(np.asarray(frame.geometry), return_index=True)
    keep = (shapely.get_type_id(parts) == shapely.GeometryType.LINESTRING) & ~shapely.is_empty(parts)
    parts, feature = parts[keep], feature[keep]
    if parts.size == 0:
        problems.append(Problem(str(path), "geometry", "has no lines", "give a layer of lines"))
    if problems:
        raise InputRejected(problems)
    xy, line = shapely.get_coordinates(parts, return_index=True)
    inverse = ~grid.transform
    x = inverse.a * xy[:, 0] + inverse.c
    y = inverse.e * xy[:, 1] + inverse.f
    bounds = np.searchsorted(line, np.arange(parts.size + 1)).astype(np.int64)
    return LineTable(x, y, bounds, numbers[feature], record)


def read_sinks(path: Location, grid: Grid) -> tuple[NDArray[np.bool_], dict[str, Any]]:
    """Lay polygons that keep their water on the grid: cells whose centre lies in one.

    A polygon too small to hold a centre takes the cell of a point inside it.

    Returns
    -------
    sinks : bool array, shape (nrows, ncols)
    record : dict
        How the layer was brought onto the grid, for the manifest.

    Raises
    ------
    InputRejected
        With every problem of the layer.
    """
    import shapely
    from rasterio.features import rasterize

    frame, record = _read(path, grid, None, "polygons")
    parts = shapely.get_parts(np.asarray(frame.geometry))
    keep = (shapely.get_type_id(parts) == shapely.GeometryType.POLYGON) & ~shapely.is_empty(parts)
    parts = parts[keep]
    if parts.size == 0:
        raise InputRejected.one(str(path), "geometry", "has no polygons", "give a layer of polygons")
    sinks = np.zeros(grid.shape, np.uint8)
    rasterize(parts, out=sinks, transform=grid.transform)
    inside = shapely.point_on_surface(parts)
    rows, cols = grid.rowcol(shapely.get_x(inside), shapely.get_y(inside))
    small = (rows >= 0) & (cols >= 0) & (shapely.area(parts) < 4.0 * abs(grid.transform.a * grid.transform.e))
    for part, row, col in zip(parts[small], rows[small], cols[small], strict=True):
        alone = np.zeros((5, 5), np.uint8)  # around the point: a polygon without a centre is looked for here
        rasterize([part], out=alone, transform=grid.transform * grid.transform.translation(col - 2, row - 2))
        sinks[row, col] |= not alone.any()
    return sinks.astype(bool), record


def check_layer(path: Location, kind: str, column: str | None = None) -> list[Problem]:
    """List what the header of a layer of lines or polygons shows to be wrong."""
    return layer_of_kind(path, column, kind=kind)[1]


def _off_grid(path: Location, layer: str, grid: Grid) -> list[Problem]:
    """Say whether a layer lies wholly off the grid."""
    import pyogrio
    from pyproj import CRS, Transformer
    from pyproj.exceptions import ProjError

    about = pyogrio.read_info(path, layer=layer, force_total_bounds=True)
    bounds = about["total_bounds"]
    try:
        to_grid = Transformer.from_crs(
            horizontal_crs(CRS.from_user_input(about["crs"]).to_wkt()), grid.crs, always_xy=True
        )
        west, south, east, north = to_grid.transform_bounds(*bounds)
    except (ProjError, TypeError, ValueError) as error:
        fix = "give the layer in a CRS that can be transformed to the terrain's"
        return [Problem(str(path), "crs", f"no way from it to the terrain's ({error})", fix)]
    left, bottom, right, top = grid.bounds
    if west < right and east > left and south < top and north > bottom:
        return []
    return [Problem(str(path), "geometry", "lies wholly off the terrain", "check the coordinate systems of both")]


def _read(
    path: Location, grid: Grid, column: str | None, kind: str
) -> tuple[gpd.GeoDataFrame, dict[str, Any]]:  # fmt: skip
    """Read a layer in the grid's CRS."""
    import pyogrio

    name, problems = layer_of_kind(path, column, kind=kind)
    problems = problems or _off_grid(path, name, grid)
    if problems:
        raise InputRejected(problems)
    frame = pyogrio.read_dataframe(path, layer=name, columns=[] if column is None else [column])
    own_crs = horizontal_crs(frame.crs.to_wkt())
    count = len(frame)
    frame = frame.set_crs(own_crs, allow_override=True).to_crs(grid.crs)
    frame = frame[frame.geometry.notna()].reset_index(drop=True)
    method = {"lines": "chains of cells along the lines", "polygons": "cell centre in polygon"}[kind]
    record = {
        "path": short_name(path),
        "layer": name,
        "crs": crs_label(own_crs),
        "features": count,
        "method": f"{method}, in {crs_label(grid.crs)}",
    }
    return frame, record


def _numbers(
    file: str, frame: gpd.GeoDataFrame, column: str | None, limits: tuple[float, float]
) -> tuple[NDArray[np.float64], list[Problem]]:
    """Return a column as numbers, NaN where empty, and what is wrong with it."""
    values = np.full(len(frame), np.nan)
    if column is None:
        return values, []
    wrong = []
    given = frame[column].astype(object).where(frame[column].notna(), None)
    for row, text in enumerate(map(as_text, given)):
        if not text.strip():
            continue
        try:
            values[row] = float(text)
        except ValueError:
            values[row] = np.inf
        if not limits[0] <= values[row] <= limits[1]:
            wrong.append(text)
    if not wrong:
        return values, []
    what = f"{wrong[0]!r} is not a number from {limits[0]:g} to {limits[1]:g} ({len(wrong)} such rows)"
    return values, [Problem(file, f"column {column}", what, "correct it, or leave it empty")]


def check_same_cells(path: Location, grid: Grid) -> list[Problem]:
    """List how a raster differs from the grid: it must have the same cells."""
    header, problems = read_header(path)
    if header is None:
        return problems
    other, own = header.transform, grid.transform
    differs = []
    if not header.crs.equals(grid.crs, ignore_axis_order=True):
        differs.append(f"its CRS is {crs_label(header.crs)}, not {crs_label(grid.crs)}")
    if (header.nrows, header.ncols) != grid.shape:
        differs.append(f"it has {header.nrows} x {header.ncols} cells, not {grid.nrows} x {grid.ncols}")
    if not on_lattice(other, own):
        differs.append("its cells are of another size or lie between the terrain's")
    elif max(abs((other.c - own.c) / own.a), abs((other.f - own.f) / own.e)) > 0.5:
        differs.append("it begins at another corner")
    fix = "give it on the cells of terrain.dem, with terrain.crs the terrain's own"
    return [Problem(str(path), "grid", what, fix) for what in differs]


def read_cells(path: Location, grid: Grid) -> np.ma.MaskedArray[Any, Any]:
    """Read a raster that has the grid's own cells, voids masked, north up.

    Raises
    ------
    InputRejected
        Where its cells are others.
    """
    problems = check_same_cells(path, grid)
    header, _ = read_header(path)
    if problems or header is None:
        raise InputRejected(problems)
    with cells_of(path) as source:
        cells = source.read(1, masked=True)
    return cells[::-1] if header.south_up else cells
