"""The charts of an outlet's page."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from basinwright.registry import methods
from basinwright.report import palette, words
from basinwright.report.reading import Outlet, Row, Run, profile_points
from basinwright.report.svg import (
    Scale,
    axis_bottom,
    axis_left,
    el,
    join,
    number,
    picture,
    polyline,
    round_step,
    spread_labels,
    text,
)
from basinwright.tables import HYDROGRAPHS, OUTLETS, SEGMENTS, TIME_AREA, UNIT_HYDROGRAPHS

if TYPE_CHECKING:
    from numpy.typing import NDArray

WIDE, HALF = 760.0, 470.0
_LEFT, _RIGHT = 62.0, 16.0
_CHANNELS = ("channel", "open_water", "pipe", "lined_channel")


def profile(run: Run, outlet: Outlet, slope_floor: float) -> Markup | None:
    """Draw the long profile over the slopes of its segments; None where there is no path."""
    points = profile_points(outlet.segments)
    if len(points) < 2:
        return None
    unit = words.unit_of(SEGMENTS.column("from"), run.system)
    length = points[-1][0]
    elevations = [elevation for _, elevation in points]
    span = max(max(elevations) - min(elevations), 1e-6)
    along = along_profile(length)
    height = Scale(min(elevations) - 0.06 * span, max(elevations) + 0.08 * span, 232.0, 30.0)
    lowest = 100.0 * min([slope_floor, *(row["slope"] for row in outlet.segments if row["slope"] > 0)])
    # Open water is level: it stands at the foot of a logarithmic axis.
    slopes = [max(100.0 * row["slope"], lowest / 1.6) for row in outlet.segments]
    steep = Scale(lowest / 1.6, max(*slopes, 1.0) * 1.3, 352.0, 268.0, log=True)
    parts = [
        axis_left(height, _LEFT, f"elevation, {unit}", WIDE - _RIGHT),
        axis_left(steep, _LEFT, "slope, %", WIDE - _RIGHT),
        axis_bottom(along, 352.0, f"distance from the divide along the path, {unit}", top=268.0),
    ]
    lines: list[Markup] = []
    for row, slope in zip(outlet.segments, slopes, strict=True):
        style = palette.regime(row["regime"])
        left, right = along(row["from"]), along(row["to"])
        told = _segment_told(run, row, unit)
        lines.append(
            el(
                "path", el("title", told), fill="none", stroke=style.colour, stroke_width=3.0,
                stroke_dasharray=style.dash or None,
                d=f"M{number(left)} {number(height(row['top_elevation']))}"
                f"L{number(right)} {number(height(row['bottom_elevation']))}",
            )
        )  # fmt: skip
        top = steep(slope)
        lines.append(
            el(
                "rect", el("title", told), x=left, y=top, width=max(right - left, 0.6), height=352.0 - top,
                fill=style.colour, fill_opacity=0.35,
            )
        )  # fmt: skip
        lines.append(
            el("path", d=f"M{number(left)} {number(top)}H{number(right)}", stroke=style.colour, stroke_width=2.0)
        )
    floor = steep(100.0 * slope_floor)
    lines.append(el("path", d=f"M{_LEFT} {number(floor)}H{WIDE - _RIGHT}", class_="limit"))
    floor_label = f"floor {words.figure(100 * slope_floor)} %"
    lines.append(text(WIDE - _RIGHT - 4, floor - 4, floor_label, anchor="end", class_="halo"))
    start = next((row["from"] for row in outlet.segments if row["regime"] in _CHANNELS), None)
    if start is not None:
        x = along(start)
        lines.append(el("path", d=f"M{number(x)} 30V232M{number(x)} 268V352", class_="limit"))
        label = f"channel begins at {words.station(start, run.system)} {unit}"
        left_side = x > WIDE * 0.6
        lines.append(text(x - 6 if left_side else x + 6, 42.0, label, anchor="end" if left_side else "start"))
    fall = elevations[0] - elevations[-1]
    description = (
        f"The path falls {words.figure(fall)} {unit} over {words.figure(length)} {unit}, from "
        f"{words.elevation(elevations[0], run.system)} to {words.elevation(elevations[-1], run.system)} {unit}. "
        f"{words.count(len(outlet.segments), 'segment')}."
        + (f" The channel begins {words.station(start, run.system)} {unit} from the divide." if start else "")
    )
    return picture(WIDE, 392.0, "Long profile", description, *parts, *lines, key=f"{outlet.anchor}-profile")


def along_profile(length: float) -> Scale:
    """Return the scale of distances on the long profile of a path of this length."""
    return Scale(0.0, length, _LEFT, WIDE - _RIGHT)


def _segment_told(run: Run, row: Row, unit: str) -> str:
    return (
        f"segment {int(row['segment'])}, {palette.regime(row['regime']).label}: "
        f"{words.station(row['from'], run.system)} to {words.station(row['to'], run.system)} {unit}, "
        f"slope {words.figure(100 * row['slope'])} %"
    )


def timing(outlet: Outlet) -> Markup | None:
    """Draw every timing method that gave a time on one axis; None where there is none."""
    rows = timing_rows(outlet)
    if not rows:
        return None
    left, right, top, step = 182.0, HALF - 52.0, 14.0, 25.0
    bottom = top + step * len(rows)
    times = [row["tc_h"] for row in rows]
    wide = max(times) / min(times) > 20.0
    scale = Scale(min(times) / 1.5 if wide else 0.0, max(times) * (1.5 if wide else 1.06), left, right, log=wide)
    parts = [axis_bottom(scale, bottom + 4, "time of concentration, h", about=5, top=top - 6)]
    applicable = [row["tc_h"] for row in rows if row["applicable"]]
    if len(applicable) > 1:
        x = scale(min(applicable))
        parts.append(
            el("rect", x=x, y=top - 6, width=scale(max(applicable)) - x, height=bottom - top + 10, class_="band")
        )
    for i, row in enumerate(rows):
        y = top + step * (i + 0.5)
        x = scale(row["tc_h"])
        name = usual_name(row["method"])
        parts.append(
            text(
                left - 10,
                y + 4,
                words.short(name.partition(" (")[0], 26),
                anchor="end",
                class_="adopted" if row["adopted"] else None,
            )
        )
        told = el("title", f"{name}: {words.figure(row['tc_h'])} h, {standing(row)}")
        if row["adopted"]:
            mark = el("path", told, d=f"M{number(x)} {number(y - 8)}l8 8-8 8-8-8Z", fill=palette.ADOPTED)
        elif row["applicable"]:
            mark = el("circle", told, cx=x, cy=y, r=5.5, fill=palette.ADOPTED, fill_opacity=0.75)
        else:
            mark = el("circle", told, cx=x, cy=y, r=5.0, fill="#fff", stroke=palette.OTHER, stroke_width=1.6)
        parts += [mark, text(x + 12, y + 4, words.figure(row["tc_h"]))]
    description = "; ".join(
        f"{usual_name(row['method'])} {words.figure(row['tc_h'])} h, {standing(row)}" for row in rows
    )
    title = "Times of concentration by method"
    return picture(HALF, bottom + 44, title, description, *parts, key=f"{outlet.anchor}-timing")


def usual_name(key: str) -> str:
    """Return the usual name of a timing method."""
    known = methods("timing")
    return known[key].name if key in known else key


def timing_rows(outlet: Outlet) -> list[Row]:
    """Return the timing methods that gave a time: the adopted one, then the applicable, then the others."""
    rows = [row for row in outlet.timing if row["tc_h"] == row["tc_h"] and row["tc_h"] > 0]
    return sorted(rows, key=lambda row: (not row["adopted"], not row["applicable"], row["tc_h"]))


def standing(row: Row) -> str:
    """Say whether a method is adopted, applicable or outside its range."""
    if row["adopted"]:
        return "adopted" if row["applicable"] else "adopted, outside its range"
    return "applicable" if row["applicable"] else "outside its range"


def unit_hydrograph(run: Run, outlet: Outlet) -> Markup | None:
    """Draw the unit hydrograph; None where the run keeps none."""
    if not outlet.unit_hydrograph:
        return None
    hours, flow = outlet.unit_hydrograph["time_h"], outlet.unit_hydrograph["flow"]
    unit = words.unit_of(UNIT_HYDROGRAPHS.column("flow"), run.system)
    peak = int(flow.argmax())
    along = Scale(0.0, float(hours[-1]), _LEFT, HALF - _RIGHT)
    up = Scale(0.0, float(flow[peak]) * 1.12, 232.0, 30.0)
    x, y = along(float(hours[peak])), up(float(flow[peak]))
    duration = outlet.row["unit_duration_h"]
    label = f"{words.figure(float(flow[peak]))} {unit} at {words.figure(float(hours[peak]))} h"
    base = words.figure(float(hours[-1]))
    description = f"Unit hydrograph of {words.figure(duration)} h of excess rain: peak {label}, base {base} h."
    return picture(
        HALF, 272.0, "Unit hydrograph", description,
        axis_left(up, _LEFT, f"flow, {unit}", HALF - _RIGHT),
        axis_bottom(along, 232.0, "time from the start of the excess rain, h", top=30.0),
        polyline(_thinned(hours, flow, along, up), stroke=palette.ADOPTED, stroke_width=2.2),
        el("circle", cx=x, cy=y, r=4.0, fill=palette.ADOPTED),
        text(x + 9, y - 7, label),
        key=f"{outlet.anchor}-unit",
    )  # fmt: skip


def time_area(run: Run, outlet: Outlet) -> Markup | None:
    """Draw the share of the basin whose water has arrived by each time; None where the run keeps none."""
    if not outlet.time_area:
        return None
    hours, area = outlet.time_area["travel_time_h"], outlet.time_area["area"]
    unit = words.unit_of(TIME_AREA.column("area"), run.system)
    tc_h = outlet.row["tc_h"]
    along = Scale(0.0, max(float(hours[-1]), tc_h) * 1.04, _LEFT, HALF - _RIGHT)
    up = Scale(0.0, float(area[-1]) * 1.08, 232.0, 30.0)
    x = along(tc_h)
    left_side = x > HALF * 0.6
    half_h = float(hours[(area >= 0.5 * area[-1]).argmax()])
    half, all_of_it, tc = (words.figure(value) for value in (half_h, float(hours[-1]), tc_h))
    description = (
        f"Half of the basin's {words.figure(float(area[-1]))} {unit} arrives within {half} h, all of it within "
        f"{all_of_it} h; the time of concentration is {tc} h."
    )
    line = [(along(0.0), up(0.0)), *_thinned(hours, area, along, up)]
    return picture(
        HALF, 272.0, "Time-area curve", description,
        axis_left(up, _LEFT, f"area, {unit}", HALF - _RIGHT),
        axis_bottom(along, 232.0, "travel time to the outlet, h", top=30.0),
        polyline(line, stroke=palette.ADOPTED, stroke_width=2.2),
        el("path", d=f"M{number(x)} 30V232", class_="limit"),
        text(x - 6 if left_side else x + 6, 222.0, f"Tc {tc} h", anchor="end" if left_side else "start"),
        key=f"{outlet.anchor}-arrival",
    )  # fmt: skip


def floods(run: Run, outlet: Outlet) -> Markup | None:
    """Draw the rain of the rarest storm over the hydrographs of all return periods."""
    drawn = {period: flood for period, flood in outlet.floods.items() if flood["flow"].max() > 0}
    if not drawn:
        return None
    rarest = max(drawn, key=float)
    flood = drawn[rarest]
    depth = words.unit_of(HYDROGRAPHS.column("rain"), run.system)
    unit = words.unit_of(HYDROGRAPHS.column("flow"), run.system)
    hours = flood["time_h"]
    step = float(hours[1] - hours[0])
    biggest = float(flood["flow"].max())
    last = max(float(hours[(flood["flow"] > 0.01 * biggest)].max()), float(hours[flood["rain"] > 0].max()))
    along = Scale(0.0, last, _LEFT, WIDE - _RIGHT)
    capacity = outlet.row.get("capacity", math.nan)
    with_capacity = capacity == capacity and capacity < 1.6 * biggest
    up = Scale(0.0, max(biggest, capacity if with_capacity else 0.0) * 1.06, 400.0, 172.0)
    rain = flood["rain"] / step
    down = Scale(0.0, float(rain.max()) * 1.05, 30.0, 138.0)
    parts = [
        axis_left(down, _LEFT, f"rain, {depth}/h, {rarest}-year storm", WIDE - _RIGHT, about=3),
        _bars(hours, rain, step, along, down, last, palette.RAIN),
        _bars(hours, flood["excess"] / step, step, along, down, last, palette.EXCESS),
        _swatch(WIDE - 240, 22.0, palette.RAIN, "rain"),
        _swatch(WIDE - 170, 22.0, palette.EXCESS, "of it excess (runoff)"),
        axis_left(up, _LEFT, f"flow, {unit}", WIDE - _RIGHT),
        axis_bottom(along, 400.0, "time from the start of the storm, h", top=172.0),
    ]
    peaks = {period: float(flood["flow"].max()) for period, flood in drawn.items()}
    heights = dict(zip(drawn, spread_labels([up(peak) for peak in peaks.values()], 15.0, 178.0, 396.0), strict=True))
    for (period, each), colour in zip(drawn.items(), palette.ramp(len(drawn)), strict=True):
        flow = each["flow"]
        inside = each["time_h"] <= last
        line = _thinned(each["time_h"][inside], flow[inside], along, up)
        told = f"{period} years: {words.figure(peaks[period])} {unit}"
        parts.append(polyline(line, stroke=colour, stroke_width=2.2))
        level = (up.start - heights[period]) / (up.start - up.end) * up.high  # where the rarest flood gets there
        rises = along(float(hours[(flood["flow"] >= level).argmax()])) if level <= biggest else along(last)
        x = max(min(rises, along(float(each["time_h"][flow.argmax()]))) - 12, _LEFT + 130)
        parts.append(text(x, heights[period] + 4, told, anchor="end"))
        top = along(float(each["time_h"][flow.argmax()])), up(peaks[period])
        parts.append(
            el("path", d=f"M{number(x + 3)} {number(heights[period])}L{number(top[0])} {number(top[1])}", class_="lead")
        )
        parts.append(el("circle", el("title", told), cx=top[0], cy=top[1], r=3.2, fill=colour))
    if with_capacity:
        y = up(capacity)
        parts.append(el("path", d=f"M{_LEFT} {number(y)}H{WIDE - _RIGHT}", class_="capacity"))
        parts.append(
            text(
                WIDE - _RIGHT, y - 5, f"capacity {words.figure(capacity)} {unit}", anchor="end", class_="capacity-label"
            )
        )

    def figures(period: str) -> list[str]:
        stems = ("depth_{}yr", "runoff_{}yr", "peak_{}yr", "peak_time_{}yr_h")
        return [words.figure(outlet.row[stem.format(period)]) for stem in stems]

    description = "; ".join(
        f"{period}-year: rain {rain} {depth}, runoff {runoff} {depth}, peak {peak} {unit} at {at} h"
        for period in outlet.floods
        for rain, runoff, peak, at in [figures(period)]
    )
    return picture(WIDE, 440.0, "Design floods", description + ".", *parts, key=f"{outlet.anchor}-floods")


def scenarios(run: Run, outlet: Outlet) -> Markup | None:
    """Draw the rarest flood of the base and of every scenario; None where there are none."""
    if not outlet.floods or not outlet.scenario_floods:
        return None
    period = max(outlet.floods, key=float)
    drawn = {"base": outlet.floods[period]}
    drawn |= {name: floods[period] for name, floods in outlet.scenario_floods.items() if period in floods}
    biggest = max(float(flood["flow"].max()) for flood in drawn.values())
    if not biggest > 0:
        return None
    unit = words.unit_of(HYDROGRAPHS.column("flow"), run.system)
    capacity = outlet.row.get("capacity", math.nan)
    with_capacity = capacity == capacity and capacity < 1.6 * biggest
    shown = [flood["time_h"][flood["flow"] > 0.01 * biggest] for flood in drawn.values()]
    first = min((float(hours[0]) for hours in shown if hours.size), default=0.0)
    last = max(float(hours[-1]) for hours in shown if hours.size)
    first = max(first - 0.04 * (last - first), 0.0)
    key = 22.0 * len(drawn)
    top, bottom = 18.0 + key, 300.0 + key
    along = Scale(first, last, _LEFT, WIDE - _RIGHT)
    up = Scale(0.0, max(biggest, capacity if with_capacity else 0.0) * 1.06, bottom, top + 12)
    parts = [
        axis_left(up, _LEFT, "", WIDE - _RIGHT),
        axis_bottom(along, bottom, f"time from the start of the {period}-year storm, h; flow in {unit}", top=top + 12),
    ]
    told = []
    for place, (name, flood) in enumerate(drawn.items()):
        style, inside = palette.scenario(place), (flood["time_h"] >= first) & (flood["time_h"] <= last)
        line = _thinned(flood["time_h"][inside], flood["flow"][inside], along, up)
        at = int(flood["flow"].argmax())
        label = f"{words.short(name, 40)}: {words.figure(float(flood['flow'][at]))} {unit}"
        label += f" at {words.figure(float(flood['time_h'][at]))} h"
        look = {"stroke": style.colour, "stroke_width": 2.2, "stroke_dasharray": style.dash or None}
        parts.append(polyline(line, **look))
        parts.append(el("path", d=f"M{number(_LEFT)} {number(14.0 + 22.0 * place)}h34", **look))
        parts.append(text(_LEFT + 42, 18.0 + 22.0 * place, label))
        told.append(label)
    if with_capacity:
        y = up(capacity)
        parts.append(el("path", d=f"M{_LEFT} {number(y)}H{WIDE - _RIGHT}", class_="capacity"))
        label = f"capacity {words.figure(capacity)} {unit}"
        parts.append(text(WIDE - _RIGHT, y - 5, label, anchor="end", class_="capacity-label"))
    description = f"Flood of the {period}-year storm. " + "; ".join(told) + "."
    title = "Floods of base and scenarios"
    return picture(WIDE, bottom + 40.0, title, description, *parts, key=f"{outlet.anchor}-scenarios")


def _swatch(x: float, y: float, colour: str, label: str) -> Markup:
    return join([el("rect", x=x, y=y - 9, width=11.0, height=10.0, fill=colour), text(x + 16, y, label)])


def _bars(
    hours: NDArray[Any], rate: NDArray[Any], step: float, along: Scale, down: Scale, last: float, colour: str
) -> Markup:
    """Draw rates that end at their times as one outline hanging from the axis."""
    base = number(down.start)
    d = [f"M{number(along.start)} {base}"]
    before = None
    for end, value in zip(hours[1:].tolist(), rate[1:].tolist(), strict=True):
        if end > last + step / 2:
            break
        y = number(down(value))
        if y != before:
            d.append(f"H{number(along(min(end - step, last)))}V{y}")
            before = y
    d.append(f"H{number(along.end)}V{base}Z")
    return el("path", d="".join(d), fill=colour)


def _thinned(hours: NDArray[Any], flow: NDArray[Any], along: Scale, up: Scale) -> list[tuple[float, float]]:
    """Return a line's points without those that do not show."""
    import shapely

    points = [(along(t), up(q)) for t, q in zip(hours.tolist(), flow.tolist(), strict=True)]
    if len(points) < 3:
        return points
    return [(x, y) for x, y in shapely.LineString(points).simplify(0.2).coords]


def capacity(run: Run, outlet: Outlet) -> Markup | None:
    """Draw the peaks as bars against the capacity; None where there is no capacity."""
    limit = outlet.row.get("capacity", math.nan)
    peaks = {period: outlet.row[f"peak_{period}yr"] for period in run.periods}
    peaks = {period: peak for period, peak in peaks.items() if peak == peak}
    if limit != limit or not peaks:
        return None
    unit = words.unit_of(OUTLETS.column("capacity"), run.system)
    left, right, top, step = 74.0, HALF - 160.0, 42.0, 30.0
    bottom = top + step * len(peaks)
    high = max(limit, *peaks.values()) * 1.04
    ticks = round_step(high / 4)
    scale = Scale(0.0, max(high, ticks), left, right)
    parts = [axis_bottom(scale, bottom + 2, f"peak flow, {unit}", about=4, top=top - 6)]
    told = []
    for i, ((period, peak), colour) in enumerate(zip(peaks.items(), palette.ramp(len(peaks)), strict=True)):
        y = top + step * i
        verdict = "no verdict" if outlet.open_ended else "over capacity" if peak > limit else "within"
        parts += [
            text(left - 8, y + 18, f"{period} years", anchor="end"),
            el("rect", x=left, y=y + 5, width=scale(peak) - left, height=18.0, fill=colour),
            text(right + 10, y + 18, f"{words.figure(peak)}: {verdict}", class_="adopted" if peak > limit else None),
        ]
        told.append(f"{period}-year {words.figure(peak)} {unit}, {verdict}")
    x = scale(limit)
    side = "end" if x > (left + right) / 2 else "start"
    parts += [
        el("path", d=f"M{number(x)} {number(top - 12)}V{number(bottom + 2)}", class_="capacity"),
        text(x, top - 18, f"capacity {words.figure(limit)} {unit}", anchor=side, class_="capacity-label"),
    ]
    description = f"Capacity {words.figure(limit)} {unit}. " + "; ".join(told) + "."
    return picture(HALF, bottom + 42, "Peaks against capacity", description, *parts, key=f"{outlet.anchor}-capacity")
