"""Everything a project names, found, opened and checked before anything is computed."""

from __future__ import annotations

import csv
import difflib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from basinwright.errors import InputRejected, Problem
from basinwright.project import Project, read_project
from basinwright.registry import methods
from basinwright.schemes import SHIPPED
from basinwright.store import file_sha256
from basinwright.units import UNITS, unit_of_suffix

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from basinwright.io.elevation import TerrainPlan
    from basinwright.io.vectors import PointTable
    from basinwright.schemes import Scheme
    from basinwright.storms import Storm

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
        The outlets.
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
    storm : Storm
    storm_table : dict or None
        Hours and fractions of the user's own distribution.
    files : dict
        Path, size and hash of the files described so far.
    """

    project: Project
    file: Path
    dem: list[Source]
    plan: TerrainPlan
    points: PointTable
    points_source: Source
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    expected_area_km2: NDArray[np.float64]
    capacity_m3s: NDArray[np.float64]
    overrides: dict[str, NDArray[np.float64]]
    cover: Source
    soils: Source | None
    scheme: Scheme
    storm: Storm
    storm_table: dict[str, list[float]] | None
    files: dict[str, dict[str, Any]] = field(default_factory=dict)

    def sources(self) -> list[Source]:
        """List every file that the project names."""
        project, folder = self.project, self.file.parent
        own_scheme = [] if self.scheme.name in SHIPPED else [folder / project.cover.scheme]
        own_storm = [folder / project.storm.table] if self.storm_table and project.storm.table else []
        layers = [source for source in (self.cover, self.soils) if source is not None]
        return [*self.dem, self.points_source, *layers, *own_scheme, *own_storm]

    def sha256(self, *sources: Source | None) -> list[str]:
        """Return the hashes of files, or the addresses of remote ones."""
        return [self.describe(source)["sha256"] for source in sources if source is not None]

    def describe(self, source: Source) -> dict[str, Any]:
        """Return path, size and hash of an input, read once."""
        name = str(source)
        if name not in self.files:
            if isinstance(source, Path):
                about = {"path": name, "bytes": source.stat().st_size, "sha256": file_sha256(source)}
            else:
                about = {"path": name, "bytes": None, "sha256": f"remote:{name}"}
            self.files[name] = about
        return self.files[name]


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
    design = problems.tried(lambda: _storm(project, folder))
    x = y = np.empty(0)
    if points is not None and plan is not None:
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
        points_source=points_source,
        x=x,
        y=y,
        expected_area_km2=expected,
        capacity_m3s=capacity,
        overrides=overrides,
        cover=cover,
        soils=soils,
        scheme=scheme,
        storm=design[0],
        storm_table=design[1],
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
    if not path.is_file():
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


def _scheme(project: Project, folder: Path) -> Scheme:
    from basinwright.schemes import load_scheme, read_scheme

    name = project.cover.scheme
    return load_scheme(name) if name in SHIPPED else read_scheme(folder / name)


def _storm(project: Project, folder: Path) -> tuple[Storm, dict[str, list[float]] | None]:
    """Build the design storm, from the register or from the user's table, which is returned too."""
    if project.storm.distribution == "table" and project.storm.table is not None:
        table = _hyetograph(folder / project.storm.table)
        return storm_of(project, table), table
    return storm_of(project, None), None


def _hyetograph(path: Path) -> dict[str, list[float]]:
    """Read a CSV of hour and fraction."""
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            reader = csv.DictReader(stream)
            names = [name.strip().lower() for name in reader.fieldnames or []]
            reader.fieldnames = names
            rows = list(reader)
    except FileNotFoundError:
        raise InputRejected.one(path.name, "file", "does not exist", f"looked for {path}; check storm.table") from None
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise InputRejected.one(
            path.name, "file", f"is not a readable CSV ({error})", "save it as CSV in UTF-8"
        ) from None
    missing = [name for name in ("hour", "fraction") if name not in names]
    if missing:
        raise InputRejected.one(
            path.name, "header", f"lacks {' and '.join(missing)}", "name the columns hour and fraction"
        )
    problems, table = [], {"hours": [0.0] * len(rows), "fractions": [0.0] * len(rows)}
    for number, row in enumerate(rows):
        for column, key in (("hour", "hours"), ("fraction", "fractions")):
            try:
                table[key][number] = float(row[column])
            except (TypeError, ValueError):
                place, what = f"row {number + 2}, {column}", f"{row[column]!r} is not a number"
                problems.append(Problem(path.name, place, what, "write a plain number"))
    if problems:
        raise InputRejected(problems)
    return table


def storm_of(project: Project, table: dict[str, list[float]] | None) -> Storm:
    """Build the design storm of a project; ``table`` is the user's own, where that is what it asks for.

    Raises
    ------
    InputRejected
        Where the distribution cannot serve the storm's duration, or the table is none.
    """
    from basinwright.errors import RangeError
    from basinwright.registry import find

    section = project.storm
    if section.distribution not in methods("storm"):
        raise InputRejected([])  # named by the check of methods
    function = find("storm", section.distribution).function
    if table is not None:
        storm: Storm = function(table["hours"], table["fractions"], file=section.table or "hyetograph")
        if abs(storm.duration_h - section.duration) > 1e-9:
            raise InputRejected.one(
                section.table or "hyetograph",
                "hour",
                f"runs for {storm.duration_h:g} h, not for storm.duration {section.duration:g} h",
                "let the table end at the storm's duration",
            )
        return storm
    try:
        published: Storm = function(section.duration)
    except RangeError as error:
        raise InputRejected.one("project", "storm.duration", str(error), 'use "24 h"') from None
    return published


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
