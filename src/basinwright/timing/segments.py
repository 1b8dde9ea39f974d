"""Travel times of the segments of many flow paths at once: the velocity method, row by row.

Given values stand, NaN is computed. Rows of all outlets come in one set of arrays, an outlet's rows together and in
downstream order.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from basinwright.errors import RangeError
from basinwright.numbers import Floats, positive
from basinwright.timing.bankfull import BankfullRelation, bankfull_depth_m, bankfull_width_m
from basinwright.timing.channel import (
    JARRETT_HYDRAULIC_RADIUS_M,
    JARRETT_SLOPE,
    critical_velocity_mps,
    hydraulic_radius_m,
    jarrett_roughness_n,
    manning_velocity_mps,
    wave_velocity_mps,
)
from basinwright.timing.shallow import SHALLOW_FLOW_SOURCE, shallow_coefficients_mps, shallow_velocity_mps
from basinwright.timing.sheet import SHEET_FLOW_SOURCE, sheet_flow_time_h

REGIMES = ("sheet", "shallow", "channel", "open_water", "pipe", "lined_channel")
"""Flow regimes that can be timed; the last two only a person enters."""

PLAIN_ROUGHNESS_N = 0.045
"""Manning n of a natural channel below Jarrett's slopes: winding, some weeds and stones, Chow (1959) table 5-6."""

Marks = NDArray[np.bool_]
Texts = NDArray[Any]


@dataclass(frozen=True)
class SegmentTimes:
    """What `time_segments` returns: one entry per row in every array.

    Parameters
    ----------
    slope : array
        Slope used [m/m]; the one slope of the whole sheet reach in its rows, unless a row's own was given.
    roughness : array
        Sheet, channel, pipe: Manning n [-]; shallow: velocity over root slope [m/s]; open water: NaN.
    bankfull_width_m, bankfull_depth_m : array
        Of channels [m]; NaN elsewhere.
    hydraulic_radius_m, hydraulic_radius_half_m : array
        Of channels, lined channels and pipes, at bankfull and at half the bankfull depth [m]; NaN elsewhere.
    velocity_mps, velocity_half_mps : array
        Velocity [m/s] at bankfull and at half the bankfull depth; equal where the stage does not matter.
    travel_time_h, travel_time_half_h : array
        Travel time [h] at both stages.
    floored : array of bool
        The computed slope was below the floor and was raised to it.
    supercritical : array of bool
        A channel faster than critical at either stage.
    out_of_bankfull_range : array of bool
        A channel whose contributing area lies outside the relation's data.
    out_of_jarrett_range : array of bool
        A channel where Jarrett's roughness was asked for and slope or hydraulic radius lies outside his data; below
        his slopes the plain roughness is used, elsewhere his equation all the same.
    basis : array of str
        Where the row's numbers come from.
    """

    slope: Floats
    roughness: Floats
    bankfull_width_m: Floats
    bankfull_depth_m: Floats
    hydraulic_radius_m: Floats
    hydraulic_radius_half_m: Floats
    velocity_mps: Floats
    velocity_half_mps: Floats
    travel_time_h: Floats
    travel_time_half_h: Floats
    floored: Marks
    supercritical: Marks
    out_of_bankfull_range: Marks
    out_of_jarrett_range: Marks
    basis: Texts

    def columns(self) -> dict[str, NDArray[Any]]:
        """Return the columns of the segment table that were computed, by name."""
        marks = ("floored", "supercritical", "out_of_bankfull_range", "out_of_jarrett_range")
        return {name: array for name, array in vars(self).items() if name not in marks}


def time_segments(
    segments: Mapping[str, ArrayLike],
    *,
    two_year_depth_mm: ArrayLike,
    relation: BankfullRelation,
    channel_roughness: ArrayLike | Literal["jarrett"] = PLAIN_ROUGHNESS_N,
    channel_roughness_words: str = "n of the project",
    slope_floor: float = 0.0005,
    open_water_depth_m: float = 2.0,
) -> SegmentTimes:
    """Time every segment of every flow path, at bankfull and at half the bankfull depth.

    Parameters
    ----------
    segments : mapping of arrays, shape (rows,)
        ``outlet`` (integer, rows of one outlet together), ``regime`` (one of `REGIMES`), ``from_m``, ``to_m``,
        ``top_elevation_m``, ``bottom_elevation_m``, ``area_km2`` [m, km2]. Optional, NaN where to be computed:
        ``slope`` [m/m], ``roughness`` (sheet, channel, pipe: Manning n; shallow: velocity over root slope [m/s]),
        ``hydraulic_radius_m``, ``hydraulic_radius_half_m`` [m], ``sheet_n`` (n of the row's cover, used where a
        sheet row has no roughness). Optional text ``shallow_category`` (key of the table `shallow_flow_neh`, used
        where a shallow row has no roughness).
    two_year_depth_mm : float or array, shape (outlets,)
        2-year 24-hour rainfall [mm], by outlet index where it is an array.
    relation : BankfullRelation
        Bankfull width and depth from contributing area.
    channel_roughness : float, array of shape (rows,), or "jarrett"
        Manning n [-] of channel rows that have none, or Jarrett's (1984) from slope and hydraulic radius.
    channel_roughness_words : str
        What the basis says of a number among these.
    slope_floor : float
        Least slope [m/m] of rows whose slope is computed and used; a given slope stands.
    open_water_depth_m : float
        Mean depth of open water [m].

    Returns
    -------
    SegmentTimes
        Arrays of shape (rows,).

    Raises
    ------
    RangeError
        Naming the argument and the row: unknown regime, a length that is not positive, a number that a formula
        cannot take, a roughness or hydraulic radius that nothing gives.

    Notes
    -----
    The sheet rows of an outlet are timed as one reach, with the sum of their lengths, their roughness weighted by
    length, and their total fall; its time is shared out by length. Travel time grows as length^0.8, so timing the
    rows one by one would lengthen it.

    A channel's section is a rectangle of bankfull width W and depth D: ``R = W D / (W + 2 D)``, and half the depth
    at the same width. Where a person gives only the bankfull radius, that of half the depth keeps the rectangle's
    proportion to it. A lined channel whose half-depth radius is not given takes half of the full one, the limit of a
    wide section; a pipe is as fast half full as full.

    A channel is supercritical where its velocity exceeds ``sqrt(g D)``; where the radius was given, the radius
    stands for the depth, which is never larger, so the mark errs on the safe side.

    Source: USDA NRCS, National Engineering Handbook, Part 630, chapter 15 (May 2010).

    Examples
    --------
    Technical Release 55 (1986), example 3-1, with its hydraulic radius; the handbook adds rounded parts to 1.53 h.

    >>> ft = 0.3048
    >>> times = time_segments(
    ...     {
    ...         "outlet": [0, 0, 0],
    ...         "regime": ["sheet", "shallow", "channel"],
    ...         "from_m": [0.0, 100 * ft, 1500 * ft],
    ...         "to_m": [100 * ft, 1500 * ft, 8800 * ft],
    ...         "top_elevation_m": [51.5 * ft, 50.5 * ft, 36.5 * ft],
    ...         "bottom_elevation_m": [50.5 * ft, 36.5 * ft, 0.0],
    ...         "area_km2": [0.01, 0.1, 1.0],
    ...         "roughness": [0.24, float("nan"), 0.05],
    ...         "hydraulic_radius_m": [float("nan"), float("nan"), 0.957 * ft],
    ...         "shallow_category": ["", "grassed_waterway", ""],
    ...     },
    ...     two_year_depth_mm=91.44,
    ...     relation=BankfullRelation("own", (2.70, 0.352), (0.30, 0.213)),
    ... )
    >>> times.travel_time_h.round(2).tolist()
    [0.3, 0.24, 0.99]
    """
    rows = _Rows(segments)
    slope, used, floored = _slopes(rows, slope_floor)
    n_rows = rows.count
    out = {name: np.full(n_rows, np.nan) for name in _COMPUTED}
    out["slope"] = slope
    out["roughness"] = rows.optional("roughness").copy()
    marks = {name: np.zeros(n_rows, dtype=bool) for name in ("supercritical", "range", "jarrett")}
    basis = _Basis(n_rows)
    basis.given = ~np.isnan(rows.optional("slope"))

    _time_sheet(rows, used, two_year_depth_mm, out, basis)
    _time_shallow(rows, used, out, basis)
    _time_channel(rows, used, relation, channel_roughness, channel_roughness_words, out, marks, basis)
    _time_conduits(rows, used, out, basis)
    water = rows.regime_is("open_water")
    out["roughness"][water] = np.nan
    out["velocity_mps"][water] = out["velocity_half_mps"][water] = wave_velocity_mps(open_water_depth_m)
    basis.add(water, f"wave speed, mean depth {open_water_depth_m:g} m, NEH 630 ch. 15 (2010)")

    out["travel_time_h"] = rows.length_m / (3600.0 * out["velocity_mps"])
    out["travel_time_half_h"] = rows.length_m / (3600.0 * out["velocity_half_mps"])
    return SegmentTimes(
        **out,
        floored=floored,
        supercritical=marks["supercritical"],
        out_of_bankfull_range=marks["range"],
        out_of_jarrett_range=marks["jarrett"],
        basis=basis.texts(),
    )


def sum_by_outlet(outlet: ArrayLike, values: ArrayLike, outlets: int) -> Floats:
    """Add up the rows of each outlet, in the order in which they stand.

    Parameters
    ----------
    outlet : array of int, shape (rows,)
        Index of each row's outlet.
    values : array, shape (rows,)
        What to add, such as travel times [h].
    outlets : int
        Number of outlets.

    Returns
    -------
    array, shape (outlets,)
        Sums; NaN for an outlet without rows.

    Examples
    --------
    Technical Release 55 (1986), example 3-1: the parts printed, and their printed sum 1.53 h.

    >>> sum_by_outlet([0, 0, 0], [0.30, 0.24, 0.99], 1).round(2).tolist()
    [1.53]
    """
    index = np.asarray(outlet, dtype=np.intp)
    sums = np.bincount(index, weights=np.asarray(values, dtype=np.float64), minlength=outlets)
    return np.where(np.bincount(index, minlength=outlets) > 0, sums, np.nan)


_COMPUTED = (
    "slope",
    "roughness",
    "bankfull_width_m",
    "bankfull_depth_m",
    "hydraulic_radius_m",
    "hydraulic_radius_half_m",
    "velocity_mps",
    "velocity_half_mps",
    "travel_time_h",
    "travel_time_half_h",
)


class _Rows:
    """The input columns, checked once: lengths positive, regimes known."""

    def __init__(self, segments: Mapping[str, ArrayLike]) -> None:
        self._segments = segments
        self.outlet = np.asarray(segments["outlet"], dtype=np.intp)
        self.count = self.outlet.size
        self._regime = np.asarray(segments["regime"], dtype=str)
        self._known = {regime: self._regime == regime for regime in REGIMES}
        unknown = ~np.logical_or.reduce(list(self._known.values())) if self.count else np.zeros(0, bool)
        if unknown.any():
            row = int(np.flatnonzero(unknown)[0])
            raise RangeError(f"row {row}: regime is {str(self._regime[row])!r}: it must be one of {', '.join(REGIMES)}")
        self.length_m = positive("to_m - from_m", self.required("to_m") - self.required("from_m"))

    def regime_is(self, regime: str) -> Marks:
        return self._known[regime]

    def required(self, name: str) -> Floats:
        return np.asarray(self._segments[name], dtype=np.float64)

    def optional(self, name: str) -> Floats:
        """Return a column, all NaN where it was not passed."""
        return self.required(name) if name in self._segments else np.full(self.count, np.nan)

    def texts(self, name: str) -> Texts:
        """Return a text column, all empty where it was not passed."""
        given = self._segments.get(name)
        return np.full(self.count, "") if given is None else np.asarray(given, dtype=str)

    def needed(self, name: str, mask: Marks, values: Floats, mend: str) -> None:
        """Refuse rows of the mask whose value is neither given nor computed, or not above zero."""
        bad = mask & ~(np.isfinite(values) & (values > 0))
        if bad.any():
            row = int(np.flatnonzero(bad)[0])
            state = "empty" if np.isnan(values[row]) else f"{values[row]:g}"
            raise RangeError(f"row {row} ({self._regime[row]}): {name} is {state}: {mend}")


class _Basis:
    """Builds the text of each row from the few combinations that occur."""

    def __init__(self, count: int) -> None:
        self._code = np.zeros(count, dtype=np.int64)
        self._known: list[str] = [""]
        self.given = np.zeros(count, dtype=bool)

    def add(self, mask: Marks, text: str) -> None:
        """Set the text of the rows of a mask."""
        if mask.any():
            self._known.append(text)
            self._code[mask] = len(self._known) - 1

    def texts(self) -> Texts:
        """Return the text of every row; rows share the few string objects."""
        plain = np.array(self._known, dtype=object)
        slope_given = np.array([f"{text}; slope given" for text in self._known], dtype=object)
        return np.where(self.given, slope_given[self._code], plain[self._code])


def _slopes(rows: _Rows, floor: float) -> tuple[Floats, Floats, Marks]:
    """Return the slope to show, the slope to compute with, and where the floor raised it.

    The rows of a sheet reach are computed with the reach's slope. Over open water the slope plays no part: it is
    shown as it is, without the floor.
    """
    positive("slope_floor", floor)
    sheet, water = rows.regime_is("sheet"), rows.regime_is("open_water")
    given = rows.optional("slope")
    computed = np.isnan(given)
    rows.needed("slope", ~computed & ~water, given, "give a slope above zero, or leave it empty")
    drop_m = rows.required("top_elevation_m") - rows.required("bottom_elevation_m")
    fall_m = np.where(computed, drop_m, given * rows.length_m)
    missing = np.isnan(fall_m) & ~water
    if missing.any():
        row = int(np.flatnonzero(missing)[0])
        raise RangeError(f"row {row}: top_elevation_m or bottom_elevation_m is empty: give both, or the slope")
    slope = fall_m / rows.length_m
    floored = computed & ~sheet & ~water & (slope < floor)
    if sheet.any():
        reach = _sheet_reaches(rows)
        reach_slope = reach.sum(fall_m) / reach.sum(rows.length_m)
        reach_floored = (reach.sum(computed) > 0) & (reach_slope < floor)
        slope[sheet] = np.where(reach_floored, floor, reach_slope)[reach.of_row]
        floored[sheet] = reach_floored[reach.of_row] & computed[sheet]
    used = np.where(floored, floor, slope)
    return np.where(computed, used, given), used, floored


@dataclass(frozen=True)
class _Reaches:
    """The sheet reach of each outlet that has one."""

    sheet: Marks
    of_row: NDArray[np.intp]
    outlet: NDArray[np.intp]

    def sum(self, values: NDArray[Any]) -> Floats:
        """Add up the sheet rows of each reach."""
        sums = np.bincount(self.of_row, weights=values[self.sheet], minlength=self.outlet.size)
        return sums.astype(np.float64)


def _sheet_reaches(rows: _Rows) -> _Reaches:
    sheet = rows.regime_is("sheet")
    outlet, of_row = np.unique(rows.outlet[sheet], return_inverse=True)
    return _Reaches(sheet, of_row, outlet)


def _time_sheet(
    rows: _Rows, slope: Floats, two_year_depth_mm: ArrayLike, out: dict[str, Floats], basis: _Basis
) -> None:
    sheet = rows.regime_is("sheet")
    if not sheet.any():
        return
    n = np.where(np.isnan(out["roughness"]), rows.optional("sheet_n"), out["roughness"])
    rows.needed("roughness", sheet, n, "give the Manning n of sheet flow, or a cover whose scheme has one")
    reach = _sheet_reaches(rows)
    length_m = reach.sum(rows.length_m)
    depth_mm = np.asarray(two_year_depth_mm, dtype=np.float64)
    depth_mm = depth_mm[reach.outlet] if depth_mm.ndim else np.full(reach.outlet.size, depth_mm)
    if (bad := ~(np.isfinite(depth_mm) & (depth_mm > 0))).any():
        first = int(np.flatnonzero(bad)[0])
        raise RangeError(
            f"outlet {reach.outlet[first]}: two_year_depth_mm is {depth_mm[first]:g}: it must be above zero"
        )
    slope_of_reach = np.empty(reach.outlet.size)
    slope_of_reach[reach.of_row] = slope[sheet]
    time_h = sheet_flow_time_h(
        length_m,
        reach.sum(n * rows.length_m) / length_m,
        depth_mm,
        slope_of_reach,
    )
    out["roughness"][sheet] = n[sheet]
    out["velocity_mps"][sheet] = out["velocity_half_mps"][sheet] = (length_m / (3600.0 * time_h))[reach.of_row]
    several = reach.sum(np.ones(rows.count))[reach.of_row] > 1
    basis.add(sheet, f"sheet flow, {SHEET_FLOW_SOURCE}")
    of_several = sheet.copy()
    of_several[sheet] = several
    basis.add(of_several, f"sheet flow, timed as one reach with the other sheet rows, {SHEET_FLOW_SOURCE}")


def _time_shallow(rows: _Rows, slope: Floats, out: dict[str, Floats], basis: _Basis) -> None:
    shallow = rows.regime_is("shallow")
    if not shallow.any():
        return
    given = ~np.isnan(out["roughness"])
    basis.add(shallow & given, "shallow flow, coefficient given")
    category = rows.texts("shallow_category")
    empty = shallow & ~given
    for key, coefficient_mps in shallow_coefficients_mps().items():
        mask = empty & (category == key)
        out["roughness"][mask] = coefficient_mps
        basis.add(mask, f"{SHALLOW_FLOW_SOURCE}, {key}")
    rows.needed(
        "roughness", shallow, out["roughness"], "give velocity over root slope, or a cover with a shallow-flow category"
    )
    out["velocity_mps"][shallow] = shallow_velocity_mps(out["roughness"][shallow], slope[shallow])
    out["velocity_half_mps"][shallow] = out["velocity_mps"][shallow]


def _time_channel(
    rows: _Rows,
    slope: Floats,
    relation: BankfullRelation,
    channel_roughness: ArrayLike | Literal["jarrett"],
    plain_text: str,
    out: dict[str, Floats],
    marks: dict[str, Marks],
    basis: _Basis,
) -> None:
    channel = rows.regime_is("channel")
    if not channel.any():
        return
    area = rows.required("area_km2")
    rows.needed("area_km2", channel, area, "give the contributing area at the middle of the segment")
    width, depth = bankfull_width_m(area[channel], relation), bankfull_depth_m(area[channel], relation)
    radius, radius_half, depth_full, depth_half, radius_given = _sections(rows, channel, width, depth)

    s, n_given = slope[channel], out["roughness"][channel]
    rows.needed("roughness", channel & ~np.isnan(out["roughness"]), out["roughness"], "give a Manning n above zero")
    n_is_given = ~np.isnan(n_given)
    by_jarrett = np.zeros(n_given.size, dtype=bool)
    if isinstance(channel_roughness, str):
        if channel_roughness != "jarrett":
            raise RangeError(f'channel_roughness is {channel_roughness!r}: it must be a Manning n or "jarrett"')
        by_jarrett = ~n_is_given & (s >= JARRETT_SLOPE[0])
        plain, plain_text = np.full(rows.count, PLAIN_ROUGHNESS_N), f"n {PLAIN_ROUGHNESS_N:g} below Jarrett's slopes"
        low, high = JARRETT_HYDRAULIC_RADIUS_M
        outside = ~by_jarrett | (s > JARRETT_SLOPE[1]) | (radius_half < low) | (radius > high)
        marks["jarrett"][channel] = ~n_is_given & outside
    else:
        plain = np.broadcast_to(np.asarray(channel_roughness, dtype=np.float64), (rows.count,))
        rows.needed("channel_roughness", channel & np.isnan(out["roughness"]), plain, "give a Manning n above zero")
    n = n_half = np.where(n_is_given, n_given, plain[channel])
    if by_jarrett.any():
        n = np.where(by_jarrett, jarrett_roughness_n(s, radius), n)
        n_half = np.where(by_jarrett, jarrett_roughness_n(s, radius_half), n_half)

    velocity, velocity_half = manning_velocity_mps(radius, s, n), manning_velocity_mps(radius_half, s, n_half)
    too_fast = (velocity > critical_velocity_mps(depth_full)) | (velocity_half > critical_velocity_mps(depth_half))
    marks["supercritical"][channel] = too_fast
    marks["range"][channel] = ~relation.covers(area[channel])
    for name, values in (
        ("roughness", n),
        ("bankfull_width_m", width),
        ("bankfull_depth_m", depth),
        ("hydraulic_radius_m", radius),
        ("hydraulic_radius_half_m", radius_half),
        ("velocity_mps", velocity),
        ("velocity_half_mps", velocity_half),
    ):
        out[name][channel] = values
    for by_relation, section in ((~radius_given, relation.name), (radius_given, "hydraulic radius given")):
        for which, roughness in (
            (n_is_given, "n given"),
            (by_jarrett, "n by Jarrett (1984)"),
            (~n_is_given & ~by_jarrett, plain_text),
        ):
            mask = channel.copy()
            mask[channel] = by_relation & which
            basis.add(mask, f"Manning, {section}, {roughness}")


def _sections(
    rows: _Rows, channel: Marks, width: Floats, depth: Floats
) -> tuple[Floats, Floats, Floats, Floats, Marks]:
    """Return hydraulic radius and depth of channel rows at both stages, and where a radius was given."""
    by_relation = hydraulic_radius_m(width, depth)
    by_relation_half = hydraulic_radius_m(width, 0.5 * depth)
    given, given_half = rows.optional("hydraulic_radius_m"), rows.optional("hydraulic_radius_half_m")
    for name, values in (("hydraulic_radius_m", given), ("hydraulic_radius_half_m", given_half)):
        rows.needed(name, channel & ~np.isnan(values), values, "give a radius above zero, or leave it empty")
    given, given_half = given[channel], given_half[channel]
    is_given, half_is_given = ~np.isnan(given), ~np.isnan(given_half)
    radius = np.where(is_given, given, by_relation)
    radius_half = np.where(half_is_given, given_half, by_relation_half * (radius / by_relation))
    depth_full = np.where(is_given, radius, depth)
    depth_half = np.where(is_given | half_is_given, radius_half, 0.5 * depth)
    return radius, radius_half, depth_full, depth_half, is_given | half_is_given


def _time_conduits(rows: _Rows, slope: Floats, out: dict[str, Floats], basis: _Basis) -> None:
    """Time pipes and lined channels: a person gave roughness and hydraulic radius."""
    for regime, share_at_half, text, mend in (
        ("pipe", 1.0, "full-pipe Manning", "a quarter of the inside diameter"),
        ("lined_channel", 0.5, "Manning, lined channel", "flow area over wetted perimeter"),
    ):
        mask = rows.regime_is(regime)
        if not mask.any():
            continue
        radius, half = rows.optional("hydraulic_radius_m"), rows.optional("hydraulic_radius_half_m")
        rows.needed("hydraulic_radius_m", mask, radius, f"give {mend}")
        rows.needed("roughness", mask, out["roughness"], "give the Manning n of the lining")
        half = np.where(np.isnan(half), share_at_half * radius, half)
        rows.needed("hydraulic_radius_half_m", mask, half, "give a radius above zero, or leave it empty")
        for stage, r in (("", radius), ("_half", half)):
            out[f"hydraulic_radius{stage}_m"][mask] = r[mask]
            out[f"velocity{stage}_mps"][mask] = manning_velocity_mps(r[mask], slope[mask], out["roughness"][mask])
        basis.add(mask, f"{text}, n and hydraulic radius given")
