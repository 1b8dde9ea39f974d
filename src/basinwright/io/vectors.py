"""Vectors: points from any layer or CSV, polygons onto a grid, GeoPackages."""

from __future__ import annotations

import csv
import difflib
import math
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.errors import InputRejected, Problem
from basinwright.grid import Grid
from basinwright.io.rasters import Location, crs_label, horizontal_crs, is_remote, short_name

if TYPE_CHECKING:
    import geopandas as gpd
    from numpy.typing import NDArray

MAX_CLASSES = 65_535
"""Classes that a class array can hold beside 0, none."""


@dataclass(frozen=True)
class PointTable:
    """The points of a layer or CSV, in file order.

    Parameters
    ----------
    file : str
        Where they come from.
    ids : tuple of str
        Their ids, exactly as text; row numbers from 1 where no id column was named.
    names : tuple of str
        Their names; empty where no name column was named.
    x, y : ndarray, shape (n,)
        Map coordinates.
    crs_wkt : str
        The coordinate reference system they are in.
    attributes : dict of tuple
        Every column as read: text of a CSV, values of a layer (None where null).
    """

    file: str
    ids: tuple[str, ...]
    names: tuple[str, ...]
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    crs_wkt: str
    attributes: dict[str, tuple[Any, ...]]

    def __len__(self) -> int:
        return len(self.ids)

    def in_crs(self, wkt: str) -> PointTable:
        """Return the points in another coordinate reference system (infinite where it does not reach them)."""
        from pyproj import CRS, Transformer

        to_other = Transformer.from_crs(horizontal_crs(self.crs_wkt), CRS.from_wkt(wkt), always_xy=True)
        x, y = to_other.transform(self.x.tolist(), self.y.tolist())
        return replace(self, x=np.array(x, dtype=np.float64), y=np.array(y, dtype=np.float64), crs_wkt=wkt)

    def texts(self, column: str) -> list[str]:
        """Return a column as text; empty where null."""
        return [as_text(value) for value in self.attributes[column]]

    def numbers(self, column: str) -> tuple[NDArray[np.float64], list[Problem]]:
        """Return a column as numbers, NaN where empty, and a problem for the cells that are no finite numbers."""
        values, wrong = np.full(len(self), np.nan), []
        for row, text in enumerate(self.texts(column)):
            if not text.strip():
                continue
            try:
                values[row] = float(text)
            except ValueError:
                wrong.append(row + 1)
            else:
                if not math.isfinite(values[row]):
                    wrong.append(row + 1)
        if not wrong:
            return values, []
        return values, [
            Problem(self.file, column, f"not a finite number in {_rows(wrong)}", "write a number or nothing")
        ]


def as_text(value: Any) -> str:
    """Return a cell as exact text: 7 and 7.0 as ``7``, ``"007"`` as it is, null as empty."""
    if value is None:
        return ""
    if isinstance(value, (float, np.floating)):
        if math.isnan(value):
            return ""
        return str(int(value)) if float(value).is_integer() else repr(float(value))
    return str(value)


def _rows(rows: Sequence[int]) -> str:
    """Return row numbers as words, the first ten of them."""
    listed = ", ".join(map(str, rows[:10]))
    more = f" and {len(rows) - 10} more" if len(rows) > 10 else ""
    return f"row{'s' if len(rows) > 1 else ''} {listed}{more}"


def nearest_name(name: str, known: Sequence[str]) -> str:
    """Return what to say about a name that is not among the known ones."""
    near = difflib.get_close_matches(name.lower(), [entry.lower() for entry in known], n=1)
    if near:
        return f"did you mean {next(entry for entry in known if entry.lower() == near[0])!r}?"
    return f"it has: {', '.join(known)}" if known else "it has none"


@dataclass(frozen=True)
class _Features:
    """What was read of a source of points, before it is checked."""

    points: list[tuple[float, float] | str]  # a point, or what stands in its place
    columns: dict[str, tuple[Any, ...]]
    crs_wkt: str


def read_points(
    path: Location,
    *,
    layer: str | None = None,
    crs: str | None = None,
    id_field: str | None = None,
    name_field: str | None = None,
    other_fields: Sequence[str] = (),
) -> PointTable:
    """Read points from any vector layer, or from a CSV with the columns x and y.

    Parameters
    ----------
    path : Path or str
        The file.
    layer : str, optional
        Needed where the file has several.
    crs : str, optional
        The coordinate reference system of a CSV, or of a layer that declares none.
    id_field, name_field : str, optional
        Columns of ids (unique, not empty; default: row numbers) and names.
    other_fields : sequence of str
        Further columns that must be there.

    Returns
    -------
    PointTable

    Raises
    ------
    InputRejected
        With every problem: file, layer, CRS, columns, ids, and the rows whose geometry is no finite point.
    """
    file, problems = str(path), []
    features: _Features | None = None
    if not is_remote(file) and not Path(path).exists():
        problems.append(Problem(file, "file", "does not exist", "check the path"))
    elif not is_remote(file) and file.lower().endswith(".csv"):
        features, problems = _read_csv(Path(path))
    else:
        features, problems = _read_layer(path, layer)
    wkt, found = _settle_crs(file, features.crs_wkt if features else "", crs, features is not None)
    problems += found
    if features is None:
        raise InputRejected(problems)
    if not features.points:
        problems.append(Problem(file, "layer", "has no points", "give at least one"))
    problems += _point_problems(file, features.points)
    columns = features.columns
    for field in (id_field, name_field, *other_fields):
        if field is not None and field not in columns:
            problems.append(Problem(file, f"column {field}", "does not exist", nearest_name(field, list(columns))))
    count = len(features.points)
    ids = tuple(as_text(value) for value in columns.get(id_field or "", range(1, count + 1)))
    problems += _id_problems(file, id_field or "row number", ids)
    if problems:
        raise InputRejected(problems)
    names = tuple(as_text(value) for value in columns.get(name_field or "", [None] * count))
    xy = np.array(features.points, dtype=np.float64).reshape(-1, 2)
    return PointTable(file, ids, names, xy[:, 0].copy(), xy[:, 1].copy(), wkt, columns)


def _read_csv(path: Path) -> tuple[_Features | None, list[Problem]]:
    """Read a CSV, every cell as text."""
    file = str(path)
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            header, *rows = [row for row in csv.reader(stream) if row] or [[]]
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        return None, [Problem(file, "file", f"is not a readable CSV ({error})", "save it as CSV in UTF-8")]
    problems = []
    header = [name.strip() for name in header]
    for name, count in Counter(header).items():
        if count > 1:
            problems.append(Problem(file, f"column {name}", f"appears {count} times", "rename all but one"))
    ragged = [number for number, row in enumerate(rows, start=1) if len(row) != len(header)]
    if ragged:
        what = f"another number of cells than the header in {_rows(ragged)}"
        problems.append(Problem(file, "rows", what, "quote cells that hold a comma"))
    place = {name.lower(): column for column, name in enumerate(header)}
    for axis in ("x", "y"):
        if axis not in place:
            fix = f"name the coordinate columns x and y; it has: {', '.join(header) or 'none'}"
            problems.append(Problem(file, f"column {axis}", "does not exist", fix))
    if problems:
        return None, problems
    columns = {name: tuple(row[column] for row in rows) for column, name in enumerate(header)}
    points = [_csv_point(row[place["x"]], row[place["y"]]) for row in rows]
    return _Features(points, columns, ""), []


def _csv_point(x: str, y: str) -> tuple[float, float] | str:
    try:
        return float(x), float(y)
    except ValueError:
        return "no number for x or y"


def _read_layer(path: Location, layer: str | None) -> tuple[_Features | None, list[Problem]]:
    """Read a layer of a vector file."""
    import fiona
    from fiona.errors import FionaError

    file = str(path)
    try:
        layers = fiona.listlayers(path)
        if layer is None and len(layers) > 1:
            return None, [Problem(file, "layer", f"has several: {', '.join(layers)}", "name one of them")]
        if layer is not None and layer not in layers:
            return None, [Problem(file, "layer", f"has no layer {layer!r}", nearest_name(layer, layers))]
        with fiona.open(path, layer=layer or layers[0]) as source:
            names = list(source.schema["properties"])
            wkt = source.crs_wkt or ""
            points, cells = [], []
            for feature in source:
                points.append(_layer_point(feature.geometry))
                cells.append([feature.properties[name] for name in names])
    except (FionaError, OSError, ValueError, IndexError) as error:
        return None, [Problem(file, "file", f"is not a readable vector file ({error})", "give one that GDAL reads")]
    by_column = list(zip(*cells, strict=True)) if cells else [()] * len(names)
    return _Features(points, dict(zip(names, by_column, strict=True)), wkt), []


def _layer_point(geometry: Any) -> tuple[float, float] | str:
    """Return a point; a multipoint of one counts as one."""
    if geometry is None:
        return "no geometry"
    if geometry.type == "Point" and geometry.coordinates:
        return geometry.coordinates[0], geometry.coordinates[1]
    if geometry.type == "MultiPoint" and len(geometry.coordinates) == 1:
        return geometry.coordinates[0][0], geometry.coordinates[0][1]
    return "no geometry" if geometry.type == "Point" else f"a {geometry.type}, not a point"


def _settle_crs(file: str, declared: str, given: str | None, known: bool) -> tuple[str, list[Problem]]:
    """Return the CRS of the points from what the layer declares and what the user gave."""
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    if given is None:
        if declared or not known:
            return declared, []
        return "", [Problem(file, "crs", "is not declared", 'give it, such as crs = "EPSG:4326"')]
    try:
        crs = CRS.from_user_input(given)
    except CRSError:
        return "", [
            Problem(file, "crs", f"{given!r} is not a coordinate reference system", 'write a code: "EPSG:4326"')
        ]
    if declared and not horizontal_crs(declared).equals(crs, ignore_axis_order=True):
        what = f"the layer declares {crs_label(horizontal_crs(declared))}, the project says {given}"
        return "", [Problem(file, "crs", what, "leave the project's out, or correct the layer")]
    return crs.to_wkt(), []


def _point_problems(file: str, points: Sequence[tuple[float, float] | str]) -> list[Problem]:
    """Return one problem for each kind of thing that is no finite point, with its rows."""
    wrong: dict[str, list[int]] = {}
    for row, point in enumerate(points, start=1):
        if isinstance(point, str):
            wrong.setdefault(point, []).append(row)
        elif not (math.isfinite(point[0]) and math.isfinite(point[1])):
            wrong.setdefault("coordinates that are not finite", []).append(row)
    return [
        Problem(file, _rows(rows), f"{'has' if len(rows) == 1 else 'have'} {what}", "give each row one point")
        for what, rows in wrong.items()
    ]


def _id_problems(file: str, field: str, ids: Sequence[str]) -> list[Problem]:
    """List empty ids and ids that stand twice."""
    problems = []
    empty = [row for row, text in enumerate(ids, start=1) if not text.strip()]
    if empty:
        problems.append(Problem(file, f"column {field}", f"is empty in {_rows(empty)}", "give every row an id"))
    rows_of: dict[str, list[int]] = {}
    for row, text in enumerate(ids, start=1):
        rows_of.setdefault(text, []).append(row)
    for text, rows in rows_of.items():
        if len(rows) > 1 and text.strip():
            problems.append(Problem(file, f"column {field}", f"{text!r} stands in {_rows(rows)}", "make ids unique"))
    return problems


def check_polygons(path: Location, field: str, layer: str | None = None) -> list[Problem]:
    """List what the header of a polygon layer shows to be wrong: file, layer, CRS, column, kind of geometry."""
    return layer_of_kind(path, field, layer)[1]


_KINDS = {"polygons": ("Polygon", "Surface"), "lines": ("LineString", "Curve")}


def layer_of_kind(
    path: Location, field: str | None, layer: str | None = None, kind: str = "polygons"
) -> tuple[str, list[Problem]]:
    """Return the name of the layer of polygons or lines to read and what is wrong with it."""
    import pyogrio
    from pyogrio.errors import DataSourceError

    file = str(path)
    if not is_remote(file) and not Path(path).exists():
        return "", [Problem(file, "file", "does not exist", "check the path")]
    try:
        layers = [str(name) for name in pyogrio.list_layers(path)[:, 0]]
        if layer is None and len(layers) != 1:
            return "", [Problem(file, "layer", f"has several: {', '.join(layers)}", "name one of them")]
        if layer is not None and layer not in layers:
            return "", [Problem(file, "layer", f"has no layer {layer!r}", nearest_name(layer, layers))]
        about = pyogrio.read_info(path, layer=layer or layers[0])
    except (DataSourceError, OSError, ValueError) as error:
        return "", [Problem(file, "file", f"is not a readable vector file ({error})", "give one that GDAL reads")]
    problems = []
    if not about["crs"]:
        problems.append(Problem(file, "crs", "is not declared", "assign the one it was made in"))
    if field is not None and field not in about["fields"]:
        fix = nearest_name(field, [str(name) for name in about["fields"]])
        problems.append(Problem(file, f"column {field}", "does not exist", fix))
    found = about["geometry_type"] or "no geometry"
    if not any(word in found for word in (*_KINDS[kind], "Unknown", "GeometryCollection")):
        problems.append(Problem(file, "geometry", f"is {found}, not {kind}", f"give a layer of {kind}"))
    if about["features"] == 0:
        problems.append(Problem(file, "layer", f"has no {kind}", "give at least one"))
    return layer or layers[0], problems


def rasterize_polygons(
    path: Location, field: str, grid: Grid, layer: str | None = None
) -> tuple[NDArray[Any], list[str], dict[str, Any]]:
    """Lay the classes of a polygon layer of any CRS onto a grid.

    A cell takes the class of the polygon that its centre lies in; where polygons overlap, of the later one in
    file order. Vertices are brought to the grid's CRS; edges run straight between them there.

    Parameters
    ----------
    path : Path or str
        The file.
    field : str
        The column that holds the class, text or number.
    grid : Grid
        The grid.
    layer : str, optional
        Needed where the file has several.

    Returns
    -------
    classes : ndarray of uint8 or uint16, shape (nrows, ncols)
        0 where there is none, else 1 + the position in `codes`.
    codes : list of str
        The classes of the layer as text, sorted.
    record : dict
        How the layer was brought onto the grid, for the manifest.

    Raises
    ------
    InputRejected
        With every problem of the layer.
    """
    import pyogrio
    from rasterio.features import rasterize

    name, problems = layer_of_kind(path, field, layer)
    if problems:
        raise InputRejected(problems)
    frame = pyogrio.read_dataframe(path, layer=name, columns=[field])
    texts = [as_text(value).strip() for value in frame[field].astype(object).where(frame[field].notna(), None)]
    codes = sorted(set(texts) - {""}, key=code_order)
    if len(codes) > MAX_CLASSES:
        what = f"holds {len(codes)} different values: that is not a column of classes"
        raise InputRejected.one(str(path), f"column {field}", what, "name another column")
    own_crs = horizontal_crs(frame.crs.to_wkt())
    frame = frame.set_crs(own_crs, allow_override=True).to_crs(grid.crs)
    position = {code: index for index, code in enumerate(codes, start=1)}
    dtype = np.uint8 if len(codes) < 256 else np.uint16
    shapes = [
        (shape, position[text])
        for shape, text in zip(frame.geometry, texts, strict=True)
        if text and shape is not None and shape.geom_type in ("Polygon", "MultiPolygon") and not shape.is_empty
    ]
    classes = np.zeros(grid.shape, dtype=dtype)
    if shapes:
        rasterize(shapes, out=classes, transform=grid.transform)
    record = {
        "path": short_name(path),
        "layer": name,
        "field": field,
        "crs": crs_label(own_crs),
        "features": len(frame),
        "method": f"cell centre in polygon, in {crs_label(grid.crs)}",
    }
    return classes, codes, record


def code_order(code: str) -> tuple[int, float, str]:
    """Return a key that sorts class codes: numbers by value, then texts."""
    try:
        value = float(code)
    except ValueError:
        return 1, 0.0, code
    return (0, value, code) if math.isfinite(value) else (1, 0.0, code)


WRITTEN = "2000-01-01T00:00:00.000Z"
"""The time of writing that GeoPackages carry: fixed, so that the same results are the same bytes."""


def write_layers(
    path: Path, layers: Mapping[str, gpd.GeoDataFrame], geometry_types: Mapping[str, str] | None = None
) -> None:
    """Write a GeoPackage; the same layers give the same bytes.

    Parameters
    ----------
    path : Path
        The file; one that is there is replaced.
    layers : mapping of str to GeoDataFrame
        The layers by name, written in this order.
    geometry_types : mapping of str to str, optional
        Declared geometry by layer, such as ``MultiPolygon`` (then single parts are promoted). Required for a
        layer without rows.
    """
    import pyogrio

    path.unlink(missing_ok=True)
    kinds = geometry_types or {}
    with _fixed_time():
        for name, frame in layers.items():
            kind = kinds.get(name)
            pyogrio.write_dataframe(
                frame, path, layer=name, driver="GPKG", append=path.exists(), geometry_type=kind,
                promote_to_multi=kind is not None and kind.startswith("Multi"), layer_options={"SPATIAL_INDEX": "YES"},
            )  # fmt: skip


@contextmanager
def _fixed_time() -> Iterator[None]:
    """Let the library that writes GeoPackages believe in one fixed time."""
    import pyogrio

    before = pyogrio.get_gdal_config_option("OGR_CURRENT_DATE")
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": WRITTEN})
    try:
        yield
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": before})
