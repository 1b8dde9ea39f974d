"""Design floods of many outlets: from storm depths to unit hydrographs, runoff, peaks and hydrographs."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.hydrograph.batches import blocks, for_each
from basinwright.hydrograph.unit_hydrograph import (
    PEAK_RATE_FACTOR,
    SECONDS_PER_H,
    UnitHydrographs,
    row_offsets,
    step_numbers,
    time_to_peak_h,
    unit_duration_s,
)
from basinwright.numbers import Floats, Integers, not_negative, positive
from basinwright.registry import Method, find
from basinwright.runoff import MoistureClass, Patches, Weighting, retentions
from basinwright.storms import Storm

_BLOCK_VALUES = 100_000
"""Flow values worked on at once: they stay in the processor's cache, and bound the memory of a run without series."""


@dataclass(frozen=True)
class Series:
    """Hydrographs of n outlets, T storms side by side on the outlet's own time axis.

    Parameters
    ----------
    offsets : int array, shape (n + 1,)
        Outlet i owns the rows ``offsets[i]`` up to ``offsets[i + 1]``; the first is the storm's start.
    step_s : int array, shape (n,)
        Time between rows [s].
    rain_mm, excess_mm : arrays, shape (rows, T)
        Rain and excess rain in the step that ends at the row [mm].
    flow_m3s : array, shape (rows, T)
        Flow at the row [m3/s]; 0 in the first and the last.
    """

    offsets: Integers
    step_s: Integers
    rain_mm: Floats
    excess_mm: Floats
    flow_m3s: Floats

    def time_h(self) -> Floats:
        """Time of each row from the storm's start, shape (rows,) [h]."""
        step = np.repeat(self.step_s, np.diff(self.offsets))
        return step_numbers(self.offsets) * step / SECONDS_PER_H


@dataclass(frozen=True)
class Floods:
    """Design floods of n outlets for T storms each.

    Parameters
    ----------
    unit_hydrographs : UnitHydrographs
        With unit duration and time to peak.
    unit_peak_m3s_per_mm : array, shape (n,)
        Peak of the unit hydrograph [m3/s per mm].
    step_coarse : bool array, shape (n,)
        Whether the unit duration exceeds a quarter of the time to peak, the limit of NEH 630 ch. 16: only a step of the
        user's can.
    runoff_mm : array, shape (n, T)
        Storm runoff [mm].
    peak_m3s : array, shape (n, T)
        Peak flow [m3/s].
    peak_time_h : array, shape (n, T)
        Time of the peak from the storm's start [h]; NaN without runoff.
    series : Series or None
        Hydrographs, unless left out.
    """

    unit_hydrographs: UnitHydrographs
    unit_peak_m3s_per_mm: Floats
    step_coarse: np.ndarray
    runoff_mm: Floats
    peak_m3s: Floats
    peak_time_h: Floats
    series: Series | None


def design_floods(
    area_km2: ArrayLike,
    tc_h: ArrayLike,
    patches: Patches,
    storms: Storm | Sequence[Storm],
    depth_mm: ArrayLike,
    *,
    shape: str = "curvilinear",
    shape_inputs: Mapping[str, Any] | None = None,
    weighting: Weighting = "runoff",
    moisture: MoistureClass = "II",
    initial_abstraction_ratio: float = 0.2,
    time_step_h: float | None = None,
    series: bool = True,
    jobs: int = 1,
) -> Floods:
    """Design floods of many outlets, each at its own time step. An outlet's bits do not depend on the others.

    Parameters
    ----------
    area_km2 : array, shape (n,)
        Drainage area [km2].
    tc_h : array, shape (n,)
        Time of concentration [h].
    patches : Patches
        Curve-number patches of the n outlets.
    storms : Storm or sequence of T storms
        One for all, or one for each column of `depth_mm`; all of the same duration.
    depth_mm : array, shape (n, T)
        Storm depths [mm].
    shape : str
        Key of the unit hydrograph.
    shape_inputs : mapping, optional
        What the shape needs beyond area, Tc, unit duration and time to peak, by the names in the register: numbers,
        arrays of shape (n,), or `TimeArea`.
    weighting, moisture, initial_abstraction_ratio
        See `basinwright.runoff.retentions`.
    time_step_h : float, optional
        Time step for all outlets [h]; must divide the storm's duration.
    series : bool
        Whether to keep rain, excess and flow by time.
    jobs : int
        Threads; the result is the same to the last bit.

    Returns
    -------
    Floods

    Raises
    ------
    RangeError
        Where a number is out of range (names argument and row), storms differ in duration, or an input that the
        shape needs is missing (names it).
    KeyError
        Where the shape is unknown; names the nearest one.

    Examples
    --------
    1 mi2, CN 75, Tc 1.53 h, 6 in of a Type II storm: 3.28 in of runoff.

    >>> from basinwright.storms import type_ii
    >>> patches = Patches([0, 1], [2.59], [75.0])
    >>> flood = design_floods([2.59], [1.53], patches, type_ii(), [[6.0 * 25.4]], series=False)
    >>> round(float(flood.runoff_mm[0, 0]) / 25.4, 2)
    3.28
    """
    from basinwright.kernels.convolve import convolve, peaks
    from basinwright.kernels.excess import excess_increments

    area, tc = positive("area_km2", area_km2), positive("tc_h", tc_h)
    depth = np.ascontiguousarray(not_negative("depth_mm", depth_mm))
    if area.ndim != 1 or area.shape != tc.shape or depth.ndim != 2 or depth.shape[0] != area.size:
        raise RangeError("area_km2, tc_h and the rows of depth_mm must have one value for each outlet")
    if patches.outlets != area.size:
        raise RangeError(f"patches are of {patches.outlets} outlets, area_km2 of {area.size}: give the same")
    tables = _StormTables.of(storms, depth.shape[1])
    entry = find("unit_hydrograph", shape)
    step_s = unit_duration_s(tc, tables.duration_h, time_step_h)
    duration = step_s / SECONDS_PER_H
    time_to_peak = time_to_peak_h(tc, duration)
    units = _unit_hydrographs(
        entry,
        {
            "area_km2": area,
            "tc_h": tc,
            "unit_duration_h": duration,
            "time_to_peak_h": time_to_peak,
            "peak_rate_factor": PEAK_RATE_FACTOR,
            **(shape_inputs or {}),
        },
    )
    ordinates = units.flow_m3s_per_mm(area)
    losses = retentions(
        patches, weighting=weighting, moisture=moisture, initial_abstraction_ratio=initial_abstraction_ratio
    )

    steps = round(tables.duration_h * SECONDS_PER_H) // step_s
    rows = steps + np.diff(units.offsets) - 1
    runoff, peak, peak_row = np.empty(depth.shape), np.empty(depth.shape), np.empty(depth.shape, dtype=np.int64)
    kept = _empty_series(rows, step_s, depth.shape[1]) if series else None

    def compute(block: tuple[int, int]) -> None:
        first, last = block
        outlets = slice(first, last)
        excess_rows, flow_rows = row_offsets(steps[outlets]), row_offsets(rows[outlets])
        rain = np.empty((excess_rows[-1], depth.shape[1]))
        excess = np.empty_like(rain)
        flow = np.zeros((flow_rows[-1], depth.shape[1]))
        excess_increments(
            tables.hours,
            tables.fractions,
            tables.offsets,
            depth[outlets],
            losses.offsets[first : last + 1],
            losses.weight,
            losses.retention_mm,
            losses.initial_abstraction_ratio,
            excess_rows,
            rain,
            excess,
            runoff[outlets],
        )
        convolve(excess, excess_rows, ordinates, units.offsets[first : last + 1], flow, flow_rows)
        peaks(flow, flow_rows, peak[outlets], peak_row[outlets])
        if kept is not None:
            _keep(kept, first, last, steps[outlets], rain, excess, flow)

    for_each(compute, blocks(rows * max(depth.shape[1], 1), _BLOCK_VALUES), jobs)
    peak_time = np.where(runoff > 0.0, peak_row * step_s[:, None] / SECONDS_PER_H, np.nan)
    return Floods(
        units,
        units.unit_peak_m3s_per_mm(area),
        duration > 0.25 * units.time_to_peak_h,
        runoff,
        peak,
        peak_time,
        kept,
    )


@dataclass(frozen=True)
class _StormTables:
    """The storms one after another, as the kernel takes them."""

    duration_h: float
    hours: Floats
    fractions: Floats
    offsets: Integers

    @classmethod
    def of(cls, storms: Storm | Sequence[Storm], count: int) -> _StormTables:
        each = [storms] * count if isinstance(storms, Storm) else list(storms)
        if len(each) != count or not each:
            raise RangeError(f"{len(each)} storms for {count} columns of depth_mm: give one storm, or one for each")
        durations = {storm.duration_h for storm in each}
        if len(durations) > 1:
            raise RangeError(f"storms last {', '.join(f'{h:g}' for h in sorted(durations))} h: all must last the same")
        return cls(
            each[0].duration_h,
            np.concatenate([storm.hours for storm in each]),
            np.concatenate([storm.fractions for storm in each]),
            row_offsets(np.array([storm.hours.size for storm in each])),
        )


def _unit_hydrographs(entry: Method, available: Mapping[str, Any]) -> UnitHydrographs:
    """Call a registered shape with the inputs that it names."""
    if missing := [name for name in entry.inputs if available.get(name) is None]:
        raise RangeError(f"the {entry.key} unit hydrograph needs {', '.join(missing)}: give it in shape_inputs")
    units: UnitHydrographs = entry.function(**{name: available[name] for name in entry.inputs})
    return units


def _empty_series(rows: Integers, step_s: Integers, storms: int) -> Series:
    offsets = row_offsets(rows)
    shape = (int(offsets[-1]), storms)
    return Series(offsets, step_s, np.zeros(shape), np.zeros(shape), np.empty(shape))


def _keep(series: Series, first: int, last: int, steps: Integers, rain: Floats, excess: Floats, flow: Floats) -> None:
    """Write a block of outlets into the series; the increments of a step stand in the row that ends it."""
    rows = slice(series.offsets[first], series.offsets[last])
    series.flow_m3s[rows] = flow
    offsets = series.offsets[first : last + 1]
    number = step_numbers(offsets - offsets[0])
    raining = (number > 0) & (number <= np.repeat(steps, np.diff(offsets)))
    series.rain_mm[rows][raining] = rain
    series.excess_mm[rows][raining] = excess
