"""The flags that times, storms and runoff raise."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np

from basinwright.flags import FLAGS, Flag
from basinwright.hydrology.floods import Floods, Rain
from basinwright.hydrology.frames import Frame
from basinwright.hydrology.settings import Settings
from basinwright.timing import MethodResult, SegmentTimes, spread
from basinwright.units import KM2_PER_MI2, MM_PER_IN

if TYPE_CHECKING:
    from numpy.typing import NDArray

IN_CHANNEL = ("channel", "open_water", "pipe", "lined_channel")
"""The regimes that count as channel."""
LARGE_BASIN_KM2 = 20.0 * KM2_PER_MI2
UNREDUCED_KM2 = 10.0 * KM2_PER_MI2
SPREAD_LIMIT = 2.0
WEIGHTING_LIMIT = 0.05
"""Relative difference in runoff between the two weightings above which both are reported."""


class Doubts:
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


def flag_segments(flags: Doubts, segments: Frame, times: SegmentTimes, settings: Settings) -> None:
    """Raise the flags that the timing of segments gives, one for each outlet and kind."""
    numbers = segments.text("segment").tolist()
    floor = settings.project.flow_path.slope_floor
    marks = {
        "SLOPE_FLOOR": (times.floored, f"slope raised to {floor:g}"),
        "SUPERCRITICAL": (times.supercritical, "faster than critical"),
        "JARRETT_RANGE": (times.out_of_jarrett_range, "outside the slopes or radii of Jarrett (1984)"),
        "BANKFULL_RANGE": (
            times.out_of_bankfull_range,
            f"area outside the data of the {settings.relation.name} relation",
        ),
    }
    for key, (mark, words) in marks.items():
        of_outlet: dict[int, list[str]] = {}
        marked = np.flatnonzero(mark)
        for i, outlet in zip(marked.tolist(), segments.outlet[marked].tolist(), strict=True):
            of_outlet.setdefault(outlet, []).append(numbers[i])
        for outlet, rows in of_outlet.items():
            flags.add(outlet, key, f"segment{'s' * (len(rows) > 1)} {', '.join(rows)}: {words}")
    count = len(flags.raised("NO_CHANNEL"))
    in_channel = segments.outlet[segments.among("regime", IN_CHANNEL)]
    for outlet in np.flatnonzero(np.bincount(in_channel, minlength=count) == 0).tolist():
        flags.add(outlet, "NO_CHANNEL", "the whole path is sheet and shallow flow")


def flag_methods(
    flags: Doubts, results: Mapping[str, MethodResult], adopted: MethodResult, by_method: NDArray[np.bool_]
) -> None:
    """Raise METHOD_RANGE and METHOD_SPREAD."""
    for i in np.flatnonzero(by_method & ~adopted.applicable).tolist():
        flags.add(i, "METHOD_RANGE", f"{adopted.method.key}: {adopted.reason[i]}")
    ratio = spread(results)
    for i in np.flatnonzero(np.nan_to_num(ratio) > SPREAD_LIMIT).tolist():
        times = {key: float(result.tc_h[i]) for key, result in results.items() if result.applicable[i]}
        low, high = min(times, key=times.__getitem__), max(times, key=times.__getitem__)
        flags.add(i, "METHOD_SPREAD", f"{low} {times[low]:.3g} h to {high} {times[high]:.3g} h")


def flag_basins(
    flags: Doubts,
    area_km2: NDArray[np.float64],
    tc_h: NDArray[np.float64],
    floods: Floods,
    rain: Rain,
    other_runoff_mm: NDArray[np.float64],
    settings: Settings,
) -> None:
    """Raise the flags that size, storm and runoff give.

    ``other_runoff_mm`` is the runoff by the weighting that was not chosen, shape (n, T).
    """
    us = settings.project.project.units == "us"
    unit, factor = ("mi2", KM2_PER_MI2) if us else ("km2", 1.0)
    periods = settings.project.storm.periods
    for i in np.flatnonzero(area_km2 > LARGE_BASIN_KM2).tolist():
        flags.add(i, "BASIN_LARGE", f"{area_km2[i] / factor:.3g} {unit}")
    if settings.project.storm.areal_reduction == "none":
        for i in np.flatnonzero(area_km2 > UNREDUCED_KM2).tolist():
            flags.add(i, "AREAL_UNREDUCED", f"{area_km2[i] / factor:.3g} {unit}, point rainfall used")
    for i in np.flatnonzero(rain.burst_step_h > 0.5 * tc_h).tolist():
        flags.add(i, "STORM_COARSE", f"storm step {rain.burst_step_h[i]:.3g} h at the burst, Tc {tc_h[i]:.3g} h")
    for i in np.flatnonzero(floods.step_coarse).tolist():
        hours = floods.unit_hydrographs.unit_duration_h[i]
        flags.add(i, "UNIT_STEP_COARSE", f"unit duration {hours:.3g} h")
    for i in np.flatnonzero(rain.at_end).tolist():
        flags.add(i, "CRITICAL_DURATION_END", f"{rain.duration_h[i]:g} h")
    for i in np.flatnonzero((floods.runoff_mm == 0).any(axis=1)).tolist():
        dry = [period for t, period in enumerate(periods) if floods.runoff_mm[i, t] == 0]
        flags.add(i, "RUNOFF_ZERO", f"return period {', '.join(dry)} years")
    most = np.maximum(floods.runoff_mm, other_runoff_mm)
    with np.errstate(invalid="ignore", divide="ignore"):
        apart = np.where(most > 0, np.abs(floods.runoff_mm - other_runoff_mm) / most, 0.0)
    depth, shown = ("in", MM_PER_IN) if us else ("mm", 1.0)
    for i in np.flatnonzero((apart > WEIGHTING_LIMIT).any(axis=1)).tolist():
        t = int(np.argmax(apart[i]))
        mine, other = floods.runoff_mm[i, t] / shown, other_runoff_mm[i, t] / shown
        words = f"{periods[t]}-year runoff {mine:.3g} {depth}, by the other weighting {other:.3g} {depth}"
        flags.add(i, "WEIGHTING_DIFFERS", words)


def exceeded_at(
    capacity_m3s: NDArray[np.float64], peak_m3s: NDArray[np.float64], periods: Sequence[str], flags: Doubts
) -> list[str]:
    """Return the smallest tested return period whose peak exceeds the capacity, as text."""
    doubtful = flags.raised("EDGE_TOUCH") | flags.raised("OUTLET_FAILED") | flags.raised("PEAKS_FALL")
    verdicts = []
    for i, capacity in enumerate(capacity_m3s.tolist()):
        over = [period for t, period in enumerate(periods) if peak_m3s[i, t] > capacity]
        verdicts.append("" if np.isnan(capacity) else "unknown" if doubtful[i] else over[0] if over else "")
    return verdicts
