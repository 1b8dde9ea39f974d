"""How the columns of outlets.csv and basin_parameters.csv come to be."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from basinwright.explaining import ground
from basinwright.explaining.reading import Here
from basinwright.explaining.records import (
    FACTORS,
    Choice,
    Get,
    How,
    PublishedRow,
    Ref,
    Value,
    cell,
    column,
    option,
    row_of,
)
from basinwright.hydrograph import UnitHydrographs
from basinwright.registry import find
from basinwright.runoff import Patches, retentions
from basinwright.tables import BASIN_PARAMETERS, COVER_SHARES, HYDROGRAPHS, OUTLETS, SEGMENTS, TIMING

_NEH15 = "USDA NRCS, National Engineering Handbook, Part 630, chapter 15 (2010)"
_NEH16 = "USDA NRCS, National Engineering Handbook, Part 630, chapter 16 (2007)"
_NEH10 = (
    "USDA NRCS, National Engineering Handbook, Part 630, chapter 10 (2004), eq. 10-11; Technical Release 55 eq. 2-1"
)
NRCS_SHAPES = {"curvilinear": 484.0, "triangular": 484.0, "delmarva": 284.0}


def from_layer(key: str) -> How:
    """Return the record of what the outlet layer says."""
    return How(f"as it stands in the outlet layer, column outlets.{key} of the project", places=ground.supplied_places)


def depth_unit(here: Here) -> str:
    """Return the unit of depths in the run's tables."""
    return OUTLETS.column("depth_{T}yr").unit_in(here.run.system)


def patches_of(here: Here) -> tuple[Patches, tuple[Ref, ...]]:
    """Return the curve-number patches of the outlet, one where a person gave its curve number."""
    if held(here, "curve_number"):
        ref = Ref(OUTLETS.name, here.outlet, "curve_number")
        given = np.array([float(here.outlet["curve_number"])])
        return Patches(np.array([0, 1]), np.ones(1), given), (ref,)
    area, curve = here.column(COVER_SHARES.name, "area", "km2"), here.column(COVER_SHARES.name, "curve_number")
    return Patches(np.array([0, len(area.value)]), area.value, curve.value), curve.refs


def losses(here: Here) -> Any:
    """Return weights and retentions [mm] of the outlet's patches, as the project asks."""
    runoff = here.run.project.runoff
    return retentions(
        patches_of(here)[0],
        weighting=runoff.weighting,
        moisture=runoff.moisture,
        initial_abstraction_ratio=runoff.initial_abstraction_ratio,
    )


def weights(here: Here) -> Value:
    """Return the share of each patch in the basin's area."""
    return Value(losses(here).weight, "1", f"share of each patch in the area, runoff.weighting = {_weighting(here)}")


def _weighting(here: Here) -> str:
    return repr(here.run.project.runoff.weighting)


def retention(here: Here) -> Value:
    """Return the retention of each patch in the unit of depths."""
    unit, runoff = depth_unit(here), here.run.project.runoff
    form = "1000 / CN - 10 in" if runoff.initial_abstraction_ratio == 0.2 else "1.33 (1000 / CN - 10)^1.15 in"
    about = f"retention of each patch, {form}, moisture class {runoff.moisture}"
    return Value(losses(here).retention_mm / FACTORS[unit], unit, about, patches_of(here)[1])


def areal_depth(here: Here) -> Value:
    """Return the storm depth over the basin in the unit of depths."""
    factor = here.outlet.get("areal_factor", "")
    point = here.cell("depth_{T}yr", "", OUTLETS.name, here.period)
    about = "storm depth" + (f" times the areal factor {float(factor):.4g}" if factor else "")
    return Value(point.value * (float(factor) if factor else 1.0), point.unit, about, point.refs)


def held(here: Here, stem: str) -> bool:
    """Say whether a cell of outlets.csv stands as a person gave it."""
    return (OUTLETS.name, here.outlet_id, "", stem) in here.run.record.held


def unit_hydrograph(here: Here) -> UnitHydrographs:
    """Compute the outlet's unit hydrograph from its row, as the project's shape asks."""
    from basinwright.hydrograph import TimeArea

    section = here.run.project.unit_hydrograph
    entry = find("unit_hydrograph", section.shape)
    row, rows = here.outlet, here.rows("time_area")

    def metric(stem: str) -> Any:
        return np.array([here.at(OUTLETS.name, row, stem).number(_INSIDE.get(stem, ""))])

    available: dict[str, Any] = {
        "area_km2": metric("area"),
        "tc_h": metric("tc_h"),
        "unit_duration_h": metric("unit_duration_h"),
        "time_to_peak_h": metric("unit_duration_h") / 2.0 + 0.6 * metric("tc_h"),
        "path_length_m": metric("path_length"),
        "centroid_length_m": metric("centroid_length"),
        "peak_rate_factor": section.peak_rate_factor,
        "ct": section.ct,
        "cp": section.cp,
        "storage_ratio": section.storage_ratio,
    }
    if rows:
        travel, area = (here.column("time_area", stem, unit).value for stem, unit in _CURVE)
        available["time_area"] = TimeArea(np.array([0, len(rows)]), travel, area)
    units: UnitHydrographs = entry.function(**{name: available[name] for name in entry.inputs})
    return units


_INSIDE = {"area": "km2", "path_length": "m", "centroid_length": "m"}
_CURVE = (("travel_time_h", ""), ("area", "km2"))


def shape_rows(here: Here, time_ratio: float = 1.0) -> list[PublishedRow]:
    """Return the row of the published shape at or before a time over the time to peak; none for a shape by formula."""
    from basinwright import published

    names = {"curvilinear": "dimensionless_uh_neh_16_1", "delmarva": "dimensionless_uh_delmarva"}
    name = names.get(here.run.project.unit_hydrograph.shape)
    if name is None:
        return []
    table = published.table(name)
    before = [row for row in table.rows if float(row["time_ratio"]) <= time_ratio + 1e-9]
    return [PublishedRow(name, before[-1], table.source)]


def _shape(name: str, words: str, unit: str) -> Get:
    """Return the reader of a number of the unit hydrograph by the library's own function."""

    def get(here: Here) -> Value:
        shape = here.run.project.unit_hydrograph.shape
        units = unit_hydrograph(here)
        if name == "peak":
            area = here.cell("area", "km2", OUTLETS.name).value
            return Value(float(units.unit_peak_m3s_per_mm(np.array([area]))[0]), unit, f"{words}, shape {shape}")
        return Value(float(units.time_to_peak_h[0]), unit, f"{words}, shape {shape}")

    return get


def _time_to_peak(here: Here) -> How:
    shape = here.run.project.unit_hydrograph.shape
    if shape in (*NRCS_SHAPES, "gamma"):
        return How(
            "half the unit duration plus the lag",
            "D / 2 + 0.6 * Tc",
            {"D": cell("unit_duration_h"), "Tc": cell("tc_h")},
            source=f"{_NEH16}, eq. 16-7",
        )
    entry = find("unit_hydrograph", shape)
    return How(entry.form, "Tp", {"Tp": _shape("time", "time to peak", "h")}, source=entry.source)


def _unit_peak(here: Here) -> How:
    shape, entry = (
        here.run.project.unit_hydrograph.shape,
        find("unit_hydrograph", here.run.project.unit_hydrograph.shape),
    )
    if shape in NRCS_SHAPES:
        factor = Value(NRCS_SHAPES[shape], "ft3/s h/(mi2 in)", f"peak rate factor of the {shape} shape")
        return How(
            "peak rate factor times area over time to peak",
            "K * A / Tp",
            {"K": lambda _: factor, "A": cell("area", "mi2"), "Tp": cell("time_to_peak_h")},
            unit="ft3/s/in",
            source=f"{_NEH16}, eq. 16-6",
            rows=shape_rows,
        )
    peak = _shape("peak", "peak of the unit hydrograph", "m3/s/mm")
    return How(entry.form, "qp", {"qp": peak}, unit="m3/s/mm", source=entry.source)


def _duration(here: Here) -> Value:
    from basinwright.hydrograph import unit_duration_s

    storm, step = here.run.project.storm, here.run.project.unit_hydrograph.time_step
    hours = float(here.outlet.get("critical_duration_h", "") or storm.duration)

    def of(tc_h: float) -> float:
        return float(unit_duration_s(tc_h, hours, None if isinstance(step, str) else step)) / 3600.0

    words = "at most 0.133 Tc" if isinstance(step, str) else "as unit_hydrograph.time_step says"
    return Value(of, "h", f"the longest step of whole seconds that divides the storm's {hours:g} h, {words}")


def _depth(here: Here) -> How:
    storm, name = here.run.project.storm, f"depth_{here.period}yr"
    for flag in here.rows("flags"):
        if flag["flag"] == "OVERRIDE" and flag["message"].startswith(f"{name} "):
            return How(f"supplied with the outlet, column {name} of the outlet layer", places=ground.supplied_places)
    if here.run.project.storm.critical_duration:
        return How("depth of the critical duration, read off storm.ddf", source=storm.ddf or "")
    if storm.depth_rasters:
        file = storm.depth_rasters[here.period]
        return How(f"mean over the basin of the raster {file}, bilinear onto the grid", places=ground.basin_places)
    unit = depth_unit(here)
    depth = Value(
        storm.depths[here.period] / FACTORS[unit],
        unit,
        f'option storm.depths."{here.period}"' + (f", read off {storm.ddf}" if storm.ddf else ""),
    )
    return How("the project's depth of this return period", "P", {"P": lambda _: depth})


_Q = How(
    "runoff of each patch by curve number, averaged by area: r is the initial abstraction ratio, above0 leaves no "
    "negative rain",
    "sum(w * above0(P - r * S) ** 2 / (above0(P - r * S) + S))",
    {"w": weights, "P": areal_depth, "S": retention, "r": option("runoff.initial_abstraction_ratio")},
    source=_NEH10,
)


def at_peak(stem: str) -> Get:
    """Return the reader of a cell of the hydrograph's highest row of the period."""

    def get(here: Here) -> Value:
        rows = here.rows(HYDROGRAPHS.name, lambda row: float(row["return_period_yr"]) == float(here.period))
        if not rows:
            return Value(np.nan, "", "the run keeps no hydrographs (--summary-only)")
        flow = HYDROGRAPHS.column("flow").name(here.run.system)
        top = max(rows, key=lambda row: float(row[flow]))
        place = here.at(HYDROGRAPHS.name, top, stem)
        about = f"the highest of {len(rows)} rows, {place.table.column(stem).meaning}"
        return Value(place.number(), place.unit, about, (Ref(HYDROGRAPHS.name, top, stem),))

    return get


def _tc(here: Here) -> How:
    key = here.run.project.timing.adopt

    def adopted(here: Here) -> Value:
        row = here.rows(TIMING.name, lambda row: row["method"] == key)[0]
        return Value(float(row["tc_h"] or "nan"), "h", f"by {key}, timing.adopt", (Ref(TIMING.name, row, "tc_h"),))

    return How(
        "time of concentration by the adopted method, not under timing.minimum",
        "max(Tc, Tmin)",
        {"Tc": adopted, "Tmin": option("timing.minimum", inside="h")},
    )


def _lengths(*regimes: str) -> How:
    def end(stem: str) -> Get:
        return column(SEGMENTS.name, stem, where=lambda row: row["regime"] in regimes)

    words = f"lengths of the segments in {' or '.join(name.replace('_', ' ') for name in regimes)}"
    return How(words, "sum(b - a)", {"a": end("from"), "b": end("to")})


def _open_water(here: Here) -> Value:
    rows, scheme = here.rows(COVER_SHARES.name, first=True), here.run.settings.scheme
    wet = [1.0 if (found := scheme.find(row["cover"])) and found.open_water else 0.0 for row in rows]
    return Value(np.array(wet), "1", f"1 where the class is open water in scheme {scheme.name}")


def _first_areas(here: Here) -> Value:
    unit = COVER_SHARES.column("area").unit_in(here.run.system)
    areas = [here.at(COVER_SHARES.name, row, "area").number() for row in here.rows(COVER_SHARES.name, first=True)]
    return Value(np.array(areas), unit, "area of each patch, as the run first wrote it")


def _used(here: Here) -> How:
    periods = here.run.periods
    deepest = max(periods, key=lambda period: here.at(OUTLETS.name, here.outlet, "depth_{T}yr", period).number())

    def at(get: Get) -> Get:
        return lambda here: get(here.at(OUTLETS.name, here.outlet, "depth_{T}yr", deepest))

    return How(
        f"the curve number that gives the runoff of the deepest storm ({deepest} years), by the runoff equation",
        "25400 / (254 + (2 * r * P + (1 - r) * Q - sqrt(((1 - r) * Q) ** 2 + 4 * r * P * Q)) / (2 * r ** 2))",
        {
            "P": at(lambda here: _in_mm(areal_depth(here))),
            "Q": at(cell("runoff_{T}yr", "mm", period=True)),
            "r": option("runoff.initial_abstraction_ratio"),
        },
        source="R. H. Hawkins, J. Irrig. Drain. Div. ASCE 99, 1973",
    )


def _in_mm(value: Value) -> Value:
    return Value(value.value * FACTORS[value.unit], "mm", value.about, value.refs)


def _areal(here: Here) -> Value:
    from basinwright.storms import areal_reduction_leclerc_schaake

    hours = float(here.outlet.get("critical_duration_h", "") or here.run.project.storm.duration)
    return Value(
        lambda area: float(areal_reduction_leclerc_schaake(area, hours)),
        "1",
        f"reduction by Leclerc and Schaake for a storm of {hours:g} h",
    )


def _translation(here: Here) -> Value:
    from basinwright.hydrograph import TimeArea, translation_peak_rate_factor

    travel, area = (here.column("time_area", stem, unit).value for stem, unit in _CURVE)
    curve = TimeArea(np.array([0, travel.size]), travel, area)
    duration = np.array([here.at(OUTLETS.name, here.outlet, "unit_duration_h").number()])
    factor = float(translation_peak_rate_factor(duration, curve)[0])
    about = "peak of the time-area curve's own unit hydrograph times its time to peak over area, in the units of 484"
    return Value(factor, "1", about)


def _snap(here: Here) -> How:
    return How(
        "from the point as supplied to the centre of its cell on the flow line, 0 where the point lies in that cell; "
        "chosen within outlets.snap_within, nearest cell of the expected area or down the flow line to the channel",
        places=lambda here: [*ground.supplied_places(here), *ground.outlet_places(here)],
    )


def _degrees(which: int) -> Get:
    def get(here: Here) -> Value:
        from pyproj import Transformer

        crs = here.run.about["grid"]["crs"]
        transformer = Transformer.from_crs(crs, "EPSG:4326", always_xy=True)
        name = ("longitude", "latitude")[which]
        return Value(lambda x, y: transformer.transform(x, y)[which], "degree", f"{name} of a point of {crs}, by PROJ")

    return get


def _cell_centre(axis: str) -> How:
    def origin(here: Here) -> Value:
        place = ground.transform(here)
        return Value(place.c if axis == "x" else place.f, "CRS unit", "corner of the working grid (run.json, grid)")

    def size(here: Here) -> Value:
        place = ground.transform(here)
        return Value(place.a if axis == "x" else place.e, "CRS unit", "cell size of the working grid")

    def number(here: Here) -> Value:
        row, col = ground.row_col(here, *ground.outlet_xy(here))
        return Value(
            float(col if axis == "x" else row), "1", f"{'column' if axis == 'x' else 'row'} of the outlet's cell"
        )

    return How(
        "centre of the outlet's cell",
        f"{axis}0 + ({'j' if axis == 'x' else 'i'} + 0.5) * d",
        {f"{axis}0": origin, "j" if axis == "x" else "i": number, "d": size},
        places=ground.outlet_places,
    )


_FALL = {
    "z1": ground.first_segment_cell("top_elevation", 0, "m"),
    "z2": ground.first_segment_cell("bottom_elevation", -1, "m"),
    "L": ground.first_outlet_cell("path_length", "m"),
}

OUTLET_HOWS: Mapping[str, Choice] = {
    "outlet_id": from_layer("id"),
    "name": from_layer("name"),
    "status": How("failed where OUTLET_FAILED was raised, flagged where any other flag was, else ok"),
    "flags": How("the flags of this outlet in flags.csv, in one cell"),
    "x": _cell_centre("x"),
    "y": _cell_centre("y"),
    "longitude": How("the cell's centre on WGS 84", "f(x, y)", {"f": _degrees(0), "x": cell("x"), "y": cell("y")}),
    "latitude": How("the cell's centre on WGS 84", "f(x, y)", {"f": _degrees(1), "x": cell("x"), "y": cell("y")}),
    "snap": _snap,
    "downstream_outlet_id": How(
        "the first outlet met going down the flow directions from this one's cell", places=ground.outlet_places
    ),
    "area": How(
        "contributing area of the outlet's cell: true areas of all cells that drain to it",
        "A",
        {"A": ground.contributing_area},
        unit="km2",
        places=ground.basin_places,
    ),
    "centroid_length": How(
        "measured along the longest flow path, from the outlet to the point of it nearest to the "
        "centre of area of the basin",
        places=ground.path_places,
    ),
    "path_length": How(
        "where the last segment of the longest flow path ends",
        "max(b)",
        {"b": column(SEGMENTS.name, "to")},
        places=ground.path_places,
    ),
    "path_length_raw": How(
        "true lengths of the steps along the longest flow path, added up in whole micrometres; of all "
        "cells of the basin the one with the longest way",
        places=ground.path_places,
    ),
    "sheet_length": _lengths("sheet"),
    "shallow_length": _lengths("shallow"),
    "channel_length": _lengths("channel", "open_water", "pipe", "lined_channel"),
    "relief": How(
        "highest minus lowest cell of the basin, before conditioning",
        "max(z) - min(z)",
        {"z": ground.basin_values("elevation", "m")},
        unit="m",
        places=ground.extreme_places,
    ),
    "basin_slope_pct": How(
        "slope of each cell of the basin before conditioning, by the differences of its eight "
        "neighbours, averaged by true cell area",
        places=ground.basin_places,
        source="B. K. P. Horn, Hill Shading and the Reflectance Map, Proc. IEEE 69(1), 1981",
    ),
    "path_slope_pct": How(
        "fall of the path over its length, as the terrain gave it",
        "100 * (z1 - z2) / L",
        _FALL,
        places=ground.path_places,
    ),
    "path_slope_1085_pct": How(
        "between the points at 10 and 85 % of the path's length from the outlet",
        "100 * (z85 - z10) / (0.75 * L)",
        {
            "z85": ground.profile_at_share(0.15),
            "z10": ground.profile_at_share(0.90),
            "L": ground.first_outlet_cell("path_length", "m"),
        },
        places=ground.path_places,
    ),
    "curve_number": How(
        "mean of the patches by area",
        "sum(A * CN) / sum(A)",
        {"A": column(COVER_SHARES.name, "area"), "CN": column(COVER_SHARES.name, "curve_number")},
    ),
    "curve_number_used": _used,
    "impervious_pct": How(
        "mean of the patches by area",
        "sum(A * I) / sum(A)",
        {"A": column(COVER_SHARES.name, "area"), "I": column(COVER_SHARES.name, "impervious_pct")},
    ),
    "open_water_pct": How(
        "share of the patches whose class is open water",
        "100 * sum(A * W) / sum(A)",
        {"A": _first_areas, "W": _open_water},
    ),
    "tc_h": _tc,
    "tc_bankfull_h": How(
        "travel times along the path",
        "sum(t)",
        {"t": column(SEGMENTS.name, "travel_time_h")},
        source=f"{_NEH15}, eq. 15-7",
    ),
    "tc_half_bankfull_h": How(
        "travel times along the path, channels at half the bankfull depth",
        "sum(t)",
        {"t": column(SEGMENTS.name, "travel_time_half_h")},
        source=f"{_NEH15}, eq. 15-7",
    ),
    "lag_h": How("lag of the basin", "0.6 * Tc", {"Tc": cell("tc_h")}, source=f"{_NEH15}, eq. 15-3"),
    "unit_duration_h": How(
        "step of the unit hydrograph", "f(Tc)", {"f": _duration, "Tc": cell("tc_h")}, source=f"{_NEH16}, eq. 16-13"
    ),
    "time_to_peak_h": _time_to_peak,
    "unit_peak": _unit_peak,
    "depth_{T}yr": _depth,
    "runoff_{T}yr": _Q,
    "peak_{T}yr": How("the highest flow of the design flood", "max(Q)", {"Q": at_peak("flow")}),
    "peak_time_{T}yr_h": How("when the flow of the design flood is highest", "t", {"t": at_peak("time_h")}),
    "capacity": from_layer("capacity"),
    "capacity_basis": from_layer("capacity_basis"),
    "exceeded_at_yr": How(
        "the smallest tested return period whose peak exceeds the capacity; unknown where the basin "
        "touches the edge of the terrain"
    ),
    "mean_elevation": How(
        "mean of the basin's cells by true area, before conditioning",
        "sum(a * z) / sum(a)",
        {"a": ground.basin_values("cell_area", "m2"), "z": ground.basin_values("elevation", "m")},
        unit="m",
        places=ground.basin_places,
    ),
    "reach_length": How(
        "true lengths of the steps down the flow directions from this outlet's cell to the next outlet's",
        places=ground.outlet_places,
    ),
    "reach_fall": How(
        "conditioned elevation of this outlet's cell minus that of the next outlet's", places=ground.outlet_places
    ),
    "reach_area": How("contributing area at the last cell in the upper half of the reach", places=ground.outlet_places),
    "translation_peak_rate_factor": How(
        "what the peak rate factor would be if water were only carried, not stored", "K", {"K": _translation}
    ),
    "areal_factor": How(
        "from point to areal rainfall",
        "f(A)",
        {"f": _areal, "A": cell("area", "km2")},
        source="G. Leclerc and J. C. Schaake, MIT Report 142, 1972",
    ),
    "sink_area": How(
        "true areas of the cells whose water ends in a polygon of terrain.sinks that would spill towards this outlet",
        places=ground.basin_places,
    ),
    "drainage_density": How(
        "length of the channels in the basin over its area; channels begin at terrain.stream_area",
        places=ground.basin_places,
    ),
    "tc_longest_in_time_h": How(
        "travel time along the path from the cell whose water takes longest, by the time-area sweep; not edited",
        places=ground.basin_places,
    ),
    "critical_duration_h": How(
        "of the durations of storm.ddf the one whose storm gives the highest peak of the rarest flood"
    ),
}


def _from_outlets(stem: str) -> How:
    if OUTLETS.column(stem).type == "text":
        return How("copied from outlets.csv")
    return How("copied from outlets.csv", "v", {"v": cell(stem, table=OUTLETS.name)})


def _upstream(here: Here) -> Value:
    unit = OUTLETS.column("area").unit_in(here.run.system)
    here_at = (here.outlet["x"], here.outlet["y"])
    found: dict[tuple[str, str], Ref] = {}
    for outlet_id in here.run.position:
        row = here.run.require_outlet(outlet_id)
        below = row["downstream_outlet_id"]
        if below and _place(here.run.require_outlet(below)) == here_at:
            found[_place(row)] = Ref(OUTLETS.name, row, "area")
    areas = [here.at(OUTLETS.name, ref.row, "area").number() for ref in found.values()]
    return Value(np.array(areas), unit, "areas of the outlets next upstream; none: 0", tuple(found.values()))


def _place(row: Mapping[str, str]) -> tuple[str, str]:
    return row["x"], row["y"]


def bankfull_rows(here: Here) -> list[PublishedRow]:
    """Return the published row of the project's bankfull region; none where the relation is the project's own."""
    region = here.run.project.channel.bankfull_region
    return [] if region == "own" else [row_of("bankfull_bieger_2015", region)]


def bankfull(side: str, area: str) -> How:
    """Return the record of bankfull width or depth from a column of contributing area."""

    def power(k: int) -> Get:
        def get(here: Here) -> Value:
            relation = here.run.settings.relation
            word = ("coefficient", "exponent")[k]
            return Value(getattr(relation, side)[k], "1", f"{word}, {relation.name}", (), tuple(bankfull_rows(here)))

        return get

    inputs = {"a": power(0), "A": cell(area, "km2"), "b": power(1)}
    return How(f"bankfull {side} from contributing area", "a * A ** b", inputs, unit="m", rows=bankfull_rows)


def _mean_retention(here: Here) -> Value:
    from basinwright.runoff import retention_mm

    unit, ratio = depth_unit(here), here.run.project.runoff.initial_abstraction_ratio
    mean = here.cell("curve_number", table=OUTLETS.name)
    depth = float(retention_mm(mean.value, ratio)) / FACTORS[unit]
    return Value(depth, unit, f"retention of the mean curve number at ratio {ratio:g}", mean.refs)


_COPIED = tuple(c.stem for c in BASIN_PARAMETERS.columns if c.stem in {o.stem for o in OUTLETS.columns})

BASIN_HOWS: Mapping[str, Choice] = {
    **{stem: _from_outlets(stem) for stem in _COPIED},
    "incremental_area": How(
        "area less that of the outlets next upstream", "A - sum(U)", {"A": cell("area"), "U": _upstream}
    ),
    "outlet_elevation": How("where the last segment ends", "z[-1]", {"z": column(SEGMENTS.name, "bottom_elevation")}),
    "initial_abstraction": How(
        "share r of the retention of the mean curve number",
        "r * S",
        {"r": option("runoff.initial_abstraction_ratio"), "S": _mean_retention},
        source=_NEH10,
    ),
    "reach_slope": How(
        "fall over length, not under the floor",
        "max(H / L, s0)",
        {
            "H": cell("reach_fall", table=OUTLETS.name),
            "L": cell("reach_length", table=OUTLETS.name),
            "s0": option("flow_path.slope_floor"),
        },
    ),
    "reach_bankfull_width": bankfull("width", "reach_area"),
    "reach_bankfull_depth": bankfull("depth", "reach_area"),
}
