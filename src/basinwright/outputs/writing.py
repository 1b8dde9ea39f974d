"""Writes the tables of a run, their schema and the terrain rasters."""

from __future__ import annotations

import json
from collections.abc import Collection, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrology import Columns
from basinwright.outputs import hydrographs_nc
from basinwright.project import Project
from basinwright.tables import ALL, HYDROGRAPHS, Table, frictionless_schema, read_csv, write_csv

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from basinwright.grid import Grid
    from basinwright.terrain import Terrain


def write_tables(folder: Path, tables: Mapping[str, Columns], project: Project) -> None:
    """Write the tables of a run as CSV, the hydrographs as netCDF too, and ``tables.json``, which describes them.

    Tables that stand in the folder already and are not among the given ones are described too.

    Parameters
    ----------
    folder : Path
        Where to write.
    tables : mapping of str to columns
        Tables by name.
    project : Project
        Gives units and return periods.

    Notes
    -----
    ``tables.json`` is a Frictionless Data Package with the schema of every CSV that is written: of a run with many
    outlets the hydrographs stand in the netCDF file only (`hydrograph_files`).
    """
    system = project.project.units
    series = hydrograph_files(tables)
    (folder / hydrographs_nc.FILE).unlink(missing_ok=True)
    if hydrographs_nc.FILE in series:
        hydrographs_nc.write_hydrographs(folder / hydrographs_nc.FILE, tables, project)
    resources = []
    for table in ALL:
        path = folder / f"{table.name}.csv"
        if table is HYDROGRAPHS and path.name not in series:
            continue
        if table.name in tables:
            columns: Collection[str] = tables[table.name]
            path.unlink(missing_ok=True)  # it may be a link to a file of the run before
            write_csv(path, tables[table.name])
        elif path.is_file():
            columns = [str(name) for name in read_csv(path).columns]
        else:
            continue
        optional = [column.stem for column in table.columns if column.optional and column.name(system) in columns]
        schema = frictionless_schema(table.fields(system, project.storm.periods, optional), system, table.key)
        resources.append(_resource(table, schema))
    package = {
        "profile": "tabular-data-package",
        "name": "basinwright-run",
        "title": project.project.name,
        "resources": resources,
    }
    (folder / "tables.json").unlink(missing_ok=True)
    (folder / "tables.json").write_text(json.dumps(package, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")


def hydrograph_files(tables: Mapping[str, Columns]) -> list[str]:
    """Return the files in which the hydrographs of a run stand: of one without any, the table with its header alone."""
    if HYDROGRAPHS.name not in tables:
        return []
    some = len(tables[HYDROGRAPHS.name]["outlet_id"]) > 0
    few = len(tables["outlets"]["outlet_id"]) <= hydrographs_nc.MOST_OUTLETS_IN_CSV
    return [*([hydrographs_nc.FILE] if some else []), *([f"{HYDROGRAPHS.name}.csv"] if few or not some else [])]


def _resource(table: Table, schema: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "profile": "tabular-data-resource",
        "name": table.name,
        "path": f"{table.name}.csv",
        "description": table.meaning,
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "dialect": {"delimiter": ",", "lineTerminator": "\r\n", "quoteChar": '"', "doubleQuote": True, "header": True},
        "schema": schema,
    }


def write_terrain(folder: Path, grid: Grid, terrain: Terrain, elevation_m: NDArray[Any]) -> None:
    """Write the conditioned terrain, what conditioning changed, flow directions and contributing area.

    Parameters
    ----------
    folder : Path
        Where to write the cloud-optimised GeoTIFFs; made here.
    grid : Grid
    terrain : Terrain
    elevation_m : float array, shape (nrows, ncols) [m]
        The terrain before conditioning.
    """
    from basinwright.io.rasters import write_cog
    from basinwright.terrain.encoding import to_azimuth

    folder.mkdir()
    void = np.float32(-9999.0)

    def or_void(values: NDArray[Any], rows: slice) -> NDArray[Any]:
        return np.where(np.isfinite(terrain.conditioned_grid[rows]), values, void)

    def area_m2(rows: slice) -> NDArray[Any]:
        area = terrain.area_grid[rows]
        return np.where(area > 0, area, -1.0)

    write_cog(
        folder / "conditioned.tif",
        lambda rows: or_void(terrain.conditioned_grid[rows], rows),
        grid,
        meaning="elevation after conditioning: depressions breached or filled",
        unit="m",
        nodata=-9999.0,
    )
    write_cog(
        folder / "conditioning_change.tif",
        lambda rows: or_void(terrain.change_m(elevation_m, rows), rows),
        grid,
        meaning="change of elevation by conditioning: negative where cut, positive where filled",
        unit="m",
        nodata=-9999.0,
    )
    write_cog(
        folder / "flow_direction.tif",
        lambda rows: to_azimuth(terrain.directions_grid[rows]),
        grid,
        meaning="azimuth of the downstream neighbour on the grid, clockwise from grid north; "
        "65534: water leaves here; 65533: declared sink",
        unit="degree",
        nodata=65535,
    )
    write_cog(
        folder / "contributing_area.tif",
        area_m2,
        grid,
        meaning="contributing area, the cell's own included",
        unit="m2",
        nodata=-1.0,
    )
