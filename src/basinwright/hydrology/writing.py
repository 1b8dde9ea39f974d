"""Computed columns put among those of the tables."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.flags import Flag
from basinwright.hydrology.floods import Floods
from basinwright.hydrology.frames import Columns, Frame
from basinwright.project import Project
from basinwright.tables import HYDROGRAPHS, UNIT_HYDROGRAPHS
from basinwright.timing import MethodResult, SegmentTimes
from basinwright.units import M_PER_FT

if TYPE_CHECKING:
    from numpy.typing import NDArray


def outlet_columns(
    every: Frame,
    live: NDArray[np.bool_],
    shown: Mapping[str, Any],
    flags: Mapping[str, list[Flag]],
    status: Mapping[str, str],
) -> Columns:
    """Put the computed columns of the live outlets among those of all."""
    rows = np.flatnonzero(live)

    def spread_out(values: Any) -> NDArray[Any]:
        array = values if hasattr(values, "dtype") else np.array(values, dtype=object)
        column = np.full(live.size, np.nan) if array.dtype.kind == "f" else np.full(live.size, None, dtype=object)
        column[rows] = array
        return column

    ids = every.text("outlet_id").tolist()
    replaced: dict[str, Any] = {stem: spread_out(values) for stem, values in shown.items()}
    for stem in ("curve_number", "tc_h"):  # what a person supplied stays as it was written
        replaced[stem] = every.completed(stem, replaced[stem])
    replaced["status"] = [status[outlet_id] for outlet_id in ids]
    replaced["flags"] = [" ".join(flag.key for flag in flags[outlet_id]) for outlet_id in ids]
    return every.columns(replaced)


def segment_columns(segments: Frame, times: SegmentTimes, edited: set[tuple[str, str]]) -> Columns:
    """Put what was computed into the empty cells of the segment table."""
    us = segments.system == "us"
    shallow = segments.among("regime", ("shallow",))
    computed = {name.removesuffix("_m").removesuffix("_mps"): array for name, array in times.columns().items()}
    shown = segments.shown_of(computed)
    shown["roughness"] = times.roughness / np.where(shallow & us, M_PER_FT, 1.0)
    for stem in ("slope", "roughness", "hydraulic_radius", "hydraulic_radius_half"):
        shown[stem] = segments.completed(stem, shown[stem])
    shown["edited"] = np.zeros(segments.outlet.size, dtype=bool)
    if edited:
        keys = zip(segments.text("outlet_id").tolist(), segments.text("segment").tolist(), strict=True)
        shown["edited"] = np.array([key in edited for key in keys], dtype=bool)
    return segments.columns(shown)


def timing_columns(
    results: Mapping[str, MethodResult], ids: list[str], adopt: str, by_method: NDArray[np.bool_]
) -> Columns:
    """List every method for every outlet, outlet by outlet."""
    n, k = len(ids), len(results)

    def woven(columns: list[Any]) -> NDArray[Any]:
        return np.array(columns, dtype=object).reshape(k, n).T.ravel()

    return {
        "outlet_id": np.repeat(np.array(ids, dtype=object), k),
        "method": np.tile(np.array(list(results), dtype=object), n),
        "tc_h": woven([result.tc_h for result in results.values()]).astype(np.float64),
        "adopted": np.outer(by_method, [key == adopt for key in results]).ravel(),
        "applicable": woven([result.applicable.tolist() for result in results.values()]).astype(bool),
        "reason": woven([result.reason.tolist() for result in results.values()]),
        "source": np.tile(np.array([str(result.method.source) for result in results.values()], dtype=object), n),
    }


def flag_columns(flags: Mapping[str, list[Flag]]) -> Columns:
    """List the flags, outlet by outlet."""
    rows = [flag for of_outlet in flags.values() for flag in of_outlet]
    return {
        "outlet_id": [flag.outlet_id for flag in rows],
        "flag": [flag.key for flag in rows],
        "severity": [flag.severity for flag in rows],
        "message": [flag.message for flag in rows],
    }


def unit_hydrograph_columns(
    floods: Floods, area_km2: NDArray[np.float64], ids: list[str], known: NDArray[np.bool_], project: Project
) -> Columns:
    """List the ordinates of the unit hydrographs, outlet by outlet."""
    unit = floods.unit_hydrographs
    outlet_id, time, flow = UNIT_HYDROGRAPHS.fields(project.project.units)
    rows = known[unit.outlet]
    return {
        outlet_id.name: np.array(ids, dtype=object)[unit.outlet[rows]],
        time.name: unit.time_h()[rows],
        flow.name: unit.flow_m3s_per_mm(area_km2)[rows] / flow.factor,
    }


def hydrograph_columns(floods: Floods, ids: list[str], known: NDArray[np.bool_], project: Project) -> Columns:
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
