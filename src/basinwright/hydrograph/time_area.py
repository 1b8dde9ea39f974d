"""Unit hydrographs from time-area curves: Clark's with a linear reservoir, and translation alone."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.hydrograph.unit_hydrograph import (
    VOLUME_FACTOR,
    UnitHydrographs,
    row_offsets,
    step_numbers,
)
from basinwright.numbers import Floats, Integers, check_offsets, not_negative, positive, within
from basinwright.registry import Range, Source, method

_RECESSION_END = 1e-5
"""A reservoir's recession ends where what is left of the unit falls under this share."""


@dataclass(frozen=True)
class TimeArea:
    """Time-area curves of n outlets: the area whose water arrives within a time.

    Parameters
    ----------
    offsets : int array, shape (n + 1,)
        Outlet i owns the rows ``offsets[i]`` up to ``offsets[i + 1]``.
    travel_time_h : array, shape (rows,)
        Travel time to the outlet, rising within an outlet [h].
    area_km2 : array, shape (rows,)
        Area within that time, never falling within an outlet; the last row is the whole basin [km2].

    Raises
    ------
    RangeError
        Where a curve is empty, falls, or holds an impossible number.
    """

    offsets: Integers
    travel_time_h: Floats
    area_km2: Floats

    def __post_init__(self) -> None:
        time, area = not_negative("travel_time_h", self.travel_time_h), not_negative("area_km2", self.area_km2)
        if time.ndim != 1 or time.shape != area.shape:
            raise RangeError("travel_time_h and area_km2 must have one value for each row")
        offsets = check_offsets("offsets", self.offsets, time.size)
        if (np.diff(offsets) == 0).any():
            raise RangeError(f"outlet {int(np.argmax(np.diff(offsets) == 0))} has no time-area curve")
        inside = np.ones(time.size, dtype=np.bool_)
        inside[offsets[:-1]] = False
        for name, values, broken in (
            ("travel_time_h", time, np.diff(time, prepend=0.0) <= 0.0),
            ("area_km2", area, np.diff(area, prepend=0.0) < 0.0),
        ):
            if (inside & broken).any():
                row = int(np.argmax(inside & broken))
                raise RangeError(f"row {row}: {name} is {values[row]:g}, after {values[row - 1]:g}: it must rise")
        positive("last area_km2 of an outlet", area[offsets[1:] - 1])
        positive("last travel_time_h of an outlet", time[offsets[1:] - 1])
        for name, value in (("offsets", offsets), ("travel_time_h", time), ("area_km2", area)):
            object.__setattr__(self, name, value)

    @property
    def longest_h(self) -> Floats:
        """Travel time from the farthest point, shape (n,) [h]."""
        return self.travel_time_h[self.offsets[1:] - 1]

    def within_km2(self, offsets: Integers, time_h: Floats) -> Floats:
        """Area of each outlet whose water has arrived by given times, linear between rows [km2].

        Parameters
        ----------
        offsets : int array, shape (n + 1,)
            Outlet i owns the times ``offsets[i]`` up to ``offsets[i + 1]``.
        time_h : array, shape (times,)
            Times, never falling within an outlet [h].
        """
        from basinwright.kernels.curves import areas_within

        within_km2 = np.empty(time_h.shape)
        areas_within(self.offsets, self.travel_time_h, self.area_km2, offsets, time_h, within_km2)
        return within_km2


def arriving_area_km2(travel_time_h: ArrayLike, area_km2: ArrayLike, unit_duration_h: float) -> Floats:
    """Area whose water arrives in each step: the areas between isochrones one step apart.

    Parameters
    ----------
    travel_time_h, area_km2 : arrays, shape (k,)
        Time-area curve of one outlet, see `TimeArea` [h, km2].
    unit_duration_h : float
        Step [h].

    Returns
    -------
    array, shape (steps,)
        Areas; their sum is the basin [km2].

    Raises
    ------
    RangeError
        As `TimeArea`.

    Examples
    --------
    >>> arriving_area_km2([1.0, 2.0, 3.0, 4.0], [10.0, 40.0, 60.0, 100.0], 1.0).round(9).tolist()
    [10.0, 30.0, 20.0, 40.0]
    """
    curve = TimeArea([0, np.size(travel_time_h)], travel_time_h, area_km2)  # type: ignore[arg-type]
    duration = np.atleast_1d(positive("unit_duration_h", unit_duration_h))
    return _arrivals(duration, curve.longest_h, curve)[1][1:] * curve.area_km2[-1]


def default_time_area(time_ratio: ArrayLike) -> Floats:
    """Share of the basin whose water has arrived, by time over time of concentration: the published default curve.

    Parameters
    ----------
    time_ratio : float or array
        t/Tc, 0 to 1 [-].

    Returns
    -------
    float or array
        A/A(whole) [-].

    Raises
    ------
    RangeError
        Where a ratio is outside 0 to 1.

    Notes
    -----
    ``A* = 1.414 T*^1.5`` up to T* = 0.5, ``1 - A* = 1.414 (1 - T*)^1.5`` beyond (U.S. Army Corps of Engineers,
    Engineering Manual 1110-2-1417, Flood-Runoff Analysis, 1994). 1.414 makes 0.49992 of one half; the curve is closed
    at one half, as in the print.

    Examples
    --------
    1000 km2, Tc 6 h: cumulative area after each hour.

    >>> (1000 * default_time_area([1 / 6, 2 / 6, 4 / 6, 5 / 6, 1.0])).round(1).tolist()
    [96.2, 272.1, 727.9, 903.8, 1000.0]
    """
    ratio = within("time_ratio", time_ratio, 0.0, 1.0)
    near = 1.414 * np.minimum(ratio, 0.5) ** 1.5
    far = 1.0 - 1.414 * (1.0 - np.maximum(ratio, 0.5)) ** 1.5
    return np.where(ratio < 0.5, near, np.where(ratio > 0.5, far, 0.5))


def storage_coefficient_h(tc_h: ArrayLike, storage_ratio: ArrayLike) -> Floats:
    """Clark's storage coefficient R from R / (Tc + R).

    Parameters
    ----------
    tc_h : float or array
        Time of concentration [h].
    storage_ratio : float or array
        R / (Tc + R), in (0, 1) [-].

    Returns
    -------
    float or array
        R [h].

    Raises
    ------
    RangeError
        Where Tc is not above zero or the ratio not between 0 and 1.

    Examples
    --------
    >>> float(storage_coefficient_h(6.0, 0.5))
    6.0
    """
    ratio = within("storage_ratio", positive("storage_ratio", storage_ratio), 0.0, 1.0 - 1e-9)
    return positive("tc_h", tc_h) * ratio / (1.0 - ratio)


def reservoir_coefficients(step_h: ArrayLike, storage_h: ArrayLike) -> tuple[Floats, Floats, Floats]:
    """Coefficients of routing through a linear reservoir, ``O2 = C0 I2 + C1 I1 + C2 O1``.

    Parameters
    ----------
    step_h : float or array
        Time step [h].
    storage_h : float or array
        Storage coefficient [h].

    Returns
    -------
    c0, c1, c2 : float or array
        ``C0 = C1 = (D/R) / (2 + D/R)``, ``C2 = (2 - D/R) / (2 + D/R)`` [-]; their sum is 1.

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Examples
    --------
    V. M. Ponce, Engineering Hydrology (1989), ch. 5: K 2 h, step 1 h.

    >>> [round(float(c), 9) for c in reservoir_coefficients(1.0, 2.0)]
    [0.2, 0.2, 0.6]
    """
    ratio = positive("step_h", step_h) / positive("storage_h", storage_h)
    return ratio / (2.0 + ratio), ratio / (2.0 + ratio), (2.0 - ratio) / (2.0 + ratio)


def _arrivals(unit_duration_h: Floats, longest_h: Floats, curve: TimeArea | None) -> tuple[Integers, Floats]:
    """Share of each basin that arrives in each step: offsets and one row a step, the first of 0 at time 0."""
    offsets = row_offsets(np.ceil(longest_h / unit_duration_h - 1e-9).astype(np.int64) + 1)
    outlet = np.repeat(np.arange(unit_duration_h.size), np.diff(offsets))
    at = step_numbers(offsets) * unit_duration_h[outlet]
    if curve is None:
        arrived = default_time_area(np.minimum(at / longest_h[outlet], 1.0))
    else:
        whole = curve.area_km2[curve.offsets[1:] - 1]
        arrived = curve.within_km2(offsets, at) / whole[outlet]
    share = np.diff(arrived, prepend=0.0)
    share[offsets[:-1]] = 0.0
    # What lies at the outlet itself (travel time 0) arrives in the first step.
    share[offsets[:-1] + 1] += arrived[offsets[:-1]]
    return offsets, share


def _routed(unit_duration_h: Floats, storage_h: Floats, offsets: Integers, share: Floats) -> tuple[Integers, Floats]:
    """Route the arrivals of each step through a linear reservoir, until its recession ends."""
    c0, c1, keep = reservoir_coefficients(unit_duration_h, storage_h)
    if (keep < 0.0).any():
        row = int(np.argmax(keep < 0.0))
        raise RangeError(
            f"row {row}: storage_ratio: R {storage_h[row]:.4g} h is under half the time step of "
            f"{unit_duration_h[row]:.4g} h: use a shorter time step, or travel_time where there is no storage"
        )
    steps = np.diff(offsets)
    with np.errstate(divide="ignore"):
        tail = np.ceil(np.log(_RECESSION_END) / np.log(keep))
    lengths = steps + np.maximum(tail, 0.0).astype(np.int64)
    inflow = np.zeros((int(lengths.max(initial=1)), steps.size))
    inflow[step_numbers(offsets), np.repeat(np.arange(steps.size), steps)] = share
    outflow = np.zeros_like(inflow)
    for step in range(1, inflow.shape[0]):
        # The inflow is constant over the step: I1 = I2.
        outflow[step] = (c0 + c1) * inflow[step] + keep * outflow[step - 1]
    longer = row_offsets(lengths + 1)
    within_length = np.arange(inflow.shape[0])[:, None] < lengths
    routed = np.zeros(longer[-1])
    rows = step_numbers(longer) < np.repeat(lengths, lengths + 1)
    routed[rows] = outflow.T[within_length.T]
    return longer, routed


def _closed(offsets: Integers, share: Floats, unit_duration_h: Floats) -> UnitHydrographs:
    """Return unit hydrographs whose peak is that of their ordinates, scaled to a volume of 1."""
    outlet = np.repeat(np.arange(unit_duration_h.size), np.diff(offsets))
    total = np.bincount(outlet, weights=share, minlength=unit_duration_h.size)
    share = share / total[outlet]
    highest = np.maximum.reduceat(share, offsets[:-1])
    number = step_numbers(offsets)
    first = np.minimum.reduceat(np.where(share == highest[outlet], number, number.size), offsets[:-1])
    return UnitHydrographs(
        offsets, share, unit_duration_h, first * unit_duration_h, highest / unit_duration_h, 1.0 / total
    )


_CLARK = Source(
    "C. O. Clark, Storage and the Unit Hydrograph, Trans. ASCE 110; default time-area curve: U.S. Army Corps of "
    "Engineers, Engineering Manual 1110-2-1417, 1994",
    "1945",
    "pp. 1419-1446",
    "from memory; worked examples in a secondary copy are reproduced",
)
_STORAGE_RANGE = {"storage_ratio": Range(0.1, 0.9, "0.1 to 0.9, common practice")}


@method(
    "unit_hydrograph",
    "clark",
    name="Clark unit hydrograph (1945), default time-area curve",
    form="A* = 1.414 T*^1.5; O2 = C0 I2 + C1 I1 + C2 O1, C0 = C1 = (D/R)/(2 + D/R), C2 = (2 - D/R)/(2 + D/R)",
    inputs=("unit_duration_h", "tc_h", "storage_ratio"),
    source=_CLARK,
    valid_range=_STORAGE_RANGE,
    limits="R / (Tc + R) must come from gauged basins of the region",
)
def clark(unit_duration_h: ArrayLike, tc_h: ArrayLike, storage_ratio: ArrayLike) -> UnitHydrographs:
    """Clark's unit hydrographs with the published default time-area curve.

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain, also the routing step [h].
    tc_h : float or array, shape (n,)
        Time of concentration [h].
    storage_ratio : float or array, shape (n,)
        R / (Tc + R) [-].

    Returns
    -------
    UnitHydrographs
        Ending where less than 1e-5 of the unit is left.

    Raises
    ------
    RangeError
        Where an argument is out of range, or R is under half the step.

    Examples
    --------
    >>> unit = clark(1.0, 6.0, 0.5)
    >>> float(unit.time_to_peak_h[0]), round(float(unit.share.sum()), 9)
    (5.0, 1.0)
    """
    duration, tc, storage = np.broadcast_arrays(
        np.atleast_1d(positive("unit_duration_h", unit_duration_h)),
        positive("tc_h", tc_h),
        storage_coefficient_h(tc_h, storage_ratio),
    )
    return _closed(*_routed(duration, storage, *_arrivals(duration, tc, None)), duration)


@method(
    "unit_hydrograph",
    "clark_terrain",
    name="Clark unit hydrograph (1945), the basin's own time-area curve",
    form="as clark, with the area between isochrones of the basin's own travel times",
    inputs=("unit_duration_h", "tc_h", "storage_ratio", "time_area"),
    source=_CLARK,
    valid_range=_STORAGE_RANGE,
    limits="R / (Tc + R) must come from gauged basins of the region",
)
def clark_terrain(
    unit_duration_h: ArrayLike, tc_h: ArrayLike, storage_ratio: ArrayLike, time_area: TimeArea
) -> UnitHydrographs:
    """Clark's unit hydrographs with the basins' own time-area curves.

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain, also the routing step [h].
    tc_h : float or array, shape (n,)
        Time of concentration [h]; with the ratio it gives R.
    storage_ratio : float or array, shape (n,)
        R / (Tc + R) [-].
    time_area : TimeArea
        Curves of the n outlets.

    Returns
    -------
    UnitHydrographs

    Raises
    ------
    RangeError
        Where an argument is out of range, or R is under half the step.

    Examples
    --------
    V. M. Ponce, Engineering Hydrology (1989), ch. 5: 10, 30, 20, 40 km2 at one-hour isochrones, K 2 h; a rain of
    0.5 cm in each of two hours gives 2, 9.2, 15.52, 21.312 km2 cm/h.

    >>> curve = TimeArea([0, 4], [1.0, 2.0, 3.0, 4.0], [10.0, 40.0, 60.0, 100.0])
    >>> one_hour = 100 * clark_terrain(1.0, 4.0, 1 / 3, curve).share
    >>> (0.5 * one_hour[1:5] + 0.5 * one_hour[:4]).round(2).tolist()
    [2.0, 9.2, 15.52, 21.31]
    """
    duration, storage = np.broadcast_arrays(
        np.atleast_1d(positive("unit_duration_h", unit_duration_h)), storage_coefficient_h(tc_h, storage_ratio)
    )
    _one_curve_each(duration, time_area)
    return _closed(*_routed(duration, storage, *_arrivals(duration, time_area.longest_h, time_area)), duration)


@method(
    "unit_hydrograph",
    "travel_time",
    name="Travel-time unit hydrograph: translation without storage",
    form="u(t) = [A(t) - A(t - D)] / D, A the area within travel time t",
    inputs=("unit_duration_h", "time_area"),
    source=Source(
        "C. O. Clark, Storage and the Unit Hydrograph, Trans. ASCE 110", "1945", "pp. 1419-1446", "R = 0; from memory"
    ),
    limits="for comparison only: without storage its peak is an upper bound of the shape",
)
def travel_time(unit_duration_h: ArrayLike, time_area: TimeArea) -> UnitHydrographs:
    """Unit hydrographs by translation alone, for comparison.

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain [h].
    time_area : TimeArea
        Curves of the n outlets.

    Returns
    -------
    UnitHydrographs

    Raises
    ------
    RangeError
        Where a duration is not above zero, or the number of curves differs.

    Examples
    --------
    >>> curve = TimeArea([0, 4], [1.0, 2.0, 3.0, 4.0], [10.0, 40.0, 60.0, 100.0])
    >>> travel_time(1.0, curve).share.round(9).tolist()
    [0.0, 0.1, 0.3, 0.2, 0.4, 0.0]
    """
    duration = np.atleast_1d(positive("unit_duration_h", unit_duration_h))
    _one_curve_each(duration, time_area)
    offsets, share = _arrivals(duration, time_area.longest_h, time_area)
    lengths = np.diff(offsets)
    longer = row_offsets(lengths + 1)
    ended = np.zeros(longer[-1])
    ended[step_numbers(longer) < np.repeat(lengths, lengths + 1)] = share
    return _closed(longer, ended, duration)


def _one_curve_each(unit_duration_h: Floats, time_area: TimeArea) -> None:
    if time_area.offsets.size - 1 != unit_duration_h.size:
        raise RangeError(
            f"time_area has {time_area.offsets.size - 1} curves for {unit_duration_h.size} outlets: give one each"
        )


def translation_peak_rate_factor(unit_duration_h: ArrayLike, time_area: TimeArea) -> Floats:
    """Peak rate factor that translation alone would imply: an index of the basin's shape, **not for adoption**.

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain [h].
    time_area : TimeArea
        Curves of the n outlets.

    Returns
    -------
    array, shape (n,)
        ``PRF = 645.33 qp Tp / V`` of the travel-time unit hydrograph [cfs h / (mi2 in)]; of equal peaks the middle one
        counts. Storage, which it leaves out, lowers the peak: the factor to adopt is lower.

    Raises
    ------
    RangeError
        As `travel_time`.
    """
    unit = travel_time(unit_duration_h, time_area)
    highest = np.maximum.reduceat(unit.share, unit.offsets[:-1])[unit.outlet]
    at_peak = unit.share >= highest * (1.0 - 1e-9)
    count = unit.offsets.size - 1
    number = np.where(at_peak, step_numbers(unit.offsets), 0)
    middle = np.bincount(unit.outlet, weights=number, minlength=count) / np.bincount(
        unit.outlet, weights=at_peak, minlength=count
    )
    return VOLUME_FACTOR * unit.peak_per_h * middle * unit.unit_duration_h
