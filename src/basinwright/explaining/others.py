"""How the columns of the other tables come to be."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from basinwright.explaining import ground
from basinwright.explaining.methods import timing_how
from basinwright.explaining.outlets import areal_depth, depth_unit, losses, patches_of, shape_rows, unit_hydrograph
from basinwright.explaining.reading import Here
from basinwright.explaining.records import FACTORS, Choice, Get, How, PublishedRow, Ref, Value, cell
from basinwright.explaining.segments import scheme_rows
from basinwright.registry import find
from basinwright.schemes import ANY_GROUP
from basinwright.tables import HYDROGRAPHS, OUTLETS, UNIT_HYDROGRAPHS

_OUTLET = How("the outlet that the row is of")


def _class_curve_number(here: Here) -> Value:
    found, group = here.run.settings.scheme.find(here.row["cover"]), here.row["soil_group"]
    value = np.nan if found is None else found.curve_number_on(group)
    name = here.run.settings.scheme.name
    words = "any soil group" if group == ANY_GROUP else f"group {group}"
    return Value(value, "1", f"curve number of class {here.row['cover']} on {words} in scheme {name}")


def _pervious(here: Here) -> Value:
    found, group = here.run.settings.scheme.find(here.row["cover"]), here.row["soil_group"]
    value = np.nan if found is None else found.pervious_curve_number["D" if group == ANY_GROUP else group]
    return Value(value, "1", f"pervious curve number of class {here.row['cover']} on group {group}")


def _composite(here: Here) -> Value:
    from basinwright.runoff import composite_curve_number

    connected = here.run.project.cover.connected_fraction

    def of(pervious: float, percent: float) -> float:
        return float(composite_curve_number(pervious, percent, connected))

    return Value(of, "1", f"composite with mapped impervious area, {connected:g} of it connected (TR-55 app. F)")


def _share_curve_number(here: Here) -> How:
    rows = scheme_rows("curve_number_row", "curve_numbers_tr55")
    mapped = here.run.project.cover.impervious is not None
    found = here.run.settings.scheme.find(here.row["cover"])
    if (
        mapped
        and found is not None
        and found.impervious_pct > 0
        and float(here.row["impervious_pct"]) != found.impervious_pct
    ):
        return How(
            "composite of the class's pervious curve number and its mapped impervious share",
            "f(CNp, I)",
            {"f": _composite, "CNp": _pervious, "I": cell("impervious_pct")},
            rows=rows,
            places=ground.patch_places,
        )
    return How(
        "the scheme's curve number of the class on the soil group",
        "CN",
        {"CN": _class_curve_number},
        rows=rows,
        places=ground.patch_places,
    )


def _share_impervious(here: Here) -> How:
    found = here.run.settings.scheme.find(here.row["cover"])
    listed = Value(found.impervious_pct if found else np.nan, "%", f"impervious_pct of class {here.row['cover']}")
    if here.run.project.cover.impervious is not None and here.text and float(here.text) != listed.value:
        return How("mean of cover.impervious over the patch", places=ground.patch_places)
    return How(
        "impervious share that the class's curve number includes",
        "I",
        {"I": lambda _: listed},
        rows=scheme_rows("curve_number_row", "curve_numbers_tr55"),
    )


COVER_HOWS: Mapping[str, Choice] = {
    "outlet_id": _OUTLET,
    "cover": How(
        "class of the land-cover layer, nearest pixel to each cell of the working grid", places=ground.patch_places
    ),
    "soil_group": How("group of the soils layer at each cell; one letter of a dual group as soils.dual_groups says"),
    "area": How("true areas of the cells of the basin with this class and group", places=ground.patch_places),
    "curve_number": _share_curve_number,
    "impervious_pct": _share_impervious,
    "source": How(
        "where the scheme's curve number was published", rows=scheme_rows("curve_number_row", "curve_numbers_tr55")
    ),
}

TIMING_HOWS: Mapping[str, Choice] = {
    "outlet_id": _OUTLET,
    "method": How("key of a registered method; basinwright methods lists them"),
    "tc_h": timing_how,
    "adopted": How("true for timing.adopt, unless a person gave the time of concentration"),
    "applicable": How("true where the method was computed and no input lies outside the range published with it"),
    "reason": How("the inputs that are missing, or outside the published range"),
    "source": How("document, edition and equation of the method"),
}


def _step(table: str) -> Get:
    def number(here: Here) -> Value:
        duration = float(here.outlet["unit_duration_h"])
        return Value(
            float(round(float(here.row["time_h"]) / duration)), "1", f"number of the step, rows of {table} from 0"
        )

    return number


def _duration(here: Here) -> Value:
    return here.cell("unit_duration_h", "", OUTLETS.name)


_TIME = {"k": _step(UNIT_HYDROGRAPHS.name), "D": _duration}


def _share(here: Here) -> Value:
    step = int(_TIME["k"](here).value)
    shape = here.run.project.unit_hydrograph.shape
    about = f"share of the unit that passes in the step, shape {shape}: its ratios made to add up to 1"
    refs = tuple(Ref(OUTLETS.name, here.outlet, stem) for stem in ("time_to_peak_h", "unit_duration_h"))
    return Value(float(unit_hydrograph(here).share[step]), "1", about, refs)


def _ordinate(here: Here) -> How:
    entry = find("unit_hydrograph", here.run.project.unit_hydrograph.shape)
    return How(
        entry.form,
        "s * A * 1000 / (3600 * D)",
        {"s": _share, "A": cell("area", "km2", OUTLETS.name), "D": _duration},
        unit="m3/s/mm",
        source=entry.source,
        rows=lambda here: shape_rows(here, float(here.row["time_h"]) / float(here.outlet["time_to_peak_h"])),
    )


UNIT_HOWS: Mapping[str, Choice] = {
    "outlet_id": _OUTLET,
    "time_h": How("number of the step times the unit duration", "k * D", _TIME),
    "flow": _ordinate,
}


def _period(here: Here) -> str:
    return next(text for text in here.run.periods if float(text) == float(here.row["return_period_yr"]))


def _storm_depth(here: Here) -> Value:
    return areal_depth(here.at(OUTLETS.name, here.outlet, "runoff_{T}yr", _period(here)))


def _fraction(back: int) -> Get:
    def get(here: Here) -> Value:
        settings, duration = here.run.settings, float(here.outlet["unit_duration_h"])
        hours = float(here.outlet.get("critical_duration_h", "") or here.run.project.storm.duration)
        storm = settings.storms(hours)[here.run.periods.index(_period(here))]
        time = (round(float(here.row["time_h"]) / duration) - back) * duration
        value = float(storm.fraction_at(min(time, hours))) if time >= 0 else 0.0
        time = max(time, 0.0)
        rows = tuple(storm_rows(here, time))
        return Value(value, "1", f"fraction of the storm {storm.name} fallen by {time:.6g} h", (), rows)

    return get


def storm_rows(here: Here, time_h: float) -> list[PublishedRow]:
    """Return the row of the published distribution at or before a time; none for another storm."""
    from basinwright import published

    name = f"scs_{here.run.project.storm.distribution}"
    if name not in published.names():
        return []
    table = published.table(name)
    before = [row for row in table.rows if float(row["hour"]) <= time_h + 1e-9]
    return [PublishedRow(name, before[-1], table.source)]


def _runoff_of(here: Here) -> Value:
    rows, unit = losses(here), depth_unit(here)
    ratio = rows.initial_abstraction_ratio

    def of(depth: float) -> float:
        retention = rows.retention_mm / FACTORS[unit]
        effective = np.maximum(depth - ratio * retention, 0.0)
        each = effective**2 / np.where(effective + retention > 0, effective + retention, 1.0)
        return float(np.sum(rows.weight * each))

    about = f"runoff of the patches for a depth, averaged by area: Ia = {ratio:g} S (NEH 630 eq. 10-11)"
    return Value(of, unit, about, patches_of(here)[1])


def _excesses(here: Here) -> Value:
    rows = _rows_to_now(here)
    name = HYDROGRAPHS.column("excess").name(here.run.system)
    values = np.array([float(row[name]) for row in rows])
    refs = tuple(Ref(HYDROGRAPHS.name, row, "excess") for row in rows)
    return Value(values, depth_unit(here), "excess rain of each step up to this time", refs)


def _rows_to_now(here: Here) -> list[Mapping[str, str]]:
    time = float(here.row["time_h"])
    same = here.rows(HYDROGRAPHS.name, lambda row: row["return_period_yr"] == here.row["return_period_yr"])
    return [row for row in same if 0.0 < float(row["time_h"]) <= time + 1e-9]


def _ordinates_back(here: Here) -> Value:
    rows = here.rows(UNIT_HYDROGRAPHS.name)
    name = UNIT_HYDROGRAPHS.column("flow").name(here.run.system)
    ordinates = np.array([float(row[name]) for row in rows])
    count = len(_rows_to_now(here))
    back = np.zeros(count)
    reached = min(count, ordinates.size - 1)
    back[count - reached :] = ordinates[1 : reached + 1][::-1]
    unit = UNIT_HYDROGRAPHS.column("flow").unit_in(here.run.system)
    refs = tuple(Ref(UNIT_HYDROGRAPHS.name, row, "flow") for row in rows)
    return Value(back, unit, "ordinate of the unit hydrograph that each step's excess has reached by now", refs)


HYDROGRAPH_HOWS: Mapping[str, Choice] = {
    "outlet_id": _OUTLET,
    "return_period_yr": How("a return period of the project's storm"),
    "time_h": How(
        "number of the step times the unit duration", "k * D", {"k": _step(HYDROGRAPHS.name), "D": _duration}
    ),
    "rain": How(
        "depth times what falls of the storm within the step",
        "P * (F1 - F0)",
        {"P": _storm_depth, "F1": _fraction(0), "F0": _fraction(1)},
    ),
    "excess": How(
        "runoff by the end of the step less that by its beginning",
        "Q(P * F1) - Q(P * F0)",
        {"Q": _runoff_of, "P": _storm_depth, "F1": _fraction(0), "F0": _fraction(1)},
    ),
    "flow": How(
        "each step's excess on its own unit hydrograph, added up", "sum(E * u)", {"E": _excesses, "u": _ordinates_back}
    ),
}

TIME_AREA_HOWS: Mapping[str, Choice] = {
    "outlet_id": _OUTLET,
    "travel_time_h": How("bounds of equal classes of travel time to the outlet"),
    "area": How(
        "true areas of the cells whose water arrives within that time: each cell is timed by the formulas of the "
        "segments, and times are added up down the flow directions",
        places=ground.basin_places,
    ),
}


def _cross_check(here: Here) -> How:
    if here.row["method"] == "rational":
        return How(
            "runoff coefficient times intensity of duration Tc times area",
            "q(C, Tc, A)",
            {
                "q": _rational,
                "C": _coefficient,
                "Tc": cell("tc_h", table=OUTLETS.name),
                "A": cell("area", "km2", OUTLETS.name),
            },
            unit="m3/s",
            source=here.row["source"],
        )
    return How(
        "unit peak by Tc and Ia/P times area, runoff and pond factor",
        "q(A, Tc, CN, P, W)",
        {
            "q": _graphical,
            "A": cell("area", "km2", OUTLETS.name),
            "Tc": cell("tc_h", table=OUTLETS.name),
            "CN": cell("curve_number", table=OUTLETS.name),
            "P": _depth_mm,
            "W": cell("open_water_pct", table=OUTLETS.name),
        },
        unit="m3/s",
        source=here.row["source"],
    )


def _depth_mm(here: Here) -> Value:
    depth = _storm_depth(here)
    return Value(depth.value * FACTORS[depth.unit], "mm", depth.about, depth.refs)


def _graphical(here: Here) -> Value:
    from basinwright.hydrograph import graphical_peak

    distribution = here.run.project.storm.distribution

    def of(area: float, tc: float, curve: float, depth: float, ponds: float) -> float:
        return float(graphical_peak(area, tc, curve, depth, distribution, ponds).peak_m3s)

    return Value(of, "m3/s", f"the graphical method, coefficients of {distribution} (graphical_peak_tr55)")


def _rational(here: Here) -> Value:
    from basinwright.hydrograph import rational_peak_m3s

    ddf, period = here.run.settings.ddf, _period(here)

    def of(coefficient: float, tc: float, area: float) -> float:
        if ddf is None:
            return float("nan")
        return float(rational_peak_m3s(area, float(ddf.depth_mm(tc, period)) / tc, coefficient))

    return Value(of, "m3/s", "the rational method with the intensity of storm.ddf")


def _coefficient(here: Here) -> Value:
    from basinwright.explaining.methods import INPUTS

    return INPUTS["runoff_coefficient"](here)


def _own_peak(here: Here) -> Value:
    return here.at(OUTLETS.name, here.outlet, "peak_{T}yr").cell("peak_{T}yr", period=_period(here))


CROSS_HOWS: Mapping[str, Choice] = {
    "outlet_id": _OUTLET,
    "return_period_yr": How("a return period of the project's storm"),
    "method": How("graphical (Technical Release 55, chapter 4) or rational"),
    "peak": _cross_check,
    "ratio": How("this peak over the hydrograph's", "q / Q", {"q": cell("peak"), "Q": _own_peak}),
    "applicable": How("true where the outlet lies inside the method's limits"),
    "reason": How("the limit that it exceeds, or what is missing"),
    "source": How("where the method was published"),
}

FLAG_HOWS: Mapping[str, Choice] = {
    "outlet_id": _OUTLET,
    "flag": How("raised where its trigger holds; docs/flags.md says when and what to do"),
    "severity": How("of its kind"),
    "message": How("the case in words"),
}
