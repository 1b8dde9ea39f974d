"""Everything a project names, found, opened and checked before anything is computed."""

from __future__ import annotations

import difflib
import hashlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from basinwright.errors import InputRejected, Problem
from basinwright.pipeline import design_storm
from basinwright.pipeline.design_storm import DesignStorm
from basinwright.project import Project, read_project
from basinwright.registry import methods
from basinwright.schemes import SHIPPED
from basinwright.store import file_sha256
from basinwright.units import UNITS, unit_of_suffix

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from basinwright.grid import Grid
    from basinwright.io.elevation import TerrainPlan
    from basinwright.io.vectors import PointTable
    from basinwright.schemes import Scheme

T = TypeVar("T")
Source = Path | str
"""A local file, or the address of a remote one where the project allows it."""


@dataclass
class Inputs:
    """A project with its inputs opened.

    Parameters
    ----------
    project : Project
    file : Path
        The project file.
    dem : list of Source
        The terrain's rasters.
    plan : TerrainPlan
        The working grid and how the terrain comes onto it.
    points : PointTable
        The outlets, in the working CRS.
    points_alignment : dict
        How they came into it.
    points_source : Source
        The file they come from.
    x, y : (n,) arrays
        The outlets in the working CRS.
    expected_area_km2, capacity_m3s : (n,) arrays
        NaN where not given.
    overrides : dict of str to (n,) array
        Supplied values by column stem of outlets.csv, in the units used inside, NaN where not given.
    cover, soils : Source or None
        Land-cover and soils layer; None for soils of one group everywhere.
    scheme : Scheme
    impervious : Source or None
        Raster of percent impervious.
    depth_rasters : dict of str to Source
        Raster of storm depth by return period.
    design : DesignStorm
    files : dict
        Path, size and hash of the files described so far.
    """

    project: Project
    file: Path
    dem: list[Source]
    plan: TerrainPlan
    points: PointTable
    points_alignment: dict[str, Any]
    points_source: Source
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    expected_area_km2: NDArray[np.float64]
    capacity_m3s: NDArray[np.float64]
    overrides: dict[str, NDArray[np.float64]]
    cover: Source
    soils: Source | None
    scheme: Scheme
    impervious: Source | None
    depth_rasters: dict[str, Source]
    design: DesignStorm
    files: dict[str, dict[str, Any]] = field(default_factory=dict)

    def sources(self) -> list[Source]:
        """List every file that the project names."""
        project, folder = self.project, self.file.parent
        tables = [None if self.scheme.name in SHIPPED else project.cover.scheme, project.storm.table, project.storm.ddf]
        layers = [self.cover, self.soils, self.impervious, *self.depth_rasters.values()]
        return [
            *self.dem,
            self.points_source,
            *(source for source in layers if source is not None),
            *(folder / name for name in tables if name is not None),
        ]

    def alignment(self) -> list[dict[str, Any]]:
        """Say how the outlets and the rasters that are averaged over basins come onto the grid."""
        from basinwright.io.rasters import align_record

        grid = self.plan.grid
        shares = [] if self.impervious is None else [align_record(self.impervious, grid)]
        depths = [align_record(raster, grid, "bilinear") for raster in self.depth_rasters.values()]
        return [self.points_alignment, *shares, *depths]

    def sha256(self, *sources: Source | None) -> list[str]:
        """Return the hashes of files and of what belongs to them, or the addresses of remote ones."""
        described = [self.describe(source) for source in sources if source is not None]
        return [part["sha256"] for about in described for part in (about, *about.get("parts", ()))]

    def describe(self, source: Source) -> dict[str, Any]:
        """Return path, size and hash of an input, read once; where it is of several files, those of each part too."""
        name = str(source)
        if name not in self.files:
            if isinstance(source, Path):
                about = _described(source)
            else:
                about = {"path": name, "bytes": None, "sha256": f"remote:{name}"}
            self.files[name] = about
        return self.files[name]


def _points_alignment(points: PointTable, grid: Grid) -> dict[str, Any]:
    from pyproj import CRS

    from basinwright.io.rasters import crs_label

    return {
        "path": Path(points.file).name,
        "features": len(points),
        "crs": crs_label(CRS.from_wkt(points.crs_wkt)),
        "method": f"points, to {crs_label(grid.crs)}",
    }


BESIDE = (".shx", ".dbf", ".prj", ".cpg", ".qpj", ".hdr", ".tfw", ".wld", ".aux")
"""Endings of the files that hold part of a layer of the same name: attributes, CRS, georeference."""


def _described(source: Path) -> dict[str, Any]:
    """Return path, size and hash of a file or folder, and of each of its parts."""

    def one(path: Path) -> dict[str, Any]:
        return {"path": str(path), "bytes": path.stat().st_size, "sha256": file_sha256(path)}

    if source.is_dir():
        parts = [one(path) for path in sorted(source.rglob("*")) if path.is_file()]
        digest = hashlib.sha256("".join(part["sha256"] for part in parts).encode()).hexdigest()
        return {"path": str(source), "bytes": sum(p["bytes"] for p in parts), "sha256": digest, "parts": parts}
    beside = [source.with_suffix(ending) for ending in BESIDE] + [source.with_name(f"{source.name}.aux.xml")]
    parts = [one(path) for path in beside if path != source and path.is_file()]
    return {**one(source), "parts": parts} if parts else one(source)


class _Problems:
    """Collects problems while as much as possible is still looked at."""

    def __init__(self) -> None:
        self.found: list[Problem] = []

    def add(self, file: str, key: str, what: str, fix: str) -> None:
        self.found.append(Problem(file, key, what, fix))

    def tried(self, step: Callable[[], T]) -> T | None:
        """Return what a step gives, or None with its problems noted."""
        try:
            return step()
        except InputRejected as rejected:
            self.found += rejected.problems
            return None


def inspect(file: Path) -> Inputs:
    """Read a project file and open everything it names.

    Parameters
    ----------
    file : Path
        The project file.

    Returns
    -------
    Inputs

    Raises
    ------
    InputRejected
        With every problem of the file and of its inputs that can be known before computing.
    """
    project = read_project(file)
    problems = _Problems()
    problems.found += _unknown_methods(project, file.name)
    folder = file.absolute().parent

    dem = _terrain_files(project, file, problems)
    plan = _plan(project, dem, problems) if dem else None
    points_source = _source(project, file, "outlets.source", project.outlets.source, problems)
    points = _outlets(project, points_source, problems) if points_source is not None else None
    cover = _layer(
        project, file, "cover", project.cover.raster, project.cover.vector, project.cover.field, plan, problems
    )
    soils = _layer(
        project, file, "soils", project.soils.raster, project.soils.vector, project.soils.field, plan, problems
    )
    scheme = problems.tried(lambda: _scheme(project, folder))
    design = problems.tried(lambda: design_storm.read(project, folder))
    if design is not None and design.ddf is not None:
        project = problems.tried(partial(design_storm.with_depths, project, design.ddf)) or project
    rasters = {
        "cover.impervious": project.cover.impervious,
        **{f'storm.depth_rasters."{period}"': text for period, text in project.storm.depth_rasters.items()},
    }
    percent = {key: _raster(project, file, key, text, plan, problems) for key, text in rasters.items() if text}
    x = y = np.empty(0)
    aligned: dict[str, Any] = {}
    if points is not None and plan is not None:
        aligned = _points_alignment(points, plan.grid)
        points = points.in_crs(plan.grid.crs_wkt)
        x, y = np.asarray(points.x, dtype=np.float64), np.asarray(points.y, dtype=np.float64)
        rows, _ = plan.grid.rowcol(x, y)
        if (rows < 0).all():
            source = Path(points.file).name
            problems.add(
                source, "geometry", "every outlet lies outside the terrain", "check the coordinate systems of both"
            )
    expected, capacity, overrides = _attributes(project, points, problems)
    if (
        problems.found
        or plan is None
        or points is None
        or points_source is None
        or cover is None
        or scheme is None
        or design is None
    ):
        raise InputRejected(problems.found)
    return Inputs(
        project=project,
        file=file.absolute(),
        dem=dem,
        plan=plan,
        points=points,
        points_alignment=aligned,
        points_source=points_source,
        x=x,
        y=y,
        expected_area_km2=expected,
        capacity_m3s=capacity,
        overrides=overrides,
        cover=cover,
        soils=soils,
        scheme=scheme,
        impervious=percent.get("cover.impervious"),
        depth_rasters={
            period: path
            for period in project.storm.depth_rasters
            if (path := percent[f'storm.depth_rasters."{period}"']) is not None
        },
        design=design,
    )


def _unknown_methods(project: Project, file: str) -> Iterator[Problem]:
    """Name what the project asks for that no register knows."""
    from basinwright.timing import bankfull_regions

    asked = (
        ("timing.adopt", project.timing.adopt, list(methods("timing"))),
        ("unit_hydrograph.shape", project.unit_hydrograph.shape, list(methods("unit_hydrograph"))),
        ("storm.distribution", project.storm.distribution, list(methods("storm"))),
        ("channel.bankfull_region", project.channel.bankfull_region, [*bankfull_regions(), "own"]),
    )
    for key, value, known in asked:
        if value not in known:
            near = difflib.get_close_matches(value, known, n=1)
            hint = f"nearest: {near[0]!r}; " if near else ""
            yield Problem(file, key, f"{value!r} is unknown", f"{hint}use one of {', '.join(known)}")


def _source(project: Project, file: Path, key: str, text: str, problems: _Problems) -> Source | None:
    """Return the file that an option names, refusing what is remote without leave and what is not there."""
    from basinwright.io.rasters import is_remote, refers_to_remote

    allowed = project.project.allow_remote
    fix = "name a local file, or set project.allow_remote = true"
    if is_remote(text):
        if allowed:
            return text
        problems.add(file.name, key, f"{text!r} is a URL or a virtual path", fix)
        return None
    path = file.absolute().parent / text
    if not path.exists():  # a folder may be a layer: a file geodatabase
        problems.add(file.name, key, f"{text!r} does not exist", f"looked for {path}; check the name")
        return None
    if not allowed and refers_to_remote(path):
        problems.add(file.name, key, f"{text!r} points to a URL or a virtual path", fix)
        return None
    return path


def _terrain_files(project: Project, file: Path, problems: _Problems) -> list[Source]:
    from basinwright.io.rasters import expand_paths, is_remote, refers_to_remote

    paths, found = expand_paths(project.terrain.dem, file.absolute().parent)
    problems.found += found
    if not project.project.allow_remote:
        for path in paths:
            if is_remote(str(path)) or (isinstance(path, Path) and refers_to_remote(path)):
                problems.add(
                    file.name,
                    "terrain.dem",
                    f"{str(path)!r} is a URL or a virtual path",
                    "name a local file, or set project.allow_remote = true",
                )
                return []
    return [] if found else list(paths)


def _plan(project: Project, dem: list[Source], problems: _Problems) -> TerrainPlan | None:
    from basinwright.io.elevation import plan_terrain

    plan, found = plan_terrain(dem, project.terrain.crs, project.terrain.vertical_unit)
    problems.found += found
    return plan


def _outlets(project: Project, path: Source, problems: _Problems) -> PointTable | None:
    from basinwright.io.vectors import read_points

    options = project.outlets
    wanted = [name for name in (options.expected_area, options.capacity, options.capacity_basis) if name]
    return problems.tried(
        lambda: read_points(
            path,
            layer=options.layer,
            crs=options.crs,
            id_field=options.id,
            name_field=options.name,
            other_fields=wanted,
        )
    )


def _layer(
    project: Project,
    file: Path,
    section: str,
    raster: str | None,
    vector: str | None,
    column: str | None,
    plan: TerrainPlan | None,
    problems: _Problems,
) -> Source | None:
    """Find and check a cover or soils layer."""
    from basinwright.io.rasters import check_raster
    from basinwright.io.vectors import check_polygons

    kind, text = ("raster", raster) if raster is not None else ("vector", vector)
    if text is None:
        return None
    path = _source(project, file, f"{section}.{kind}", text, problems)
    if path is not None:
        found = (
            check_raster(path, plan.grid if plan else None) if kind == "raster" else check_polygons(path, str(column))
        )
        problems.found += found
    return path


def _raster(
    project: Project, file: Path, key: str, text: str, plan: TerrainPlan | None, problems: _Problems
) -> Source | None:
    """Find and check a raster of values."""
    from basinwright.io.rasters import check_raster

    path = _source(project, file, key, text, problems)
    if path is not None:
        problems.found += check_raster(path, plan.grid if plan else None)
    return path


def _scheme(project: Project, folder: Path) -> Scheme:
    from basinwright.schemes import load_scheme, read_scheme

    name = project.cover.scheme
    return load_scheme(name) if name in SHIPPED else read_scheme(folder / name)


def _attributes(
    project: Project, points: PointTable | None, problems: _Problems
) -> tuple[NDArray[np.float64], NDArray[np.float64], dict[str, NDArray[np.float64]]]:
    """Read the outlets' expected areas, capacities and supplied values, in the units used inside."""
    empty = np.empty(0)
    if points is None:
        return empty, empty, {}
    source = Path(points.file).name
    blank = np.full(len(points), np.nan)

    def column(name: str | None, dimension: str) -> NDArray[np.float64]:
        if name is None or name not in points.attributes:
            return blank
        unit = unit_of_suffix(name, dimension)
        return numbers(name, unit[1] if unit else 1.0, 0.0, np.inf)

    def numbers(name: str, factor: float, low: float, high: float) -> NDArray[np.float64]:
        values, found = points.numbers(name)
        problems.found += found
        for i in np.flatnonzero(~np.isnan(values) & ~((values > low) & (values <= high))).tolist():
            problems.add(
                source,
                f"outlet {points.ids[i]}, {name}",
                f"{values[i]:g} is out of range",
                f"give a number over {low:g}" + (f", at most {high:g}" if np.isfinite(high) else ""),
            )
        return values * factor

    overrides: dict[str, NDArray[np.float64]] = {}
    if "curve_number" in points.attributes:
        overrides["curve_number"] = numbers("curve_number", 1.0, 0.0, 100.0)
    if "tc_h" in points.attributes:
        overrides["tc_h"] = numbers("tc_h", 1.0, 0.0, np.inf)
    for period in project.storm.periods:
        for suffix, factor in (("in", UNITS["in"][1]), ("mm", 1.0)):
            if (name := f"depth_{period}yr_{suffix}") in points.attributes:
                overrides[f"depth_{period}yr"] = numbers(name, factor, 0.0, np.inf)
    return column(project.outlets.expected_area, "area"), column(project.outlets.capacity, "flow"), overrides
