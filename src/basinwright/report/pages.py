"""Makes the files of a report: templates filled, pages of many outlets in parallel."""

from __future__ import annotations

import base64
import hashlib
import itertools
import os
import pickle
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import ExitStack
from dataclasses import replace
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from basinwright.errors import BasinwrightError
from basinwright.progress import tell
from basinwright.report import charts, comparisons, confidence, context, maps, palette, words
from basinwright.report.reading import Outlet, Run, read_run

if TYPE_CHECKING:
    from jinja2 import Environment

ONE_FILE = 25
"""Up to so many outlets the report is one file; above, an index and a page for each."""
FOLDER, PAGES, INDEX = "report", "outlets", "index.html"


def write_report(folder: Path, about: Mapping[str, Any], *, jobs: int = 1) -> None:
    """Write the report of a run into its folder, in place of an earlier one.

    Parameters
    ----------
    folder : Path
        The run's folder with its tables, and layers and terrain where it keeps them.
    about : mapping
        The manifest.
    jobs : int
        Processes that make pages where there are many; the pages do not depend on it.

    Raises
    ------
    InputRejected
        Where the tables are not there.
    BasinwrightError
        Where a process that makes pages fails.
    """
    run = read_run(folder, about)
    target = folder / FOLDER
    shutil.rmtree(target, ignore_errors=True)
    target.mkdir()
    if len(run.outlets) <= ONE_FILE:
        _write(target / INDEX, _index(run, run.outlets))
        return
    _write(target / INDEX, _index(run, []))
    (target / PAGES).mkdir()
    _write_pages(run, target / PAGES, jobs)


def write_outlet_page(folder: Path, about: Mapping[str, Any], outlet_id: str) -> Path:
    """Write the page of one outlet alone and return its path.

    Raises
    ------
    InputRejected
        Where the run has no such outlet.
    """
    run = read_run(folder, about)
    outlet = run.outlet(outlet_id)
    path = folder / FOLDER / PAGES / outlet.file
    path.parent.mkdir(parents=True, exist_ok=True)
    _write(path, outlet_page(run, outlet, _neighbours(run, outlet)))
    return path


def _write(path: Path, text: str) -> None:
    path.unlink(missing_ok=True)  # it may be a link to a file of the run before
    path.write_text(text, encoding="utf-8", newline="\n")


@cache
def _templates() -> Environment:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("basinwright.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.globals.update(
        legend_line=maps.legend_line, legend_mark=maps.legend_mark, regime=palette.regime, marks=palette.MARKS,
        short=words.short, page_parts=page_parts(),
    )  # fmt: skip
    return environment


def page_parts() -> dict[str, Markup | str]:
    """Return style and script of every page, and the policy that lets nothing else run or be fetched."""
    style, script = (
        files(__package__).joinpath("templates", name).read_text(encoding="utf-8")
        for name in ("report.css", "report.js")
    )
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    policy = f"default-src 'none'; img-src data:; style-src 'unsafe-inline'; script-src 'sha256-{digest}'"
    return {"style": Markup(style), "script": Markup(script), "policy": policy}  # files of this package


def _index(run: Run, outlets: list[Outlet]) -> str:
    """Return the index page, with the pages of these outlets below it."""
    one_file = bool(outlets)

    def link(outlet: Outlet) -> str:
        return f"#{outlet.anchor}" if one_file else f"{PAGES}/{outlet.file}"

    worries = context.worries(run)
    shown = worries if len(run.outlets) <= ONE_FILE else worries[: context.FIRST_LOOK]
    return _templates().get_template("index.html").render(
        title=words.short(run.about["name"], 120),
        headline=context.headline(run),
        map=maps.index_map(run, link, context.over_capacity) if run.with_maps else None,
        severities=[key for key in palette.MARKS if any(outlet.severity == key for outlet in run.outlets)],
        any_over=any(context.over_capacity(outlet) for outlet in run.outlets),
        worries=[context.worry(run, outlet) for outlet in shown],
        more_worries=len(worries) - len(shown),
        columns=context.index_columns(run),
        rows=[(link(outlet), outlet.severity, context.index_row(run, outlet)) for outlet in run.outlets],
        periods=run.periods,
        scenarios=comparisons.scenario_summary(run),
        cell_sizes=comparisons.cell_size_summary(run),
        failing=confidence.failing(run),
        flags=context.flag_summary(run),
        settings=context.settings(run),
        inputs=context.inputs(run),
        alignment=context.alignment(run),
        versions=context.versions(run),
        cautions=context.CAUTIONS,
        link=link,
        pages=[_page(run, outlet) for outlet in outlets],
        sources=context.sources(run),
    )  # fmt: skip


def _page(run: Run, outlet: Outlet) -> dict[str, Any]:
    """Return what the template of one outlet needs."""
    facts = context.outlet_facts(run, outlet)
    if outlet.failed:
        return facts
    floor = float(run.about["project"]["flow_path"]["slope_floor"])
    return {
        **facts,
        "map": maps.outlet_map(run, outlet),
        "close": maps.close_up(run, outlet),
        "profile": charts.profile(run, outlet, floor),
        "timing_chart": charts.timing(outlet),
        "time_area": charts.time_area(run, outlet),
        "unit_hydrograph": charts.unit_hydrograph(run, outlet),
        "floods": charts.floods(run, outlet),
        "scenario_chart": charts.scenarios(run, outlet),
        "capacity": charts.capacity(run, outlet),
        "bands": confidence.bands(run, outlet),
        "peak_swings": confidence.peak_swings(run, outlet),
        "time_swings": confidence.time_swings(run, outlet),
        "regional": confidence.regional(run, outlet),
    }


def outlet_page(run: Run, outlet: Outlet, neighbours: Mapping[str, tuple[str, str]]) -> str:
    """Return the page of one outlet.

    Parameters
    ----------
    run : Run
        The run; only its manifest and folder are used.
    outlet : Outlet
    neighbours : mapping
        ``previous`` and ``next``: file and heading of the pages beside it, where there are any.
    """
    return _templates().get_template("page.html").render(
        title=words.short(run.about["name"], 120),
        page=_page(run, outlet),
        neighbours=neighbours,
        sources=context.sources(run),
        cautions=context.CAUTIONS,
    )  # fmt: skip


def _neighbours(run: Run, outlet: Outlet) -> dict[str, tuple[str, str]]:
    """Return file and heading of the pages beside an outlet's; none where the report is one file."""
    if len(run.outlets) <= ONE_FILE:
        return {}
    beside = {"previous": outlet.number - 2, "next": outlet.number}
    return {
        name: (run.outlets[i].file, words.short(run.outlets[i].id, 40))
        for name, i in beside.items()
        if 0 <= i < len(run.outlets)
    }


_NEEDED = ("name", "project", "grid", "scheme")
"""What a page alone needs of the manifest."""


def _write_pages(run: Run, target: Path, jobs: int) -> None:
    """Write a page for each outlet, in processes of their own."""
    tasks = [(outlet, _neighbours(run, outlet)) for outlet in run.outlets]
    lean = replace(run, about={key: run.about[key] for key in _NEEDED}, outlets=[])
    for done, _ in enumerate(_in_processes(lean, tasks, target, max(1, min(jobs, os.cpu_count() or 1))), start=1):
        tell(done, len(tasks), "pages")


def _in_processes(run: Run, tasks: list[tuple[Outlet, dict[str, Any]]], target: Path, jobs: int) -> Iterator[str]:
    """Hand each process its share of the pages; yield something for every page that is done."""
    with ExitStack() as stack:
        scratch = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="basinwright-report-")))
        children = []
        for k in range(jobs):
            share = scratch / f"{k}.pickle"
            share.write_bytes(pickle.dumps((run, tasks[k::jobs], target)))
            errors = stack.enter_context((scratch / f"{k}.txt").open("w+", encoding="utf-8", errors="replace"))
            command = [sys.executable, "-P", "-m", "basinwright.report.worker", str(share)]
            child = stack.enter_context(subprocess.Popen(command, stdout=subprocess.PIPE, stderr=errors, text=True))
            stack.callback(child.kill)
            children.append((child, errors))
        # The shares are alike, so the processes are read in step.
        for lines in itertools.zip_longest(*(child.stdout or () for child, _ in children)):
            yield from (line for line in lines if line)
        for child, errors in children:
            if child.wait() != 0:
                errors.seek(0)
                said = errors.read().strip().splitlines() or ["no message"]
                raise BasinwrightError(f"a process that makes the report's pages failed: {said[-1]}")
