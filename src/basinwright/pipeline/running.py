"""Runs a project, times a run again, checks, and starts new projects."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Sequence
from filecmp import cmp
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING

from basinwright.errors import BasinwrightError, InputRejected, RangeError
from basinwright.outputs.summary import Outcome
from basinwright.store import STORE, RunFolder, Store
from basinwright.tables import OUTLETS, as_text

if TYPE_CHECKING:
    from basinwright.editing import Edited, Record
    from basinwright.pipeline.cell_sizes import CellSize
    from basinwright.pipeline.inputs import Inputs
    from basinwright.pipeline.variants import Ground

Say = Callable[[str], None]


def _silent(text: str) -> None:
    del text


def run(
    project_file: Path,
    *,
    out: Path | None = None,
    jobs: int | None = None,
    resume: bool = False,
    overwrite: bool = False,
    summary_only: bool = False,
    also_at: Sequence[str] = (),
    say: Say = _silent,
) -> Outcome:
    """Do the whole job of a project.

    Parameters
    ----------
    project_file : Path
        The project file.
    out : Path, optional
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
    """
    from basinwright.pipeline.cell_sizes import read_sizes
    from basinwright.pipeline.inputs import inspect

    folder = RunFolder(out if out is not None else project_file.absolute().parent / "out")
    folder.refuse_occupied(resume=resume, overwrite=overwrite)
    say(f"Checking {project_file}")
    inputs = inspect(project_file)
    if jobs is not None:
        compute_section = inputs.project.compute.model_copy(update={"jobs": jobs})
        inputs.project = inputs.project.model_copy(update={"compute": compute_section})
    if also_at and "flow_direction" in inputs.mapped:
        what, fix = "published directions are of one cell size", "leave it out, or let directions be computed"
        raise InputRejected.one("command line", "--also-at", what, fix)
    sizes = read_sizes(also_at, inputs.plan.grid)
    with folder.locked():
        folder.refuse_occupied(resume=resume, overwrite=overwrite)
        edits = _edits_of(folder.final) if resume and not overwrite else None
        partial = folder.begin(keep=resume)
        try:
            with folder.building(keep=True):
                outcome = _build(inputs, folder, partial, resume, summary_only, sizes, edits, say)
        except InputRejected:
            folder.discard()
            raise
        except RangeError as error:
            folder.discard()
            what, fix = f"cannot be computed: {error}", "change what it names"
            raise InputRejected.one(project_file.name, "options", what, fix) from error
        folder.publish()
    return outcome


def _edits_of(folder: Path) -> tuple[Edited, Record] | None:
    """Return a person's edits of the run that a folder holds; None where there are none.

    Raises
    ------
    InputRejected
        Where an edit is impossible.
    """
    from basinwright import editing
    from basinwright.pipeline import manifest
    from basinwright.tables import read_csv

    if not folder.is_dir():
        return None
    about = manifest.read(folder)
    record = manifest.record(about)
    tables = {name: path for name in record.first if (path := folder / f"{name}.csv").is_file()}
    if all(read_csv(path).equals(record.first[name]) for name, path in tables.items()):
        return None
    project, settings = manifest.settings(about)
    return editing.apply(folder, record, project.project.units, settings.scheme), record


def _refuse_strangers(edits: Edited, record: Record, ground: Ground) -> None:
    """Refuse to carry edits onto terrain on which the edited outlets have other basins or paths.

    Raises
    ------
    InputRejected
        Saying what to do.
    """
    name = {stem: OUTLETS.column(stem).name(ground.settings.project.project.units) for stem in ("area", "path_length")}
    tables = record.first["outlets"], as_text(ground.tables["outlets"])
    before, now = ({row["outlet_id"]: row for row in table.to_dict("records")} for table in tables)
    touched = {outlet_id for outlet_id, _ in edits.segments | edits.shares}
    touched |= {outlet_id for _, outlet_id, _, _ in edits.held - record.supplied}
    for outlet_id in sorted(touched):
        old, new = before[outlet_id], now.get(outlet_id, {})
        if any(old.get(column) != new.get(column) for column in name.values()):
            what = f"holds a person's edits of outlet {outlet_id!r}, whose basin or path is another one now"
            fix = "drop the edits by adding --overwrite, or run into another folder"
            raise InputRejected.one("run", "folder", what, fix)


def _build(
    inputs: Inputs,
    folder: RunFolder,
    partial: Path,
    resume: bool,
    summary_only: bool,
    sizes: Sequence[CellSize],
    edits: tuple[Edited, Record] | None,
    say: Say,
) -> Outcome:
    """Build the run in its partial folder, the manifest last."""
    from basinwright.editing import Edited
    from basinwright.outputs import writing
    from basinwright.pipeline import cell_sizes, geometry, manifest, second_opinion, terrain_half, variants
    from basinwright.pipeline.machine import Machine
    from basinwright.report import write_report

    project, series = inputs.project, not summary_only
    store = Store(partial / STORE, folder.final / STORE if resume else None, say)
    say(Machine(project.compute, inputs.plan.grid).plan(partial, [size.cells for size in sizes], rasters=series))
    half = terrain_half.run(inputs, store)
    flags = half.flags()
    if project.audit.second_opinion != "none":
        flags += second_opinion.audit(inputs, half, store)
    shapes = None if summary_only else geometry.shapes(inputs, half, store)

    base = variants.ground_of(inputs, half, flags)
    own = Edited(base.tables, base.supplied)
    if edits is not None:
        _refuse_strangers(*edits, base)
        base, own = base.with_edits(*edits)
    depends_on = {
        "tables": half.keys(),
        "flags": [list(flag) for flag in flags],
        "options": project.model_dump(mode="json", exclude={"audit", "compute"}),
        "storm": inputs.design.tables,
        "regional": inputs.regional,
        "series": series,
    }
    with store.watched("hydrology", "Timing, runoff and hydrographs", depends_on):
        first = base.compute(series=series and edits is None)
        results = first if edits is None else base.compute(own, series=series)
    scenarios = variants.run_scenarios(inputs, store, partial, edits, series=series)
    variants.compare(results, scenarios, own.held, project)
    size_runs, compared = cell_sizes.run_sizes(inputs, sizes, first.tables["outlets"], store)
    cell_sizes.add(results, compared, project)

    say("Writing tables, layers and rasters")
    writing.write_tables(partial, results.tables, project)
    if shapes is not None:
        shapes.write(partial / "basins.gpkg", results.tables, project)
        writing.write_terrain(partial / "terrain", half.grid, half.routed(), half.elevation.array("elevation_m"))
    store.prune()
    about = manifest.describe(inputs, half, store, base, first, own.held, results, scenarios, size_runs, summary_only)
    if not summary_only:
        say("Writing the report")
        write_report(partial, about, jobs=project.compute.jobs)
    manifest.write(partial, about)
    say(store.most_memory())
    return Outcome(folder.final, project, results.tables["outlets"], results.flags, variants.told(scenarios))


def retime(run_dir: Path, *, revise: Callable[[Path], None] | None = None, say: Say = _silent) -> Outcome:
    """Compute timing, runoff and hydrographs again from a run's tables, edited or not.

    Parameters
    ----------
    run_dir : Path
        The run's folder: ``run.json``, ``outlets.csv``, ``segments.csv`` and ``cover_shares.csv`` are needed.
    revise : callable, optional
        Handed a copy of the run's folder by links, whose tables it may replace before they are read.
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
    """
    from basinwright import editing
    from basinwright.outputs import writing
    from basinwright.pipeline import cell_sizes, geometry, manifest, variants
    from basinwright.report import write_report

    folder = RunFolder(run_dir)
    folder.refuse_absent()
    with folder.locked():
        about = manifest.read(folder.final)
        project, settings = manifest.settings(about)
        say("Reading the tables")
        record = manifest.record(about)
        kept = manifest.scenarios(about)
        variants.refuse_edited(folder.final, {name: scenario["files"] for name, scenario in kept.items()})
        try:
            place = folder.final if revise is None else folder.begin_copy()
            if revise is not None:
                revise(place)
            edits = editing.apply(place, record, project.project.units, settings.scheme)
        except InputRejected:
            if revise is not None:
                folder.discard()
            raise
        say("Timing, runoff and hydrographs")
        summary_only = bool(about["summary_only"])
        base = manifest.ground(about, record, settings)
        try:
            results = base.compute(edits, series=not summary_only)
        except RangeError as error:
            what, fix = f"cannot be computed: {error}", "undo the edit that gave this number"
            raise InputRejected.one(str(folder.final), "tables", what, fix) from error
        say("Writing")
        with folder.building():
            partial = place if revise is not None else folder.begin_copy()
            scenarios = []
            for name, scenario in kept.items():
                say(f"{variants.stage_name(name)}: Timing, runoff and hydrographs")
                ground = manifest.scenario_ground(scenario, base)
                scenarios.append(
                    variants.compute_scenario(
                        name, ground, scenario["alignment"], partial, (edits, record), series=not summary_only
                    )
                )
            variants.compare(results, scenarios, edits.held, project)
            cell_sizes.add(results, manifest.cell_sizes(about), project)
            writing.write_tables(partial, results.tables, project)
            shapes = None if summary_only else geometry.stored(about, partial / STORE)
            if shapes is not None:
                (partial / "basins.gpkg").unlink(missing_ok=True)
                shapes.write(partial / "basins.gpkg", results.tables, project)
            elif (partial / "basins.gpkg").exists():
                say("basins.gpkg is left as it was: the run's store is not there")
            about = manifest.retimed(about, record, edits.held, results, scenarios)
            if not summary_only:
                say("Writing the report")
                write_report(partial, about, jobs=project.compute.jobs)
            manifest.write(partial, about)
        folder.publish()
    return Outcome(folder.final, project, results.tables["outlets"], results.flags, variants.told(scenarios))


def report(run_dir: Path, outlet_id: str | None = None, *, say: Say = _silent) -> Path:
    """Make the report of a finished run again, or the page of one of its outlets alone.

    Parameters
    ----------
    run_dir : Path
        The run's folder.
    outlet_id : str, optional
        The outlet whose page is wanted; the whole report where not given.
    say : callable
        Told what is happening.

    Returns
    -------
    Path
        The page to open.

    Raises
    ------
    InputRejected
        Where the folder holds no run, or no such outlet, or tables that were edited and not computed again.
    PublishError
        Where the report could not be put in place; the folder is then as it was.
    """
    from basinwright.pipeline import manifest
    from basinwright.report import write_outlet_page, write_report
    from basinwright.tables import read_csv

    folder = RunFolder(run_dir)
    folder.refuse_absent()
    with folder.locked():
        about = manifest.read(folder.final)
        for name, written in manifest.record(about).written.items():
            path = folder.final / f"{name}.csv"
            if path.is_file() and not read_csv(path).equals(written):
                what, fix = "was edited after it was computed", f"run: basinwright retime {run_dir}"
                raise InputRejected.one(str(path), "file", what, fix)
        say("Writing the report")
        with folder.building():
            partial = folder.begin_copy()
            if outlet_id is None:
                write_report(partial, about, jobs=int(about["project"]["compute"]["jobs"]))
                page = Path("report", "index.html")
            else:
                page = write_outlet_page(partial, about, outlet_id).relative_to(partial)
            manifest.write(partial, about)
        folder.publish()
    return folder.final / page


def check(project_file: Path) -> list[str]:
    """Validate every input of a project and say what was found; computes nothing.

    Raises
    ------
    InputRejected
        With every problem at once.
    """
    from basinwright.io.elevation import open_terrain
    from basinwright.pipeline import mapping
    from basinwright.pipeline.inputs import inspect

    inputs = inspect(project_file)
    mapping.check(inputs)
    terrain = open_terrain(inputs.dem, inputs.project.terrain.crs, inputs.project.terrain.vertical_unit)
    if terrain.damaged:
        raise InputRejected(terrain.damaged)
    grid = inputs.plan.grid.describe()
    return [
        f"{project_file}: ready to run",
        f"terrain: {grid['rows']} x {grid['columns']} cells of {grid['cell_size_m']:.4g} m, {grid['crs_name']}",
        f"outlets: {len(inputs.points)}; cover classes in scheme {inputs.scheme.name}: {len(inputs.scheme.classes)}",
        f"storm: {inputs.project.storm.distribution}, {', '.join(inputs.project.storm.periods)} years",
    ]


def start(folder: Path) -> Path:
    """Write a commented project file into a new or existing folder.

    Raises
    ------
    InputRejected
        Where the folder already holds one, or cannot be written.
    """
    path = folder / "project.toml"
    if path.exists():
        raise InputRejected.one(str(path), "file", "exists already", "choose another folder")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        path.write_bytes(files("basinwright").joinpath("project_template.toml").read_bytes())
    except OSError as error:
        raise InputRejected.one(
            str(path), "file", f"cannot be written ({error.strerror})", "choose another folder"
        ) from None
    return path


def copy_sample(folder: Path) -> Path:
    """Copy the sample project and return its project file.

    Raises
    ------
    InputRejected
        Where the folder holds something else, or cannot be written.
    """
    package = Path(__file__).parents[1]
    source = next(
        (
            place
            for place in (package / "sample_data", package.parents[1] / "sample_data")
            if (place / "project.toml").is_file()
        ),
        None,
    )
    if source is None:
        raise BasinwrightError("the sample data is not installed with this copy of basinwright: install it again")
    sample = [path for path in sorted(source.iterdir()) if path.is_file() and path.suffix != ".py"]
    try:
        folder.mkdir(parents=True, exist_ok=True)
        there = {path.name: path for path in folder.iterdir()}
        changed = [
            path.name for path in sample if path.name in there and not cmp(path, there[path.name], shallow=False)
        ]
        if changed or (there and "project.toml" not in there):
            what = f"holds another {changed[0]} than the sample's" if changed else "holds something else"
            raise InputRejected.one(str(folder), "folder", what, "choose a new or empty folder")
        for path in sample:
            if path.name not in there:
                shutil.copyfile(path, folder / path.name)
    except OSError as error:
        what = f"cannot be written ({error.strerror})"
        raise InputRejected.one(str(folder), "folder", what, "choose another folder") from None
    return folder / "project.toml"
