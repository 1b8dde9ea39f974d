"""Unit hydrographs of many outlets: their duration, their peak, and how their ordinates are kept."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.numbers import Floats, Integers, positive
from basinwright.units import KM2_PER_MI2, M3S_PER_CFS, MM_PER_IN

SECONDS_PER_H = 3600

PEAK_RATE_FACTOR = 484.0
"""Standard peak rate factor of the NRCS unit hydrograph [cfs h / (mi2 in)] (NEH 630 ch. 16 eq. 16-6)."""

VOLUME_FACTOR = 5280.0**2 / (12.0 * 3600.0)
"""One inch from one square mile in one hour [cfs]: 645.33, exact by definition."""

DURATION_OVER_TC = 0.133
"""Longest unit duration over time of concentration (NEH 630 ch. 16 eq. 16-13: Tc + D = 1.7 Tp)."""


@dataclass(frozen=True)
class UnitHydrographs:
    """The unit hydrographs of n outlets: what share of the unit passes in each step.

    Parameters
    ----------
    offsets : int array, shape (n + 1,)
        Outlet i owns the ordinates ``offsets[i]`` up to ``offsets[i + 1]``; its k-th stands at k unit durations.
    share : array, shape (ordinates,)
        Flow times unit duration over the volume of the unit; the sum is 1 for each outlet [-].
    unit_duration_h : array, shape (n,)
        Duration of the excess rain [h], also the spacing of the ordinates.
    time_to_peak_h : array, shape (n,)
        From the start of the excess rain to the peak [h], by formula where the shape has one.
    peak_per_h : array, shape (n,)
        Peak flow over the volume of the unit [1/h], by formula where the shape has one.
    adjustment : array, shape (n,)
        Factor that was applied to the ordinates of the published shape to make their volume 1 [-].
    """

    offsets: Integers
    share: Floats
    unit_duration_h: Floats
    time_to_peak_h: Floats
    peak_per_h: Floats
    adjustment: Floats

    @property
    def outlet(self) -> Integers:
        """Outlet of each ordinate, shape (ordinates,)."""
        return np.repeat(np.arange(self.offsets.size - 1), np.diff(self.offsets))

    def time_h(self) -> Floats:
        """Time of each ordinate from the start of the excess rain, shape (ordinates,) [h]."""
        return step_numbers(self.offsets) * self.unit_duration_h[self.outlet]

    def flow_m3s_per_mm(self, area_km2: ArrayLike) -> Floats:
        """Ordinates for the outlets' areas [km2], shape (ordinates,) [m3/s per mm]."""
        area = positive("area_km2", area_km2)
        return self.share * (_m3s_of_mm_per_h(area) / self.unit_duration_h)[self.outlet]

    def unit_peak_m3s_per_mm(self, area_km2: ArrayLike) -> Floats:
        """Peak for the outlets' areas [km2], shape (n,) [m3/s per mm]."""
        return self.peak_per_h * _m3s_of_mm_per_h(positive("area_km2", area_km2))


def _m3s_of_mm_per_h(area_km2: Floats) -> Floats:
    return area_km2 * 1000.0 / SECONDS_PER_H  # 1 mm on 1 km2 is 1000 m3


def step_numbers(offsets: Integers) -> Integers:
    """Number the rows of each outlet from 0, shape (rows,)."""
    return np.arange(offsets[-1]) - np.repeat(offsets[:-1], np.diff(offsets))


def row_offsets(counts: Integers) -> Integers:
    """Offsets of outlets with these numbers of rows, shape (n + 1,)."""
    return np.concatenate((np.zeros(1, dtype=np.int64), np.cumsum(counts, dtype=np.int64)))


def normalised(
    offsets: Integers, ratio: Floats, unit_duration_h: Floats, time_to_peak_h: Floats, peak_per_h: Floats
) -> UnitHydrographs:
    """Return unit hydrographs from flow ratios, scaled to a volume of 1.

    Parameters
    ----------
    offsets : int array, shape (n + 1,)
    ratio : array, shape (ordinates,)
        Flow over peak flow [-].
    unit_duration_h, time_to_peak_h, peak_per_h : arrays, shape (n,)
        See `UnitHydrographs`.
    """
    outlet = np.repeat(np.arange(offsets.size - 1), np.diff(offsets))
    # bincount adds one by one: the bits of an outlet do not depend on its neighbours.
    total = np.bincount(outlet, weights=ratio, minlength=offsets.size - 1)
    volume = total * unit_duration_h * peak_per_h
    return UnitHydrographs(offsets, ratio / total[outlet], unit_duration_h, time_to_peak_h, peak_per_h, 1.0 / volume)


def unit_duration_s(tc_h: ArrayLike, duration_h: float, time_step_h: float | None = None) -> Integers:
    """Duration of the unit hydrograph's excess rain: a step of whole seconds that divides the storm's duration.

    Parameters
    ----------
    tc_h : float or array
        Time of concentration [h].
    duration_h : float
        Duration of the storm [h].
    time_step_h : float, optional
        A step of the user's [h]; without it, the longest that is at most 0.133 Tc.

    Returns
    -------
    int or int array
        Step [s].

    Raises
    ------
    RangeError
        Where the storm's duration is not a whole number of seconds, a user's step does not divide it, or Tc is so
        short that 0.133 Tc is under a second.

    Examples
    --------
    NEH 630 ch. 16, example 16-1: Tc 2.3 h, 6-hour storm; 0.133 Tc = 0.306 h is rounded to 0.30 h.

    >>> int(unit_duration_s(2.3, 6.0)) / 3600
    0.3
    """
    tc = positive("tc_h", tc_h)
    duration_s = _whole_seconds("duration_h", duration_h)
    if time_step_h is not None:
        step_s = _whole_seconds("time_step_h", time_step_h)
        if duration_s % step_s:
            raise RangeError(f"time_step_h is {time_step_h:g}: it must divide the storm's duration of {duration_h:g} h")
        return np.full(tc.shape, step_s, dtype=np.int64)
    numbers = np.arange(1, int(duration_s**0.5) + 1)
    small = numbers[duration_s % numbers == 0]
    divisors = np.unique(np.concatenate((small, duration_s // small)))
    # A longest step that misses a whole second by a rounding is that second.
    longest_s = DURATION_OVER_TC * SECONDS_PER_H * tc * (1.0 + 1e-12)
    at = np.searchsorted(divisors, longest_s, side="right") - 1
    if (at < 0).any():
        row = int(np.argmax(np.atleast_1d(at < 0)))
        raise RangeError(
            f"row {row}: tc_h is {np.atleast_1d(tc)[row]:g}: 0.133 Tc is under one second; raise timing.minimum"
        )
    return divisors[at]


def _whole_seconds(name: str, hours: float) -> int:
    seconds = float(positive(name, hours)) * SECONDS_PER_H
    if abs(seconds - round(seconds)) > 1e-6 or round(seconds) < 1:
        raise RangeError(f"{name} is {hours:g}: it must be a whole number of seconds")
    return round(seconds)


def time_to_peak_h(tc_h: ArrayLike, unit_duration_h: ArrayLike) -> Floats:
    """Time to peak of the NRCS unit hydrograph.

    Parameters
    ----------
    tc_h : float or array
        Time of concentration [h].
    unit_duration_h : float or array
        Duration of the excess rain [h].

    Returns
    -------
    float or array
        From the start of the excess rain [h].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``Tp = D / 2 + L`` with the lag ``L = 0.6 Tc`` (NEH 630 ch. 16 eq. 16-7 and ch. 15 eq. 15-3).

    Examples
    --------
    NEH 630 ch. 16, example 16-1: Tc 2.3 h, D 0.30 h.

    >>> round(float(time_to_peak_h(2.3, 0.30)), 2)
    1.53
    """
    return positive("unit_duration_h", unit_duration_h) / 2.0 + 0.6 * positive("tc_h", tc_h)


def unit_peak_m3s_per_mm(
    area_km2: ArrayLike, time_to_peak_h: ArrayLike, peak_rate_factor: ArrayLike = PEAK_RATE_FACTOR
) -> Floats:
    """Peak of the NRCS unit hydrograph.

    Parameters
    ----------
    area_km2 : float or array
        Drainage area [km2].
    time_to_peak_h : float or array
        Time to peak [h].
    peak_rate_factor : float or array
        Peak rate factor [cfs h / (mi2 in)].

    Returns
    -------
    float or array
        Peak per unit of runoff [m3/s per mm].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``qp = 484 A Q / Tp``: cfs, mi2, in, h (NEH 630 ch. 16 eq. 16-6).

    Examples
    --------
    NEH 630 ch. 16, example 16-1: 4.6 mi2, Tp 1.53 h, 1 in; 1455 cfs.

    >>> round(float(unit_peak_m3s_per_mm(4.6 * 2.589988110336, 1.53)) * 25.4 / 0.3048**3)
    1455
    """
    peak_cfs = _peak_cfs(
        positive("area_km2", area_km2) / KM2_PER_MI2,
        positive("time_to_peak_h", time_to_peak_h),
        positive("peak_rate_factor", peak_rate_factor),
    )
    return peak_cfs * M3S_PER_CFS / MM_PER_IN


def _peak_cfs(area_mi2: Floats, time_to_peak_h: Floats, factor: Floats, runoff_in: float = 1.0) -> Floats:
    return factor * area_mi2 * runoff_in / time_to_peak_h  # NEH 630 eq. 16-6
