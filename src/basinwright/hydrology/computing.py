"""One pass over the tables: read, time, rain, flood, doubt, write."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.flags import Flag, status_of
from basinwright.hydrograph import TimeArea, translation_peak_rate_factor
from basinwright.hydrology import agreement, doubts, times, uncertainty, writing
from basinwright.hydrology.cross_checks import cross_checks
from basinwright.hydrology.floods import Basins, floods_of
from basinwright.hydrology.frames import Columns, Frame
from basinwright.hydrology.parameters import basin_parameters
from basinwright.hydrology.settings import Settings
from basinwright.hydrology.variation import Response
from basinwright.registry import find
from basinwright.runoff import Patches, effective_curve_number, weighted_runoff_mm
from basinwright.tables import COVER_SHARES, OUTLETS, SEGMENTS, TIME_AREA
from basinwright.timing import sum_by_outlet, time_of_concentration

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from basinwright.editing import Cell
    from basinwright.project import Project

LAG_OF_TC = 0.6
"""Lag over time of concentration: NEH 630 ch. 15 eq. 15-3."""
OTHER_STARTS = ("segments_small_area", "segments_large_area")
"""Tables like ``segments``: the paths cut where channels begin at a smaller and at a larger stream area."""
SHORTEST_TC_H = 8.0 / 3600.0
"""0.133 of it, the longest step of a unit hydrograph, is one second, the shortest that is computed."""


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
    scenario: str = agreement.BASE,
) -> Results:
    """Compute times, runoff and hydrographs from the tables.

    Parameters
    ----------
    tables : mapping of str to DataFrame
        ``outlets``, ``segments`` and ``cover_shares``, and ``time_area`` and those of `OTHER_STARTS` where they are
        known; cells as text or as numbers, dependent ones empty unless a person filled them.
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
    scenario : str
        Name of the case, for capacity.csv.

    Returns
    -------
    Results
    """
    project = settings.project
    periods = project.storm.periods
    every = Frame(OUTLETS, tables["outlets"], project)
    ids = every.text("outlet_id").tolist()
    failed = {flag.outlet_id for flag in terrain_flags if flag.key == "OUTLET_FAILED"}
    live = np.array([outlet_id not in failed for outlet_id in ids], dtype=bool)
    outlets = every.where(live)
    index = {outlet_id: i for i, outlet_id in enumerate(outlets.text("outlet_id").tolist())}
    count = len(index)
    segments = Frame(SEGMENTS, tables["segments"], project).of_outlets(index)
    shares = Frame(COVER_SHARES, tables["cover_shares"], project).of_outlets(index)
    supplied = set(held)
    flags = doubts.Doubts(ids, index, terrain_flags)

    timed = times.timed(segments, settings, supplied)
    travel_h = {
        "bankfull": sum_by_outlet(segments.outlet, timed.travel_time_h, count),
        "half": sum_by_outlet(segments.outlet, timed.travel_time_half_h, count),
    }
    patches, patch_columns, means = times.patches_of(shares, settings.scheme, count)
    own_curve_number = outlets.number("curve_number")
    curve_number = np.where(np.isnan(own_curve_number), patches.mean_curve_number(), own_curve_number)
    patches = times.replaced(patches, own_curve_number)

    along = times.path_times(segments, timed, settings.scheme, count)
    method_inputs: dict[str, Any] = {
        **{stem: outlets.number(column) for stem, column in _METHOD_COLUMNS.items()},
        **along.inputs,
        "mean_elevation_above_outlet_m": outlets.number("mean_elevation") - along.inputs["outlet_elevation_m"],
        "curve_number": curve_number,
        "travel_time_h": travel_h[project.channel.stage],
        "two_year_depth_mm": np.full(count, project.storm.two_year_depth_mm),
        "runoff_coefficient": means["runoff_coefficient"],
        **settings.intensity(),
    }
    results = time_of_concentration(method_inputs)
    adopted = results[project.timing.adopt]
    own_tc_h = outlets.number("tc_h")
    tc_h = np.where(np.isnan(own_tc_h), adopted.tc_h, own_tc_h)
    known = np.isfinite(tc_h) & (tc_h > 0)
    raised = known & np.isnan(own_tc_h) & (tc_h < project.timing.minimum)
    tc_h = np.where(raised, project.timing.minimum, np.where(known, tc_h, np.nan))
    short = tc_h < SHORTEST_TC_H
    known, raised, tc_h = known & ~short, raised & ~short, np.where(short, np.nan, tc_h)

    area_km2 = outlets.number("area")
    curves = _time_area(tables.get("time_area"), index, settings)
    basins = Basins(
        area_km2=area_km2,
        tc_h=tc_h,
        path_length_m=outlets.number("path_length"),
        centroid_length_m=outlets.number("centroid_length"),
        patches=patches,
        depth_mm=np.column_stack([outlets.number("depth_{T}yr", period) for period in periods]),
        time_area=curves,
    )
    floods, rain = floods_of(basins, settings, series=series)

    for i in np.flatnonzero(~known & ~short):
        flags.add(i, "OUTLET_FAILED", f"no time of concentration by {project.timing.adopt}: {adopted.reason[i]}")
    for i in np.flatnonzero(short):
        flags.add(i, "OUTLET_FAILED", "its time of concentration is under 8 s: set timing.minimum")
    for i in np.flatnonzero(raised):
        flags.add(i, "TC_MINIMUM", f"{adopted.tc_h[i]:.3g} h raised to {project.timing.minimum:g} h")
    doubts.flag_segments(flags, segments, timed, settings)
    doubts.flag_methods(flags, results, adopted, np.isnan(own_tc_h) & known)
    other = _other_weighting_mm(patches, rain.depth_mm, settings)
    doubts.flag_basins(flags, area_km2, tc_h, floods, rain, other, settings)
    agreement.flag_falling(floods.peak_m3s, flags, periods)
    for table, outlet_id, _, stem in sorted(supplied):
        if table == "outlets" and outlet_id in index:
            flags.add(index[outlet_id], "OVERRIDE", f"{stem} is a supplied value")

    unit = floods.unit_hydrographs
    deepest, rows = np.argmax(rain.depth_mm, axis=1), np.arange(count)
    computed: dict[str, Any] = {
        "curve_number": curve_number,
        "curve_number_used": effective_curve_number(
            floods.runoff_mm[rows, deepest], rain.depth_mm[rows, deepest], project.runoff.initial_abstraction_ratio
        ),
        "impervious_pct": means["impervious_pct"],
        "tc_h": tc_h,
        "tc_bankfull_h": travel_h["bankfull"],
        "tc_half_bankfull_h": travel_h["half"],
        "lag_h": LAG_OF_TC * tc_h,
        "unit_duration_h": np.where(known, unit.unit_duration_h, np.nan),
        "time_to_peak_h": np.where(known, unit.time_to_peak_h, np.nan),
        "unit_peak": np.where(known, floods.unit_peak_m3s_per_mm, np.nan),
    }
    if project.storm.areal_reduction != "none":
        computed["areal_factor"] = rain.areal_factor
    if project.storm.critical_duration:
        computed["critical_duration_h"] = np.where(known, rain.duration_h, np.nan)
    if curves is not None:
        index_of_shape = translation_peak_rate_factor(unit.unit_duration_h, curves)
        computed["translation_peak_rate_factor"] = np.where(known, index_of_shape, np.nan)
    for t, period in enumerate(periods):
        if project.storm.critical_duration:
            computed[f"depth_{period}yr"] = rain.point_mm[:, t]
        computed[f"runoff_{period}yr"] = floods.runoff_mm[:, t]
        computed[f"peak_{period}yr"] = np.where(known, floods.peak_m3s[:, t], np.nan)
        computed[f"peak_time_{period}yr_h"] = np.where(known, floods.peak_time_h[:, t], np.nan)
    shown = outlets.shown_of(computed) | times.lengths(segments, count)
    if outlets.has("capacity"):
        shown["exceeded_at_yr"] = doubts.exceeded_at(outlets.number("capacity"), floods.peak_m3s, periods, flags)
    paths, recut = _other_starts(tables, index, settings, along, {outlet_id for outlet_id, _ in edited})
    confidence = _confidence(
        Response(
            settings,
            replace(basins, depth_mm=rain.point_mm, time_area=curves if _takes_time_area(project) else None),
            rain.duration_h,
            own_tc_h,
            paths,
            method_inputs,
        ),
        recut,
        every,
        outlets,
        shown,
        np.where(known[:, None], floods.peak_m3s, np.nan),
        flags,
        scenario,
    )
    listed = flags.listed()
    status = {outlet_id: status_of(of_outlet) for outlet_id, of_outlet in listed.items()}
    written: dict[str, Columns] = {
        **confidence,
        "outlets": writing.outlet_columns(every, live, shown, listed, status),
        "segments": writing.segment_columns(segments, timed, set(edited)),
        "cover_shares": shares.columns(shares.shown_of(patch_columns)),
        "timing": writing.timing_columns(results, list(index), project.timing.adopt, np.isnan(own_tc_h)),
        "flags": writing.flag_columns(listed),
    }
    ends = dict(zip(segments.text("outlet_id").tolist(), segments.text("bottom_elevation").tolist(), strict=True))
    written["basin_parameters"] = basin_parameters(written["outlets"], ends, settings)  # each path's last row stays
    if series:
        curve_number_ii = np.where(known, curve_number, np.nan)
        written["cross_checks"] = cross_checks(
            list(index), area_km2, tc_h, curve_number_ii, outlets.number("open_water_pct"),
            means["runoff_coefficient"], floods, rain, settings,
        )  # fmt: skip
        written["unit_hydrographs"] = writing.unit_hydrograph_columns(floods, area_km2, list(index), known, project)
        written["hydrographs"] = writing.hydrograph_columns(floods, list(index), known, project)
    if series and "time_area" in tables:
        written["time_area"] = {str(name): tables["time_area"][name].to_numpy() for name in tables["time_area"]}
    return Results(written, [flag for of_outlet in listed.values() for flag in of_outlet], status)


def _takes_time_area(project: Project) -> bool:
    return "time_area" in find("unit_hydrograph", project.unit_hydrograph.shape).inputs


def _other_starts(
    tables: Mapping[str, pd.DataFrame],
    index: Mapping[str, int],
    settings: Settings,
    along: times.PathTimes,
    edited: set[str],
) -> tuple[list[times.PathTimes], NDArray[np.bool_]]:
    """Time the paths cut at the small, the run's own and the large stream area, and say for which outlets that is.

    Where a person changed the segments the channel begins where they say: there all three are the run's own.
    """
    recut = np.array([outlet_id not in edited for outlet_id in index], dtype=bool)
    if any(name not in tables for name in OTHER_STARTS):
        return [along] * 3, np.zeros(recut.size, dtype=bool)
    cuts = []
    for name in OTHER_STARTS:
        segments = Frame(SEGMENTS, tables[name], settings.project).of_outlets(index)
        timed = times.timed(segments, settings, set())
        cuts.append(times.path_times(segments, timed, settings.scheme, recut.size))
        recut &= ~np.isnan(cuts[-1].sheet_h)
    small, large = (cut.or_else(along, recut) for cut in cuts)
    return [small, along, large], recut


def _confidence(
    response: Response,
    recut: NDArray[np.bool_],
    every: Frame,
    outlets: Frame,
    shown: Mapping[str, Any],
    peak_m3s: NDArray[np.float64],
    flags: doubts.Doubts,
    scenario: str,
) -> dict[str, Columns]:
    """Make the tables that say how sure the results are, as far as the project asks for them."""
    settings, project = response.settings, response.settings.project
    ids = outlets.text("outlet_id").tolist()
    live = np.flatnonzero(~np.isnan(peak_m3s).any(axis=1))
    made: dict[str, Columns] = {}
    bands = None
    if project.uncertainty is not None:
        rated = outlets.number("capacity") if outlets.has("capacity") else np.full(len(ids), np.nan)
        bands = uncertainty.sample(response, ids, live, rated)
        made["uncertainty"] = uncertainty.uncertainty(bands, ids, live, project)
        made["swings"] = uncertainty.swings(response, ids, live, recut)
    if settings.equations:
        stems = {parameter.stem for equation in settings.equations for parameter in equation.exponents}
        values = {stem: outlets.inside(stem, shown) for stem in stems}
        made["regional"] = agreement.regional(settings.equations, values, ids, peak_m3s, flags, project)
    if every.has("capacity"):
        made["capacity"] = agreement.capacity(scenario, every, ids, peak_m3s, bands, flags)
    return made


_METHOD_COLUMNS = {
    "area_km2": "area",
    "path_length_m": "path_length",
    "path_slope_pct": "path_slope_pct",
    "basin_slope_pct": "basin_slope_pct",
}
"""Inputs of the timing methods that stand in outlets.csv, by their names there."""


def _time_area(frame: pd.DataFrame | None, index: Mapping[str, int], settings: Settings) -> TimeArea | None:
    """Read the time-area curves of the outlets; None where there are none."""
    if frame is None or not index:
        return None
    table = Frame(TIME_AREA, frame, settings.project).of_outlets(index)
    offsets = np.searchsorted(table.outlet, np.arange(len(index) + 1))
    if (np.diff(offsets) == 0).any():
        return None
    return TimeArea(offsets, table.number("travel_time_h"), table.number("area"))


def _other_weighting_mm(patches: Patches, depth_mm: NDArray[np.float64], settings: Settings) -> NDArray[np.float64]:
    """Return the runoff by the weighting that was not chosen, shape (n, T) [mm]."""
    runoff = settings.project.runoff
    return weighted_runoff_mm(
        patches,
        depth_mm,
        weighting="curve_number" if runoff.weighting == "runoff" else "runoff",
        moisture=runoff.moisture,
        initial_abstraction_ratio=runoff.initial_abstraction_ratio,
    )
