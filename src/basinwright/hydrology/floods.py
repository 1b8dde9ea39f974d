"""Rain and design floods of all outlets: which storm, which depth, how long."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrograph import Floods, Series, TimeArea, UnitHydrographs, design_floods
from basinwright.hydrology.settings import Settings
from basinwright.runoff import Patches
from basinwright.storms import areal_reduction_leclerc_schaake, critical_duration

if TYPE_CHECKING:
    from numpy.typing import NDArray

__all__ = ["Basins", "Floods", "Rain", "floods_of"]


@dataclass(frozen=True)
class Rain:
    """The rain that the floods rest on.

    Parameters
    ----------
    duration_h : array, shape (n,)
        Storm duration [h].
    point_mm : array, shape (n, T)
        Depths at a point [mm].
    areal_factor : array, shape (n,)
        From point to areal depth [-].
    at_end : bool array, shape (n,)
        The critical duration is the first or last that was tried.
    burst_step_h : array, shape (n,)
        Step of the distribution where it is steepest [h].
    """

    duration_h: NDArray[np.float64]
    point_mm: NDArray[np.float64]
    areal_factor: NDArray[np.float64]
    at_end: NDArray[np.bool_]
    burst_step_h: NDArray[np.float64]

    @property
    def depth_mm(self) -> NDArray[np.float64]:
        """Areal depths [mm], shape (n, T)."""
        return self.point_mm * self.areal_factor[:, None]


@dataclass(frozen=True)
class Basins:
    """What the floods need of the outlets, one entry for each.

    Parameters
    ----------
    area_km2, tc_h, path_length_m, centroid_length_m : arrays, shape (n,)
    patches : Patches
    depth_mm : array, shape (n, T)
        Point depths of the project's storm [mm].
    time_area : TimeArea or None
    peak_rate_factor : array, shape (n,), or None
        Of gamma unit hydrographs, in the place of the project's shape.
    """

    area_km2: NDArray[np.float64]
    tc_h: NDArray[np.float64]
    path_length_m: NDArray[np.float64]
    centroid_length_m: NDArray[np.float64]
    patches: Patches
    depth_mm: NDArray[np.float64]
    time_area: TimeArea | None
    peak_rate_factor: NDArray[np.float64] | None = None

    def rows(self, outlets: NDArray[np.int64]) -> Basins:
        """Return some of the outlets, in any order and any number of times."""
        patches, curve = self.patches, self.time_area
        rows = _rows_of(patches.offsets, outlets)
        some_patches = Patches(
            _offsets(np.diff(patches.offsets)[outlets]), patches.area_km2[rows], patches.curve_number[rows]
        )
        some_curves = None
        if curve is not None:
            rows = _rows_of(curve.offsets, outlets)
            some_curves = TimeArea(
                _offsets(np.diff(curve.offsets)[outlets]), curve.travel_time_h[rows], curve.area_km2[rows]
            )
        return Basins(
            self.area_km2[outlets],
            self.tc_h[outlets],
            self.path_length_m[outlets],
            self.centroid_length_m[outlets],
            some_patches,
            self.depth_mm[outlets],
            some_curves,
            None if self.peak_rate_factor is None else self.peak_rate_factor[outlets],
        )


def floods_of(basins: Basins, settings: Settings, *, series: bool) -> tuple[Floods, Rain]:
    """Compute the design floods of all outlets, and the rain they rest on."""
    section = settings.project.storm
    count = basins.area_km2.size
    duration = np.full(count, section.duration)
    at_end = np.zeros(count, dtype=bool)
    if section.critical_duration and settings.ddf is not None:
        tried = _durations(settings.ddf.durations_h, section.duration)
        peaks = [_floods(basins, settings, float(hours), series=False)[0].peak_m3s[:, -1] for hours in tried]
        duration, at_end = critical_duration(tried, np.array(peaks))
    kept: list[tuple[NDArray[np.int64], Floods, Rain]] = []
    for hours in np.unique(duration).tolist() or [section.duration]:  # the project's, where every outlet failed
        rows = np.flatnonzero(duration == hours)
        kept.append(
            (rows, *_floods(basins if rows.size == count else basins.rows(rows), settings, hours, series=series))
        )
    floods, rain = _merged(kept) if len(kept) != 1 else kept[0][1:]
    return floods, replace(rain, at_end=at_end)


def _durations(durations_h: NDArray[np.float64], longest_h: float) -> NDArray[np.float64]:
    """Return the durations of a table that whole steps of its shortest one make up, up to the project's."""
    steps = durations_h / durations_h[0]
    whole = np.abs(steps - np.round(steps)) < 1e-9
    return durations_h[whole & (steps > 1.5) & (durations_h <= longest_h)]


def _floods(basins: Basins, settings: Settings, duration_h: float, *, series: bool) -> tuple[Floods, Rain]:
    """Compute the floods of one storm duration, its depths read off the project's table."""
    section = settings.project.storm
    if duration_h != section.duration and settings.ddf is not None:
        each = [float(settings.ddf.depth_mm(duration_h, period)) * section.depth_factor for period in section.periods]
        basins = replace(basins, depth_mm=np.broadcast_to(np.array(each), basins.depth_mm.shape))
    return floods_at(basins, settings, duration_h, series=series)


def floods_at(basins: Basins, settings: Settings, duration_h: float, *, series: bool) -> tuple[Floods, Rain]:
    """Compute the floods of one storm duration [h], which the depths of the basins are of."""
    project = settings.project
    section, unit = project.storm, project.unit_hydrograph
    storms, point = settings.storms(duration_h), basins.depth_mm
    varied = basins.peak_rate_factor
    factor = np.ones(basins.area_km2.size)
    if section.areal_reduction == "leclerc_schaake":
        factor = areal_reduction_leclerc_schaake(basins.area_km2, duration_h)
    coarsest = max(storm.burst_step_h for storm in storms)
    rain = Rain(
        np.full(factor.size, duration_h), point, factor, np.zeros(factor.size, bool), np.full(factor.size, coarsest)
    )
    floods = design_floods(
        basins.area_km2,
        np.where(np.isnan(basins.tc_h), 1.0, basins.tc_h),  # an outlet without a time gets one in passing: no result
        basins.patches,
        storms,
        rain.depth_mm,
        shape=unit.shape if varied is None else "gamma",
        shape_inputs={
            "peak_rate_factor": unit.peak_rate_factor if varied is None else varied,
            "path_length_m": basins.path_length_m,
            "centroid_length_m": basins.centroid_length_m,
            "ct": unit.ct,
            "cp": unit.cp,
            "storage_ratio": unit.storage_ratio,
            "time_area": basins.time_area,
        },
        weighting=project.runoff.weighting,
        moisture=project.runoff.moisture,
        initial_abstraction_ratio=project.runoff.initial_abstraction_ratio,
        time_step_h=None if isinstance(unit.time_step, str) else unit.time_step,
        series=series,
        jobs=project.compute.jobs,
    )
    return floods, rain


def _rows_of(offsets: NDArray[np.int64], outlets: NDArray[np.int64]) -> NDArray[np.int64]:
    """List the rows of some outlets in a ragged table, outlet by outlet."""
    counts = np.diff(offsets)[outlets]
    start = np.repeat(offsets[outlets] - np.concatenate(([0], np.cumsum(counts)[:-1])), counts)
    return start + np.arange(counts.sum())


def _offsets(counts: NDArray[np.int64]) -> NDArray[np.int64]:
    return np.concatenate(([0], np.cumsum(counts))).astype(np.int64)


def _merged(groups: list[tuple[NDArray[np.int64], Floods, Rain]]) -> tuple[Floods, Rain]:
    """Put the outlets of several durations together again, in their order."""
    order = np.argsort(np.concatenate([rows for rows, _, _ in groups]), kind="stable")
    floods, rains = [group[1] for group in groups], [group[2] for group in groups]
    units = [flood.unit_hydrographs for flood in floods]

    def by_outlet(parts: Sequence[object], name: str) -> Any:
        return np.concatenate([getattr(part, name) for part in parts])[order]

    def ragged(parts: Sequence[Any], name: str) -> tuple[Any, Any]:
        counts = np.concatenate([np.diff(part.offsets) for part in parts])
        values = np.concatenate([getattr(part, name) for part in parts])
        return _offsets(counts[order]), values[_rows_of(_offsets(counts), order)]

    offsets, share = ragged(units, "share")
    of_unit = ("unit_duration_h", "time_to_peak_h", "peak_per_h", "adjustment")
    series = [flood.series for flood in floods if flood.series is not None]
    of_flood = ("unit_peak_m3s_per_mm", "step_coarse", "runoff_mm", "peak_m3s", "peak_time_h")
    merged = Floods(
        unit_hydrographs=UnitHydrographs(offsets, share, *(by_outlet(units, name) for name in of_unit)),
        series=None
        if not series
        else Series(
            ragged(series, "flow_m3s")[0],
            by_outlet(series, "step_s"),
            *(ragged(series, name)[1] for name in ("rain_mm", "excess_mm", "flow_m3s")),
        ),
        **{name: by_outlet(floods, name) for name in of_flood},
    )
    of_rain = ("duration_h", "point_mm", "areal_factor", "at_end", "burst_step_h")
    return merged, Rain(*(by_outlet(rains, name) for name in of_rain))
