"""The schema of every table that crosses a wall: column, type, unit, meaning.

Columns are written here once, in the units used inside; the CSV files, the GeoPackage layers, ``tables.json`` and
the documentation derive from it. In a project with ``units = "us"`` the columns of a changing quantity take the US
suffix and unit; `Table.fields` does the naming.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from basinwright.units import SHOWN, System

if TYPE_CHECKING:
    import pandas as pd

Type = Literal["text", "number", "integer", "boolean"]


@dataclass(frozen=True)
class Column:
    """One column of a table.

    Parameters
    ----------
    stem : str
        Its name; without the unit where the quantity changes with the unit system. ``{T}`` stands for the return
        period: the column is repeated for each.
    type : {"text", "number", "integer", "boolean"}
        What its cells hold.
    meaning : str
        What it is, as the documentation says it.
    quantity : str
        A key of `basinwright.units.SHOWN`, or empty where the unit is fixed.
    unit : str
        The fixed unit (``h``, ``%``, ``1``), or empty.
    editable : bool
        Whether a person may change it before `retime`.
    optional : bool
        Whether it appears only where the project asks for it.
    choices : tuple of str
        The closed list of its values, if any.
    """

    stem: str
    type: Type
    meaning: str
    quantity: str = ""
    unit: str = ""
    editable: bool = False
    optional: bool = False
    choices: tuple[str, ...] = ()

    @property
    def per_return_period(self) -> bool:
        """Whether the column is repeated for every return period."""
        return "{T}" in self.stem

    def name(self, system: System = "si", period: str = "") -> str:
        """Return the column's name in a unit system."""
        stem = self.stem.replace("{T}", period)
        return f"{stem}_{SHOWN[self.quantity].suffix(system)}" if self.quantity else stem

    def unit_in(self, system: System = "si") -> str:
        """Return the column's unit in a unit system; empty where it has none."""
        return SHOWN[self.quantity].unit(system) if self.quantity else self.unit

    def inside_per_shown(self, system: System) -> float:
        """Return the factor from the number in the table to the one used inside."""
        return SHOWN[self.quantity].inside_per_shown(system) if self.quantity else 1.0


@dataclass(frozen=True)
class Field:
    """A column as it stands in a file.

    Parameters
    ----------
    name : str
        Its name there.
    stem : str
        Its stem in the schema, the return period put in.
    column : Column
        Its schema.
    factor : float
        From the number in the file to the unit used inside.
    """

    name: str
    stem: str
    column: Column
    factor: float


@dataclass(frozen=True)
class Table:
    """One table.

    Parameters
    ----------
    name : str
        File name without its ending.
    meaning : str
        What a row is.
    key : tuple of str
        Stems of the columns that identify a row.
    columns : tuple of Column
        In order.
    """

    name: str
    meaning: str
    key: tuple[str, ...]
    columns: tuple[Column, ...]

    def fields(self, system: System = "si", periods: Sequence[str] = (), optional: Iterable[str] = ()) -> list[Field]:
        """List the columns as they stand in a file.

        Parameters
        ----------
        system : {"us", "si"}
            Unit system of the project.
        periods : sequence of str
            Return periods as written in the project.
        optional : iterable of str
            Stems of the optional columns that are present.

        Returns
        -------
        list of Field
            In order; the columns per return period stand together, period by period.
        """
        present = set(optional)
        listed: list[Field] = []
        repeated = [column for column in self.columns if column.per_return_period]
        for column in self.columns:
            if column.per_return_period:
                if column is repeated[0]:
                    listed += [_field(entry, system, period) for period in periods for entry in repeated]
            elif not column.optional or column.stem in present:
                listed.append(_field(column, system, ""))
        return listed

    def column(self, stem: str) -> Column:
        """Return a column by its stem."""
        return next(column for column in self.columns if column.stem == stem)


def _field(column: Column, system: System, period: str) -> Field:
    return Field(
        column.name(system, period), column.stem.replace("{T}", period), column, column.inside_per_shown(system)
    )


# Short constructors keep the schema below readable as a table.
def _text(stem: str, meaning: str, **more: Any) -> Column:
    return Column(stem, "text", meaning, **more)


def _count(stem: str, meaning: str, **more: Any) -> Column:
    return Column(stem, "integer", meaning, **more)


def _yes(stem: str, meaning: str, **more: Any) -> Column:
    return Column(stem, "boolean", meaning, **more)


def _number(stem: str, meaning: str, unit: str = "", **more: Any) -> Column:
    return Column(stem, "number", meaning, unit=unit, **more)


def _shown(stem: str, quantity: str, meaning: str, **more: Any) -> Column:
    return Column(stem, "number", meaning, quantity=quantity, **more)


_ID = _text("outlet_id", "identifier of the outlet, as text")

REGIMES = ("sheet", "shallow", "channel", "open_water", "pipe", "lined_channel")
"""Flow regimes; the last two only a person enters."""

OUTLETS = Table(
    "outlets",
    "one outlet: where it is, its basin, its times and its peaks",
    ("outlet_id",),
    (
        _ID,
        _text("name", "name from the outlet layer"),
        _text("status", "ok (no flag), flagged or failed (not computed)", choices=("ok", "flagged", "failed")),
        _text("flags", "flags raised, separated by spaces; flags.csv says why"),
        _number("x", "easting or longitude of the outlet's cell in the working CRS", "CRS unit"),
        _number("y", "northing or latitude of the outlet's cell in the working CRS", "CRS unit"),
        _number("longitude", "longitude of the outlet's cell, WGS 84", "degree"),
        _number("latitude", "latitude of the outlet's cell, WGS 84", "degree"),
        _shown("snap", "length", "how far the point was moved onto its flow line"),
        _text("downstream_outlet_id", "the next outlet downstream in this run"),
        _shown("area", "area", "drainage area", editable=True),
        _shown("centroid_length", "length", "length along the path from outlet to the point nearest the centroid"),
        _shown("path_length", "length", "length of the longest flow path, divide to outlet", editable=True),
        _shown("path_length_raw", "length", "the same before any correction of the grid's staircase"),
        _shown("sheet_length", "length", "length of the path in sheet flow"),
        _shown("shallow_length", "length", "length of the path in shallow concentrated flow"),
        _shown("channel_length", "length", "length of the path in channels and open water"),
        _shown("relief", "length", "highest minus lowest elevation of the basin, unconditioned terrain"),
        _number("basin_slope_pct", "mean land slope (Horn 1981), unconditioned terrain", "%", editable=True),
        _number("path_slope_pct", "fall of the longest flow path over its length", "%"),
        _number("path_slope_1085_pct", "slope between 10 and 85 % of the path's length from the outlet", "%"),
        _number("curve_number", "area-weighted mean curve number, class II, ratio 0.2", "1", editable=True),
        _number("curve_number_used", "curve number that gives the runoff actually used, class and ratio applied", "1"),
        _number("impervious_pct", "impervious share of the basin", "%"),
        _number("open_water_pct", "open-water share of the basin", "%"),
        _number("tc_h", "adopted time of concentration", "h", editable=True),
        _number("tc_bankfull_h", "travel time along the path, channels at bankfull stage", "h"),
        _number("tc_half_bankfull_h", "the same at half the bankfull depth", "h"),
        _number(
            "tc_longest_in_time_h",
            "travel time along the path that is longest in time, unedited; the path that counts may be another",
            "h",
        ),
        _number("lag_h", "basin lag, 0.6 of the time of concentration (NEH 630 ch. 15 eq. 15-3)", "h"),
        _number("unit_duration_h", "duration of the unit hydrograph's excess rain", "h"),
        _number("time_to_peak_h", "time to peak of the unit hydrograph", "h"),
        _shown("unit_peak", "unit_flow", "peak of the unit hydrograph"),
        _shown("depth_{T}yr", "depth", "storm depth"),
        _shown("runoff_{T}yr", "depth", "storm runoff"),
        _shown("peak_{T}yr", "flow", "peak flow"),
        _number("peak_time_{T}yr_h", "time of the peak from the storm's start", "h"),
        _shown("capacity", "flow", "capacity as supplied", optional=True),
        _text("capacity_basis", "the criterion the capacity rests on, as supplied", optional=True),
        _text("exceeded_at_yr", "smallest tested period over capacity; empty: none; or unknown", optional=True),
        _shown("mean_elevation", "length", "mean elevation of the basin, unconditioned terrain"),
        _shown("drainage_density", "per_length", "length of the channels in the basin over its area"),
        _shown("reach_length", "length", "length of the flow path from this outlet to the next downstream"),
        _shown("reach_fall", "length", "fall of that path, conditioned terrain"),
        _shown("reach_area", "area", "contributing area at its middle"),
        _shown("sink_area", "area", "area that drains to sinks and, if they spilt, to the outlet: not in its area",
               optional=True),
        _number("translation_peak_rate_factor", "peak rate factor of translation alone: an index", "1", optional=True),
        _number("areal_factor", "factor from point to areal rainfall", "1", optional=True),
        _number("critical_duration_h", "storm duration that gives the highest peak", "h", optional=True),
    ),
)  # fmt: skip

SEGMENTS = Table(
    "segments",
    "one piece of the longest flow path in one flow regime, in downstream order",
    ("outlet_id", "segment"),
    (
        _ID,
        _count("segment", "number of the segment within its outlet"),
        _text("regime", "flow regime", editable=True, choices=REGIMES),
        _text("cover", "land-cover class it crosses", editable=True),
        _shown("from", "length", "distance of its top from the divide", editable=True),
        _shown("to", "length", "distance of its bottom from the divide", editable=True),
        _shown("top_elevation", "length", "elevation of its top, conditioned terrain", editable=True),
        _shown("bottom_elevation", "length", "elevation of its bottom, conditioned terrain", editable=True),
        _number("slope", "fall over length, not under the floor", "1", editable=True),
        _number("roughness", "sheet, channel: n; shallow: velocity over root slope, ft/s or m/s", editable=True),
        _shown("area", "area", "contributing area at its middle"),
        _shown("bankfull_width", "length", "bankfull width"),
        _shown("bankfull_depth", "length", "bankfull depth"),
        _shown("hydraulic_radius", "length", "hydraulic radius at bankfull", editable=True),
        _shown("hydraulic_radius_half", "length", "hydraulic radius at half the bankfull depth", editable=True),
        _shown("velocity", "speed", "velocity (channel: at bankfull)"),
        _shown("velocity_half", "speed", "velocity (channel: at half the bankfull depth)"),
        _number("travel_time_h", "travel time (channel: at bankfull)", "h"),
        _number("travel_time_half_h", "travel time (channel: at half the bankfull depth)", "h"),
        _text("basis", "where the numbers of this row come from"),
        _yes("edited", "whether a person changed the row"),
        _text("note", "a person's note", editable=True),
    ),
)  # fmt: skip

COVER_SHARES = Table(
    "cover_shares",
    "the curve-number worksheet: one land-cover class on one soil group in one basin",
    ("outlet_id", "cover", "soil_group"),
    (
        _ID,
        _text("cover", "land-cover class", editable=True),
        _text("soil_group", "hydrologic soil group", editable=True),
        _shown("area", "area", "area of the patch", editable=True),
        _number("curve_number", "curve number, class II, ratio 0.2", "1", editable=True),
        _number("impervious_pct", "impervious share of the patch", "%", editable=True),
        _text("source", "where the curve number was published", editable=True),
    ),
)

TIMING = Table(
    "timing",
    "one timing method for one outlet",
    ("outlet_id", "method"),
    (
        _ID,
        _text("method", "key of the method"),
        _number("tc_h", "time of concentration by this method", "h"),
        _yes("adopted", "whether the hydrographs use it"),
        _yes("applicable", "whether the basin lies inside the method's published range"),
        _text("reason", "why it is not applicable or not computed"),
        _text("source", "where the method was published"),
    ),
)

UNIT_HYDROGRAPHS = Table(
    "unit_hydrographs",
    "one ordinate of an outlet's unit hydrograph",
    ("outlet_id", "time_h"),
    (
        _ID,
        _number("time_h", "time from the start of the excess rain", "h"),
        _shown("flow", "unit_flow", "flow per unit of excess rain"),
    ),
)

HYDROGRAPHS = Table(
    "hydrographs",
    "one time step of one design flood",
    ("outlet_id", "return_period_yr", "time_h"),
    (
        _ID,
        _number("return_period_yr", "return period of the storm", "yr"),
        _number("time_h", "time from the storm's start", "h"),
        _shown("rain", "depth", "rain in the step that ends at this time"),
        _shown("excess", "depth", "excess rain in the step that ends at this time"),
        _shown("flow", "flow", "flow at this time"),
    ),
)

TIME_AREA = Table(
    "time_area",
    "one row of an outlet's time-area curve",
    ("outlet_id", "travel_time_h"),
    (
        _ID,
        _number("travel_time_h", "travel time to the outlet", "h"),
        _shown("area", "area", "area whose water arrives within that time"),
    ),
)

CROSS_CHECKS = Table(
    "cross_checks",
    "one peak by another published method, beside the hydrograph's",
    ("outlet_id", "return_period_yr", "method"),
    (
        _ID,
        _number("return_period_yr", "return period of the storm", "yr"),
        _text("method", "graphical (Technical Release 55) or rational"),
        _shown("peak", "flow", "peak flow by that method"),
        _number("ratio", "that peak over the hydrograph's", "1"),
        _yes("applicable", "whether the outlet lies inside the method's limits"),
        _text("reason", "why it is not applicable or not computed"),
        _text("source", "where the method was published"),
    ),
)

BASIN_PARAMETERS = Table(
    "basin_parameters",
    "one basin with what a rainfall-runoff model asks for, and the reach below its outlet",
    ("outlet_id",),
    (
        _ID,
        _text("name", "name from the outlet layer"),
        _text("downstream_outlet_id", "the next outlet downstream in this run"),
        _number("longitude", "longitude of the outlet's cell, WGS 84", "degree"),
        _number("latitude", "latitude of the outlet's cell, WGS 84", "degree"),
        _shown("area", "area", "drainage area of the whole basin"),
        _shown("incremental_area", "area", "drainage area below the next outlets upstream"),
        _shown("path_length", "length", "length of the longest flow path, divide to outlet"),
        _shown("centroid_length", "length", "length along the path from outlet to the point nearest the centroid"),
        _number("path_slope_pct", "fall of the longest flow path over its length", "%"),
        _number("path_slope_1085_pct", "slope between 10 and 85 % of the path's length from the outlet", "%"),
        _number("basin_slope_pct", "mean land slope of the basin", "%"),
        _shown("relief", "length", "highest minus lowest elevation of the basin"),
        _shown("mean_elevation", "length", "mean elevation of the basin"),
        _shown("outlet_elevation", "length", "elevation of the outlet, conditioned terrain"),
        _number("curve_number", "area-weighted mean curve number, class II, ratio 0.2", "1"),
        _shown("initial_abstraction", "depth", "initial abstraction of the mean curve number, ratio as in the project"),
        _number("impervious_pct", "impervious share of the basin", "%"),
        _number("open_water_pct", "open-water share of the basin", "%"),
        _number("tc_h", "adopted time of concentration", "h"),
        _number("lag_h", "basin lag", "h"),
        _shown("reach_length", "length", "length of the channel from this outlet to the next downstream"),
        _number("reach_slope", "fall of that reach over its length, not under flow_path.slope_floor", "1"),
        _shown("reach_area", "area", "contributing area at the middle of the reach"),
        _shown("reach_bankfull_width", "length", "bankfull width of the reach"),
        _shown("reach_bankfull_depth", "length", "bankfull depth of the reach"),
    ),
)

SCENARIOS = Table(
    "scenarios",
    "one design flood of one outlet in one scenario, beside the base's",
    ("scenario", "outlet_id", "return_period_yr"),
    (
        _text("scenario", "name of the scenario"),
        _ID,
        _number("return_period_yr", "return period of the storm", "yr"),
        _shown("base_depth", "depth", "storm depth in the base"),
        _shown("depth", "depth", "storm depth in the scenario"),
        _shown("base_runoff", "depth", "storm runoff in the base"),
        _shown("runoff", "depth", "storm runoff in the scenario"),
        _number("runoff_change_pct", "change in runoff, and so in the flood's volume", "%"),
        _shown("base_peak", "flow", "peak flow in the base"),
        _shown("peak", "flow", "peak flow in the scenario"),
        _number("peak_change_pct", "change in peak flow", "%"),
        _number("base_peak_time_h", "time of the peak from the storm's start in the base", "h"),
        _number("peak_time_h", "time of the peak from the storm's start in the scenario", "h"),
        _number("peak_time_change_h", "how much later the peak comes; negative: earlier", "h"),
        _number("base_tc_h", "time of concentration in the base", "h"),
        _number("tc_h", "time of concentration in the scenario", "h"),
        _number("tc_change_h", "change in time of concentration", "h"),
        _number("base_curve_number", "mean curve number in the base", "1"),
        _number("curve_number", "mean curve number in the scenario", "1"),
        _text("over_capacity", "where the peak is over the capacity as supplied", optional=True,
              choices=("neither", "scenario", "base", "both", "unknown", "")),
        _text("stands", "supplied values that are the same in base and scenario, and hide what it changes"),
    ),
)  # fmt: skip

CELL_SIZES = Table(
    "cell_sizes",
    "one outlet on terrain of one cell size: the base's, then coarser ones; without a person's edits",
    ("outlet_id", "cell_size"),
    (
        _ID,
        _shown("cell_size", "length", "typical size of the terrain's cells"),
        _text("status", "ok (no flag), flagged or failed (not computed)", choices=("ok", "flagged", "failed")),
        _shown("area", "area", "drainage area"),
        _number("area_change_pct", "its change against the base", "%"),
        _shown("path_length", "length", "length of the longest flow path"),
        _number("path_length_change_pct", "its change against the base", "%"),
        _number("path_slope_pct", "fall of the longest flow path over its length", "%"),
        _number("path_slope_change_pct", "its change against the base, relative", "%"),
        _number("basin_slope_pct", "mean land slope", "%"),
        _number("basin_slope_change_pct", "its change against the base, relative", "%"),
        _number("curve_number", "area-weighted mean curve number", "1"),
        _number("curve_number_change", "its change against the base", "1"),
        _number("tc_h", "adopted time of concentration", "h"),
        _number("tc_change_pct", "its change against the base", "%"),
        _shown("peak_{T}yr", "flow", "peak flow"),
        _number("peak_{T}yr_change_pct", "its change against the base", "%"),
        _text("verdict", "safe to screen on such cells: area and every peak within 10 % of the base",
              choices=("base", "safe", "not safe", "unknown")),
        _text("reason", "what moves too far, or why there is no verdict"),
    ),
)  # fmt: skip
UNCERTAINTY = Table(
    "uncertainty",
    "the band of one result at one outlet, from a sample over the ranges of the uncertain inputs",
    ("outlet_id", "quantity", "return_period_yr"),
    (
        _ID,
        _text("quantity", "what the band is of, unit included", choices=("tc_h", "peak_cfs", "peak_m3s")),
        _number("return_period_yr", "return period of the storm; empty for a time", "yr"),
        _number("p05", "5 % of the sample lie under it, in the unit that quantity names"),
        _number("p50", "the middle of the sample, in the unit that quantity names"),
        _number("p95", "95 % of the sample lie under it, in the unit that quantity names"),
    ),
)

SWINGS = Table(
    "swings",
    "one uncertain input at the ends of its range, all others as in the run",
    ("outlet_id", "return_period_yr", "input"),
    (
        _ID,
        _number("return_period_yr", "return period of the storm", "yr"),
        _text("input", "the input that varies"),
        _number("low", "lower end of its range, as applied"),
        _number("high", "upper end of its range, as applied"),
        _text("applied", "how the ends are applied"),
        _number("tc_low_h", "time of concentration at the lower end", "h"),
        _number("tc_high_h", "time of concentration at the upper end", "h"),
        _shown("peak_low", "flow", "peak flow at the lower end"),
        _shown("peak_high", "flow", "peak flow at the upper end"),
        _count("rank", "place among the outlet's inputs by their effect on this peak, 1 the largest"),
        _count("tc_rank", "place by their effect on the time of concentration"),
        _yes("sampled", "whether the input is in the sample that uncertainty.csv rests on"),
    ),
)

REGIONAL = Table(
    "regional",
    "one peak beside the regional regression equation's",
    ("outlet_id", "return_period_yr"),
    (
        _ID,
        _number("return_period_yr", "return period", "yr"),
        _shown("peak", "flow", "peak flow of the run"),
        _shown("regional", "flow", "peak flow by the user's regression equation"),
        _shown("regional_p05", "flow", "lower end of the equation's 90 % band, 1.645 standard errors below"),
        _shown("regional_p95", "flow", "upper end of the equation's 90 % band, 1.645 standard errors above"),
        _number("ratio", "peak of the run over the regional one", "1"),
        _yes("applicable", "whether every parameter lies inside the equation's range"),
        _text("reason", "why it is not applicable or not computed"),
        _text("source", "where the equation was published, as supplied"),
    ),
)

CAPACITY = Table(
    "capacity",
    "one crossing with its capacity as supplied against the peaks, the first to fail on top",
    ("outlet_id", "scenario"),
    (
        _ID,
        _text("name", "name from the outlet layer"),
        _text("scenario", "base, or the name of the scenario"),
        _count("rank", "place among the crossings of the scenario, 1 the first to fail; empty without a verdict"),
        _text("verdict", "the case in words"),
        _text("exceeded_at_yr", "smallest tested period over capacity; empty: none; or unknown"),
        _number("exceeded_at_interp_yr", "return period that reaches the capacity, between tested ones only", "yr"),
        _number("exceeded_at_p05_yr", "the same in the sample: 5 % lie under it; empty beyond the tested ones", "yr"),
        _number("exceeded_at_p95_yr", "the same in the sample: 95 % lie under it; empty beyond the tested ones", "yr"),
        _text("band", "that band in words"),
        _number("peak_over_capacity_{T}yr", "peak flow over the capacity", "1"),
        _number("exceeded_{T}yr_pct", "share of the sample whose peak is over the capacity", "%"),
        _shown("capacity", "flow", "capacity as supplied"),
        _text("capacity_basis", "the criterion the capacity rests on, as supplied"),
    ),
)

FLAGS_TABLE = Table(
    "flags",
    "one doubt about one outlet",
    (),
    (
        _ID,
        _text("flag", "kind of doubt"),
        _text("severity", "how much it weighs", choices=("note", "warning", "serious")),
        _text("message", "the case in words"),
    ),
)

STREAMS = Table(
    "streams",
    "one reach of a channel, from its head or a junction to the next junction or to where it ends",
    ("reach",),
    (
        _count("reach", "number of the reach"),
        _count("to_reach", "number of the next reach downstream, 0 where the channel leaves the terrain or ends"),
        _count("strahler_order", "order of the reach (Strahler 1957)"),
        _shown("length", "length", "length of the reach"),
        _shown("drop", "length", "fall of the reach, conditioned terrain"),
        _shown("top_area", "area", "contributing area at its upper end"),
        _shown("area", "area", "contributing area at its lower end, above the junction"),
    ),
)
"""A layer of ``basins.gpkg`` that no CSV repeats."""

EDITS = Table(
    "edits",
    "one thing that a person changed on the review page, in the order of doing; rows are only ever added",
    (),
    (
        _text("time", "when, UTC, ISO 8601"),
        _ID,
        _text("field", "what was changed"),
        _text("from", "what it was"),
        _text("to", "what it became"),
        _text("reason", "why, in the reviewer's words"),
    ),
)

REVIEW = Table(
    "review",
    "how far the review of one outlet has come",
    ("outlet_id",),
    (
        _ID,
        _text("state", "what the reviewer decided", choices=("left", "accepted", "edited", "rejected", "field_check")),
        _text("reason", "why, in the reviewer's words"),
        _text("time", "when, UTC, ISO 8601; empty for outlets not looked at yet"),
    ),
)

ALL: tuple[Table, ...] = (
    OUTLETS,
    SEGMENTS,
    COVER_SHARES,
    TIMING,
    TIME_AREA,
    CROSS_CHECKS,
    UNIT_HYDROGRAPHS,
    HYDROGRAPHS,
    BASIN_PARAMETERS,
    UNCERTAINTY,
    SWINGS,
    REGIONAL,
    CAPACITY,
    FLAGS_TABLE,
    SCENARIOS,
    CELL_SIZES,
    EDITS,
    REVIEW,
)
"""Every table a run can write."""


_ROWS_AT_ONCE = 20_000
_SPECIAL = re.compile(r'[,"\r\n]')


def texts(values: Any) -> list[str]:
    """Return a column as the texts that stand in a CSV file, unquoted.

    Parameters
    ----------
    values : array or sequence
        Numbers, booleans or text. Floats are written so that they read back exactly, booleans as ``true`` and
        ``false``; NaN and None are missing and left empty.
    """
    kind = values.dtype.kind if hasattr(values, "dtype") else "O"
    if kind == "f":
        return _number_texts(values)
    listed = values.tolist() if hasattr(values, "tolist") else list(values)
    if kind == "b":
        return ["true" if value else "false" for value in listed]
    if kind in "iu":
        return list(map(str, listed))
    return [value if type(value) is str else _text_of(value) for value in listed]


def _number_texts(values: Any) -> list[str]:
    import numpy as np

    from basinwright.kernels.decimals import LONGEST, write_numbers

    numbers = np.ascontiguousarray(values, dtype=np.float64)
    text = np.empty(numbers.size * (LONGEST + 1), dtype=np.uint8)
    return text[: write_numbers(numbers, text)].tobytes().decode("ascii").split("\n")[:-1]


def _text_of(value: Any) -> str:
    if value is None or value != value:  # NaN differs from itself
        return ""
    return ("true" if value else "false") if isinstance(value, bool) else str(value)


class _Quoted(dict[str, str]):
    """Texts as RFC 4180 wants them between commas; most stand in a table many times."""

    def __missing__(self, text: str) -> str:
        self[text] = quoted = '"' + text.replace('"', '""') + '"' if _SPECIAL.search(text) else text
        return quoted


def as_text(columns: Mapping[Any, Any] | pd.DataFrame) -> pd.DataFrame:
    """Return columns as the table that `read_csv` would read from their file."""
    import pandas as pd

    return pd.DataFrame({str(name): texts(values) for name, values in columns.items()}, dtype=object)


def csv_text(columns: Mapping[str, Any]) -> str:
    """Return columns as CSV text by RFC 4180: CRLF, one header row.

    Parameters
    ----------
    columns : mapping of str to array
        Columns by name, in order, of one length; see `texts`.
    """
    return "".join(_lines(columns))


def write_csv(path: Path, columns: Mapping[str, Any]) -> None:
    """Write columns as a CSV file in UTF-8 (see `csv_text`)."""
    with path.open("w", encoding="utf-8", newline="") as stream:
        stream.writelines(_lines(columns))


def _lines(columns: Mapping[str, Any]) -> Iterator[str]:
    """Yield the text of a table, many rows at a time.

    Raises
    ------
    ValueError
        Where the columns differ in length.
    """
    quoted = _Quoted()
    yield ",".join(quoted[name] for name in columns) + "\r\n"
    lengths = {len(values) for values in columns.values()}
    if len(lengths) > 1:
        raise ValueError(f"columns of different lengths: {sorted(lengths)}")
    for first in range(0, max(lengths, default=0), _ROWS_AT_ONCE):
        rows = slice(first, first + _ROWS_AT_ONCE)
        cells = [_quoted_texts(values[rows], quoted) for values in columns.values()]
        yield "\r\n".join(map(",".join, zip(*cells, strict=True))) + "\r\n"


def _quoted_texts(values: Any, quoted: _Quoted) -> list[str]:
    listed = texts(values)
    plain = hasattr(values, "dtype") and values.dtype.kind in "fiub"
    return listed if plain else [quoted[text] for text in listed]


def read_csv(path: Path) -> pd.DataFrame:
    """Read a CSV file with every cell as the text that stands there.

    Parameters
    ----------
    path : Path
        File to read; a byte-order mark is tolerated.

    Returns
    -------
    pandas.DataFrame
        All columns of dtype object, empty cells as ``""``.
    """
    import pandas as pd

    return pd.read_csv(path, dtype=str, keep_default_na=False, na_filter=False, encoding="utf-8-sig")


def frictionless_schema(fields: Sequence[Field], system: System, key: Sequence[str]) -> dict[str, Any]:
    """Return the Frictionless Table Schema of a table.

    Parameters
    ----------
    fields : sequence of Field
        As `Table.fields` lists them.
    system : {"us", "si"}
        Unit system of the project.
    key : sequence of str
        Stems of the primary key; empty for none.
    """
    kinds = {"text": "string", "number": "number", "integer": "integer", "boolean": "boolean"}

    def entries() -> Iterator[Mapping[str, Any]]:
        for field in fields:
            entry: dict[str, Any] = {
                "name": field.name,
                "type": kinds[field.column.type],
                "description": field.column.meaning,
            }
            if unit := field.column.unit_in(system):
                entry["unit"] = unit
            if field.column.choices:
                entry["constraints"] = {"enum": list(field.column.choices)}
            yield entry

    schema: dict[str, Any] = {"fields": list(entries()), "missingValues": [""]}
    if key:
        by_stem = {field.column.stem: field.name for field in fields}
        schema["primaryKey"] = [by_stem[stem] for stem in key]
    return schema
