"""What was measured on the terrain and the maps: cells, pixels, files; measured again where cheap."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.explaining.reading import Here
from basinwright.explaining.records import FACTORS, Get, Value
from basinwright.tables import OUTLETS, SEGMENTS

if TYPE_CHECKING:
    from affine import Affine
    from numpy.typing import NDArray

NOT_THERE = "the run's store is not there: the cells can no longer be named"
DEM = "terrain.dem"


def transform(here: Here) -> Affine:
    """Return the working grid's transform, from (column, row) to map coordinates."""
    from affine import Affine

    return Affine(*here.run.about["grid"]["transform"])


def outlet_xy(here: Here) -> tuple[float, float]:
    """Return the centre of the outlet's cell."""
    return float(here.outlet["x"]), float(here.outlet["y"])


def row_col(here: Here, x: float, y: float) -> tuple[int, int]:
    """Return the cell of the working grid that holds a point, counted from 0 at the upper left."""
    grid = transform(here)
    return int(np.floor((y - grid.f) / grid.e)), int(np.floor((x - grid.c) / grid.a))


def profile(here: Here) -> tuple[NDArray[Any], ...] | None:
    """Return rows, columns, distance from the divide [m], elevation [m] and area [km2] of the cells of the path."""
    paths = here.run.stage("paths")
    if paths is None:
        return None
    bounds = paths.array("paths.bounds")
    i = here.run.position[here.outlet_id]
    part = slice(int(bounds[i]), int(bounds[i + 1]))
    cells = paths.array("paths.cells")[part].astype(np.int64)
    width = int(here.run.about["grid"]["columns"]) + 2
    return (
        cells // width - 1,
        cells % width - 1,
        *(np.asarray(paths.array(f"paths.{name}")[part]) for name in ("distance_m", "elevation_m", "area_km2")),
    )


def centre(here: Here, row: int, col: int) -> tuple[float, float]:
    """Return the centre of a cell of the working grid in map coordinates."""
    grid = transform(here)
    return float(grid.c + (col + 0.5) * grid.a), float(grid.f + (row + 0.5) * grid.e)


def cell_words(here: Here, row: int, col: int) -> str:
    """Name a cell of the working grid."""
    x, y = centre(here, row, col)
    return f"cell at row {row}, column {col} of the working grid (x {x:.10g}, y {y:.10g})"


def pixel_words(here: Here, layer: str, x: float, y: float) -> list[str]:
    """Name the pixel of an input file under a point of the working CRS, with its value where the file is still there.

    ``layer`` is ``terrain.dem`` or a raster's option such as ``cover.raster``.
    """
    from basinwright.io.rasters import pixel_at

    wanted = _files(here, layer)
    found = []
    for path in wanted:
        pixel = pixel_at(path, here.run.about["grid"]["crs"], x, y) if path.is_file() else None
        if pixel is not None:
            row, col, value = pixel
            found.append(f"{path}: pixel at row {row}, column {col}: {value}")
    if not found:
        found = [f"{path}: no longer there, or not over this point" for path in wanted[:1]]
    return found


def _files(here: Here, layer: str) -> list[Path]:
    """Return the files of an option as the run read them: the terrain's are listed first, then the outlets'."""
    project = here.run.project
    inputs = [Path(entry["path"]) for entry in here.run.about["inputs"]]
    if layer == DEM:
        outlets = Path(project.outlets.source).name
        return list(itertools.takewhile(lambda path: path.name != outlets, inputs))
    section, _, key = layer.partition(".")
    value = getattr(getattr(project, section), key)
    return [path for path in inputs if value and path.name == Path(str(value)).name]


def outlet_places(here: Here) -> list[str]:
    """Name the outlet's cell and the pixel of the terrain under it."""
    if not here.outlet["x"]:
        return []
    x, y = outlet_xy(here)
    return [cell_words(here, *row_col(here, x, y)), *pixel_words(here, DEM, x, y)]


def supplied_places(here: Here) -> list[str]:
    """Name the outlet layer and the point as supplied."""
    point = here.run.about["supplied_points"][here.run.position[here.outlet_id]]
    where = f"x {point[0]:.10g}, y {point[1]:.10g} in the working CRS" if point else "no point"
    outlets = here.run.project.outlets
    return [f"{outlets.source}: row {here.run.position[here.outlet_id] + 1}, {where}"]


def path_places(here: Here) -> list[str]:
    """Name the first and the last cell of the longest flow path."""
    found = profile(here)
    if found is None or not found[0].size:
        return [NOT_THERE]
    rows, cols = found[0], found[1]
    return [
        f"{rows.size} cells of the working grid, followed down the flow directions",
        f"from the divide: {cell_words(here, int(rows[0]), int(cols[0]))}",
        f"to the outlet: {cell_words(here, int(rows[-1]), int(cols[-1]))}",
    ]


def at_distance(stem: str) -> Callable[[Here], Sequence[str]]:
    """Return the namer of the cell of the path at the distance of a column of segments.csv."""

    def places(here: Here) -> list[str]:
        found = profile(here)
        if found is None:
            return [NOT_THERE]
        metres = here.cell(stem, "m").value
        rows, cols, distance = found[:3]
        k = max(int(np.searchsorted(distance, metres * (1 + 1e-12), side="right")) - 1, 0)
        row, col = int(rows[k]), int(cols[k])
        x, y = centre(here, row, col)
        return [
            f"at or next above {metres:.6g} m from the divide: {cell_words(here, row, col)}",
            *pixel_words(here, DEM, x, y),
        ]

    return places


def profile_elevation(stem: str, unit: str) -> Get:
    """Return the reader of the conditioned elevation at the distance of a column, linear between cell centres."""

    def get(here: Here) -> Value:
        found = profile(here)
        metres = here.cell(stem, "m").value
        value = np.nan if found is None else float(np.interp(metres, found[2], found[3]))
        return Value(
            value / FACTORS[unit], unit, f"conditioned terrain along the path at {metres:.6g} m, between cells"
        )

    return get


def profile_at_share(share: float, unit: str = "m") -> Get:
    """Return the reader of the conditioned elevation at a share of the path's length from the divide."""

    def get(here: Here) -> Value:
        found = profile(here)
        value = np.nan if found is None else float(np.interp(share * found[2][-1], found[2], found[3]))
        return Value(value / FACTORS[unit], unit, f"conditioned terrain at {share:.0%} of the path from the divide")

    return get


def first_segment_cell(stem: str, which: int, unit: str) -> Get:
    """Return the reader of a cell of the first (0) or last (-1) segment as the run first wrote it."""

    def get(here: Here) -> Value:
        row = here.rows(SEGMENTS.name, first=True)[which]
        place = here.at(SEGMENTS.name, row, stem)
        return Value(place.number(unit), unit, f"{SEGMENTS.column(stem).meaning}, as the run first wrote it")

    return get


def first_outlet_cell(stem: str, unit: str) -> Get:
    """Return the reader of a cell of outlets.csv as the run first wrote it."""

    def get(here: Here) -> Value:
        row = here.rows(OUTLETS.name, first=True)[0]
        return Value(
            here.at(OUTLETS.name, row, stem).number(unit), unit, f"{OUTLETS.column(stem).meaning}, as first written"
        )

    return get


def contributing_area(here: Here) -> Value:
    """Read the contributing area at the outlet's cell off the run's raster [km2]."""
    from basinwright.io.rasters import pixel_at

    path = here.run.folder / "terrain" / "contributing_area.tif"
    place = cell_words(here, *row_col(here, *outlet_xy(here)))
    about = f"terrain/contributing_area.tif over 1e6 at the outlet's {place}"
    if not path.is_file():
        return Value(np.nan, "km2", "terrain/contributing_area.tif is not there")
    pixel = pixel_at(path, here.run.about["grid"]["crs"], *outlet_xy(here))
    return Value(np.nan if pixel is None else float(pixel[2]) / 1e6, "km2", about)


@dataclass(frozen=True)
class _Basin:
    """The cells of an outlet's whole basin on the working grid, with elevation before conditioning and true area."""

    rows: NDArray[np.int64]
    cols: NDArray[np.int64]
    elevation_m: NDArray[np.float64]
    area_m2: NDArray[np.float64]


def _basin(here: Here) -> _Basin | None:
    """Return the basin's cells, None where the run's store is not there; found once for each outlet."""
    kept: dict[str, _Basin | None] = here.run.kept
    if here.outlet_id not in kept:
        kept.clear()
        kept[here.outlet_id] = _find_basin(here)
    return kept[here.outlet_id]


def _find_basin(here: Here) -> _Basin | None:
    basins, elevation, routing = (here.run.stage(name) for name in ("basins", "elevation", "routing"))
    if basins is None or elevation is None or routing is None:
        return None
    try:
        label, elevation_m = basins.array("basins.label"), elevation.array("elevation_m")
        row_area_m2 = routing.array("terrain.row_area_m2")
    except FileNotFoundError:  # terrain in tiles keeps no whole rasters
        return None
    nrows, ncols = int(here.run.about["grid"]["rows"]), int(here.run.about["grid"]["columns"])
    parent = basins.array("basins.parent")
    inside = np.zeros(parent.size + 1, dtype=bool)  # the last stands for no label, -1
    inside[int(basins.array("basins.outlet_label")[here.run.position[here.outlet_id]])] = True
    for one in basins.array("basins.upstream_first")[::-1].tolist():
        inside[one] |= bool(parent[one] >= 0 and inside[parent[one]])
    rows, cols = np.nonzero(inside[label.reshape(nrows + 2, ncols + 2)[1:-1, 1:-1]])
    return _Basin(rows, cols, np.asarray(elevation_m)[rows, cols].astype(np.float64), np.asarray(row_area_m2)[rows])


def basin_values(kind: str, unit: str) -> Get:
    """Return the reader of ``elevation`` or ``cell_area`` of every cell of the basin, unconditioned terrain."""

    def get(here: Here) -> Value:
        basin = _basin(here)
        if basin is None:
            return Value(np.nan, unit, NOT_THERE)
        values = basin.elevation_m if kind == "elevation" else basin.area_m2
        return Value(
            values / FACTORS[unit], unit, f"{kind.replace('_', ' ')} of each cell of the basin, before conditioning"
        )

    return get


def extreme_places(here: Here) -> list[str]:
    """Name the highest and the lowest cell of the basin, and their pixels."""
    basin = _basin(here)
    if basin is None:
        return [NOT_THERE]
    found = []
    for word, k in (("highest", int(np.argmax(basin.elevation_m))), ("lowest", int(np.argmin(basin.elevation_m)))):
        row, col = int(basin.rows[k]), int(basin.cols[k])
        x, y = centre(here, row, col)
        found += [f"{word}: {cell_words(here, row, col)}", *pixel_words(here, DEM, x, y)]
    return found


def basin_places(here: Here) -> list[str]:
    """Say over how many cells of the working grid the basin lies."""
    basin = _basin(here)
    if basin is None:
        return [NOT_THERE]
    return [
        f"{basin.rows.size} cells of the working grid drain to {cell_words(here, *row_col(here, *outlet_xy(here)))}"
    ]


def patch_places(here: Here) -> list[str]:
    """Say how many cells of the working grid make up a patch of cover and soils, and name the first."""
    cover, basin = here.run.stage("cover"), _basin(here)
    if cover is None or basin is None:
        return [NOT_THERE]
    codes = cover.values("cover")["codes"]
    code = codes["texts"] if isinstance(codes, dict) else codes
    classes = np.asarray(cover.array("cover.classes"))[basin.rows, basin.cols]
    listed = list(code)
    position = listed.index(here.row["cover"]) if here.row["cover"] in listed else -2
    of_class = np.flatnonzero(classes == position)
    words = [f"{len(of_class)} cells of the basin have land cover {here.row['cover']} (on any soil group)"]
    if len(of_class) and here.run.project.cover.raster:
        k = int(of_class[0])
        x, y = centre(here, int(basin.rows[k]), int(basin.cols[k]))
        words += [f"the first: {cell_words(here, int(basin.rows[k]), int(basin.cols[k]))}"]
        words += pixel_words(here, "cover.raster", x, y)
    return words
