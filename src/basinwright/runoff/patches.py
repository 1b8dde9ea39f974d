"""Runoff of whole basins: patches of one curve number each, many outlets at once."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.numbers import Floats, Integers, check_offsets, not_negative, positive
from basinwright.runoff.curve_number import (
    MoistureClass,
    check_ratio,
    checked_curve_number,
    moisture_curve_number,
    retention_mm,
    runoff_depth,
)

Weighting = Literal["runoff", "curve_number"]


@dataclass(frozen=True)
class Patches:
    """The curve-number patches of many outlets, outlet by outlet.

    Parameters
    ----------
    offsets : int array, shape (n + 1,)
        Outlet i owns the patches ``offsets[i]`` up to ``offsets[i + 1]``.
    area_km2 : array, shape (m,)
        Area of each patch [km2]; only shares within an outlet count.
    curve_number : array, shape (m,)
        Curve number, class II and ratio 0.2, composite with impervious area [-].

    Raises
    ------
    RangeError
        Where a number is out of range, or an outlet has no area.

    Examples
    --------
    Technical Release 55 (1986), example 2-1: pasture in good condition, 75 ac on group B and 175 ac on group C.

    >>> Patches([0, 2], [75.0, 175.0], [61.0, 74.0]).mean_curve_number().round(1).tolist()
    [70.1]
    """

    offsets: Integers
    area_km2: Floats
    curve_number: Floats

    def __post_init__(self) -> None:
        area = not_negative("area_km2", self.area_km2)
        curve = checked_curve_number("curve_number", self.curve_number)
        if area.ndim != 1 or area.shape != curve.shape:
            raise RangeError("area_km2 and curve_number must have one value for each patch")
        for name, value in (
            ("offsets", check_offsets("offsets", self.offsets, area.size)),
            ("area_km2", area),
            ("curve_number", curve),
        ):
            object.__setattr__(self, name, value)
        positive("area_km2 of the patches of an outlet", self.sums(area))

    @property
    def outlets(self) -> int:
        """Number of outlets."""
        return self.offsets.size - 1

    @property
    def outlet(self) -> Integers:
        """Outlet of each patch, shape (m,)."""
        return np.repeat(np.arange(self.outlets), np.diff(self.offsets))

    def sums(self, values: Floats) -> Floats:
        """Sum a value of each patch by outlet, in the order of the patches, shape (n,)."""
        # bincount adds one by one: the bits of an outlet do not depend on its neighbours.
        return np.bincount(self.outlet, weights=values, minlength=self.outlets).astype(np.float64)

    def weights(self) -> Floats:
        """Share of each patch in its outlet's area, shape (m,) [-]."""
        return self.area_km2 / self.sums(self.area_km2)[self.outlet]

    def mean_curve_number(self) -> Floats:
        """Area-weighted mean curve number, class II and ratio 0.2, shape (n,) [-]."""
        return self.sums(self.weights() * self.curve_number)


@dataclass(frozen=True)
class Retentions:
    """What the runoff equation needs of many outlets: retentions with their weights, outlet by outlet.

    Parameters
    ----------
    offsets : int array, shape (n + 1,)
        Outlet i owns the rows ``offsets[i]`` up to ``offsets[i + 1]``.
    weight : array, shape (m,)
        Share in the outlet's area [-].
    retention_mm : array, shape (m,)
        Potential maximum retention [mm].
    initial_abstraction_ratio : float
        Ratio Ia / S [-].
    """

    offsets: Integers
    weight: Floats
    retention_mm: Floats
    initial_abstraction_ratio: float


def retentions(
    patches: Patches,
    *,
    weighting: Weighting = "runoff",
    moisture: MoistureClass = "II",
    initial_abstraction_ratio: float = 0.2,
) -> Retentions:
    """Retentions of many outlets: moisture class first, then the weighting, then the ratio.

    Parameters
    ----------
    patches : Patches
        Curve-number patches.
    weighting : {"runoff", "curve_number"}
        ``runoff``: each patch runs off by itself and the depths are averaged by area. ``curve_number``: one retention
        from the area mean of the curve numbers.
    moisture : {"I", "II", "III"}
        Antecedent runoff condition.
    initial_abstraction_ratio : {0.2, 0.05}
        Ratio Ia / S.

    Returns
    -------
    Retentions

    Raises
    ------
    RangeError
        Where weighting, class or ratio is unknown.
    """
    if weighting not in ("runoff", "curve_number"):
        raise RangeError(f"weighting is {weighting!r}: it must be runoff or curve_number")
    ratio = check_ratio(initial_abstraction_ratio)
    curve, weight, offsets = moisture_curve_number(patches.curve_number, moisture), patches.weights(), patches.offsets
    if weighting == "curve_number":
        # A mean of equal numbers may exceed them by a rounding.
        curve = np.minimum(patches.sums(weight * curve), 100.0)
        weight, offsets = np.ones(patches.outlets), np.arange(patches.outlets + 1)
    return Retentions(offsets, weight, retention_mm(curve, ratio), ratio)


def weighted_runoff_mm(
    patches: Patches,
    depth_mm: ArrayLike,
    *,
    weighting: Weighting = "runoff",
    moisture: MoistureClass = "II",
    initial_abstraction_ratio: float = 0.2,
) -> Floats:
    """Runoff of many outlets for their own depths: storm depths, or the rain fallen by given times.

    Parameters
    ----------
    patches : Patches
        Curve-number patches of n outlets.
    depth_mm : array, shape (n, k)
        Depths of each outlet [mm]: one for each return period, or cumulative rain at k times.
    weighting, moisture, initial_abstraction_ratio
        See `retentions`.

    Returns
    -------
    array, shape (n, k)
        Runoff [mm]: of each storm, or the cumulative excess rain at those times.

    Raises
    ------
    RangeError
        Where a depth is negative or not finite, or an option is unknown.

    Examples
    --------
    A basin half paved (CN 98), half meadow (CN 58), 4 in of rain: both weightings.

    >>> basin = Patches([0, 2], [1.0, 1.0], [98.0, 58.0])
    >>> for weighting in ("runoff", "curve_number"):
    ...     print(round(float(weighted_runoff_mm(basin, [[101.6]], weighting=weighting)[0, 0]), 1))
    56.3
    47.9
    """
    depth = not_negative("depth_mm", depth_mm)
    if depth.ndim != 2 or depth.shape[0] != patches.outlets:
        raise RangeError(f"depth_mm must have one row for each of the {patches.outlets} outlets")
    rows = retentions(
        patches, weighting=weighting, moisture=moisture, initial_abstraction_ratio=initial_abstraction_ratio
    )
    outlet = np.repeat(np.arange(patches.outlets), np.diff(rows.offsets))
    runoff = np.empty_like(depth)
    for column in range(depth.shape[1]):
        each = runoff_depth(depth[outlet, column], rows.retention_mm, rows.initial_abstraction_ratio)
        runoff[:, column] = np.bincount(outlet, weights=rows.weight * each, minlength=patches.outlets)
    return runoff
