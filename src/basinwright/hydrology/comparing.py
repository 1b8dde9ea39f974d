"""The results of a scenario, or of another cell size, beside those of the base."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrology.frames import Columns
from basinwright.project import Project
from basinwright.tables import CELL_SIZES, OUTLETS, SCENARIOS, SWINGS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from basinwright.editing import Cell

SAFE_PCT = 10.0
"""How far area and peaks may move for a cell size to count as safe for screening: as far as AREA_MISMATCH allows."""
_OPEN = "EDGE_TOUCH"
_NO_VERDICT = (_OPEN, "PEAKS_FALL")
"""Doubts with which no capacity verdict is given."""
_STANDS = ("curve_number", "tc_h")
"""What, where a person or the outlet layer supplied it, is the same in every scenario."""


def scenarios_table(base: Columns, scenarios: Mapping[str, Columns], held: Iterable[Cell], project: Project) -> Columns:
    """Return ``scenarios.csv``: a row for each scenario, outlet and return period.

    Parameters
    ----------
    base : columns
        outlets.csv of the base.
    scenarios : mapping of str to columns
        outlets.csv of each scenario, by name; the same outlets and return periods.
    held : iterable of Cell
        Cells that a person or the outlet layer supplied.
    project : Project
        Gives units and return periods.
    """
    periods, before = project.storm.periods, _Outlets(base, project)
    supplied: dict[str, set[str]] = {}
    for table, outlet_id, _, stem in held:
        if table == "outlets" and stem in _STANDS:
            supplied.setdefault(outlet_id, set()).add(stem)
    stands = [" ".join(sorted(supplied.get(outlet_id, ()))) for outlet_id in before.ids]
    with_capacity = "capacity" in before
    fields = SCENARIOS.fields(project.project.units, (), ["over_capacity"] if with_capacity else [])
    count = len(periods)
    parts: list[dict[str, Any]] = []
    for name, outlets in scenarios.items():
        after = _Outlets(outlets, project)
        by_period = [_scenario_columns(before, after, period) for period in periods]
        part: dict[str, Any] = {  # outlet by outlet, and storm by storm within
            stem: np.column_stack([each[stem] for each in by_period]).ravel().tolist() for stem in by_period[0]
        }
        part["scenario"] = [name] * (len(before.ids) * count)
        part["outlet_id"] = [outlet_id for outlet_id in before.ids for _ in periods]
        part["return_period_yr"] = [float(period) for period in periods] * len(before.ids)
        part["stands"] = [text for text in stands for _ in periods]
        parts.append(part)
    return {field.name: [value for part in parts for value in part[field.stem]] for field in fields}


def _scenario_columns(before: _Outlets, after: _Outlets, period: str) -> dict[str, Any]:
    """Return what a scenario does to the flood of one return period, by stem."""
    depth, runoff, peak, at = (f"depth_{period}yr", f"runoff_{period}yr", f"peak_{period}yr", f"peak_time_{period}yr_h")
    columns: dict[str, Any] = {}
    pairs = {"depth": depth, "runoff": runoff, "peak": peak, "peak_time_h": at}
    pairs |= {stem: stem for stem in ("tc_h", "curve_number")}
    for stem, source in pairs.items():
        columns[f"base_{stem}"], columns[stem] = before.number(source), after.number(source)
    for stem in ("runoff", "peak"):
        columns[f"{stem}_change_pct"] = _change_pct(columns[f"base_{stem}"], columns[stem])
    for stem in ("peak_time", "tc"):
        columns[f"{stem}_change_h"] = columns[f"{stem}_h"] - columns[f"base_{stem}_h"]
    if "capacity" in before:
        over = _over(before, peak), _over(after, peak)
        columns["over_capacity"] = np.array([_told(*pair) for pair in zip(*over, strict=True)], dtype=object)
    return columns


_OVER = {
    (False, False): "neither",
    (False, True): "scenario",
    (True, False): "base",
    (True, True): "both",
}


def _told(base: Any, scenario: Any) -> str:
    """Say which of base and scenario is over the capacity; ``unknown`` where either has no verdict."""
    return "" if "" in (base, scenario) else _OVER.get((base, scenario), "unknown")


def _over(outlets: _Outlets, peak: str) -> list[Any]:
    """Say of each outlet whether a peak is over its capacity; ``unknown`` without a verdict, empty without either."""
    capacity, flow = outlets.number("capacity"), outlets.number(peak)
    told: list[Any] = (flow > capacity).tolist()
    for i in np.flatnonzero(np.isnan(capacity) | np.isnan(flow)).tolist():
        told[i] = ""
    return [
        "unknown" if verdict != "" and any(outlets.flagged(i, key) for key in _NO_VERDICT) else verdict
        for i, verdict in enumerate(told)
    ]


def cell_sizes_table(base: Columns, sizes: Iterable[tuple[float, Columns]], project: Project) -> Columns:
    """Return ``cell_sizes.csv``: a row for each outlet and cell size, the base's first.

    Parameters
    ----------
    base : columns
        outlets.csv of the base.
    sizes : iterable of (float, columns)
        Cell size [m] and outlets.csv of every run, the base's first, of the same outlets.
    project : Project
        Gives units and return periods.
    """
    system, periods = project.project.units, project.storm.periods
    before = _Outlets(base, project)
    fields = CELL_SIZES.fields(system, periods)
    listed = [(size, _Outlets(outlets, project)) for size, outlets in sizes]
    metres = CELL_SIZES.column("cell_size").inside_per_shown(system)
    rows = [_size_columns(before, outlets, size / metres, periods) for size, outlets in listed]
    return {field.name: [part[field.stem][i] for i in range(len(before.ids)) for part in rows] for field in fields}


def swings_with_cell_sizes(swings: Columns, sizes: Columns, project: Project) -> Columns:
    """Return ``swings.csv`` with the cell size as one more input, from the base's cells to the coarsest that served.

    Parameters
    ----------
    swings, sizes : columns
        ``swings.csv`` and ``cell_sizes.csv`` of one run.
    project : Project
        Gives units and return periods.
    """
    system, periods = project.project.units, project.storm.periods
    size_name, tc, peaks = CELL_SIZES.column("cell_size").name(system), "tc_h", CELL_SIZES.column("peak_{T}yr")
    of_outlet: dict[str, list[dict[str, Any]]] = {}
    for row in _rows(sizes):
        of_outlet.setdefault(row["outlet_id"], []).append(row)
    fields = SWINGS.fields(system)
    names = {field.stem: field.name for field in fields}
    groups: dict[tuple[str, float], list[dict[str, Any]]] = {}
    for row in _rows(swings):
        groups.setdefault((row["outlet_id"], float(row["return_period_yr"])), []).append(row)
    written = {float(period): peaks.name(system, period) for period in periods}
    for (outlet_id, period), rows in groups.items():
        served = [row for row in of_outlet.get(outlet_id, []) if row["status"] != "failed"]
        if len(served) > 1 and served[0]["verdict"] == "base":
            base, coarsest = served[0], served[-1]
            stems = {"tc_low_h": base[tc], "tc_high_h": coarsest[tc],
                     "peak_low": base[written[period]], "peak_high": coarsest[written[period]]}  # fmt: skip
            stems |= {"low": base[size_name], "high": coarsest[size_name], "input": "cell_size", "sampled": False}
            stems["applied"] = f"size of the terrain's cells, {CELL_SIZES.column('cell_size').unit_in(system)}"
            own = {names[stem]: value for stem, value in stems.items()}
            rows.append({**rows[0], **own})
        for rank, low, high in (("tc_rank", "tc_low_h", "tc_high_h"), ("rank", "peak_low", "peak_high")):
            rows.sort(key=lambda row, a=names[low], b=names[high]: -abs(float(row[b]) - float(row[a])))  # type: ignore[misc]
            for place, row in enumerate(rows, start=1):
                row[names[rank]] = place
    every = [row for rows in groups.values() for row in rows]
    return {
        field.name: np.array(values, dtype=bool) if field.column.type == "boolean" else values
        for field in fields
        for values in [[row[field.name] for row in every]]
    }


def _rows(columns: Columns) -> list[dict[str, Any]]:
    return [
        dict(zip(columns, row, strict=True)) for row in zip(*(list(column) for column in columns.values()), strict=True)
    ]


def _size_columns(before: _Outlets, after: _Outlets, cell_size: float, periods: list[str]) -> dict[str, Any]:
    """Return the columns of one cell size, outlet by outlet, by stem."""
    count = len(before.ids)
    is_base = after.columns is before.columns
    columns: dict[str, Any] = {
        "outlet_id": before.ids,
        "cell_size": [cell_size] * count,
        "status": list(after.columns["status"]),
    }
    peaks = {f"peak_{period}yr": f"peak_{period}yr_change_pct" for period in periods}
    for stem, change in {**_CHANGES, **peaks}.items():
        columns[stem] = after.number(stem)
        difference = columns[stem] - before.number(stem)
        relative = change.endswith("_pct")
        columns[change] = _change_pct(before.number(stem), columns[stem]) if relative else difference
        if is_base:
            columns[change] = np.full(count, np.nan)
    told = [_verdict(before, after, i, {"area": "area_change_pct", **peaks}, columns) for i in range(count)]
    columns["verdict"] = ["base" if is_base else verdict for verdict, _ in told]
    columns["reason"] = ["" if is_base else reason for _, reason in told]
    return columns


_CHANGES = {
    "area": "area_change_pct",
    "path_length": "path_length_change_pct",
    "path_slope_pct": "path_slope_change_pct",
    "basin_slope_pct": "basin_slope_change_pct",
    "curve_number": "curve_number_change",
    "tc_h": "tc_change_pct",
}


def _verdict(
    before: _Outlets, after: _Outlets, i: int, changes: Mapping[str, str], columns: Mapping[str, Any]
) -> tuple[str, str]:
    """Say whether an outlet is safe to screen at a cell size, and why not."""
    for outlets, name in ((before, "on the base's cells"), (after, "on these cells")):
        if outlets.columns["status"][i] == "failed":
            return ("not safe" if outlets is after else "unknown"), f"could not be computed {name}"
        if outlets.flagged(i, _OPEN):
            return "unknown", f"the basin goes on beyond the terrain {name}"
    moved = {stem.replace("_", " "): float(columns[change][i]) for stem, change in changes.items()}
    far = [f"{stem} {pct:+.3g} %" for stem, pct in moved.items() if not abs(pct) <= SAFE_PCT]
    return ("not safe", ", ".join(far)) if far else ("safe", "")


def _change_pct(before: NDArray[np.float64], after: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the change [%]; of nothing into something there is none."""
    with np.errstate(invalid="ignore", divide="ignore"):
        change = 100.0 * (after - before) / before
    return np.where(after == before, np.where(np.isnan(before), np.nan, 0.0), np.where(before > 0, change, np.nan))


class _Outlets:
    """outlets.csv as it is written, read by stem; numbers stay in the units of the table."""

    def __init__(self, columns: Columns, project: Project) -> None:
        self.columns = columns
        self.names = {
            field.stem: field.name
            for field in OUTLETS.fields(
                project.project.units, project.storm.periods, [c.stem for c in OUTLETS.columns if c.optional]
            )
        }
        self.ids = [str(outlet_id) for outlet_id in columns["outlet_id"]]
        self.flags = [set(str(flags).split()) for flags in columns["flags"]]

    def __contains__(self, stem: str) -> bool:
        return self.names[stem] in self.columns

    def number(self, stem: str) -> NDArray[np.float64]:
        """Return a column as numbers, NaN where empty."""
        cells = list(self.columns[self.names[stem]])
        return np.array([np.nan if cell is None or cell == "" else float(cell) for cell in cells], dtype=np.float64)

    def flagged(self, i: int, key: str) -> bool:
        """Say whether an outlet carries a flag."""
        return key in self.flags[i]
