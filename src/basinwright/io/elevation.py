"""The terrain: one raster or the tiles of a mosaic, brought to metres on one north-up grid.

What the headers tell is a `TerrainPlan` (`plan_terrain`), enough to check a project; `open_terrain` then reads the
cells. Terrain stays on its native cells, geographic or projected, with one exception: a projected CRS whose areas
are off by over 0.5 % is resampled to the UTM zone of its centre.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from affine import Affine

from basinwright.errors import InputRejected, Problem
from basinwright.grid import Grid
from basinwright.io.rasters import (
    BLOCK_CELLS,
    WARP_TOLERANCE,
    Header,
    Location,
    cells_of,
    crs_label,
    horizontal_crs,
    on_lattice,
    read_header,
    short_name,
)
from basinwright.progress import tell
from basinwright.terrain.workspace import IN_MEMORY, Workspace
from basinwright.units import M_PER_FT

if TYPE_CHECKING:
    from numpy.typing import NDArray
    from pyproj import CRS

VerticalUnit = Literal["m", "ft", "us-ft"]

METRES: dict[VerticalUnit, float] = {"m": 1.0, "ft": M_PER_FT, "us-ft": 1200.0 / 3937.0}
"""Metres in each vertical unit. The US survey foot is exactly 1200/3937 m (NIST SP 811, 2008, appendix B.6)."""

AREA_TOLERANCE = 0.005
"""How far a projected CRS may be off in area before it is resampled."""

# How rasters spell their units: GDAL's names, those of WKT and of the EPSG data set, and common abbreviations.
_SPELLINGS: dict[str, VerticalUnit] = {
    **dict.fromkeys(("m", "metre", "metres", "meter", "meters"), "m"),
    **dict.fromkeys(("ft", "foot", "feet", "international foot", "foot (international)"), "ft"),
    **dict.fromkeys(
        ("us-ft", "ftus", "ft-us", "us_ft", "us ft", "us foot", "us survey foot", "us survey feet", "foot_us",
         "survey foot", "us_survey_foot", "foot (us survey)", "sft"), "us-ft"),
}  # fmt: skip

# No land lies lower or higher, and these exact values stand for "none" in files that forget to declare it.
_LOWEST_M, _HIGHEST_M = -12_000.0, 9_000.0
_UNDECLARED_VOIDS = (-9999.0, -32768.0, -32767.0)


@dataclass(frozen=True)
class TerrainPlan:
    """What the headers of the terrain tell: everything but its cells.

    Parameters
    ----------
    headers : tuple of Header
        The tiles, in the order given.
    native : Grid
        The cells of the whole mosaic as they are in the files.
    grid : Grid
        The working grid: `native`, or the one it is resampled to.
    vertical_unit : {"m", "ft", "us-ft"}
        The unit of the elevations in the files.
    unit_assumed : bool
        Whether nothing declared that unit.
    reason : str
        Why the terrain is resampled; empty where it is not.
    """

    headers: tuple[Header, ...]
    native: Grid
    grid: Grid
    vertical_unit: VerticalUnit
    unit_assumed: bool
    reason: str

    @property
    def alignment(self) -> list[dict[str, Any]]:
        """How each tile was brought onto the grid, as plain values for the manifest."""
        method = "native"
        if self.reason:
            method = f"bilinear, to {crs_label(self.grid.crs)}: {self.reason}"
        unit = f"{self.vertical_unit} (assumed)" if self.unit_assumed else self.vertical_unit
        return [{**header.record(method), "vertical_unit": unit} for header in self.headers]


@dataclass(frozen=True)
class TerrainInput:
    """The terrain as read.

    Parameters
    ----------
    elevation_m : ndarray, shape (nrows, ncols)
        Elevation [m], float32 or float64 as the files need, NaN in voids.
    plan : TerrainPlan
        Grid, unit and alignment.
    damaged : tuple of Problem
        Tiles of a mosaic whose cells could not all be read: what could not be is void.
    """

    elevation_m: NDArray[np.floating[Any]]
    plan: TerrainPlan
    damaged: tuple[Problem, ...] = ()

    @property
    def grid(self) -> Grid:
        """The working grid."""
        return self.plan.grid


def plan_terrain(
    paths: Sequence[Location], crs: str = "auto", vertical_unit: VerticalUnit | None = None
) -> tuple[TerrainPlan | None, list[Problem]]:
    """Read the headers of the terrain and settle grid and unit; no cell is read.

    Parameters
    ----------
    paths : sequence of Path or str
        One raster, or the tiles of one mosaic.
    crs : str
        ``auto``, or a CRS to work in.
    vertical_unit : {"m", "ft", "us-ft"}, optional
        By default the unit that the files declare, else metres (assumed).

    Returns
    -------
    plan : TerrainPlan or None
        None where there is a problem.
    problems : list of Problem
        All of them.
    """
    headers, problems = [], []
    for path in paths:
        header, found = read_header(path)
        problems += found
        if header is not None:
            headers.append(header)
    target, found = _read_crs(crs)
    problems += found
    problems += _mosaic_problems(headers)
    unit, assumed, found = _vertical_unit(headers, vertical_unit)
    problems += found
    if problems or not headers:
        return None, problems
    native = _union(headers)
    grid, reason, problems = _working_grid(native, target, str(paths[0]))
    return (None, problems) if problems else (TerrainPlan(tuple(headers), native, grid, unit, assumed, reason), [])


def open_terrain(
    paths: Sequence[Location],
    crs: str = "auto",
    vertical_unit: VerticalUnit | None = None,
    space: Workspace = IN_MEMORY,
) -> TerrainInput:
    """Read the terrain (parameters as in `plan_terrain`), window by window.

    Where tiles overlap, the first listed wins wherever it has data. The elevations lie in `space`, as ``elevation_m``.
    Of a mosaic, what cannot be read of a damaged tile is void, and the rest goes on.

    Raises
    ------
    InputRejected
        With every problem of the headers, or of the cells: damaged all, all void, impossible elevations.
    """
    plan, problems = plan_terrain(paths, crs, vertical_unit)
    if plan is None:
        raise InputRejected(problems)
    make = space.temporary if plan.reason else space.result
    elevation = make("native" if plan.reason else "elevation_m", plan.native.shape, _float_type(plan.headers))
    elevation[:] = np.nan
    damaged: list[Problem] = []
    for number, header in enumerate(plan.headers, start=1):
        try:
            problems += _read_tile(header, plan, elevation)
        except InputRejected as error:
            damaged += error.problems
        if len(plan.headers) > 1:
            tell(number, len(plan.headers), "files")
    if len(damaged) == len(plan.headers):
        problems += damaged
    if not problems and not any(np.isfinite(rows).any() for rows in elevation):
        what = "every cell is void" if len(plan.headers) == 1 else "every cell of the mosaic is void"
        problems.append(Problem(str(paths[0]), "cells", what, "check the file and its nodata value"))
    if problems:
        raise InputRejected(problems)
    working = _resampled(elevation, plan, space) if plan.reason else elevation
    return TerrainInput(working, plan, tuple(damaged))


def _read_crs(text: str) -> tuple[CRS | None, list[Problem]]:
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    if text == "auto":
        return None, []
    try:
        crs = CRS.from_user_input(text)
    except CRSError:
        what = f"{text!r} is not a coordinate reference system"
        return None, [Problem("project", "terrain.crs", what, 'write a code such as "EPSG:32614", or "auto"')]
    if not (crs.is_geographic or crs.is_projected):
        what = f"{text!r} is neither geographic nor projected"
        return None, [Problem("project", "terrain.crs", what, 'write a code such as "EPSG:32614", or "auto"')]
    return horizontal_crs(crs.to_wkt()), []


def _mosaic_problems(headers: Sequence[Header]) -> list[Problem]:
    """List how tiles differ from the first one."""
    problems = []
    for header in headers[1:]:
        first, file = headers[0], str(header.path)
        if not header.crs.equals(first.crs, ignore_axis_order=True):
            what = f"its CRS ({crs_label(header.crs)}) is not that of {short_name(first.path)} ({crs_label(first.crs)})"
            problems.append(Problem(file, "crs", what, "warp all tiles of the mosaic to one CRS"))
        elif not on_lattice(header.transform, first.transform):
            what = f"its cells are not those of {short_name(first.path)}: another size, or not whole cells apart"
            problems.append(Problem(file, "georeference", what, "resample all tiles of the mosaic to one lattice"))
    return problems


def _vertical_unit(headers: Sequence[Header], given: VerticalUnit | None) -> tuple[VerticalUnit, bool, list[Problem]]:
    """Settle the vertical unit: the given one, else the declared one, else metres, assumed."""
    if given is not None:
        return given, False, []
    problems = []
    declared: dict[str, Header] = {}
    for header in headers:
        text = header.unit.strip() or _vertical_axis_unit(header.crs_wkt)
        if text and text.lower() not in _SPELLINGS:
            what = f"declares the vertical unit {text!r}, which is not known here"
            problems.append(Problem(str(header.path), "vertical unit", what, 'set terrain.vertical_unit ("m", "ft")'))
        else:
            declared.setdefault(_SPELLINGS[text.lower()] if text else "none", header)
    if len(declared) > 1:
        listed = ", ".join(f"{short_name(header.path)}: {unit}" for unit, header in declared.items())
        what = f"the tiles declare different vertical units ({listed})"
        problems.append(
            Problem(str(headers[0].path), "vertical unit", what, "set terrain.vertical_unit or convert them")
        )
    unit = next(iter(declared), "none")
    return ("m", True, problems) if unit == "none" else (_SPELLINGS[unit], False, problems)


def _vertical_axis_unit(wkt: str) -> str:
    """Return the unit of the vertical axis of a compound or three-dimensional CRS, or an empty text."""
    from pyproj import CRS

    crs = CRS.from_wkt(wkt)
    vertical = crs.sub_crs_list[-1] if crs.is_compound else crs
    axes = [axis for axis in vertical.axis_info if axis.direction.lower() == "up"]
    return axes[0].unit_name if axes else ""


def _union(headers: Sequence[Header]) -> Grid:
    """Return the grid of the whole mosaic: the lattice of the first tile, extended over all."""
    offsets = [_offset(header, headers[0].transform) for header in headers]
    top = min(row for row, _ in offsets)
    left = min(col for _, col in offsets)
    bottom = max(row + header.nrows for (row, _), header in zip(offsets, headers, strict=True))
    right = max(col + header.ncols for (_, col), header in zip(offsets, headers, strict=True))
    first = headers[0].transform
    transform = Affine(first.a, 0.0, first.c + left * first.a, 0.0, first.e, first.f + top * first.e)
    return Grid(bottom - top, right - left, transform, headers[0].crs.to_wkt())


def _offset(header: Header, transform: Affine) -> tuple[int, int]:
    """Return row and column of a tile's first cell on the lattice of a transform."""
    row = round((header.transform.f - transform.f) / transform.e)
    return row, round((header.transform.c - transform.c) / transform.a)


def _working_grid(native: Grid, target: CRS | None, file: str) -> tuple[Grid, str, list[Problem]]:
    """Return the grid to work on, why it is not the native one, and what speaks against it."""
    if target is None:
        error = area_error(native)
        if error <= AREA_TOLERANCE:
            return native, "", []
        target, reason = _utm_zone(native), f"areas in {crs_label(native.crs)} are off by {error:.1%}"
        fix = "set terrain.crs to an equal-area CRS of the region"
    else:
        reason = "terrain.crs" if not target.equals(native.crs, ignore_axis_order=True) else ""
        fix = 'choose another terrain.crs, or "auto"'
    grid = _resampled_grid(native, target) if reason else native
    error = area_error(grid)
    if error > AREA_TOLERANCE:
        what = f"areas in {crs_label(target)} would be off by {error:.1%} on this terrain"
        return grid, reason, [Problem(file, "terrain.crs", what, fix)]
    return grid, reason, []


def area_error(grid: Grid) -> float:
    """Return how far areas on a projected grid are off: the largest of |areal scale - 1| at centre and corners.

    A geographic grid takes true cell sizes row by row, so its error is zero.
    """
    from pyproj import Proj

    if grid.is_geographic:
        return 0.0
    west, south, east, north = grid.bounds
    x = np.array([0.5 * (west + east), west, west, east, east])
    y = np.array([0.5 * (south + north), south, north, south, north])
    projection = Proj(grid.crs)
    lon, lat = projection(x, y, inverse=True)
    known = np.isfinite(lon) & np.isfinite(lat)
    scale = np.asarray(projection.get_factors(lon[known], lat[known]).areal_scale)
    scale = scale[np.isfinite(scale)]
    return float(np.abs(scale - 1.0).max()) if scale.size else 0.0


def _utm_zone(grid: Grid) -> CRS:
    """Return the UTM zone (WGS 84) of the grid's centre."""
    from pyproj import CRS, Transformer

    west, south, east, north = grid.bounds
    to_degrees = Transformer.from_crs(grid.crs, "EPSG:4326", always_xy=True)
    lon, lat = to_degrees.transform(0.5 * (west + east), 0.5 * (south + north))
    zone = min(60, int((lon + 180.0) // 6.0) + 1)
    return CRS.from_epsg((32600 if lat >= 0 else 32700) + zone)


def _resampled_grid(native: Grid, target: CRS) -> Grid:
    """Return a grid of square cells in another CRS that covers the native one at its true resolution."""
    from rasterio.warp import calculate_default_transform

    wkt = target.to_wkt()
    transform, ncols, nrows = calculate_default_transform(
        native.crs_wkt, wkt, native.ncols, native.nrows, *native.bounds
    )
    return Grid(nrows, ncols, transform, wkt)


def _resampled(elevation: NDArray[np.floating[Any]], plan: TerrainPlan, space: Workspace) -> NDArray[np.floating[Any]]:
    from rasterio.enums import Resampling
    from rasterio.warp import reproject

    out = space.result("elevation_m", plan.grid.shape, elevation.dtype)
    out[:] = np.nan
    reproject(
        elevation, out, src_transform=plan.native.transform, src_crs=plan.native.crs_wkt, src_nodata=np.nan,
        dst_transform=plan.grid.transform, dst_crs=plan.grid.crs_wkt, dst_nodata=np.nan,
        resampling=Resampling.bilinear, tolerance=WARP_TOLERANCE,
    )  # fmt: skip
    return out


def _float_type(headers: Sequence[Header]) -> type[np.floating[Any]]:
    """Return float32 where it holds every value of the files, else float64."""
    exact = all(np.result_type(header.dtype, np.float32) == np.float32 for header in headers)
    return np.float32 if exact else np.float64


def _read_tile(header: Header, plan: TerrainPlan, elevation: NDArray[np.floating[Any]]) -> list[Problem]:
    """Read one tile into the mosaic wherever that is still void, in metres."""
    from rasterio.windows import Window

    top, left = _offset(header, plan.native.transform)
    factor = METRES[plan.vertical_unit]
    rows = max(1, BLOCK_CELLS // header.ncols)
    lowest, highest, undeclared = np.inf, -np.inf, False
    with cells_of(header.path) as source:
        scale, offset = source.scales[0], source.offsets[0]
        for first in range(0, header.nrows, rows):
            height = min(rows, header.nrows - first)
            start = header.nrows - first - height if header.south_up else first
            read = source.read(1, window=Window(0, start, header.ncols, height), masked=True)
            block = read.data.astype(elevation.dtype)
            block[np.ma.getmaskarray(read)] = np.nan
            block[~np.isfinite(block)] = np.nan
            undeclared |= bool(np.isin(block, _UNDECLARED_VOIDS).any())
            if (scale, offset) != (1.0, 0.0) or factor != 1.0:
                block = ((block.astype(np.float64) * scale + offset) * factor).astype(elevation.dtype)
            if header.south_up:
                block = block[::-1]
            lowest = min(lowest, np.fmin.reduce(block, axis=None, initial=np.inf))
            highest = max(highest, np.fmax.reduce(block, axis=None, initial=-np.inf))
            into = elevation[top + first : top + first + height, left : left + header.ncols]
            np.copyto(into, block, where=np.isnan(into))
            if len(plan.headers) == 1:
                tell(first + height, header.nrows, "rows")
    if undeclared or lowest < _LOWEST_M or highest > _HIGHEST_M:
        what = f"elevations run from {lowest:g} to {highest:g} m, which no land does"
        return [Problem(str(header.path), "cells", what, "declare its nodata value, and check its unit")]
    return []
