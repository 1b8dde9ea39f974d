"""How sure an outlet's numbers are: bands, what drives them, the region's equations, the crossings that fail first."""

from __future__ import annotations

import math
from typing import Any

from markupsafe import Markup

from basinwright.report import palette, words
from basinwright.report.reading import Outlet, Row, Run
from basinwright.report.svg import Scale, axis_bottom, el, number, picture, text
from basinwright.report.words import figure, plain, short
from basinwright.tables import CAPACITY, OUTLETS, REGIONAL

WIDTH = 470.0
FIRST_TO_FAIL = 40
"""Crossings in the list of the index where the run has many."""

_INPUTS = {
    "curve_number": "curve number",
    "roughness": "roughness",
    "peak_rate_factor": "peak rate factor",
    "stream_area_factor": "channel start",
    "depths": "rain depth",
    "stage": "channel stage",
    "cell_size": "cell size",
}


def input_name(key: str) -> str:
    """Return what an uncertain input is called."""
    return _INPUTS.get(key, plain(key))


def _end(row: Row, value: float) -> str:
    """Return an end of an input's range as it is applied, in a word."""
    key = row["input"]
    if key == "cell_size":
        return f"{figure(value)} {row['applied'].rpartition(', ')[2]}"
    if key == "curve_number":
        return f"{value:+g}".replace("-", "−")
    if key == "stage":
        return "bankfull" if value == 1.0 else f"{value:g} of it"
    return f"{value:g}" if key == "peak_rate_factor" else f"× {value:.3g}"


def bands(run: Run, outlet: Outlet) -> dict[str, Any] | None:
    """Return the bands of an outlet as sentence and table; None where the run has none."""
    if not outlet.bands:
        return None
    flow = words.unit_of(OUTLETS.column("peak_{T}yr"), run.system)
    rows = []
    for band in outlet.bands:
        years, of_time = band["return_period_yr"], band["return_period_yr"] != band["return_period_yr"]
        period = "" if of_time else _period(run, years)
        of_run = outlet.row["tc_h" if of_time else f"peak_{period}yr"]
        rows.append(
            {
                "name": "time of concentration" if of_time else f"{period}-year peak",
                "unit": "h" if of_time else flow,
                "run": figure(of_run),
                **{name: figure(band[name]) for name in ("p05", "p50", "p95")},
            }
        )
    return {"rows": rows, "told": _told(run, outlet, rows), "size": run.about["project"]["uncertainty"]["samples"]}


def _period(run: Run, years: float) -> str:
    return next((period for period in run.periods if float(period) == years), f"{years:g}")


def _told(run: Run, outlet: Outlet, rows: list[dict[str, str]]) -> str:
    """Say the band and the biggest driver of the rarest peak and of the time in a sentence each."""
    sentences = []
    for row, drivers in ((rows[-1], _drivers(run, outlet, "rank")), (rows[0], _drivers(run, outlet, "tc_rank"))):
        by = f"; the {drivers[0]} moves it most{f', then the {drivers[1]}' if drivers[1:] else ''}" if drivers else ""
        sentences.append(f"{row['name'].capitalize()}: {row['p05']} to {row['p95']} {row['unit']}{by}.")
    if outlet.open_ended:
        sentences.append("All of this is of the part of the basin on the terrain: it goes on beyond.")
    return " ".join(sentences)


def _drivers(run: Run, outlet: Outlet, rank: str) -> list[str]:
    """Return the sampled inputs that move the rarest peak or the time, the strongest first."""
    low, high = ("tc_low_h", "tc_high_h") if rank == "tc_rank" else ("peak_low", "peak_high")
    moving = [row for row in _swings(run, outlet) if row["sampled"] and row[low] != row[high]]
    return [input_name(row["input"]) for row in sorted(moving, key=lambda row: row[rank])]


def _swings(run: Run, outlet: Outlet) -> list[Row]:
    """Return the swings of the rarest storm."""
    rarest = float(run.periods[-1])
    return [row for row in outlet.swings if row["return_period_yr"] == rarest]


def peak_swings(run: Run, outlet: Outlet) -> Markup | None:
    """Draw how far each input moves the rarest peak; None where the run has no swings."""
    flow, rarest = words.unit_of(OUTLETS.column("peak_{T}yr"), run.system), run.periods[-1]
    rows = sorted(_swings(run, outlet), key=lambda row: row["rank"])
    title = f"What moves the {rarest}-year peak"
    ends, at = ("peak_low", "peak_high"), outlet.row[f"peak_{rarest}yr"]
    return _tornado(rows, ends, at, title, flow, f"{outlet.anchor}-peak-swings")


def time_swings(run: Run, outlet: Outlet) -> Markup | None:
    """Draw how far each input moves the time of concentration; None where none does."""
    rows = [row for row in _swings(run, outlet) if row["tc_low_h"] != row["tc_high_h"]]
    rows.sort(key=lambda row: row["tc_rank"])
    title = "What moves the time of concentration"
    return _tornado(rows, ("tc_low_h", "tc_high_h"), outlet.row["tc_h"], title, "h", f"{outlet.anchor}-time-swings")


def _tornado(rows: list[Row], ends: tuple[str, str], at: float, title: str, unit: str, key: str) -> Markup | None:
    """Draw a bar for each input between the results at the ends of its range, about the run's own result."""
    if not rows or at != at:
        return None
    left, right, top, step = 128.0, WIDTH - 16.0, 14.0, 34.0
    bottom = top + step * len(rows)
    values = [row[name] for row in rows for name in ends]
    low, high = min(*values, at), max(*values, at)
    room = 0.16 * (high - low) or 0.1 * high
    scale = Scale(max(low - room, 0.0), high + room, left, right)
    parts = [axis_bottom(scale, bottom + 4, f"{title.partition('moves the ')[2]}, {unit}", about=5, top=top - 6)]
    told = []
    for i, row in enumerate(rows):
        y = top + step * i
        name, first, second = input_name(row["input"]), row[ends[0]], row[ends[1]]
        labels = {first: _end(row, row["low"]), second: _end(row, row["high"])}
        small, large = min(first, second), max(first, second)
        parts.append(text(left - 8, y + 19, name if row["sampled"] else f"{name} *", anchor="end"))
        told.append(f"{name} {labels.get(small, '')}: {figure(small)}, {labels.get(large, '')}: {figure(large)} {unit}")
        # The run's own result may lie outside the two: the shape of the unit hydrograph changes with its factor.
        for end, colour in ((small, palette.EXCESS), (large, palette.ADOPTED)):
            begin, stop = sorted((scale(at), scale(end)))
            if stop - begin > 0.05:
                attributes = {"x": begin, "y": y + 7, "width": stop - begin, "height": 16.0, "fill": colour}
                parts.append(el("rect", el("title", told[-1]), fill_opacity=0.85, **attributes))
        if small != large:
            parts.append(text(scale(min(small, at)) - 4, y + 19, labels[small], anchor="end", class_="halo"))
            parts.append(text(scale(max(large, at)) + 4, y + 19, labels[large], class_="halo"))
    x = number(scale(at))
    parts.append(el("path", d=f"M{x} {number(top - 6)}V{number(bottom + 4)}", class_="limit"))
    description = f"The run: {figure(at)} {unit}. " + "; ".join(told) + "."
    return picture(WIDTH, bottom + 44, title, description, *parts, key=key)


def regional(run: Run, outlet: Outlet) -> list[dict[str, Any]]:
    """Return the peaks beside the region's equations."""
    unit = words.unit_of(REGIONAL.column("peak"), run.system)
    rows = []
    for row in outlet.regional:
        inside = row["regional_p05"] <= row["peak"] <= row["regional_p95"]
        standing = "inside" if inside else "outside the band"
        rows.append(
            {
                "period": _period(run, row["return_period_yr"]),
                "peak": f"{figure(row['peak'])} {unit}",
                "regional": f"{figure(row['regional'])} {unit}" if row["regional"] == row["regional"] else "–",
                "band": f"{figure(row['regional_p05'])} to {figure(row['regional_p95'])}",
                "ratio": figure(row["ratio"]),
                "standing": standing if row["applicable"] else f"not applicable: {plain(row['reason'])}",
                "outside": bool(row["applicable"]) and not inside,
                "source": short(row["source"], 200),
            }
        )
    return rows


def failing(run: Run) -> dict[str, Any] | None:
    """Return the list of crossings by what fails first, scenarios beside the base; None without capacities."""
    numbers = {outlet.id: outlet for outlet in run.outlets}
    base = [row for row in run.capacity if row["scenario"] == "base" and row["outlet_id"] in numbers]
    if not base:
        return None
    scenarios = list(dict.fromkeys(row["scenario"] for row in run.capacity if row["scenario"] != "base"))
    others = {(row["scenario"], row["outlet_id"]): row for row in run.capacity}
    with_bands = any(row["band"] for row in base)
    unit = words.unit_of(CAPACITY.column("capacity"), run.system)
    rows = [
        {
            "outlet": numbers[row["outlet_id"]],
            "id": short(row["outlet_id"], 40),
            "name": short(row["name"], 60),
            "rank": "–" if math.isnan(row["rank"]) else f"{row['rank']:.0f}",
            "capacity": figure(row["capacity"]),
            "basis": short(row["capacity_basis"], 80),
            "verdict": plain(row["verdict"]),
            "at": years(row, run),
            "band": plain(row["band"]) or "–",
            "loads": [_share(row[f"peak_over_capacity_{period}yr"]) for period in run.periods],
            "over": [row[f"peak_over_capacity_{period}yr"] > 1.0 for period in run.periods],
            "scenarios": [years(others.get((name, row["outlet_id"])), run) for name in scenarios],
        }
        for row in base[:FIRST_TO_FAIL]
    ]
    return {
        "rows": rows,
        "unit": unit,
        "with_bands": with_bands,
        "scenarios": [short(name, 30) for name in scenarios],
        "periods": run.periods,
        "more": len(base) - len(rows),
    }


def years(row: Row | None, run: Run) -> str:
    """Return the return period that reaches a capacity, in a word or two."""
    if row is None:
        return "–"
    if row["exceeded_at_yr"] == "unknown":
        return "unknown"
    at = row["exceeded_at_interp_yr"]
    if at == at:
        return f"{at:.2g}" if at < 10 else f"{at:.0f}"
    return f"under {run.periods[0]}" if row["exceeded_at_yr"] else f"over {run.periods[-1]}"


def _share(ratio: float) -> str:
    return "–" if ratio != ratio else f"{100 * ratio:.0f}"
