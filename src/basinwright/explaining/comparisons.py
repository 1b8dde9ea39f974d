"""How the columns of the tables come to be that set runs, samples and other equations beside the base."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from basinwright.explaining.reading import Here
from basinwright.explaining.records import Choice, Get, How, Value, cell
from basinwright.tables import (
    CAPACITY,
    CELL_SIZES,
    EDITS,
    OUTLETS,
    REGIONAL,
    REVIEW,
    SCENARIOS,
    SWINGS,
    UNCERTAINTY,
    read_csv,
)

_OUTLET = How("the outlet that the row is of")
_PERIOD = How("a return period of the project's storm")
_SAMPLE = "of a sample over the ranges of [uncertainty] (samples, seed): the hydrology computed anew for each draw"


def _period(here: Here) -> str:
    return next(text for text in here.run.periods if float(text) == float(here.row["return_period_yr"]))


def _base(stem: str) -> Get:
    """Return the reader of a cell of the outlet's row in outlets.csv, of the row's return period where it has one."""

    def get(here: Here) -> Value:
        return here.cell(stem, "", OUTLETS.name, _period(here) if "{T}" in stem else "")

    return get


def _in_scenario(stem: str) -> Get:
    """Return the reader of a cell of the outlet's row in the scenario's own outlets.csv."""

    def get(here: Here) -> Value:
        name = here.row["scenario"]
        path = here.run.folder / "scenarios" / name / "outlets.csv"
        column = OUTLETS.column(stem)
        about = f"{column.meaning}, scenarios/{name}/outlets.csv"
        if not path.is_file():
            return Value(np.nan, column.unit_in(here.run.system), about)
        frame = read_csv(path)
        row = frame[frame["outlet_id"] == here.outlet_id].iloc[0]
        text = row[column.name(here.run.system, _period(here) if "{T}" in stem else "")]
        return Value(float(text) if text else np.nan, column.unit_in(here.run.system), about)

    return get


def _copied(stem: str) -> How:
    return How("copied from outlets.csv of the base", "v", {"v": _base(stem)})


def _of_scenario(stem: str) -> How:
    return How("copied from outlets.csv of the scenario", "v", {"v": _in_scenario(stem)})


def _change(stem: str, base: str) -> How:
    return How("relative change against the base", "100 * (v / v0 - 1)", {"v": cell(stem), "v0": cell(base)})


def _difference(stem: str, base: str) -> How:
    return How("difference from the base", "v - v0", {"v": cell(stem), "v0": cell(base)})


SCENARIO_HOWS: Mapping[str, Choice] = {
    "scenario": How("a [[scenario]] of the project: base with some inputs replaced"),
    "outlet_id": _OUTLET,
    "return_period_yr": _PERIOD,
    "base_depth": _copied("depth_{T}yr"),
    "depth": _of_scenario("depth_{T}yr"),
    "base_runoff": _copied("runoff_{T}yr"),
    "runoff": _of_scenario("runoff_{T}yr"),
    "runoff_change_pct": _change("runoff", "base_runoff"),
    "base_peak": _copied("peak_{T}yr"),
    "peak": _of_scenario("peak_{T}yr"),
    "peak_change_pct": _change("peak", "base_peak"),
    "base_peak_time_h": _copied("peak_time_{T}yr_h"),
    "peak_time_h": _of_scenario("peak_time_{T}yr_h"),
    "peak_time_change_h": _difference("peak_time_h", "base_peak_time_h"),
    "base_tc_h": _copied("tc_h"),
    "tc_h": _of_scenario("tc_h"),
    "tc_change_h": _difference("tc_h", "base_tc_h"),
    "base_curve_number": _copied("curve_number"),
    "curve_number": _of_scenario("curve_number"),
    "over_capacity": How("each peak against the capacity as supplied"),
    "stands": How("what was supplied with the outlet, or filled in by a person, and so is the same in both"),
}


def _first_row(stem: str) -> Get:
    """Return the reader of a cell of the outlet's first row: that of the base's own cells."""

    def get(here: Here) -> Value:
        place = here.at(here.table.name, here.rows(here.table.name)[0], stem)
        return Value(place.number(), place.unit, f"{place.table.column(stem).meaning}, on the base's cells")

    return get


def _against_base(stem: str) -> How:
    return How(
        "relative change against the base's cells", "100 * (v / v0 - 1)", {"v": cell(stem), "v0": _first_row(stem)}
    )


def _first_peak(here: Here) -> Value:
    place = here.at(here.table.name, here.rows(here.table.name)[0], "peak_{T}yr", here.period)
    return Value(place.number(), place.unit, "peak flow, on the base's cells")


_ON_CELLS = How("the whole job again on terrain averaged to cells of this size, without a person's edits")

CELL_SIZE_HOWS: Mapping[str, Choice] = {
    **{column.stem: _ON_CELLS for column in CELL_SIZES.columns},
    "outlet_id": _OUTLET,
    "cell_size": How("typical size of the terrain's cells, as asked for by --also-at"),
    **{
        f"{stem}_change_pct": _against_base(stem if stem in {c.stem for c in CELL_SIZES.columns} else f"{stem}_pct")
        for stem in ("area", "path_length", "path_slope", "basin_slope")
    },
    "tc_change_pct": _against_base("tc_h"),
    "peak_{T}yr_change_pct": How(
        "relative change against the base's cells",
        "100 * (v / v0 - 1)",
        {"v": cell("peak_{T}yr", period=True), "v0": _first_peak},
    ),
    "curve_number_change": How(
        "difference from the base's cells", "v - v0", {"v": cell("curve_number"), "v0": _first_row("curve_number")}
    ),
}

UNCERTAINTY_HOWS: Mapping[str, Choice] = {
    "outlet_id": _OUTLET,
    "quantity": How("time of concentration, or peak of a return period, in the unit that it names"),
    "return_period_yr": _PERIOD,
    **{stem: How(f"{share} % point {_SAMPLE}") for stem, share in (("p05", 5), ("p50", 50), ("p95", 95))},
}

SWING_HOWS: Mapping[str, Choice] = {
    **{column.stem: How("the hydrology computed anew with one input at an end of its range, all others as in the run")
       for column in SWINGS.columns},
    "outlet_id": _OUTLET,
    "return_period_yr": _PERIOD,
    "input": How("an uncertain input of [uncertainty]"),
    "low": How("lower end of the input's range, as applied"),
    "high": How("upper end of the input's range, as applied"),
    "applied": How("whether the ends replace, add to or multiply the input"),
    "rank": How("order of the outlet's inputs by the distance between the peaks at both ends"),
    "tc_rank": How("order of the outlet's inputs by the distance between the times at both ends"),
    "sampled": How("whether uncertainty.csv's sample draws it too"),
}  # fmt: skip

_REGRESSION = How("the user's regression equation with this outlet's parameters: the file that check.regression names")

REGIONAL_HOWS: Mapping[str, Choice] = {
    **{column.stem: _REGRESSION for column in REGIONAL.columns},
    "outlet_id": _OUTLET,
    "return_period_yr": _PERIOD,
    "peak": _copied("peak_{T}yr"),
    "ratio": How("peak of the run over that of the equation", "Q / q", {"Q": cell("peak"), "q": cell("regional")}),
}


def _over_capacity(here: Here) -> How:
    if here.row["scenario"] != "base":
        return How("peak of the scenario over the capacity")
    peak = here.at(OUTLETS.name, here.outlet, "peak_{T}yr").cell("peak_{T}yr", period=here.period)
    return How("peak over capacity", "Q / C", {"Q": lambda _: peak, "C": cell("capacity")})


_VERDICT = How("the peaks of the tested return periods, in rising order, against the capacity as supplied")

CAPACITY_HOWS: Mapping[str, Choice] = {
    **{column.stem: _VERDICT for column in CAPACITY.columns},
    "outlet_id": _OUTLET,
    "name": How("name from the outlet layer"),
    "scenario": How("base, or a [[scenario]] of the project"),
    "rank": How("order of the crossings by the return period that reaches their capacity"),
    "exceeded_at_interp_yr": How("between the tested periods on both sides of the capacity, never beyond them"),
    **{stem: How(f"the same {_SAMPLE}") for stem in ("exceeded_at_p05_yr", "exceeded_at_p95_yr", "band")},
    "peak_over_capacity_{T}yr": _over_capacity,
    "exceeded_{T}yr_pct": How(f"share over the capacity {_SAMPLE}"),
    "capacity": How("copied from outlets.csv", "v", {"v": cell("capacity", table=OUTLETS.name)}),
    "capacity_basis": How("copied from outlets.csv"),
}

_BY_HAND = How("written down when a person changed or judged something, in review or in the tables")

COMPARISON_HOWS: Mapping[str, Mapping[str, Choice]] = {
    **{table.name: {column.stem: _BY_HAND for column in table.columns} for table in (EDITS, REVIEW)},
    SCENARIOS.name: SCENARIO_HOWS,
    CELL_SIZES.name: CELL_SIZE_HOWS,
    UNCERTAINTY.name: UNCERTAINTY_HOWS,
    SWINGS.name: SWING_HOWS,
    REGIONAL.name: REGIONAL_HOWS,
    CAPACITY.name: CAPACITY_HOWS,
}
