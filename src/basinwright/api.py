"""Projects, runs and the two halves as Python objects: tables as data frames, rasters as xarray with their CRS."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping, Sequence
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from basinwright.errors import InputRejected

if TYPE_CHECKING:
    import geopandas as gpd
    import numpy as np
    import pandas as pd
    import xarray as xr
    from numpy.typing import ArrayLike, NDArray

    from basinwright.explaining import Explanation
    from basinwright.grid import Grid
    from basinwright.outputs.summary import Outcome
    from basinwright.storms import Storm
    from basinwright.terrain import Terrain

Place = str | os.PathLike[str]
Raster = Literal["conditioned", "flow_direction", "contributing_area"]


class Project:
    """A project file: what the user wrote, validated.

    Parameters
    ----------
    path : str or Path
        The TOML file.

    Raises
    ------
    InputRejected
        With every problem of the file itself; `check` looks at the inputs that it names.

    Examples
    --------
    >>> project = Project("basinwright-demo/project.toml")
    >>> project.name, project.options["storm"]["distribution"]
    ('Tallow County crossings', 'type_ii')
    """

    def __init__(self, path: Place) -> None:
        from basinwright.project import read_project

        self.path = Path(path)
        reading = read_project(self.path)
        if reading.problems:
            raise InputRejected(reading.problems)
        self._project = reading.project

    def __repr__(self) -> str:
        return f"Project({str(self.path)!r})"

    @property
    def name(self) -> str:
        """Its name."""
        return self._project.project.name

    @property
    def options(self) -> dict[str, Any]:
        """Every option with its value, defaults included: itself the content of a project file."""
        return self._project.resolved()

    def check(self) -> list[str]:
        """Look at every input and say what was found; computes nothing.

        Raises
        ------
        InputRejected
            With every problem at once.
        """
        from basinwright.pipeline import check

        return check(self.path)

    def run(self, out: Place | None = None, **options: Any) -> Run:
        """Do the whole job and open the finished run.

        Parameters
        ----------
        out : str or Path, optional
            The run's folder; ``out`` beside the project file where not given.
        **options
            See `basinwright.run`: ``jobs``, ``resume``, ``overwrite``, ``summary_only``, ``say``.
        """
        from basinwright.pipeline import run

        return Run(run(self.path, out=None if out is None else Path(out), **options).folder)

    def terrain(self, say: Callable[[str], None] | None = None) -> xr.Dataset:
        """Run the terrain half alone and return its rasters; nothing is kept on disk.

        Returns
        -------
        xarray.Dataset
            ``conditioned`` [m], ``flow_direction`` [degree], ``contributing_area`` [m2], with their CRS.
        """
        import tempfile

        from basinwright.pipeline import terrain_half
        from basinwright.pipeline.inputs import inspect
        from basinwright.store import Store

        with tempfile.TemporaryDirectory() as folder:
            half = terrain_half.run(inspect(self.path), Store(Path(folder), None, say or (lambda title: None)))
            return _as_dataset(half.grid, half.routed())


class Run:
    """A finished run: its tables, layers, rasters and hydrographs.

    Parameters
    ----------
    folder : str or Path
        The run's folder.

    Raises
    ------
    InputRejected
        Where it holds no run of this version.

    Examples
    --------
    >>> run = Run("basinwright-demo/out")
    >>> run.outlets["name"]["TC-001"], f"{run.outlets['area_mi2']['TC-001']:.2f}"
    ('Tannery Road', '2.83')
    >>> run.raster("contributing_area").sizes["x"], run.layer("basins").crs.to_epsg()
    (740, 32614)
    """

    def __init__(self, folder: Place) -> None:
        from basinwright.pipeline import manifest

        self.folder = Path(folder)
        self.about: Mapping[str, Any] = manifest.read(self.folder)

    def __repr__(self) -> str:
        return f"Run({str(self.folder)!r})"

    @property
    def crs(self) -> str:
        """The working CRS."""
        return str(self.about["grid"]["crs"])

    @cached_property
    def tables(self) -> tuple[str, ...]:
        """Names of the tables that the run has."""
        from basinwright.tables import ALL

        return tuple(table.name for table in ALL if (self.folder / f"{table.name}.csv").is_file())

    def table(self, name: str) -> pd.DataFrame:
        """Read a table with the types of its schema: ids as text, numbers, booleans.

        Parameters
        ----------
        name : str
            One of `tables`.

        Raises
        ------
        InputRejected
            Where the run has no such table.
        """
        import pandas as pd

        from basinwright.tables import ALL

        if name not in self.tables:
            raise InputRejected.one(str(self.folder), name, "no such table", f"use one of {', '.join(self.tables)}")
        table = next(table for table in ALL if table.name == name)
        storm, system = self.about["project"]["storm"], self.about["project"]["project"]["units"]
        periods = list(storm.get("depths") or storm.get("depth_rasters") or ())
        fields = table.fields(system, periods, [column.stem for column in table.columns if column.optional])
        kinds = {"text": "str", "number": "float64", "integer": "Int64", "boolean": "boolean"}
        types: dict[Any, str] = {field.name: kinds[field.column.type] for field in fields}
        texts = [column for column, kind in types.items() if kind == "str"]
        missing = {column: [""] for column in types if column not in texts}
        frame: pd.DataFrame = pd.read_csv(
            self.folder / f"{name}.csv",
            dtype=types,
            keep_default_na=False,
            na_values=missing,
            float_precision="round_trip",
            encoding="utf-8-sig",
        )
        return frame

    @cached_property
    def outlets(self) -> pd.DataFrame:
        """outlets.csv, a row for each outlet, by its id."""
        return self.table("outlets").set_index("outlet_id")

    def layer(self, name: str) -> gpd.GeoDataFrame:
        """Read a layer of ``basins.gpkg``.

        Parameters
        ----------
        name : str
            ``outlets``, ``basins``, ``subbasins``, ``flow_paths``, ``segments`` or ``streams``.
        """
        import pyogrio

        path = self.folder / "basins.gpkg"
        if not path.is_file():
            raise InputRejected.one(str(path), "file", "does not exist", "run without summary_only")
        return pyogrio.read_dataframe(path, layer=name)

    def raster(self, name: Raster) -> xr.DataArray:
        """Read a raster of ``terrain/`` with its CRS; NaN where there is no data.

        Parameters
        ----------
        name : {"conditioned", "flow_direction", "contributing_area"}
        """
        from basinwright.grid import Grid
        from basinwright.io.rasters import read_whole

        path = self.folder / "terrain" / f"{name}.tif"
        if not path.is_file():
            raise InputRejected.one(str(path), "file", "does not exist", "run without summary_only")
        values, transform, crs_wkt = read_whole(path)
        grid = Grid(values.shape[0], values.shape[1], transform, crs_wkt)
        return _georeferenced({name: values}, grid)[name]

    def hydrographs(self) -> xr.Dataset:
        """Open ``hydrographs.nc``: ``flow``, ``rain`` and ``excess`` by time, one series after another."""
        import xarray as xr

        return xr.open_dataset(self.folder / "hydrographs.nc")

    def explain(self, outlet_id: str, column: str, **which: Any) -> Explanation:
        """Say where one number came from; see `basinwright.explain`."""
        return explain(self.folder, outlet_id, column, **which)

    def retime(self) -> Run:
        """Compute times and flows again from the tables, edited or not, and open the run anew."""
        from basinwright.pipeline import retime

        return Run(retime(self.folder).folder)


def run(
    project_file: Place,
    *,
    out: Place | None = None,
    jobs: int | None = None,
    resume: bool = False,
    overwrite: bool = False,
    summary_only: bool = False,
    also_at: Sequence[str] = (),
    say: Callable[[str], None] = lambda text: None,
) -> Outcome:
    """Do the whole job of a project.

    Parameters
    ----------
    project_file : str or Path
        The project file.
    out : str or Path, optional
        The run's folder; ``out`` beside the project file where not given.
    jobs : int, optional
        Processor cores; ``compute.jobs`` where not given. Results do not depend on it.
    resume : bool
        Skip every stage whose outputs an interrupted or an earlier run left and that still hold.
    overwrite : bool
        Replace the run that the folder holds.
    summary_only : bool
        Tables only: no polygons, no terrain rasters, no hydrograph series.
    also_at : sequence of str
        Coarser cell sizes, such as ``30 m``, on which to repeat the job and compare.
    say : callable
        Told what is happening.

    Returns
    -------
    Outcome

    Raises
    ------
    InputRejected
        Before anything is computed, with every problem.
    PublishError
        Where the results could not be put in place; the folder is then as it was.

    Examples
    --------
    >>> outcome = run("basinwright-demo/project.toml", out="screening", summary_only=True)
    >>> len(outcome.outlets["outlet_id"]), outcome.failed
    (8, 0)
    """
    from basinwright import pipeline

    return pipeline.run(
        Path(project_file),
        out=None if out is None else Path(out),
        jobs=jobs,
        resume=resume,
        overwrite=overwrite,
        summary_only=summary_only,
        also_at=also_at,
        say=say,
    )


def retime(run_dir: Place, *, say: Callable[[str], None] = lambda text: None) -> Outcome:
    """Compute timing, runoff and hydrographs again from a run's tables, edited or not; no raster is read.

    Parameters
    ----------
    run_dir : str or Path
        The run's folder.
    say : callable
        Told what is happening.

    Returns
    -------
    Outcome

    Raises
    ------
    InputRejected
        Where a table is missing or an edit impossible: file, row, column, mend. Nothing is changed then.
    PublishError
        Where the results could not be put in place; the folder is then as it was.

    Examples
    --------
    >>> retime("screening").failed
    0
    """
    from basinwright import pipeline

    return pipeline.retime(Path(run_dir), say=say)


def check(project_file: Place) -> list[str]:
    """Validate every input of a project and say what was found; computes nothing.

    Raises
    ------
    InputRejected
        With every problem at once.

    Examples
    --------
    >>> check("basinwright-demo/project.toml")[1]
    'terrain: 900 x 740 cells of 10 m, WGS 84 / UTM zone 14N'
    """
    from basinwright import pipeline

    return pipeline.check(Path(project_file))


def start(folder: Place) -> Path:
    """Write a commented project file into a new or existing folder.

    Raises
    ------
    InputRejected
        Where the folder already holds one, or cannot be written.

    Examples
    --------
    >>> start("my-county").name
    'project.toml'
    """
    from basinwright import pipeline

    return pipeline.start(Path(folder))


def explain(
    run_dir: Place,
    outlet_id: str,
    column: str,
    *,
    depth: int = 1,
    table: str | None = None,
    where: Mapping[str, str] | None = None,
) -> Explanation:
    """Explain one number of a finished run: formula filled in, inputs, published rows, cells, flags.

    Parameters
    ----------
    run_dir : str or Path
        The run's folder.
    outlet_id : str
        The outlet.
    column : str
        Name of the column as it stands in the file, or with its table: ``segments.slope``.
    depth : int
        To what depth inputs are explained in turn.
    table : str, optional
        The table, where more than one has the column.
    where : mapping, optional
        Which row, where the outlet has several, such as ``{"segment": "3"}``.

    Returns
    -------
    Explanation

    Raises
    ------
    InputRejected
        Where there is no such outlet, column or row, or several rows.

    Examples
    --------
    >>> found = explain("basinwright-demo/out", "TC-001", "lag_h")
    >>> found.formula, found.agrees
    ('0.6 × Tc', True)
    """
    from basinwright import explaining

    return explaining.explain(Path(run_dir), outlet_id, column, depth=depth, table=table, where=where)


def route(
    elevation_m: ArrayLike, *, cell: float | tuple[float, float], corner: tuple[float, float] = (0.0, 0.0), crs: str
) -> xr.Dataset:
    """Condition and route a terrain that is in memory: the terrain half alone, without a project.

    Parameters
    ----------
    elevation_m : array, shape (rows, columns) [m]
        Rows from north to south, NaN in voids.
    cell : float or (width, height)
        Cell size in units of the CRS.
    corner : (x, y)
        Upper left corner of the raster.
    crs : str
        Its CRS, such as ``"EPSG:32614"``.

    Returns
    -------
    xarray.Dataset
        ``conditioned`` [m], depressions filled; ``flow_direction``, azimuth of the downstream neighbour [degree],
        65534 where water leaves; ``contributing_area`` [m2]. With coordinates and CRS.

    Raises
    ------
    TerrainError
        Where no cell has an elevation.

    Examples
    --------
    A plane that falls to the south by 1 m a cell: all water runs south, 180 degrees.

    >>> import numpy as np
    >>> plane = 10.0 - np.arange(4.0)[:, None] + np.zeros((4, 3))
    >>> routed = route(plane, cell=10.0, crs="EPSG:32614")
    >>> routed.flow_direction.values[:3].tolist()
    [[180, 180, 180], [180, 180, 180], [180, 180, 180]]
    >>> routed.contributing_area.values[:, 0].tolist()
    [100.0, 200.0, 300.0, 400.0]
    """
    import numpy as np
    from affine import Affine
    from pyproj import CRS

    from basinwright.grid import Grid
    from basinwright.terrain import condition_and_route

    elevation = np.asarray(elevation_m, dtype=np.float64)
    width, height = cell if isinstance(cell, tuple) else (cell, cell)
    transform = Affine(width, 0.0, corner[0], 0.0, -height, corner[1])
    grid = Grid(elevation.shape[0], elevation.shape[1], transform, CRS.from_user_input(crs).to_wkt())
    return _as_dataset(grid, condition_and_route(elevation, grid.dx_m, grid.dy_m, grid.cell_area_m2))


def storm(
    distribution: str,
    hours: Sequence[float] | NDArray[np.float64] | None = None,
    fractions: Sequence[float] | NDArray[np.float64] | None = None,
) -> Storm:
    """Return a design storm: a published distribution by its key, or the user's own.

    Parameters
    ----------
    distribution : str
        ``type_i``, ``type_ia``, ``type_ii``, ``type_iii``, or a name for `hours` and `fractions`.
    hours : array, optional
        Times from the storm's start, rising from 0 [h].
    fractions : array, optional
        Fraction of the depth fallen by then, from 0 to 1 [-].

    Returns
    -------
    Storm

    Raises
    ------
    KeyError
        Where the key is unknown; names the nearest.
    RangeError
        Where hours or fractions are no storm; names the row.

    Examples
    --------
    >>> float(storm("type_ii").fraction_at(12.0))
    0.663
    >>> storm("even", [0, 6], [0, 1]).duration_h
    6.0
    """
    from basinwright.registry import find
    from basinwright.storms import Storm

    if hours is not None and fractions is not None:
        import numpy as np

        return Storm(distribution, np.asarray(hours, dtype=np.float64), np.asarray(fractions, dtype=np.float64))
    built: Storm = find("storm", distribution).function()
    return built


_ABOUT: dict[str, tuple[str, str]] = {
    "conditioned": ("m", "elevation after conditioning"),
    "flow_direction": ("degree", "azimuth of the downstream neighbour on the grid; 65534: water leaves; 65533: sink"),
    "contributing_area": ("m2", "contributing area, the cell's own included"),
}


def _as_dataset(grid: Grid, terrain: Terrain) -> xr.Dataset:
    """Return the rasters of a routed terrain."""
    import numpy as np

    conditioned, area = terrain.conditioned_grid, terrain.area_grid
    return _georeferenced(
        {
            "conditioned": np.where(np.isfinite(conditioned), conditioned, np.float32(np.nan)),
            "flow_direction": terrain.azimuths(),
            "contributing_area": np.where(area > 0, area, np.nan),
        },
        grid,
    )


def _georeferenced(rasters: Mapping[str, NDArray[Any]], grid: Grid) -> xr.Dataset:
    """Return rasters with coordinates of cell centres and their CRS as a CF grid mapping."""
    import numpy as np
    import xarray as xr

    x, _ = grid.xy(np.zeros(grid.ncols), np.arange(grid.ncols))
    _, y = grid.xy(np.arange(grid.nrows), np.zeros(grid.nrows))
    t = grid.transform
    mapping = grid.crs.to_cf() | {"GeoTransform": f"{t.c!r} {t.a!r} 0.0 {t.f!r} 0.0 {t.e!r}"}
    axes = {axis["axis"]: axis for axis in grid.crs.cs_to_cf()}
    data = {
        name: (("y", "x"), values, {"units": _ABOUT[name][0], "long_name": _ABOUT[name][1]})
        for name, values in rasters.items()
    }
    dataset = xr.Dataset(
        data,
        coords={"x": ("x", x, axes.get("X", {})), "y": ("y", y, axes.get("Y", {})), "spatial_ref": ((), 0, mapping)},
    )
    for name in rasters:
        dataset[name].encoding["grid_mapping"] = "spatial_ref"
    return dataset
