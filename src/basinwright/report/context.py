"""What the pages say, as plain values ready for the templates."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import PurePosixPath, PureWindowsPath
from typing import Any

from basinwright import published
from basinwright.flags import FLAGS, SEVERITIES
from basinwright.registry import find
from basinwright.report import charts, comparisons, palette, words
from basinwright.report.reading import Outlet, Run
from basinwright.report.words import count, elevation, figure, listed, plain, short, station, unit_label, with_unit
from basinwright.tables import COVER_SHARES, CROSS_CHECKS, OUTLETS, SEGMENTS
from basinwright.units import SHOWN, System, parse_quantity

FIRST_LOOK = 12
"""Crossings that the index names one by one where the run has many."""

CAUTIONS = (
    "People can be hurt by an undersized crossing or dam. These results support, and do not replace, the judgement of "
    "a licensed engineer; local drainage criteria come first.",
    "Not represented: storm sewers, snowmelt, baseflow, routing through ponds, lakes and reservoirs. Peaks at lakes "
    "and behind road fills are flagged, not attenuated.",
    "Curve-number runoff is for rainfall events on ordinary soils, and uncertain by several units of curve number.",
    "Bankfull dimensions from a regional relation scatter by a factor of about two about its line; the two stages in "
    "the tables are a first measure of that doubt.",
    "A path on a grid is a staircase: on a plane it is up to 8 % too long, depending on direction.",
)

_INDEX_COLUMNS = ("area", "path_length", "curve_number", "tc_h")
_KEY_FIGURES = (
    ("area", "drainage area"),
    ("path_length", "longest flow path"),
    ("path_slope_1085_pct", "10–85 slope"),
    ("basin_slope_pct", "mean land slope"),
    ("curve_number", "curve number"),
    ("impervious_pct", "impervious"),
    ("open_water_pct", "open water"),
    ("relief", "relief"),
    ("tc_h", "time of concentration"),
    ("lag_h", "lag"),
    ("tc_bankfull_h", "travel time, bankfull"),
    ("tc_half_bankfull_h", "travel time, half bankfull"),
)


@dataclass(frozen=True)
class Cell:
    """One cell of the index table: what is shown and what it sorts and filters by."""

    text: str
    value: str = ""
    number: bool = False


def _value(number: float) -> str:
    return "" if number != number else f"{number:.6g}"


def index_columns(run: Run) -> list[dict[str, Any]]:
    """Return the columns of the index table: name, unit, whether they hold numbers."""
    columns: list[dict[str, Any]] = [
        {"name": "outlet", "unit": "", "number": False},
        {"name": "name", "unit": "", "number": False},
        {"name": "doubt", "unit": "", "number": False},
    ]
    names = {"area": "area", "path_length": "path", "curve_number": "CN", "tc_h": "Tc"}
    for stem in _INDEX_COLUMNS:
        columns.append({"name": names[stem], "unit": words.unit_of(OUTLETS.column(stem), run.system), "number": True})
    flow = words.unit_of(OUTLETS.column("peak_{T}yr"), run.system)
    columns += [{"name": f"peak {period} yr", "unit": flow, "number": True} for period in run.periods]
    if "capacity" in run.columns:
        columns.append({"name": "capacity", "unit": flow, "number": True})
        columns.append({"name": "exceeded at", "unit": "yr", "number": True})
    columns.append({"name": "moved", "unit": words.unit_of(OUTLETS.column("snap"), run.system), "number": True})
    columns.append({"name": "flags", "unit": "", "number": False})
    return columns


def index_row(run: Run, outlet: Outlet) -> list[Cell]:
    """Return an outlet's cells in the index table, in the order of `index_columns`."""
    row = outlet.row
    rank = ("ok", *SEVERITIES, "failed").index(outlet.severity)
    keys = [doubt.key for doubt in outlet.doubts]
    cells = [
        Cell(short(outlet.id, 24), plain(outlet.id)),
        Cell(short(row["name"], 60), plain(row["name"])[:200]),
        Cell(palette.MARKS[outlet.severity].label, str(rank)),
    ]
    for stem in _INDEX_COLUMNS:
        shown = figure(row[stem])
        cells.append(
            Cell(f"≥ {shown}" if stem == "area" and outlet.open_ended else shown, _value(row[stem]), number=True)
        )
    for period in run.periods:
        peak = row[f"peak_{period}yr"]
        cells.append(Cell(figure(peak), _value(peak), number=True))
    if "capacity" in run.columns:
        cells.append(Cell(figure(row["capacity"]), _value(row["capacity"]), number=True))
        cells.append(Cell(_exceeded(outlet), _exceeded_value(outlet), number=True))
    cells.append(Cell(figure(row["snap"]), _value(row["snap"]), number=True))
    cells.append(Cell(" ".join(keys), " ".join(keys)))
    return cells


def _with_capacity(outlet: Outlet) -> bool:
    capacity = outlet.row.get("capacity", math.nan)
    return bool(capacity == capacity)


def _exceeded(outlet: Outlet) -> str:
    """Say at which return period the capacity is exceeded, in a word."""
    if not _with_capacity(outlet) or outlet.failed:
        return "–"
    return outlet.row["exceeded_at_yr"] or "none"


def _exceeded_value(outlet: Outlet) -> str:
    at = _exceeded(outlet)
    return {"–": "", "none": "1e9", "unknown": ""}.get(at, at)


def verdict(run: Run, outlet: Outlet) -> str:
    """Say in a sentence how the peaks stand to the capacity; empty where no capacity was given."""
    if not _with_capacity(outlet) or outlet.failed:
        return ""
    row = outlet.row
    capacity = with_unit(row["capacity"], "capacity", run.system)
    basis = short(row.get("capacity_basis") or "", 80)
    told = f"{capacity}{f' ({basis})' if basis else ''}"
    at = row["exceeded_at_yr"]
    if at == "unknown":
        return f"No verdict on the capacity of {told}: the basin goes on beyond the terrain."
    if not at:
        rarest = run.periods[-1]
        peak = with_unit(row[f"peak_{rarest}yr"], "peak_{T}yr", run.system)
        return f"The capacity of {told} holds every storm tested; the {rarest}-year peak is {peak}."
    peak = with_unit(row[f"peak_{at}yr"], "peak_{T}yr", run.system)
    return f"The {at}-year peak of {peak} exceeds the capacity of {told}."


def over_capacity(outlet: Outlet) -> bool:
    """Say whether the peak of a tested storm exceeds the capacity."""
    return _exceeded(outlet) not in ("–", "none", "unknown")


def worries(run: Run) -> list[Outlet]:
    """Return the outlets to look at first: failed, in serious doubt, soon over capacity, with warnings."""

    def rank(outlet: Outlet) -> tuple[float, ...]:
        at = outlet.row.get("exceeded_at_yr") or ""
        period = float(at) if _with_capacity(outlet) and at not in ("", "unknown") else math.inf
        grave = sum(doubt.severity == "serious" for doubt in outlet.doubts)
        warnings = sum(doubt.severity == "warning" for doubt in outlet.doubts)
        return (-outlet.failed, -grave, period, -warnings)

    ranked = sorted(run.outlets, key=rank)
    return [outlet for outlet in ranked if rank(outlet) < (0, 0, math.inf, 0)]


def worry(run: Run, outlet: Outlet) -> dict[str, Any]:
    """Return why an outlet is to be looked at."""
    told = [doubt for doubt in outlet.doubts if doubt.severity != "note"]
    return {
        "outlet": outlet,
        "name": short(outlet.row["name"], 60),
        "id": short(outlet.id, 40),
        "over": over_capacity(outlet),
        "verdict": verdict(run, outlet),
        "doubts": [
            {
                "key": doubt.key,
                "severity": doubt.severity,
                "trigger": FLAGS[doubt.key].trigger,
                "message": short(doubt.message, 48),
            }
            for doubt in told
        ],
    }


def flag_summary(run: Run) -> list[dict[str, Any]]:
    """Return every flag raised: how often, what it means, what to do, on which outlets."""
    summary = []
    for severity in reversed(SEVERITIES):
        for key, kind in FLAGS.items():
            ids = [outlet.id for outlet in run.outlets if any(doubt.key == key for doubt in outlet.doubts)]
            if kind.severity == severity and ids:
                shown = listed([short(outlet_id, 30) for outlet_id in ids])
                summary.append(
                    {"key": key, "severity": severity, "count": len(ids), "trigger": kind.trigger,
                     "remedy": kind.remedy, "outlets": shown}
                )  # fmt: skip
    return summary


def headline(run: Run) -> list[str]:
    """Say in sentences how many outlets there are, how many are doubtful, how many over capacity."""
    total = len(run.outlets)
    by = {severity: sum(outlet.severity == severity for outlet in run.outlets) for severity in palette.MARKS}
    parts = [f"{by[key]} {words_for}" for key, words_for in _STANDING.items() if by[key]]
    told = [f"{count(total, 'outlet')}: {', '.join(parts)}."]
    rated = [outlet for outlet in run.outlets if _with_capacity(outlet) and not outlet.failed]
    if rated:
        known = [outlet for outlet in rated if outlet.row["exceeded_at_yr"] != "unknown"]
        over = [
            f"{number} at {period} years" for period in run.periods
            if (number := sum(outlet.row["exceeded_at_yr"] == period for outlet in known))
        ]  # fmt: skip
        within = sum(outlet.row["exceeded_at_yr"] == "" for outlet in known)
        parts = [f"first exceeded: {', '.join(over)}" if over else "", f"never: {within}" if within else ""]
        parts.append(f"no verdict: {len(rated) - len(known)}" if len(rated) > len(known) else "")
        told.append(f"Capacity given at {len(rated)}; {'; '.join(part for part in parts if part)}.")
    return told


_STANDING = {
    "failed": "failed",
    "serious": "with a serious doubt",
    "warning": "with warnings",
    "note": "with notes only",
    "ok": "without doubt raised",
}


def _quantity(text: str, dimension: str, system: System) -> str:
    """Return a quantity of the resolved project in the unit system of the report."""
    try:
        inside = parse_quantity(text, dimension)
    except ValueError:
        return plain(text)
    if dimension == "time":
        return f"{figure(inside)} h"
    shown = SHOWN[dimension]
    return f"{figure(inside / shown.inside_per_shown(system))} {unit_label(shown.unit(system))}"


def settings(run: Run) -> list[tuple[str, str]]:
    """Return how the run was set, in the trade's terms."""
    project, system, grid = run.about["project"], run.system, run.about["grid"]
    storm, terrain, channel, runoff = project["storm"], project["terrain"], project["channel"], project["runoff"]
    uh, path, soils, timing = project["unit_hydrograph"], project["flow_path"], project["soils"], project["timing"]

    def length(text: str) -> str:
        return _quantity(text, "length", system)

    cell = length(f"{grid['cell_size_m']} m")
    conditioning = "depressions filled to their lowest rim"
    if terrain["conditioning"] == "breach":
        limits = f"{length(terrain['breach_depth'])} deep and {length(terrain['breach_length'])} long"
        conditioning = f"depressions breached by cuts up to {limits}, else filled"
    depths = [f"{period} yr {_quantity(text, 'depth', system)}" for period, text in (storm.get("depths") or {}).items()]
    least = _quantity(timing["minimum"], "time", system)
    factor = f", peak rate factor {uh['peak_rate_factor']:g}" if uh["shape"] in _WITH_FACTOR else ""
    return [
        ("Terrain", f"{grid['rows']:,} × {grid['columns']:,} cells of {cell}, {plain(grid['crs_name'])}"),
        ("Conditioning", conditioning),
        ("Channels begin at", _channel_start(terrain["stream_area"], run.about["terrain"]["stream_area_km2"], system)),
        ("Land cover", f"scheme {plain(project['cover']['scheme'])}"),
        ("Soils", f"one group, {soils['group']}" if soils.get("group") else f"dual groups {soils['dual_groups']}"),
        ("Sheet flow up to", length(path["sheet_limit"])),
        ("Slope floor", f"{figure(100 * path['slope_floor'])} %"),
        ("Channel roughness", _roughness(channel["roughness"])),
        ("Channel sections", f"bankfull relation, region {plain(channel['bankfull_region'])}"),
        ("Stage adopted", {"half": "half the bankfull depth"}.get(channel["stage"], channel["stage"])),
        ("Storm", f"{_quantity(storm['duration'], 'time', system)}, {find('storm', storm['distribution']).name}"),
        ("Depths", ", ".join(depths) or "by outlet"),
        ("Areal reduction", _REDUCTION.get(storm["areal_reduction"], storm["areal_reduction"])),
        ("Initial abstraction", f"{runoff['initial_abstraction_ratio']:g} S"),
        ("Moisture class", runoff["moisture"]),
        ("Runoff of a basin", _WEIGHTING.get(runoff["weighting"], runoff["weighting"])),
        ("Time of concentration", f"{find('timing', timing['adopt']).name}, at least {least}"),
        ("Unit hydrograph", f"{find('unit_hydrograph', uh['shape']).name}{factor}"),
        ("Second opinion on areas", _AUDIT.get(project["audit"]["second_opinion"], "none asked for")),
    ]


def _channel_start(wanted: str, found_km2: float, system: System) -> str:
    """Say at which contributing area channels begin, and who says so."""
    if wanted == "mapped":
        return "the heads of mapped streams"
    area = _quantity(f"{found_km2} km2", "area", system)
    return f"{area}, by the drop test" if wanted == "auto" else area


def _roughness(value: float | str) -> str:
    """Say where the channels' roughness comes from."""
    if value == "jarrett":
        return "Manning n by slope and hydraulic radius, Jarrett (1984)"
    return f"Manning n of column {plain(value)}" if isinstance(value, str) else f"Manning n {value:g}"


_WITH_FACTOR = ("curvilinear", "triangular", "gamma")
_REDUCTION = {"leclerc_schaake": "Leclerc and Schaake"}
_WEIGHTING = {"runoff": "mean of each patch's runoff", "curve_number": "runoff of the mean curve number"}
_AUDIT = {"all": "every basin, by an independent program", "sample": "20 basins, by an independent program"}


def inputs(run: Run) -> list[dict[str, str]]:
    """Return the input files: name, size and hash; folders are left out, which are the maker's own."""
    files = [run.about["project_file"], *run.about["inputs"]]
    return [
        {
            "name": plain(_base_name(entry["path"])),
            "size": _bytes(entry.get("bytes")),
            "hash": entry.get("sha256") or "",
        }
        for entry in files
    ]


def _base_name(path: str) -> str:
    return PureWindowsPath(PurePosixPath(path).name).name or path


def _bytes(size: int | None) -> str:
    return "" if size is None else f"{size:,}"


def alignment(run: Run) -> list[tuple[str, str]]:
    """Return how each layer was brought onto the terrain's grid."""
    return [
        (plain(_base_name(entry["path"])), plain(f"{entry['crs']}: {entry['method']}"))
        for entry in run.about["alignment"]
        if "path" in entry  # soils of one group everywhere have none
    ]


def versions(run: Run) -> list[tuple[str, str]]:
    """Return the versions of the program and its libraries."""
    about = run.about
    return [("basinwright", about["basinwright"]), ("Python", about["python"]), *sorted(about["libraries"].items())]


def sources(run: Run) -> list[tuple[str, str, str]]:
    """Return what the whole run rests on: subject, source in full, how it reached us."""
    project = run.about["project"]
    uh, storm = (
        find("unit_hydrograph", project["unit_hydrograph"]["shape"]),
        find("storm", project["storm"]["distribution"]),
    )
    used = [(uh.name, uh.source), (f"Storm: {storm.name}", storm.source)]
    tables = {"Shallow concentrated flow": "shallow_flow_neh", "Sheet-flow roughness": "sheet_roughness_tr55"}
    if project["channel"]["bankfull_region"] != "own":
        tables["Bankfull width and depth"] = "bankfull_bieger_2015"
    tables["Curve numbers of the handbook"] = "curve_numbers_tr55"
    scheme = f"cover_{project['cover']['scheme']}"
    if scheme in published.names():
        tables["Land-cover scheme"] = scheme
    used += [(subject, published.table(name).source) for subject, name in tables.items()]
    return [(subject, str(source), source.note) for subject, source in used]


def outlet_facts(run: Run, outlet: Outlet) -> dict[str, Any]:
    """Return what an outlet's page says in words and tables (its pictures apart)."""
    row, system = outlet.row, run.system
    facts: dict[str, Any] = {
        "id": plain(outlet.id),
        "name": plain(row["name"]),
        "heading": outlet_heading(outlet),
        "anchor": outlet.anchor,
        "severity": outlet.severity,
        "failed": outlet.failed,
        "doubts": outlet.doubts,
        "verdict": verdict(run, outlet),
        "over": over_capacity(outlet),
    }
    if outlet.failed:
        return facts
    facts["figures"] = [
        (label, ("≥ " if stem == "area" and outlet.open_ended else "") + with_unit(row[stem], stem, system))
        for stem, label in _KEY_FIGURES
        if row[stem] == row[stem]
    ]
    facts["downstream"] = short(row["downstream_outlet_id"], 40)
    facts["place"] = f"{row['latitude']:.5f}°, {row['longitude']:.5f}°"
    facts["snap"] = with_unit(row["snap"], "snap", system)
    facts["storms"] = [
        {"period": period,
         "depth": with_unit(row[f"depth_{period}yr"], "depth_{T}yr", system),
         "runoff": with_unit(row[f"runoff_{period}yr"], "runoff_{T}yr", system),
         "peak": with_unit(row[f"peak_{period}yr"], "peak_{T}yr", system),
         "time": f"{figure(row[f'peak_time_{period}yr_h'])} h"}
        for period in run.periods
    ]  # fmt: skip
    facts["segments"] = segment_table(run, outlet)
    facts["regimes"] = [key for key in palette.REGIMES if any(entry["regime"] == key for entry in outlet.segments)]
    facts["timing"] = _timing_table(outlet)
    facts["not_computed"] = _not_computed(outlet)
    facts["cross_checks"] = _cross_checks(run, outlet)
    translation = row.get("translation_peak_rate_factor", math.nan)
    facts["translation"] = "" if translation != translation else figure(translation)
    facts["shares"] = _worksheet(run, outlet)
    facts["scenarios"] = comparisons.of_scenarios(run, outlet)
    facts["cell_sizes"] = comparisons.of_cell_sizes(run, outlet)
    return facts


def outlet_heading(outlet: Outlet) -> str:
    """Return an outlet's id and name as one line, over-long ones cut."""
    name = short(outlet.row["name"], 90)
    return f"{short(outlet.id, 60)}{' · ' if name else ''}{name}"


_SEGMENT_COLUMNS = (
    ("from", "from"), ("to", "to"), ("top_elevation", "top"), ("bottom_elevation", "bottom"), ("slope", "slope"),
    ("roughness", "roughness"), ("area", "area"), ("bankfull_width", "bankfull width"), ("bankfull_depth", "depth"),
    ("hydraulic_radius", "hydraulic radius"), ("velocity", "velocity"), ("travel_time_h", "time"),
    ("velocity_half", "velocity, half"), ("travel_time_half_h", "time, half"),
)  # fmt: skip


def segment_table(run: Run, outlet: Outlet) -> dict[str, Any]:
    """Return the segment table: header, rows, and the bases that stand as letters in the rows."""
    system = run.system
    header = []
    for stem, label in _SEGMENT_COLUMNS:
        unit = (
            "%" if stem == "slope" else "min" if stem.endswith("_h") else words.unit_of(SEGMENTS.column(stem), system)
        )
        header.append((label, unit))
    present = [any(row[stem] == row[stem] for row in outlet.segments) for stem, _ in _SEGMENT_COLUMNS]
    classes = _class_names(run)
    letters: dict[str, str] = {}
    rows = []
    for row in outlet.segments:
        basis = plain(row["basis"])
        letters.setdefault(basis, _letter(len(letters)))
        cells = [_segment_cell(stem, row[stem], system) for stem, _ in _SEGMENT_COLUMNS]
        rows.append(
            {
                "number": int(row["segment"]),
                "regime": row["regime"],
                "label": palette.regime(row["regime"]).label.removesuffix(" concentrated flow").removesuffix(" flow"),
                "cover": _cover_name(classes, row["cover"]),
                "cells": [cell for cell, shown in zip(cells, present, strict=True) if shown],
                "basis": letters[basis],
                "edited": bool(row["edited"]),
                "note": plain(row["note"]),
            }
        )
    return {
        "header": [entry for entry, shown in zip(header, present, strict=True) if shown],
        "rows": rows,
        "bases": [(letter, basis) for basis, letter in letters.items()],
        "edited": any(row["edited"] or row["note"] for row in rows),
    }


def _letter(number: int) -> str:
    """Return a, b, ... z, aa, ab, ...: what stands for a basis in the table."""
    return (_letter(number // 26 - 1) if number > 25 else "") + chr(ord("a") + number % 26)


def _segment_cell(stem: str, value: float, system: System) -> str:
    if value != value:
        return ""
    if stem in ("from", "to"):
        return station(value, system)
    if stem.endswith("elevation"):
        return elevation(value, system)
    scale = 100.0 if stem == "slope" else 60.0 if stem.endswith("_h") else 1.0
    return figure(scale * value)


def _timing_table(outlet: Outlet) -> list[dict[str, Any]]:
    """Return the methods that gave a time, the adopted one first."""
    return [
        {
            "name": charts.usual_name(row["method"]),
            "tc": figure(row["tc_h"]),
            "standing": charts.standing(row),
            "adopted": row["adopted"],
            "reason": plain(row["reason"]),
            "source": plain(row["source"]),
        }
        for row in charts.timing_rows(outlet)
    ]


def _not_computed(outlet: Outlet) -> list[str]:
    """Return why the other methods gave no time: each reason with its methods."""
    by_reason: dict[str, list[str]] = {}
    for row in outlet.timing:
        if row["tc_h"] != row["tc_h"]:
            by_reason.setdefault(plain(row["reason"]), []).append(charts.usual_name(row["method"]))
    return [f"{', '.join(names)}: {reason}" for reason, names in by_reason.items()]


def _cross_checks(run: Run, outlet: Outlet) -> list[dict[str, Any]]:
    """Return the peaks by other methods beside the hydrographs' own."""
    unit = words.unit_of(CROSS_CHECKS.column("peak"), run.system)
    periods = {float(period): period for period in run.periods}
    return [
        {
            "period": periods.get(row["return_period_yr"], f"{row['return_period_yr']:g}"),
            "method": plain(row["method"]),
            "peak": f"{figure(row['peak'])} {unit}" if row["peak"] == row["peak"] else "–",
            "ratio": figure(row["ratio"]),
            "standing": "applicable" if row["applicable"] else plain(row["reason"]),
            "source": plain(row["source"]),
        }
        for row in outlet.cross_checks
        if row["peak"] == row["peak"]
    ]


def _class_names(run: Run) -> Mapping[str, str]:
    return {entry["code"]: entry["name"] for entry in run.about["scheme"]["classes"]}


def _cover_name(classes: Mapping[str, str], code: str) -> str:
    return plain(f"{classes[code]} ({code})" if code in classes else code)


def _worksheet(run: Run, outlet: Outlet) -> dict[str, Any]:
    """Return the curve-number worksheet, the largest patches first, with their sources."""
    classes = _class_names(run)
    total = sum(row["area"] for row in outlet.shares) or math.nan
    rows = [
        {"cover": _cover_name(classes, row["cover"]), "group": plain(row["soil_group"]), "area": figure(row["area"]),
         "share": figure(100 * row["area"] / total), "curve_number": figure(row["curve_number"]),
         "impervious": figure(row["impervious_pct"]), "source": plain(row["source"])}
        for row in sorted(outlet.shares, key=lambda row: -row["area"])
    ]  # fmt: skip
    return {"rows": rows, "unit": words.unit_of(COVER_SHARES.column("area"), run.system)}
