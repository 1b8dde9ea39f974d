"""Builds small projects on disk for tests: a terrain given as an array, one land cover, one soil group, its outlets.

    file = make_project(tmp_path, elevation, {"A": (9, 5)})
    outcome = pipeline.run(file)

Everything that `make_project` writes can be replaced: sections and keys by `overrides`, files by writing over them.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from affine import Affine
from numpy.typing import ArrayLike, NDArray

ORIGIN = (500_000.0, 4_300_000.0)
"""Upper left corner of the terrain in EPSG:32614 [m]: on its central meridian."""
NODATA = -9999.0
DEPTHS = {"2": "3.1 in", "10": "4.6 in", "100": "7.2 in"}


def make_project(
    folder: Path,
    elevation: ArrayLike,
    outlets: Mapping[str, tuple[int, int]],
    *,
    cell: float | tuple[float, float] = 10.0,
    origin: tuple[float, float] = ORIGIN,
    crs: str = "EPSG:32614",
    cover: int | ArrayLike = 71,
    columns: Mapping[str, Mapping[str, object]] | None = None,
    overrides: Mapping[str, Mapping[str, Any]] | None = None,
) -> Path:
    """Write a project and its inputs.

    Parameters
    ----------
    folder : Path
        Where to write; made if it is not there.
    elevation : (rows, cols) array
        Terrain, NaN where void. Its dtype is the raster's: integers stay integers. The project says that it is in
        metres.
    outlets : mapping of str to (row, col)
        The cell of each outlet by its id; the point is put at the cell's centre.
    cell : float or (width, height)
        Cell size in the unit of the CRS.
    origin : (x, y)
        Upper left corner of the terrain.
    crs : str
        CRS of terrain, land cover and outlets.
    cover : int or (rows, cols) array
        NLCD class of every cell: 71 is grassland.
    columns : mapping of str to mapping of str to value, optional
        Further columns of outlets.csv by name, each a mapping of outlet id to cell; empty where an id is left out.
    overrides : mapping of str to mapping, optional
        Sections of the project file: ``{"storm": {"depths": {...}}}`` replaces that key, the value None leaves it out.

    Returns
    -------
    Path
        The project file. The outlets' search distance is small: an outlet stays on its cell.
    """
    folder.mkdir(parents=True, exist_ok=True)
    terrain = np.asarray(elevation)
    transform = transform_of(cell, origin)
    write_raster(folder / "dem.tif", terrain, transform, crs)
    classes = np.broadcast_to(np.asarray(cover, dtype=np.uint8), terrain.shape)
    write_raster(folder / "cover.tif", classes, transform, crs, nodata=0)

    further = columns or {}
    with (folder / "outlets.csv").open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["id", "x", "y", *further])
        for outlet_id, (row, col) in outlets.items():
            x, y = cell_centre(transform, row, col)
            writer.writerow([outlet_id, repr(x), repr(y), *(values.get(outlet_id, "") for values in further.values())])

    sections: dict[str, dict[str, Any]] = {
        "project": {"name": "Test ground", "units": "si"},
        "terrain": {"dem": ["dem.tif"], "vertical_unit": "m", "stream_area": "0.02 km2"},
        "outlets": {"source": "outlets.csv", "id": "id", "crs": crs, "snap_within": "0.01 m"},
        "cover": {"raster": "cover.tif", "scheme": "nlcd"},
        "soils": {"group": "B"},
        "storm": {"distribution": "type_ii", "depths": DEPTHS},
    }
    for name, keys in (overrides or {}).items():
        merged = sections.setdefault(name, {}) | dict(keys)
        sections[name] = {key: value for key, value in merged.items() if value is not None}
    return write_project(folder / "project.toml", sections)


def transform_of(cell: float | tuple[float, float] = 10.0, origin: tuple[float, float] = ORIGIN) -> Affine:
    """Return the transform of a north-up raster."""
    width, height = cell if isinstance(cell, tuple) else (cell, cell)
    return Affine(width, 0.0, origin[0], 0.0, -height, origin[1])


def cell_centre(transform: Affine, row: float, col: float) -> tuple[float, float]:
    """Return the coordinates of a cell's centre."""
    return transform.c + transform.a * (col + 0.5), transform.f + transform.e * (row + 0.5)


def write_raster(
    path: Path, data: NDArray[Any], transform: Affine, crs: str, *, nodata: float = NODATA, unit: str | None = None
) -> Path:
    """Write one band; NaN becomes the nodata value."""
    kind = np.dtype(np.uint8) if data.dtype == bool else data.dtype
    values = np.where(np.isnan(data), nodata, data).astype(kind) if kind.kind == "f" else data.astype(kind)
    with rasterio.open(
        path, "w", driver="GTiff", height=data.shape[0], width=data.shape[1], count=1, dtype=kind, crs=crs,
        transform=transform, nodata=nodata,
    ) as target:  # fmt: skip
        target.write(values, 1)
        if unit is not None:
            target.units = (unit,)
    return path


def write_project(path: Path, sections: Mapping[str, Mapping[str, Any]]) -> Path:
    """Write a project file."""
    lines = []
    for name, keys in sections.items():
        lines += [f"[{name}]", *(f"{key} = {_toml(value)}" for key, value in keys.items()), ""]
    path.write_text("\n".join(lines), encoding="utf-8")
    return path


def _toml(value: object) -> str:
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{json.dumps(str(key))} = {_toml(entry)}" for key, entry in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(map(_toml, value)) + "]"
    if isinstance(value, bool | int | float | str):
        return json.dumps(value, ensure_ascii=False)
    raise TypeError(f"no TOML for {value!r}")


def inclined_plane(rows: int, cols: int, slope: float, azimuth_deg: float, cell: float = 10.0) -> NDArray[np.float64]:
    """Return a plane that falls with a slope towards an azimuth, clockwise from grid north; 1000 m at the centre."""
    azimuth = np.radians(azimuth_deg)
    row, col = np.mgrid[:rows, :cols]
    east, north = (col - (cols - 1) / 2) * cell, ((rows - 1) / 2 - row) * cell
    return 1000.0 - slope * (east * np.sin(azimuth) + north * np.cos(azimuth))


def v_valley(rows: int, cols: int, side_slope: float, valley_slope: float, cell: float = 10.0) -> NDArray[np.float64]:
    """Return a valley that falls towards the last row, its axis in the middle column; the lowest cell is at 1000 m."""
    row, col = np.mgrid[:rows, :cols]
    return 1000.0 + side_slope * np.abs(col - cols // 2) * cell + valley_slope * (rows - 1 - row) * cell


DITCH_HEAD_CELLS = 200
"""Cells of hillslope above every channel head of `paired_ditches`."""
DITCH_DROP_M = 20.0
"""Mean drop of its streams."""


def paired_ditches(hillslope_m: float, orders: int = 8) -> NDArray[np.float64]:
    """Return ditches that join two by two, falling 19 and 21 m, under strips of even hillslope; voids in between.

    By geometry every order has the same mean drop, whatever the stream area: a larger one takes away whole orders.
    Water leaves in the middle of the last row.

    Parameters
    ----------
    hillslope_m : float
        Fall of the hillslope from cell to cell [m].
    orders : int
        Strahler order at the bottom: 2 ** (orders - 1) channel heads.
    """
    reach = [2**level + 2 for level in range(orders - 1)]
    z = np.full((DITCH_HEAD_CELLS + sum(reach) + 4, 2**orders + 1), np.nan)
    strip = hillslope_m * np.arange(DITCH_HEAD_CELLS - 1, 0, -1)

    def climb(row: int, col: int, level: int, bottom_m: float) -> None:
        """Two arms up from a junction; above the lowest level, the hillslopes."""
        for side in (-1, 1):
            drop_m = DITCH_DROP_M + side
            for k in range(1, reach[level] + 1):
                z[row - k, col + side * min(k, 2**level)] = bottom_m + drop_m * k / reach[level]
            top, at = row - reach[level], col + side * 2**level
            if level:
                climb(top, at, level - 1, bottom_m + drop_m)
            else:
                z[top - DITCH_HEAD_CELLS + 1 : top, at] = bottom_m + drop_m + strip

    row, col = z.shape[0] - 4, 2 ** (orders - 1)
    z[row:, col] = 100.0 - np.arange(4)
    climb(row, col, orders - 2, 100.0)
    return z


def read_table(run: Path, name: str) -> list[dict[str, str]]:
    """Read a CSV of a run as rows of text."""
    with (run / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def numbers(rows: list[dict[str, str]], column: str) -> NDArray[np.float64]:
    """Return a column of `read_table` as numbers, NaN where empty."""
    return np.array([float(row[column]) if row[column] else np.nan for row in rows])


def walled(elevation: NDArray[np.float64], width: int = 3, fall_m: float = 0.2) -> NDArray[np.float64]:
    """Put a rim round a terrain that falls gently away from it: water leaves it as before, but touches no edge."""
    rows, cols = elevation.shape
    row, col = np.mgrid[-width : rows + width, -width : cols + width]
    outside = np.maximum.reduce([-row, row - rows + 1, -col, col - cols + 1, np.zeros_like(row)])
    return np.pad(elevation, width, mode="edge") - fall_m * outside
