"""The hydrology half over the tables: outlets, segments and cover shares in; times, flows and flags out.

`compute` reads the tables as text, exactly as they stand in the files, and never a raster: so a run and a later
`retime` of the same tables give the same numbers to the last bit. The formulas are in `timing`, `storms`, `runoff` and
`hydrograph`; here is only which column feeds which.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.flags import FLAGS, Flag, status_of
from basinwright.hydrograph import Floods, design_floods
from basinwright.project import Project
from basinwright.runoff import Patches, effective_curve_number
from basinwright.schemes import Scheme
from basinwright.storms import Storm
from basinwright.tables import (
    COVER_SHARES,
    HYDROGRAPHS,
    OUTLETS,
    SEGMENTS,
    UNIT_HYDROGRAPHS,
    Table,
)
from basinwright.timing import (
    BankfullRelation,
    MethodResult,
    SegmentTimes,
    bankfull_relation,
    spread,
    sum_by_outlet,
    time_of_concentration,
    time_segments,
)
from basinwright.units import KM2_PER_MI2, M_PER_FT

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from basinwright.editing import Cell

Columns = dict[str, Any]
"""A table as it is written: columns by name, in order."""

IN_CHANNEL = ("channel", "open_water", "pipe", "lined_channel")
"""The regimes that count as channel."""
LAG_OF_TC = 0.6
"""Lag over time of concentration: NEH 630 ch. 15 eq. 15-3."""
LARGE_BASIN_KM2 = 20.0 * KM2_PER_MI2
UNREDUCED_KM2 = 10.0 * KM2_PER_MI2
SPREAD_LIMIT = 2.0


@dataclass(frozen=True)
class Settings:
    """What the hydrology needs besides the tables.

    Parameters
    ----------
    project : Project
        The resolved project.
    scheme : Scheme
        The land-cover scheme.
    storm : Storm
        The design storm's distribution.
    """

    project: Project
    scheme: Scheme
    storm: Storm

    @property
    def relation(self) -> BankfullRelation:
        """The bankfull relation."""
        return bankfull_relation_of(self.project)


def bankfull_relation_of(project: Project) -> BankfullRelation:
    """Return the bankfull relation that a project names or gives."""
    width, depth = project.channel.bankfull_width, project.channel.bankfull_depth
    if project.channel.bankfull_region == "own" and width is not None and depth is not None:
        return BankfullRelation("own", (width.coefficient, width.exponent), (depth.coefficient, depth.exponent))
    return bankfull_relation(project.channel.bankfull_region)


@dataclass
class Results:
    """What `compute` returns.

    Parameters
    ----------
    tables : dict of str to columns
        Every table of the run, complete, under the names and in the units of the project.
    flags : list of Flag
        All flags, outlet by outlet.
    status : dict of str to str
        Status by outlet.
    """

    tables: dict[str, Columns]
    flags: list[Flag]
    status: dict[str, str] = field(default_factory=dict)


def compute(
    tables: Mapping[str, pd.DataFrame],
    settings: Settings,
    *,
    terrain_flags: Sequence[Flag] = (),
    held: Iterable[Cell] = (),
    edited: Iterable[tuple[str, str]] = (),
    series: bool = True,
) -> Results:
    """Compute times, runoff and hydrographs from the tables.

    Parameters
    ----------
    tables : mapping of str to DataFrame
        ``outlets``, ``segments`` and ``cover_shares``, all cells text; dependent cells are empty unless a person
        filled them.
    settings : Settings
        Options, scheme and storm.
    terrain_flags : sequence of Flag
        What the terrain half flagged; an outlet with OUTLET_FAILED is not computed.
    held : iterable of Cell
        The dependent cells that a person filled (`basinwright.editing`).
    edited : iterable of (outlet id, segment)
        The segments that a person changed.
    series : bool
        Whether to keep the unit hydrographs and hydrographs.

    Returns
    -------
    Results
    """
    project = settings.project
    periods = project.storm.periods
    outlets = _Frame(OUTLETS, tables["outlets"], project)
    ids = outlets.text("outlet_id").tolist()
    failed = {flag.outlet_id for flag in terrain_flags if flag.key == "OUTLET_FAILED"}
    live = np.array([outlet_id not in failed for outlet_id in ids], dtype=bool)
    outlets = outlets.where(live)
    index = {outlet_id: i for i, outlet_id in enumerate(outlets.text("outlet_id").tolist())}
    count = len(index)
    segments = _Frame(SEGMENTS, tables["segments"], project).of_outlets(index)
    shares = _Frame(COVER_SHARES, tables["cover_shares"], project).of_outlets(index)
    supplied = set(held)
    flags = _Flags(ids, index, terrain_flags)

    times = _time_segments(segments, settings, supplied)
    travel_h = {
        "bankfull": sum_by_outlet(segments.outlet, times.travel_time_h, count),
        "half": sum_by_outlet(segments.outlet, times.travel_time_half_h, count),
    }
    patches, patch_columns, impervious_pct = _patches(shares, settings.scheme, count)
    own_curve_number = outlets.number("curve_number")
    curve_number = np.where(np.isnan(own_curve_number), patches.mean_curve_number(), own_curve_number)
    patches = _replaced(patches, own_curve_number)

    results = time_of_concentration(
        {
            **{stem: outlets.number(column) for stem, column in _METHOD_COLUMNS.items()},
            "curve_number": curve_number,
            "travel_time_h": travel_h[project.channel.stage],
            "two_year_depth_mm": np.full(count, project.storm.two_year_depth_mm),
            **_overland(segments, times, count),
        }
    )
    adopted = results[project.timing.adopt]
    own_tc_h = outlets.number("tc_h")
    tc_h = np.where(np.isnan(own_tc_h), adopted.tc_h, own_tc_h)
    known = np.isfinite(tc_h) & (tc_h > 0)
    raised = known & np.isnan(own_tc_h) & (tc_h < project.timing.minimum)
    tc_h = np.where(raised, project.timing.minimum, np.where(known, tc_h, np.nan))

    area_km2 = outlets.number("area")
    depth_mm = np.column_stack([outlets.number("depth_{T}yr", period) for period in periods])
    floods = _floods(area_km2, tc_h, patches, depth_mm, settings, series)

    for i in np.flatnonzero(~known):
        flags.add(i, "OUTLET_FAILED", f"no time of concentration by {project.timing.adopt}: {adopted.reason[i]}")
    for i in np.flatnonzero(raised):
        flags.add(i, "TC_MINIMUM", f"{adopted.tc_h[i]:.3g} h raised to {project.timing.minimum:g} h")
    _flag_segments(flags, segments, times, settings)
    _flag_methods(flags, results, adopted, np.isnan(own_tc_h) & known)
    _flag_basins(flags, area_km2, tc_h, depth_mm, floods, settings)
    for table, outlet_id, _, stem in sorted(supplied):
        if table == "outlets" and outlet_id in index:
            flags.add(index[outlet_id], "OVERRIDE", f"{stem} is a supplied value")

    listed = flags.listed()
    status = {outlet_id: status_of(of_outlet) for outlet_id, of_outlet in listed.items()}
    unit = floods.unit_hydrographs
    deepest = np.argmax(depth_mm, axis=1)
    rows = np.arange(count)
    computed: dict[str, Any] = {
        "curve_number": curve_number,
        "curve_number_used": effective_curve_number(
            floods.runoff_mm[rows, deepest], depth_mm[rows, deepest], project.runoff.initial_abstraction_ratio
        ),
        "impervious_pct": impervious_pct,
        "tc_h": tc_h,
        "tc_bankfull_h": travel_h["bankfull"],
        "tc_half_bankfull_h": travel_h["half"],
        "lag_h": LAG_OF_TC * tc_h,
        "unit_duration_h": np.where(known, unit.unit_duration_h, np.nan),
        "time_to_peak_h": np.where(known, unit.time_to_peak_h, np.nan),
        "unit_peak": np.where(known, floods.unit_peak_m3s_per_mm, np.nan),
    }
    for t, period in enumerate(periods):
        computed[f"runoff_{period}yr"] = floods.runoff_mm[:, t]
        computed[f"peak_{period}yr"] = np.where(known, floods.peak_m3s[:, t], np.nan)
        computed[f"peak_time_{period}yr_h"] = np.where(known, floods.peak_time_h[:, t], np.nan)
    shown = outlets.shown_of(computed) | _lengths(segments, count)
    if outlets.has("capacity"):
        shown["exceeded_at_yr"] = _exceeded(outlets.number("capacity"), floods.peak_m3s, periods, flags)
    every = _Frame(OUTLETS, tables["outlets"], project)
    written: dict[str, Columns] = {
        "outlets": _outlet_columns(every, live, shown, listed, status),
        "segments": _segment_columns(segments, times, set(edited)),
        "cover_shares": shares.columns(shares.shown_of(patch_columns)),
        "timing": _timing_columns(results, list(index), project.timing.adopt, np.isnan(own_tc_h)),
        "flags": _flag_columns(listed),
    }
    if series:
        written["unit_hydrographs"] = _unit_hydrograph_columns(floods, area_km2, list(index), known, project)
        written["hydrographs"] = _hydrograph_columns(floods, list(index), known, project)
    return Results(written, [flag for of_outlet in listed.values() for flag in of_outlet], status)


_METHOD_COLUMNS = {
    "area_km2": "area",
    "path_length_m": "path_length",
    "channel_length_m": "channel_length",
    "path_slope_pct": "path_slope_pct",
    "path_slope_1085_pct": "path_slope_1085_pct",
    "basin_slope_pct": "basin_slope_pct",
    "relief_m": "relief",
}
"""Inputs of the timing methods that stand in outlets.csv, by their names there."""


class _Frame:
    """A table as text, read by the stems of its schema in the units used inside."""

    def __init__(self, table: Table, frame: pd.DataFrame, project: Project) -> None:
        self.table, self.frame, self.project = table, frame, project
        self.system = project.project.units
        present = set(frame.columns)
        optional = [c.stem for c in table.columns if c.optional and c.name(self.system) in present]
        self.fields = table.fields(self.system, project.storm.periods, optional)
        self.outlet: NDArray[Any] = np.arange(len(frame), dtype=np.int64)

    def where(self, mask: NDArray[np.bool_]) -> _Frame:
        """Return the rows of a mask."""
        return _Frame(self.table, self.frame[mask], self.project)

    def of_outlets(self, index: Mapping[str, int]) -> _Frame:
        """Return the rows of the outlets of an index, outlet by outlet, each row's outlet in ``outlet``."""
        at = self.frame["outlet_id"].map(index)
        rows = at[at.notna()].astype(np.int64).sort_values(kind="stable")
        chosen = _Frame(self.table, self.frame.loc[rows.index], self.project)
        chosen.outlet = rows.to_numpy(dtype=np.int64)
        return chosen

    def _column(self, stem: str, period: str) -> tuple[str, float]:
        column = self.table.column(stem)
        return column.name(self.system, period), column.inside_per_shown(self.system)

    def has(self, stem: str) -> bool:
        """Say whether an optional column is there."""
        return self._column(stem, "")[0] in self.frame.columns

    def text(self, stem: str, period: str = "") -> NDArray[Any]:
        """Return a column as text."""
        return self.frame[self._column(stem, period)[0]].to_numpy(dtype=object)

    def shown(self, stem: str, period: str = "") -> NDArray[np.float64]:
        """Return a column as the numbers that stand there, NaN where empty."""
        text = self.text(stem, period)
        return np.array([float(cell) if cell else np.nan for cell in text.tolist()], dtype=np.float64)

    def number(self, stem: str, period: str = "") -> NDArray[np.float64]:
        """Return a column in the unit used inside, NaN where empty."""
        return self.shown(stem, period) * self._column(stem, period)[1]

    def shown_of(self, computed: Mapping[str, Any]) -> dict[str, Any]:
        """Turn computed columns, by stem with the period put in, into the numbers to write."""
        factors = {entry.stem: entry.factor for entry in self.fields}
        return {stem: values / factors[stem] if factors[stem] != 1.0 else values for stem, values in computed.items()}

    def columns(self, replaced: Mapping[str, Any]) -> Columns:
        """Return the table as it is written: its own text, but for the columns replaced by stem."""
        return {
            entry.name: replaced.get(entry.stem, self.frame[entry.name].to_numpy(dtype=object)) for entry in self.fields
        }


class _Flags:
    """The flags of all outlets while they are collected."""

    def __init__(self, ids: list[str], index: Mapping[str, int], earlier: Sequence[Flag]) -> None:
        self._live = list(index)
        self._flags: dict[str, list[Flag]] = {outlet_id: [] for outlet_id in ids}
        for flag in earlier:
            self._flags[flag.outlet_id].append(flag)

    def add(self, outlet: int, key: str, message: str) -> None:
        """Raise a flag for an outlet by its index among those computed."""
        outlet_id = self._live[outlet]
        self._flags[outlet_id].append(Flag(outlet_id, key, message))

    def raised(self, key: str) -> NDArray[np.bool_]:
        """Return which of the computed outlets carry a flag."""
        return np.array([any(flag.key == key for flag in self._flags[i]) for i in self._live], dtype=bool)

    def listed(self) -> dict[str, list[Flag]]:
        """Return the flags by outlet, in the order of the list of flags."""
        order = {key: i for i, key in enumerate(FLAGS)}
        return {outlet_id: sorted(flags, key=lambda flag: order[flag.key]) for outlet_id, flags in self._flags.items()}


def _time_segments(segments: _Frame, settings: Settings, held: set[Cell]) -> SegmentTimes:
    """Time the segments: what a person filled stands, the rest follows from the row."""
    regime, project = segments.text("regime"), settings.project
    ids, numbers = segments.text("outlet_id").tolist(), segments.text("segment").tolist()

    def given(stem: str) -> NDArray[np.float64]:
        mask = np.array([("segments", i, n, stem) in held for i, n in zip(ids, numbers, strict=True)], dtype=bool)
        return np.where(mask, segments.number(stem), np.nan)

    sheet, shallow = regime == "sheet", regime == "shallow"
    roughness = given("roughness") * np.where(shallow & (segments.system == "us"), M_PER_FT, 1.0)
    cover = segments.text("cover").tolist()
    classes = {code: settings.scheme.find(code) for code in set(cover)}
    sheet_n = np.array([found.sheet_n if (found := classes[code]) else np.nan for code in cover], dtype=np.float64)
    weighted = np.where(sheet, segments.number("roughness"), np.nan)  # by length along the path, from the terrain
    columns = {
        "outlet": segments.outlet,
        "regime": regime,
        **{f"{stem}_m": segments.number(stem) for stem in ("from", "to", "top_elevation", "bottom_elevation")},
        "area_km2": segments.number("area"),
        "slope": given("slope"),
        "roughness": roughness,
        "hydraulic_radius_m": given("hydraulic_radius"),
        "hydraulic_radius_half_m": given("hydraulic_radius_half"),
        "sheet_n": np.where(np.isnan(weighted), sheet_n, weighted),
        "shallow_category": np.array(
            [found.shallow if (found := classes[code]) else "" for code in cover], dtype=object
        ),
    }
    return time_segments(
        columns,
        two_year_depth_mm=project.storm.two_year_depth_mm,
        relation=settings.relation,
        channel_roughness=project.channel.roughness,
        slope_floor=project.flow_path.slope_floor,
        open_water_depth_m=project.channel.open_water_depth,
    )


def _patches(shares: _Frame, scheme: Scheme, count: int) -> tuple[Patches, dict[str, Any], NDArray[np.float64]]:
    """Return the curve-number patches, the columns that were empty now filled, and the mean impervious share [%]."""
    area, curve = shares.number("area"), shares.number("curve_number")
    impervious, source = shares.number("impervious_pct"), shares.text("source").copy()
    cover, group = shares.text("cover").tolist(), shares.text("soil_group").tolist()
    for i in np.flatnonzero(np.isnan(curve) | np.isnan(impervious) | (source == "")):
        found = scheme.find(cover[i])
        if found is None:
            continue
        if np.isnan(curve[i]):
            curve[i] = found.curve_number_on(group[i])
        if np.isnan(impervious[i]):
            impervious[i] = found.impervious_pct
        source[i] = source[i] or found.source
    offsets = np.searchsorted(shares.outlet, np.arange(count + 1))
    patches = Patches(offsets, area, curve)
    mean = patches.sums(patches.weights() * np.nan_to_num(impervious))
    return patches, {"curve_number": curve, "impervious_pct": impervious, "source": source}, mean


def _replaced(patches: Patches, curve_number: NDArray[np.float64]) -> Patches:
    """Put one patch in the place of an outlet's patches where a curve number was supplied for it."""
    supplied = ~np.isnan(curve_number)
    if not supplied.any():
        return patches
    first = np.zeros(patches.area_km2.size, dtype=bool)
    first[patches.offsets[:-1]] = True
    keep = ~supplied[patches.outlet] | first
    kept_outlet = patches.outlet[keep]
    curve = np.where(supplied[kept_outlet], curve_number[kept_outlet], patches.curve_number[keep])
    area = np.where(supplied[kept_outlet], 1.0, patches.area_km2[keep])
    return Patches(np.searchsorted(kept_outlet, np.arange(patches.outlets + 1)), area, curve)


def _overland(segments: _Frame, times: SegmentTimes, count: int) -> dict[str, NDArray[np.float64]]:
    """Return what the overland methods take from the path: its part in sheet and shallow flow."""
    regime = segments.text("regime")
    length = segments.number("to") - segments.number("from")
    sheet, overland = regime == "sheet", np.isin(regime, ("sheet", "shallow"))
    fall = segments.number("top_elevation") - segments.number("bottom_elevation")
    overland_m = np.bincount(segments.outlet, weights=length * overland, minlength=count)
    overland_fall_m = np.bincount(segments.outlet, weights=fall * overland, minlength=count)
    sheet_m = np.bincount(segments.outlet, weights=length * sheet, minlength=count)
    weighted = np.bincount(segments.outlet, weights=np.where(sheet, length * times.roughness, 0.0), minlength=count)
    with np.errstate(invalid="ignore", divide="ignore"):
        return {
            "overland_length_m": np.where(overland_m > 0, overland_m, np.nan),
            "overland_slope_pct": np.where(overland_fall_m > 0, 100.0 * overland_fall_m / overland_m, np.nan),
            "sheet_n": np.where(sheet_m > 0, weighted / sheet_m, np.nan),
        }


def _lengths(segments: _Frame, count: int) -> dict[str, NDArray[Any]]:
    """Sum the lengths of the path by regime, in the unit of the file: exact, since distances are binary fractions."""
    length = segments.shown("to") - segments.shown("from")
    regime = segments.text("regime")
    kinds = {"sheet_length": ("sheet",), "shallow_length": ("shallow",), "channel_length": IN_CHANNEL}
    return {
        stem: np.bincount(segments.outlet, weights=length * np.isin(regime, names), minlength=count)
        for stem, names in kinds.items()
    }


def _flag_segments(flags: _Flags, segments: _Frame, times: SegmentTimes, settings: Settings) -> None:
    """Raise the flags that the timing of segments gives, one for each outlet and kind."""
    numbers = segments.text("segment").tolist()
    floor = settings.project.flow_path.slope_floor
    marks = {
        "SLOPE_FLOOR": (times.floored, f"slope raised to {floor:g}"),
        "SUPERCRITICAL": (times.supercritical, "faster than critical"),
        "BANKFULL_RANGE": (
            times.out_of_bankfull_range,
            f"area outside the data of the {settings.relation.name} relation",
        ),
    }
    for key, (mark, words) in marks.items():
        of_outlet: dict[int, list[str]] = {}
        for i in np.flatnonzero(mark).tolist():
            of_outlet.setdefault(int(segments.outlet[i]), []).append(numbers[i])
        for outlet, rows in of_outlet.items():
            flags.add(outlet, key, f"segment{'s' * (len(rows) > 1)} {', '.join(rows)}: {words}")
    count = len(flags.raised("NO_CHANNEL"))
    in_channel = segments.outlet[np.isin(segments.text("regime"), IN_CHANNEL)]
    for outlet in np.flatnonzero(np.bincount(in_channel, minlength=count) == 0).tolist():
        flags.add(outlet, "NO_CHANNEL", "the whole path is sheet and shallow flow")


def _flag_methods(
    flags: _Flags, results: Mapping[str, MethodResult], adopted: MethodResult, by_method: NDArray[np.bool_]
) -> None:
    """Raise METHOD_RANGE and METHOD_SPREAD."""
    for i in np.flatnonzero(by_method & ~adopted.applicable).tolist():
        flags.add(i, "METHOD_RANGE", f"{adopted.method.key}: {adopted.reason[i]}")
    ratio = spread(results)
    for i in np.flatnonzero(np.nan_to_num(ratio) > SPREAD_LIMIT).tolist():
        times = {key: float(result.tc_h[i]) for key, result in results.items() if result.applicable[i]}
        low, high = min(times, key=times.__getitem__), max(times, key=times.__getitem__)
        flags.add(i, "METHOD_SPREAD", f"{low} {times[low]:.3g} h to {high} {times[high]:.3g} h")


def _flag_basins(
    flags: _Flags,
    area_km2: NDArray[np.float64],
    tc_h: NDArray[np.float64],
    depth_mm: NDArray[np.float64],
    floods: Floods,
    settings: Settings,
) -> None:
    """Raise the flags that size, storm and runoff give."""
    us = settings.project.project.units == "us"
    unit, factor = ("mi2", KM2_PER_MI2) if us else ("km2", 1.0)
    for i in np.flatnonzero(area_km2 > LARGE_BASIN_KM2).tolist():
        flags.add(i, "BASIN_LARGE", f"{area_km2[i] / factor:.3g} {unit}")
    if settings.project.storm.areal_reduction == "none":
        for i in np.flatnonzero(area_km2 > UNREDUCED_KM2).tolist():
            flags.add(i, "AREAL_UNREDUCED", f"{area_km2[i] / factor:.3g} {unit}, point rainfall used")
    step_h = settings.storm.burst_step_h
    for i in np.flatnonzero(step_h > 0.5 * tc_h).tolist():
        flags.add(i, "STORM_COARSE", f"storm step {step_h:.3g} h at the burst, Tc {tc_h[i]:.3g} h")
    for i in np.flatnonzero((floods.runoff_mm == 0).any(axis=1)).tolist():
        dry = [period for t, period in enumerate(settings.project.storm.periods) if floods.runoff_mm[i, t] == 0]
        flags.add(i, "RUNOFF_ZERO", f"return period {', '.join(dry)} years")


def _exceeded(
    capacity_m3s: NDArray[np.float64], peak_m3s: NDArray[np.float64], periods: Sequence[str], flags: _Flags
) -> list[str]:
    """Return the smallest tested return period whose peak exceeds the capacity, as text."""
    doubtful = flags.raised("EDGE_TOUCH") | flags.raised("OUTLET_FAILED")
    verdicts = []
    for i, capacity in enumerate(capacity_m3s.tolist()):
        over = [period for t, period in enumerate(periods) if peak_m3s[i, t] > capacity]
        verdicts.append("" if np.isnan(capacity) else "unknown" if doubtful[i] else over[0] if over else "")
    return verdicts


def _floods(
    area_km2: NDArray[np.float64],
    tc_h: NDArray[np.float64],
    patches: Patches,
    depth_mm: NDArray[np.float64],
    settings: Settings,
    series: bool,
) -> Floods:
    """Compute the design floods; an outlet without a time of concentration gets one in passing, and no result."""
    project = settings.project
    step, shape = project.unit_hydrograph.time_step, project.unit_hydrograph
    return design_floods(
        area_km2,
        np.where(np.isnan(tc_h), 1.0, tc_h),
        patches,
        settings.storm,
        depth_mm,
        shape=shape.shape,
        shape_inputs={"peak_rate_factor": shape.peak_rate_factor},
        weighting=project.runoff.weighting,
        moisture=project.runoff.moisture,
        initial_abstraction_ratio=project.runoff.initial_abstraction_ratio,
        time_step_h=None if isinstance(step, str) else step,
        series=series,
    )


def _outlet_columns(
    every: _Frame,
    live: NDArray[np.bool_],
    shown: Mapping[str, Any],
    flags: Mapping[str, list[Flag]],
    status: Mapping[str, str],
) -> Columns:
    """Put the computed columns of the live outlets among the text of all."""
    rows = np.flatnonzero(live)

    def spread_out(values: Any) -> NDArray[Any]:
        column = np.full(live.size, None, dtype=object)
        column[rows] = values.tolist() if hasattr(values, "tolist") else values
        return column

    ids = every.text("outlet_id").tolist()
    replaced: dict[str, Any] = {stem: spread_out(values) for stem, values in shown.items()}
    for stem in ("curve_number", "tc_h"):  # what a person supplied stays as it was written
        text = every.text(stem)
        replaced[stem] = np.where(text == "", replaced[stem], text)
    replaced["status"] = [status[outlet_id] for outlet_id in ids]
    replaced["flags"] = [" ".join(flag.key for flag in flags[outlet_id]) for outlet_id in ids]
    return every.columns(replaced)


def _segment_columns(segments: _Frame, times: SegmentTimes, edited: set[tuple[str, str]]) -> Columns:
    """Put what was computed into the empty cells of the segment table."""
    us = segments.system == "us"
    shallow = segments.text("regime") == "shallow"
    computed = {name.removesuffix("_m").removesuffix("_mps"): array for name, array in times.columns().items()}
    shown = segments.shown_of(computed)
    shown["roughness"] = times.roughness / np.where(shallow & us, M_PER_FT, 1.0)
    for stem in ("slope", "roughness", "hydraulic_radius", "hydraulic_radius_half"):
        text = segments.text(stem)
        shown[stem] = np.where(text == "", shown[stem].astype(object), text)
    keys = zip(segments.text("outlet_id").tolist(), segments.text("segment").tolist(), strict=True)
    shown["edited"] = np.array([key in edited for key in keys], dtype=bool)
    return segments.columns(shown)


def _timing_columns(
    results: Mapping[str, MethodResult], ids: list[str], adopt: str, by_method: NDArray[np.bool_]
) -> Columns:
    """List every method for every outlet, outlet by outlet."""
    n, k = len(ids), len(results)

    def woven(columns: list[Any]) -> NDArray[Any]:
        return np.array(columns, dtype=object).reshape(k, n).T.ravel()

    return {
        "outlet_id": np.repeat(np.array(ids, dtype=object), k),
        "method": np.tile(np.array(list(results), dtype=object), n),
        "tc_h": woven([result.tc_h.tolist() for result in results.values()]),
        "adopted": np.outer(by_method, [key == adopt for key in results]).ravel(),
        "applicable": woven([result.applicable.tolist() for result in results.values()]).astype(bool),
        "reason": woven([result.reason.tolist() for result in results.values()]),
        "source": np.tile(np.array([str(result.method.source) for result in results.values()], dtype=object), n),
    }


def _flag_columns(flags: Mapping[str, list[Flag]]) -> Columns:
    rows = [flag for of_outlet in flags.values() for flag in of_outlet]
    return {
        "outlet_id": [flag.outlet_id for flag in rows],
        "flag": [flag.key for flag in rows],
        "severity": [flag.severity for flag in rows],
        "message": [flag.message for flag in rows],
    }


def _unit_hydrograph_columns(
    floods: Floods, area_km2: NDArray[np.float64], ids: list[str], known: NDArray[np.bool_], project: Project
) -> Columns:
    unit = floods.unit_hydrographs
    outlet_id, time, flow = UNIT_HYDROGRAPHS.fields(project.project.units)
    rows = known[unit.outlet]
    return {
        outlet_id.name: np.array(ids, dtype=object)[unit.outlet[rows]],
        time.name: unit.time_h()[rows],
        flow.name: unit.flow_m3s_per_mm(area_km2)[rows] / flow.factor,
    }


def _hydrograph_columns(floods: Floods, ids: list[str], known: NDArray[np.bool_], project: Project) -> Columns:
    """List the hydrographs outlet by outlet, and storm by storm within."""
    if floods.series is None:
        raise ValueError("the floods were computed without their series")
    series, periods = floods.series, project.storm.periods
    counts = np.where(known, np.diff(series.offsets), 0)
    first = np.repeat(series.offsets[:-1], len(periods))
    each = np.repeat(counts, len(periods))  # rows of each outlet and storm, in the order of the file
    storm = np.repeat(np.tile(np.arange(len(periods)), counts.size), each)
    within = np.arange(each.sum()) - np.repeat(np.cumsum(each) - each, each)
    row = np.repeat(first, each) + within
    outlet_id, years, time, rain, excess, flow = HYDROGRAPHS.fields(project.project.units)
    return {
        outlet_id.name: np.repeat(np.array(ids, dtype=object), counts * len(periods)),
        years.name: np.array([float(period) for period in periods])[storm],
        time.name: series.time_h()[row],
        rain.name: series.rain_mm[row, storm] / rain.factor,
        excess.name: series.excess_mm[row, storm] / excess.factor,
        flow.name: series.flow_m3s[row, storm] / flow.factor,
    }
