"""Runs a project, times a run again, checks, and starts new projects."""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Callable, Mapping
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING

from basinwright.errors import BasinwrightError, InputRejected, Problem, PublishError
from basinwright.hydrology import Columns, Settings, compute
from basinwright.outputs.summary import Outcome
from basinwright.store import STORE, RunFolder, Store

if TYPE_CHECKING:
    import pandas as pd

    from basinwright.editing import Cell
    from basinwright.pipeline.inputs import Inputs

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
    from basinwright.pipeline.inputs import inspect

    folder = RunFolder(out if out is not None else project_file.absolute().parent / "out")
    folder.refuse_occupied(resume=resume, overwrite=overwrite)
    say(f"Checking {project_file}")
    inputs = inspect(project_file)
    with folder.locked():
        folder.refuse_occupied(resume=resume, overwrite=overwrite)
        partial = folder.begin(keep=resume)
        try:
            outcome = _build(inputs, folder, partial, jobs, resume, summary_only, say)
        except InputRejected:
            shutil.rmtree(partial, ignore_errors=True)
            raise
        except OSError as error:
            raise PublishError(_no_room(folder.final, error)) from error
        folder.publish()
    return outcome


def _no_room(place: Path, error: OSError) -> str:
    reason = error.strerror or str(error)
    return f"{place}: --out: cannot be written ({reason}): make room or choose another folder, then add --resume"


def _build(
    inputs: Inputs, folder: RunFolder, partial: Path, jobs: int | None, resume: bool, summary_only: bool, say: Say
) -> Outcome:
    """Build the run in its partial folder, the manifest last."""
    from basinwright import editing
    from basinwright.outputs import writing
    from basinwright.pipeline import geometry, manifest, second_opinion, terrain_half
    from basinwright.tables import read_csv

    os.environ["NUMBA_NUM_THREADS"] = str(jobs if jobs is not None else inputs.project.compute.jobs)
    project = inputs.project
    store = Store(partial / STORE, folder.final / STORE if resume else None, say)
    half = terrain_half.run(inputs, store)
    flags = half.flags()
    if project.audit.second_opinion != "none":
        flags += second_opinion.audit(inputs, half, store)
    shapes = None if summary_only else geometry.shapes(inputs, half, store)

    say("Timing, runoff and hydrographs")
    started = time.perf_counter()
    base = {table.name: read_csv(half.tables.folder / f"{table.name}.csv") for table in editing.EDITABLE}
    held: set[Cell] = {(table, outlet_id, row, stem) for table, outlet_id, row, stem in half.tables.values("held")}
    settings = Settings(project, inputs.scheme, inputs.storm)
    results = compute(base, settings, terrain_flags=flags, held=held, series=not summary_only)
    seconds = time.perf_counter() - started

    say("Writing tables, layers and rasters")
    writing.write_tables(partial, results.tables, project)
    if shapes is not None:
        shapes.write(partial / "basins.gpkg", results.tables, project)
        writing.write_terrain(partial / "terrain", half.grid, half.routed())
    store.prune()
    record = editing.Record(base, _as_frames(results.tables), held)
    about = manifest.describe(inputs, half, store, record, flags, results, seconds, summary_only)
    manifest.write(partial, about)
    return Outcome(folder.final, project, results.tables["outlets"], results.flags)


def _as_frames(tables: Mapping[str, Columns]) -> dict[str, pd.DataFrame]:
    """Return the editable tables as the text that was written."""
    from basinwright import editing
    from basinwright.tables import csv_text, read_csv_text

    return {table.name: read_csv_text(csv_text(tables[table.name])) for table in editing.EDITABLE}


def retime(run_dir: Path, *, say: Say = _silent) -> Outcome:
    """Compute timing, runoff and hydrographs again from a run's tables, edited or not.

    Parameters
    ----------
    run_dir : Path
        The run's folder: ``run.json``, ``outlets.csv``, ``segments.csv`` and ``cover_shares.csv`` are needed.
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
    from basinwright.pipeline import geometry, manifest
    from basinwright.tables import read_csv

    folder = RunFolder(run_dir)
    with folder.locked():
        about = manifest.read(folder.final)
        project, settings = manifest.settings(about)
        missing = [table.name for table in editing.EDITABLE if not (folder.final / f"{table.name}.csv").is_file()]
        if missing:
            raise InputRejected(
                Problem(str(folder.final / f"{name}.csv"), "file", "does not exist", "put it back") for name in missing
            )
        say("Reading the tables")
        record = manifest.record(about)
        now = {table.name: read_csv(folder.final / f"{table.name}.csv") for table in editing.EDITABLE}
        tables, held, edited = editing.apply(now, record, project.project.units, project.storm.periods)
        say("Timing, runoff and hydrographs")
        summary_only = bool(about["summary_only"])
        flags = manifest.terrain_flags(about)
        results = compute(tables, settings, terrain_flags=flags, held=held, edited=edited, series=not summary_only)
        say("Writing")
        try:
            partial = folder.begin_copy()
            writing.write_tables(partial, results.tables, project)
            shapes = None if summary_only else geometry.stored(about, partial / STORE)
            if shapes is not None:
                (partial / "basins.gpkg").unlink(missing_ok=True)
                shapes.write(partial / "basins.gpkg", results.tables, project)
            elif (partial / "basins.gpkg").exists():
                say("basins.gpkg is left as it was: the run's store is not there")
            updated = manifest.retimed(about, editing.Record(record.base, _as_frames(results.tables), held), results)
            manifest.write(partial, updated)
        except OSError as error:
            raise PublishError(_no_room(folder.final, error)) from error
        folder.publish()
    return Outcome(folder.final, project, results.tables["outlets"], results.flags)


def check(project_file: Path) -> list[str]:
    """Validate every input of a project and say what was found; computes nothing.

    Raises
    ------
    InputRejected
        With every problem at once.
    """
    from basinwright.io.elevation import open_terrain
    from basinwright.pipeline.inputs import inspect

    inputs = inspect(project_file)
    open_terrain(inputs.dem, inputs.project.terrain.crs, inputs.project.terrain.vertical_unit)  # all void, impossible
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
    target = folder / "project.toml"
    if folder.exists() and (not folder.is_dir() or (any(folder.iterdir()) and not target.is_file())):
        raise InputRejected.one(str(folder), "DIR", "holds something else", "choose a new or empty folder")
    try:
        ignored = shutil.ignore_patterns("out", "__pycache__", ".*", "*.py")
        shutil.copytree(source, folder, dirs_exist_ok=True, ignore=ignored)
    except OSError as error:
        raise InputRejected.one(str(folder), "DIR", f"cannot be written ({error})", "choose another folder") from None
    return target
