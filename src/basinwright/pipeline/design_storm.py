"""The design storm of a project: a published distribution, the user's own, or one built from depths by duration."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from basinwright.errors import InputRejected, Problem, RangeError
from basinwright.hydrology.settings import FROM_DEPTHS_BY_DURATION
from basinwright.project import Project
from basinwright.registry import find, methods
from basinwright.units import MM_PER_IN

if TYPE_CHECKING:
    from basinwright.storms import DepthDurationFrequency, Storm

_DURATIONS = {"duration_h": 1.0, "duration_min": 1.0 / 60.0}
_DEPTHS = {"in": MM_PER_IN, "mm": 1.0}


@dataclass(frozen=True)
class DesignStorm:
    """A design storm.

    Parameters
    ----------
    storm : Storm or None
        Its distribution; None where it is built from `ddf`.
    ddf : DepthDurationFrequency or None
        Depth by duration and return period.
    tables : dict
        The user's tables as plain values, for the manifest and for `from_tables`.
    """

    storm: Storm | None
    ddf: DepthDurationFrequency | None
    tables: dict[str, Any]


def read(project: Project, folder: Path) -> DesignStorm:
    """Read the tables that a project's storm names, and build it.

    Raises
    ------
    InputRejected
        With every fault of the tables, or where the distribution cannot serve the storm's duration.
    """
    section, tables = project.storm, dict[str, Any]()
    if section.distribution == "table" and section.table is not None:
        tables["hyetograph"] = _hyetograph(folder / section.table)
    if section.ddf is not None:
        tables["ddf"] = _depths_by_duration(folder / section.ddf)
    return from_tables(project, tables)


def from_tables(project: Project, tables: dict[str, Any]) -> DesignStorm:
    """Build the design storm from tables already read (see `read`)."""
    from basinwright.storms import read_depth_duration_frequency

    section = project.storm
    if section.distribution not in methods("storm"):
        raise InputRejected([])  # named by the check of methods
    ddf = None
    if "ddf" in tables:
        table = tables["ddf"]
        ddf = read_depth_duration_frequency(
            table["durations_h"], table["return_periods"], table["depths_mm"], section.ddf or "ddf"
        )
    function = find("storm", section.distribution).function
    if section.distribution in FROM_DEPTHS_BY_DURATION:
        if ddf is not None:
            _check_built(project, ddf)
        return DesignStorm(None, ddf, tables)
    if section.distribution == "table":
        table = tables["hyetograph"]
        own: Storm = function(table["hours"], table["fractions"], file=section.table or "hyetograph")
        if abs(own.duration_h - section.duration) > 1e-9:
            what = f"runs for {own.duration_h:g} h, not for storm.duration {section.duration:g} h"
            file = section.table or "hyetograph"
            raise InputRejected.one(file, "hour", what, "let the table end at the storm's duration")
        return DesignStorm(own, ddf, tables)
    try:
        return DesignStorm(function(section.duration), ddf, tables)
    except RangeError as error:
        raise InputRejected.one("project", "storm.duration", str(error), 'use "24 h"') from None


def with_depths(project: Project, ddf: DepthDurationFrequency) -> Project:
    """Return the project with the depths, and the 2-year 24-hour depth, that its table gives where it names none.

    Raises
    ------
    InputRejected
        Where the table does not reach the storm's duration, or the 2-year 24-hour depth.
    """
    section, changed = project.storm, dict[str, Any]()
    try:
        if not section.depths and not section.depth_rasters:
            changed["depths"] = {period: float(ddf.depth_mm(section.duration, period)) for period in ddf.return_periods}
        two_year = next((period for period in ddf.return_periods if float(period) == 2.0), None)
        if section.two_year_depth is None and two_year is not None:
            changed["two_year_depth"] = float(ddf.depth_mm(24.0, two_year))
    except RangeError as error:
        fix = "give the table the durations up to storm.duration and 24 h, or storm.two_year_depth"
        raise InputRejected.one(section.ddf or "ddf", "duration", str(error), fix) from None
    return project.model_copy(update={"storm": section.model_copy(update=changed)})


def _check_built(project: Project, ddf: DepthDurationFrequency) -> None:
    """Build the storm of every return period once, to say now what would fail later."""
    section, file = project.storm, project.storm.ddf or "ddf"
    build = find("storm", section.distribution).function
    for period in section.periods or ddf.return_periods:
        try:
            build(section.duration, float(ddf.durations_h[0]), ddf.durations_h, ddf.column(period))
        except RangeError as error:
            fix = "let the shortest duration divide storm.duration and the longest reach it; name its return periods"
            raise InputRejected.one(file, f"{period} years", str(error), fix) from None


def read_rows(path: Path, key: str) -> tuple[list[str], list[dict[str, str]]]:
    """Read a CSV: its columns and its rows."""
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            reader = csv.DictReader(stream)
            names = [name.strip() for name in reader.fieldnames or []]
            reader.fieldnames = names
            return names, list(reader)
    except FileNotFoundError:
        raise InputRejected.one(path.name, "file", "does not exist", f"looked for {path}; check {key}") from None
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        what = f"is not a readable CSV ({error})"
        raise InputRejected.one(path.name, "file", what, "save it as CSV in UTF-8") from None


def _numbers(path: Path, rows: list[dict[str, str]], columns: list[str]) -> list[list[float]]:
    """Read columns of numbers, row by row."""
    problems, numbers = [], []
    for number, row in enumerate(rows, start=2):
        numbers.append([0.0] * len(columns))
        for i, column in enumerate(columns):
            try:
                numbers[-1][i] = float(row[column])
            except (TypeError, ValueError):
                what = f"{row[column]!r} is not a number"
                problems.append(Problem(path.name, f"row {number}, {column}", what, "write a plain number"))
    if problems:
        raise InputRejected(problems)
    return numbers


def _hyetograph(path: Path) -> dict[str, list[float]]:
    """Read a CSV of hour and fraction."""
    names, rows = read_rows(path, "storm.table")
    missing = [name for name in ("hour", "fraction") if name not in names]
    if missing:
        what = f"lacks {' and '.join(missing)}"
        raise InputRejected.one(path.name, "header", what, "name the columns hour and fraction")
    numbers = _numbers(path, rows, ["hour", "fraction"])
    return {"hours": [row[0] for row in numbers], "fractions": [row[1] for row in numbers]}


def _depths_by_duration(path: Path) -> dict[str, Any]:
    """Read a CSV of duration_h or duration_min, and depth_<T>yr_in or _mm for each return period."""
    names, rows = read_rows(path, "storm.ddf")
    duration = next((name for name in names if name in _DURATIONS), None)
    depths = {name: parts for name in names if (parts := _depth_column(name)) is not None}
    unknown = [name for name in names if name != duration and name not in depths]
    fix = "name the columns duration_h (or duration_min) and depth_<T>yr_in (or _mm), such as depth_10yr_in"
    if duration is None or not depths or unknown:
        what = f"has unknown columns {', '.join(unknown)}" if unknown else "lacks durations or depths"
        raise InputRejected.one(path.name, "header", what, fix)
    numbers = _numbers(path, rows, [duration, *depths])
    factors = [factor for _, factor in depths.values()]
    return {
        "durations_h": [row[0] * _DURATIONS[duration] for row in numbers],
        "return_periods": [period for period, _ in depths.values()],
        "depths_mm": [[value * factor for value, factor in zip(row[1:], factors, strict=True)] for row in numbers],
    }


def _depth_column(name: str) -> tuple[str, float] | None:
    """Return the return period and the factor to mm that a column names."""
    for suffix, factor in _DEPTHS.items():
        if name.startswith("depth_") and name.endswith(f"yr_{suffix}"):
            return name.removeprefix("depth_").removesuffix(f"yr_{suffix}"), factor
    return None
