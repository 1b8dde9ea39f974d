"""What the pages say of scenarios and of coarser terrain."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from basinwright.report import words
from basinwright.report.reading import Outlet, Row, Run
from basinwright.report.words import figure, listed, plain, short
from basinwright.tables import CELL_SIZES, SCENARIOS

_OVER = {
    "scenario": "newly over capacity",
    "base": "no longer over capacity",
    "both": "over capacity",
    "neither": "within capacity",
    "unknown": "no verdict",
    "": "",
}


def of_scenarios(run: Run, outlet: Outlet) -> list[dict[str, Any]]:
    """Return what each scenario does to the floods of an outlet."""
    unit = words.unit_of(SCENARIOS.column("peak"), run.system)
    return [
        {
            "name": short(row["scenario"], 40),
            "period": f"{row['return_period_yr']:g}",
            "base": f"{figure(row['base_peak'])} {unit}",
            "peak": f"{figure(row['peak'])} {unit}",
            "change": _change(row["peak_change_pct"], "%"),
            "runoff": _change(row["runoff_change_pct"], "%"),
            "later": _change(row["peak_time_change_h"], "h"),
            "tc": _change(row["tc_change_h"], "h"),
            "over": _OVER[row.get("over_capacity") or ""],
            "newly": row.get("over_capacity") == "scenario",
            "stands": plain(row["stands"]).replace(" ", ", "),
        }
        for row in outlet.scenarios
    ]


def _change(value: float, unit: str) -> str:
    """Return a change with its sign."""
    if value != value:
        return "–"
    return f"0 {unit}" if value == 0 else f"{'+' if value > 0 else '−'}{figure(abs(value))} {unit}"


def of_cell_sizes(run: Run, outlet: Outlet) -> dict[str, Any]:
    """Return how an outlet's figures move with the size of the terrain's cells."""
    if not outlet.cell_sizes:
        return {}
    size, area, peak = (
        words.unit_of(CELL_SIZES.column(stem), run.system) for stem in ("cell_size", "area", "peak_{T}yr")
    )
    columns = [*_OF_SIZE.items(), *((f"peak_{period}yr", f"peak_{period}yr_change_pct") for period in run.periods)]
    header = [("area", area), ("path", size), ("slope", "%"), ("CN", ""), ("Tc", "h")]
    rows = [
        {
            "size": f"{figure(row['cell_size'])} {size}",
            "cells": [(figure(row[stem]), _moved(row[change], change)) for stem, change in columns],
            "verdict": row["verdict"],
            "reason": plain(row["reason"]),
        }
        for row in outlet.cell_sizes
    ]
    return {"header": [*header, *((f"peak {period} yr", peak) for period in run.periods)], "rows": rows}


_OF_SIZE = {
    "area": "area_change_pct",
    "path_length": "path_length_change_pct",
    "path_slope_pct": "path_slope_change_pct",
    "curve_number": "curve_number_change",
    "tc_h": "tc_change_pct",
}


def _moved(value: float, change: str) -> str:
    """Return a change with its sign and unit, nothing for the base itself."""
    return "" if value != value else _change(value, "%" if change.endswith("pct") else "").strip()


def scenario_summary(run: Run) -> list[dict[str, Any]]:
    """Return what each scenario does over all outlets: what it replaces, how peaks change, what goes over capacity."""
    entries = {entry["name"]: entry for entry in run.about["project"].get("scenario", [])}
    summary = []
    for scenario in run.about.get("scenarios", []):
        name = scenario["name"]
        rows: list[tuple[Outlet, Row]] = [
            (outlet, row) for outlet in run.outlets for row in outlet.scenarios if row["scenario"] == name
        ]
        newly: dict[str, str] = {}  # the smallest return period of each outlet
        for outlet, row in rows:
            if row.get("over_capacity") == "scenario":
                newly.setdefault(outlet.id, f"{short(outlet.id, 30)} ({row['return_period_yr']:g} yr)")
        failed = [outlet for outlet, row in rows if row["peak"] != row["peak"] and row["base_peak"] == row["base_peak"]]
        summary.append(
            {
                "name": short(name, 60),
                "replaces": _replaced(entries.get(name, {})),
                "changes": [_change_over(rows, period) for period in run.periods],
                "newly": listed(list(newly.values())),
                "failed": listed([short(outlet_id, 30) for outlet_id in dict.fromkeys(outlet.id for outlet in failed)]),
            }
        )
    return summary


def _replaced(entry: Mapping[str, Any]) -> str:
    """Say which keys a scenario replaces."""
    told = []
    for section, keys in entry.items():
        if section != "name":
            values = (f"{key} {_told(value)}" for key, value in keys.items())
            told.append(f"{section}: {', '.join(values)}")
    return short("; ".join(told), 300)


def _told(value: Any) -> str:
    return ", ".join(f"{key} {_told(part)}" for key, part in value.items()) if isinstance(value, dict) else plain(value)


def _change_over(rows: Sequence[tuple[Outlet, Row]], period: str) -> str:
    """Say how the peak of a return period changes over the outlets: from the least to the most."""
    changes = sorted(
        row["peak_change_pct"]
        for _, row in rows
        if row["return_period_yr"] == float(period) and row["peak_change_pct"] == row["peak_change_pct"]
    )
    if not changes:
        return "–"
    least, most = _change(changes[0], "%"), _change(changes[-1], "%")
    return least if least == most else f"{least} to {most}"


def cell_size_summary(run: Run) -> list[dict[str, Any]]:
    """Return for each coarser cell size how many outlets are safe to screen on it, and which are not."""
    unit = words.unit_of(CELL_SIZES.column("cell_size"), run.system)
    by_size: dict[float, list[tuple[Outlet, Row]]] = {}
    for outlet in run.outlets:
        for row in outlet.cell_sizes:
            if row["verdict"] != "base":
                by_size.setdefault(row["cell_size"], []).append((outlet, row))
    summary = []
    for size, rows in sorted(by_size.items()):
        ids = {
            verdict: [short(outlet.id, 30) for outlet, row in rows if row["verdict"] == verdict]
            for verdict in ("safe", "not safe", "unknown")
        }
        summary.append(
            {"size": f"{figure(size)} {unit}", "ids": {key: (len(of), listed(of)) for key, of in ids.items()}}
        )
    return summary
