"""Everything a project names, found, opened and checked before anything is computed."""

from __future__ import annotations

import difflib
import hashlib
from collections.abc import Callable, Container, Mapping
from dataclasses import dataclass, field, replace
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from basinwright.editing import LIMITS
from basinwright.errors import InputRejected, Problem, RangeError
from basinwright.io.rasters import check_raster, expand_paths, is_remote, refers_to_remote
from basinwright.pipeline import design_storm, regional
from basinwright.pipeline.design_storm import DesignStorm
from basinwright.pipeline.machine import scheduler_problems
from basinwright.project import SCENARIO_SECTIONS, Cover, Project, Reading, Soils, read_project, scenario_field
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
    mapped : dict of str to Source
        Mapped hydrography by option: ``stream_lines``, ``barriers``, ``sinks``, ``flow_direction``.
    design : DesignStorm
    regional : dict or None
        Table of regional regression equations as plain values, checked.
    files : dict
        Path, size and hash of the files described so far.
    scenarios : dict of str to Inputs
        The same with some inputs replaced, by the scenario's name.
    coarsened : int
        Cells of the terrain as read along a side of one of the working grid.
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
    mapped: dict[str, Source]
    design: DesignStorm
    regional: dict[str, Any] | None = None
    files: dict[str, dict[str, Any]] = field(default_factory=dict)
    scenarios: dict[str, Inputs] = field(default_factory=dict)
    coarsened: int = 1

    def sources(self) -> list[Source]:
        """List every file that the project names."""
        project, folder = self.project, self.file.parent
        tables = [
            None if self.scheme.name in SHIPPED else project.cover.scheme,
            project.storm.table,
            project.storm.ddf,
            project.check.regression if project.check is not None else None,
        ]
        layers = [self.cover, self.soils, self.impervious, *self.depth_rasters.values(), *self.mapped.values()]
        own = [
            *self.dem,
            self.points_source,
            *(source for source in layers if source is not None),
            *(folder / name for name in tables if name is not None),
        ]
        return list(dict.fromkeys([*own, *(source for other in self.scenarios.values() for source in other.sources())]))

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


class _Looking:
    """Looks at the inputs of a project and collects what is wrong, section by section as far as each is sound.

    Parameters
    ----------
    file : Path
        The project file.
    reading : Reading
        What could be read of it.
    """

    def __init__(self, file: Path, reading: Reading) -> None:
        self.file, self.folder = file, file.absolute().parent
        self.project = reading.project
        self.found = list(reading.problems)
        self.allow_remote = self.project.project is not None and self.project.project.allow_remote

    def add(self, file: str, key: str, what: str, fix: str) -> None:
        """Note a problem."""
        self.found.append(Problem(file, key, what, fix))

    def is_sound(self, *keys: str) -> bool:
        """Say whether nothing was found to be wrong with these options, or with a whole section."""
        return not any(
            problem.file == self.file.name and f"{problem.field}.".startswith(f"{key}.")
            for problem in self.found
            for key in keys
        )

    def tried(self, step: Callable[[], T]) -> T | None:
        """Return what a step gives, or None with its problems noted."""
        try:
            return step()
        except InputRejected as rejected:
            self.found += rejected.problems
            return None

    def source(self, key: str, text: str) -> Source | None:
        """Return the file that an option names; None where it is remote without leave, or not there."""
        if not self.may_be_named(key, text):
            return None
        if is_remote(text):
            return text
        path = self.folder / text
        if not exists(path):  # a folder may be a layer: a file geodatabase
            self.add(self.file.name, key, f"{text!r} does not exist", f"looked for {path}; check the name")
            return None
        return path if self.may_lead_to(key, path) else None

    def table(self, key: str, text: str) -> Path | None:
        """Return the CSV that an option names: always a local file."""
        path = self.source(key, text)
        if path is None or isinstance(path, Path):
            return path
        self.add(self.file.name, key, f"{text!r} is a URL or a virtual path", "tables are read from local files only")
        return None

    def terrain_files(self) -> list[Source]:
        """Return the rasters of the terrain; none where something is wrong with one of them."""
        texts = self.project.terrain.dem
        nameable = [self.may_be_named("terrain.dem", text) for text in texts]
        if not all(nameable):
            return []
        paths, found = expand_paths(texts, self.folder)
        self.found += found
        fine = [not isinstance(path, Path) or self.may_lead_to("terrain.dem", path) for path in paths]
        return list(paths) if all(fine) and not found else []

    def may_be_named(self, key: str, text: str) -> bool:
        """Say whether an option may name this; note a problem where it may not."""
        what = ""
        if text.startswith("<") and text.endswith(">") and text.count("<") == 1:
            what, fix = f"{text!r} is a placeholder", "write the name of your file"
        elif is_remote(text) and not self.allow_remote:
            what, fix = f"{text!r} is a URL or a virtual path", _LOCAL
        elif not text.strip() or exists(self.folder / text) is None:
            what, fix = f"{text[:60]!r} is no name of a file", "write the name of your file"
        if what:
            self.add(self.file.name, key, what, fix)
        return not what

    def may_lead_to(self, key: str, path: Path) -> bool:
        """Say whether a local file may stand for what it leads to; note a problem where it may not."""
        if self.allow_remote or not refers_to_remote(path):
            return True
        self.add(self.file.name, key, f"{path.name!r} leads to a URL or a virtual path", _LOCAL)
        return False


_LOCAL = "name a local file, or set project.allow_remote = true"


def exists(path: Path) -> bool | None:
    """Say whether a file or folder exists; None where the system cannot take such a name."""
    try:
        return "\0" not in str(path) and path.exists()
    except OSError:
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
    from pyproj.exceptions import ProjError

    reading = read_project(file)
    look = _Looking(file, reading)
    project = look.project
    _look_at_options(look)

    dem = look.terrain_files() if project.terrain is not None else []
    plan = _plan(look, dem) if dem else None
    points_source = look.source("outlets.source", project.outlets.source) if project.outlets is not None else None
    points = _outlets(look, points_source) if points_source is not None else None
    layers = _replaceable(look, plan)
    project = layers.project
    table = _regional(look, project)
    mapped = _mapped(look, plan) if project.terrain is not None else {}
    x = y = np.empty(0)
    aligned: dict[str, Any] = {}
    if points is not None and plan is not None:
        aligned = _points_alignment(points, plan.grid)
        try:
            points = points.in_crs(plan.grid.crs_wkt)
        except ProjError as error:
            fix = "give the outlets in a CRS that can be transformed to the terrain's"
            look.add(Path(points.file).name, "crs", f"no way from it to the terrain's ({error})", fix)
        x, y = np.asarray(points.x, dtype=np.float64), np.asarray(points.y, dtype=np.float64)
        rows, _ = plan.grid.rowcol(x, y)
        if (rows < 0).all():
            fix = "check the coordinate systems of both"
            look.add(Path(points.file).name, "geometry", "every outlet lies outside the terrain", fix)
    expected, capacity, overrides = _attributes(project, points, look)
    scenarios = [
        _scenario(file, number, whole, layers, plan, look)
        for number, whole in enumerate(reading.scenarios, start=1)
        if len(project.scenario) == len(reading.scenarios) and project.storm is not None and whole.storm is not None
    ]
    if look.found or plan is None or points is None or points_source is None or layers.cover is None:
        raise InputRejected(look.found)
    if layers.scheme is None or layers.design is None:
        raise InputRejected(look.found)
    inputs = Inputs(
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
        mapped=mapped,
        **vars(layers),
        regional=table,
    )
    for entry, changed in zip(project.scenario, scenarios, strict=True):
        inputs.scenarios[entry.name] = replace(inputs, scenarios={}, **vars(changed))
    return inputs


@dataclass
class _Replaceable:
    """The inputs that a scenario may replace, under their names in `Inputs`; None where something is wrong with one."""

    project: Project
    cover: Source | None
    soils: Source | None
    scheme: Scheme | None
    impervious: Source | None
    depth_rasters: dict[str, Source]
    design: DesignStorm | None


def _replaceable(
    look: _Looking, plan: TerrainPlan | None, base: _Replaceable | None = None, sections: Container[str] = ()
) -> _Replaceable:
    """Find and open what a scenario may replace: all of it, or of some sections only and the rest as in the base."""
    project = look.project
    if base is not None:
        found = replace(base, project=project)
    else:
        found = _Replaceable(project, None, None, None, None, {}, None)
        sections = SCENARIO_SECTIONS
    if "cover" in sections:
        section = project.cover
        found.cover = _layer(look, "cover", section, plan)
        found.scheme = _scheme(look) if section is not None and look.is_sound("cover.scheme") else None
        raster = section.impervious if section is not None else None
        found.impervious = None if raster is None else _raster(look, "cover.impervious", raster, plan)
    if "soils" in sections:
        found.soils = _layer(look, "soils", project.soils, plan)
    if "storm" in sections and project.storm is not None:
        design = found.design = _design(look) if look.is_sound("storm") else None
        if design is not None and design.ddf is not None:
            found.project = look.tried(partial(design_storm.with_depths, project, design.ddf)) or project
        rasters = {
            period: _raster(look, f"storm.depth_rasters.{period}", text, plan)
            for period, text in project.storm.depth_rasters.items()
        }
        found.depth_rasters = {period: path for period, path in rasters.items() if path is not None}
    return found


def _scenario(
    file: Path, number: int, whole: Project, layers: _Replaceable, plan: TerrainPlan | None, look: _Looking
) -> _Replaceable:
    """Look at the inputs that a scenario, ``whole`` with all it takes over, replaces; name its problems by its keys."""
    base = layers.project
    given = base.scenario[number - 1]
    sections = {name for name in SCENARIO_SECTIONS if getattr(given, name) is not None}
    own = _Looking(file, Reading(whole, []))
    _look_at_options(own)
    changed = _replaceable(own, plan, layers, sections)
    storm = changed.project.storm if "storm" in sections else base.storm
    if "two_year_depth" not in (given.storm or {"two_year_depth": None}) and base.storm.has_two_year_depth:
        storm = storm.model_copy(update={"two_year_depth": base.storm.two_year_depth_mm})
    if storm.periods != base.storm.periods:
        what = (
            f"return periods {', '.join(storm.periods) or 'none'}, where the base has {', '.join(base.storm.periods)}"
        )
        own.add(file.name, "storm.depths", what, "give the base's, written alike, so that peaks can be compared")
    changed.project = changed.project.model_copy(update={"storm": storm})
    known = {(problem.field, problem.what) for problem in look.found}
    for problem in own.found:
        if (problem.field, problem.what) in known:
            continue
        if problem.file not in (file.name, "project"):
            look.found.append(problem)
        else:
            look.found.append(replace(problem, file=file.name, field=scenario_field(number, problem.field)))
    return changed


def _look_at_options(look: _Looking) -> None:
    """Name what the project asks for that no register knows, and time steps that cannot be."""
    from basinwright.hydrograph import unit_duration_s
    from basinwright.timing import bankfull_regions

    project = look.project
    if project.compute is not None:
        look.found += scheduler_problems(look.file.name, project.compute.scheduler)
    asked = (
        (project.timing, "timing", "adopt", list(methods("timing"))),
        (project.unit_hydrograph, "unit_hydrograph", "shape", list(methods("unit_hydrograph"))),
        (project.storm, "storm", "distribution", list(methods("storm"))),
        (project.channel, "channel", "bankfull_region", [*bankfull_regions(), "own"]),
    )
    for section, name, key, known in asked:
        value = getattr(section, key, None)
        if value is not None and value not in known and look.is_sound(f"{name}.{key}"):
            near = difflib.get_close_matches(value, known, n=1)
            hint = f"nearest: {near[0]!r}; " if near else ""
            fix = f"{hint}use one of {', '.join(known)}"
            look.add(look.file.name, f"{name}.{key}", f"{value!r} is unknown", fix)
    if project.storm is None or project.unit_hydrograph is None:
        return
    step = project.unit_hydrograph.time_step
    try:
        unit_duration_s(1.0, project.storm.duration)
    except RangeError as error:
        look.add(look.file.name, "storm.duration", str(error), "give a duration such as 24 h")
        return
    try:
        unit_duration_s(1.0, project.storm.duration, None if isinstance(step, str) else step)
    except RangeError as error:
        look.add(look.file.name, "unit_hydrograph.time_step", str(error), 'give a step that does, or "auto"')


def _plan(look: _Looking, dem: list[Source]) -> TerrainPlan | None:
    from basinwright.io.elevation import plan_terrain

    plan, found = plan_terrain(dem, look.project.terrain.crs, look.project.terrain.vertical_unit)
    look.found += found
    return plan


def _outlets(look: _Looking, path: Source) -> PointTable | None:
    from basinwright.io.vectors import read_points

    options = look.project.outlets
    wanted = [name for name in (options.expected_area, options.capacity, options.capacity_basis) if name]
    return look.tried(
        lambda: read_points(
            path,
            layer=options.layer,
            crs=options.crs,
            id_field=options.id,
            name_field=options.name,
            other_fields=wanted,
        )
    )


def _layer(look: _Looking, name: str, section: Cover | Soils | None, plan: TerrainPlan | None) -> Source | None:
    """Find and check the cover or the soils."""
    from basinwright.io.vectors import check_polygons

    if section is None:
        return None
    if section.raster is not None:
        return _raster(look, f"{name}.raster", section.raster, plan)
    if section.vector is None:
        return None
    path = look.source(f"{name}.vector", section.vector)
    if path is not None and section.field is not None:
        look.found += check_polygons(path, section.field)
    return path


def _raster(look: _Looking, key: str, text: str, plan: TerrainPlan | None) -> Source | None:
    """Find and check a raster."""
    path = look.source(key, text)
    if path is not None:
        look.found += check_raster(path, plan.grid if plan else None)
    return path


def _mapped(look: _Looking, plan: TerrainPlan | None) -> dict[str, Source]:
    """Find and check mapped hydrography, by option."""
    from basinwright.io.hydrography import check_layer, check_same_cells, read_lines, read_sinks

    section, grid, sources = look.project.terrain, plan.grid if plan else None, {}
    for key, kind in (("stream_lines", "lines"), ("barriers", "lines"), ("sinks", "polygons"), ("flow_direction", "")):
        text = getattr(section, key)
        path = None if text is None else look.source(f"terrain.{key}", text)
        if path is None:
            continue
        sources[key] = path
        if kind:
            column = roughness_column(look.project) if key == "stream_lines" else None
            if grid is None:
                look.found += check_layer(path, kind, column)
            elif kind == "lines":
                look.tried(partial(read_lines, path, grid, column, LIMITS["roughness"]))
            else:
                look.tried(partial(read_sinks, path, grid))
        elif plan is not None and plan.reason:
            what = f"terrain is resampled ({plan.reason}), and directions cannot be"
            look.add(look.file.name, f"terrain.{key}", what, "give terrain and directions in a CRS of true areas")
        elif plan is not None:
            look.found += check_same_cells(path, plan.grid)
    return sources


def roughness_column(project: Project) -> str | None:
    """Return the column of the stream lines that holds Manning's n; None where it comes from elsewhere."""
    roughness = project.channel.roughness if project.channel is not None else None
    return roughness if isinstance(roughness, str) and roughness != "jarrett" else None


def _scheme(look: _Looking) -> Scheme | None:
    """Load the land-cover scheme, one of the shipped or a table of the user's."""
    from basinwright.schemes import load_scheme, read_scheme

    name = look.project.cover.scheme
    if name in SHIPPED:
        return load_scheme(name)
    path = look.table("cover.scheme", name)
    return None if path is None else look.tried(partial(read_scheme, path))


def _design(look: _Looking) -> DesignStorm | None:
    """Build the design storm from the register and the user's tables."""
    section = look.project.storm
    tables = {"storm.table": section.table, "storm.ddf": section.ddf}
    named = [look.table(key, text) is not None for key, text in tables.items() if text is not None]
    return look.tried(partial(design_storm.read, look.project, look.folder)) if all(named) else None


def _check_rising(
    project: Project, points: PointTable, overrides: Mapping[str, NDArray[np.float64]], look: _Looking
) -> None:
    """Note where a supplied depth is under that of a more frequent storm, as far as depths are known by now."""
    depths = project.storm.depths if project.storm is not None else {}
    deepest, before = np.zeros(len(points)), ""
    for period in sorted(depths, key=float):
        supplied = overrides.get(f"depth_{period}yr", np.full(len(points), np.nan))
        here = np.where(np.isnan(supplied), depths[period], supplied)
        for i in np.flatnonzero(here < deepest).tolist():
            what = f"falls from {deepest[i]:.4g} mm at {before} years to {here[i]:.4g} mm"
            fix = "depths must not fall with the return period: check the depths of this outlet"
            look.add(Path(points.file).name, f"outlet {points.ids[i]}, depth of {period} years", what, fix)
        deepest, before = here, period


def _regional(look: _Looking, project: Project) -> dict[str, Any] | None:
    """Read and check the table of regional regression equations; None where there is none."""
    text = project.check.regression if project.check is not None else None
    path = look.table(regional.KEY, text) if text is not None else None
    if path is None:
        return None
    table = look.tried(partial(regional.read, path))
    if table is not None and project.storm is not None and project.storm.periods:
        look.tried(partial(regional.equations, project, table))
    return table


def _attributes(
    project: Project, points: PointTable | None, look: _Looking
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
        look.found += found
        for i in np.flatnonzero(~np.isnan(values) & ~((values > low) & (values <= high))).tolist():
            fix = f"give a number over {low:g}" + (f", at most {high:g}" if np.isfinite(high) else "")
            look.add(source, f"outlet {points.ids[i]}, {name}", f"{values[i]:g} is out of range", fix)
        return values * factor

    overrides: dict[str, NDArray[np.float64]] = {}
    if "curve_number" in points.attributes:
        overrides["curve_number"] = numbers("curve_number", 1.0, 0.0, 100.0)
    if "tc_h" in points.attributes:
        overrides["tc_h"] = numbers("tc_h", 1.0, *LIMITS["tc_h"])
    for period in project.storm.periods if project.storm is not None else ():
        names = {f"depth_{period}yr_{unit}": UNITS[unit][1] for unit in ("in", "mm")}
        given = [name for name in names if name in points.attributes]
        if len(given) == 2:
            look.add(source, " and ".join(given), "both columns are there", "keep one of them")
        for name in given[:1]:
            overrides[f"depth_{period}yr"] = numbers(name, names[name], 0.0, 1e5)
    _check_rising(project, points, overrides, look)
    options = project.outlets
    return column(options.expected_area, "area"), column(options.capacity, "flow"), overrides
