"""The GeoPackage of a run: its tables with their geometry."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrology import Columns
from basinwright.project import Project
from basinwright.store import Draft, Entry
from basinwright.tables import OUTLETS, SEGMENTS, STREAMS, Table

if TYPE_CHECKING:
    import geopandas as gpd
    from numpy.typing import NDArray

    from basinwright.grid import Grid

_BASIN_COLUMNS = (
    "outlet_id", "name", "status", "flags", "downstream_outlet_id", "area", "path_length", "relief", "basin_slope_pct",
    "curve_number", "impervious_pct", "open_water_pct", "tc_h",
)  # fmt: skip
_PATH_COLUMNS = (
    "outlet_id", "name", "path_length", "sheet_length", "shallow_length", "channel_length", "path_slope_pct",
    "path_slope_1085_pct", "tc_h",
)  # fmt: skip


def keep_geometries(draft: Draft, name: str, geometries: Sequence[Any] | NDArray[Any]) -> None:
    """Keep geometries in the store as WKB, None where there is none."""
    import shapely

    pieces = [piece or b"" for piece in shapely.to_wkb(np.array(geometries, dtype=object)).tolist()]
    draft.array(f"{name}.wkb", np.frombuffer(b"".join(pieces), dtype=np.uint8))
    draft.array(f"{name}.bounds", np.cumsum([0, *map(len, pieces)], dtype=np.int64))


def kept_geometries(entry: Entry, name: str) -> NDArray[Any]:
    """Read geometries that `keep_geometries` kept."""
    import shapely

    data, bounds = entry.array(f"{name}.wkb").tobytes(), entry.array(f"{name}.bounds").tolist()
    pieces = [data[a:b] or None for a, b in itertools.pairwise(bounds)]
    return shapely.from_wkb(np.array(pieces, dtype=object))


def write_layers(
    path: Path,
    tables: Mapping[str, Columns],
    project: Project,
    grid: Grid,
    geometries: Mapping[str, NDArray[Any]],
    streams: Mapping[str, NDArray[Any]] | None,
) -> None:
    """Write ``basins.gpkg``.

    Parameters
    ----------
    path : Path
        File to write.
    tables : mapping of str to columns
        Tables by name.
    project : Project
        Gives units and return periods.
    grid : Grid
        Gives the CRS.
    geometries : mapping of str to array
        ``basins``, ``subbasins``, ``flow_paths``: one for each row of outlets.csv, None where there is none;
        ``segments``: one for each row of segments.csv. A layer without geometries is left out.
    streams : mapping of str to array, or None
        ``geometry`` and the columns of `STREAMS`, by inside name.
    """
    import shapely

    from basinwright.io import vectors

    system = project.project.units
    outlets = _typed(OUTLETS, tables["outlets"], project)
    placed = ~np.isnan(outlets["x"])
    points = np.full(placed.size, None, dtype=object)
    points[placed] = shapely.points(outlets["x"][placed], outlets["y"][placed])
    layers: dict[str, gpd.GeoDataFrame] = {}
    if "basins" in geometries:
        layers["basins"] = _layer(_only(outlets, _BASIN_COLUMNS, OUTLETS, project), geometries["basins"], grid)
        layers["subbasins"] = _layer(
            _only(outlets, ("outlet_id", "downstream_outlet_id"), OUTLETS, project), geometries["subbasins"], grid
        )
    if streams is not None:
        shown, inside = STREAMS.fields(system), STREAMS.fields("si")
        frame = {
            there.name: streams[here.name] / there.factor if there.column.type == "number" else streams[here.name]
            for there, here in zip(shown, inside, strict=True)
        }
        layers["streams"] = _layer(frame, streams["geometry"], grid)
    layers["flow_paths"] = _layer(_only(outlets, _PATH_COLUMNS, OUTLETS, project), geometries["flow_paths"], grid)
    layers["segments"] = _layer(_typed(SEGMENTS, tables["segments"], project), geometries["segments"], grid)
    layers["outlets"] = _layer(outlets, points, grid)
    kinds = {
        "basins": "MultiPolygon", "subbasins": "MultiPolygon", "streams": "LineString", "flow_paths": "LineString",
        "segments": "LineString", "outlets": "Point",
    }  # fmt: skip
    vectors.write_layers(path, layers, {name: kinds[name] for name in layers})


def _typed(table: Table, columns: Columns, project: Project) -> dict[str, NDArray[Any]]:
    """Return the columns of a table as numbers, booleans and texts instead of CSV cells."""
    system = project.project.units
    kinds = {
        column.name(system, period): column.type for column in table.columns for period in ["", *project.storm.periods]
    }
    typed: dict[str, NDArray[Any]] = {}
    for name, values in columns.items():
        kind = kinds[name]
        if kind != "text" and isinstance(values, np.ndarray) and values.dtype != object:
            typed[name] = values  # as it was computed
            continue
        listed = list(values)
        if kind == "number":
            typed[name] = np.array([np.nan if value is None or value == "" else float(value) for value in listed])
        elif kind == "integer":
            typed[name] = np.array([int(value) for value in listed], dtype=np.int64)
        elif kind == "boolean":
            typed[name] = np.array([value in (True, "true") for value in listed], dtype=bool)
        else:
            typed[name] = np.array([value or "" for value in listed], dtype=object)
    return typed


def _only(columns: Mapping[str, Any], stems: Sequence[str], table: Table, project: Project) -> dict[str, Any]:
    names = [table.column(stem).name(project.project.units) for stem in stems]
    return {name: columns[name] for name in names}


def _layer(columns: Mapping[str, Any], geometry: NDArray[Any], grid: Grid) -> gpd.GeoDataFrame:
    """Return a layer of the rows that have a geometry."""
    import geopandas as gpd

    frame = gpd.GeoDataFrame(dict(columns), geometry=geometry, crs=grid.crs_wkt)
    return frame[~frame.geometry.isna()]
