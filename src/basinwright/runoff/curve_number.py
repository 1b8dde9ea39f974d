"""Runoff by curve number: retention, initial abstraction, impervious area, moisture class.

A patch's curve number is made in this order: composite with its impervious area, then the moisture class, then the
initial abstraction ratio. Curve numbers are those of tables: class II and ratio 0.2.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.numbers import Floats, not_negative, positive, within
from basinwright.published import table
from basinwright.units import MM_PER_IN

MoistureClass = Literal["I", "II", "III"]

RATIOS = (0.2, 0.05)
"""The initial abstraction ratios with a published retention."""

UNCONNECTED_LIMIT_PCT = 30.0
"""Impervious share up to which unconnected area counts (Technical Release 55, 1986, ch. 2) [%]."""


def checked_curve_number(name: str, values: ArrayLike) -> Floats:
    """Return curve numbers as float64; refuse what is not above 0 and up to 100."""
    return within(name, positive(name, values), 0.0, 100.0)


def retention_in(curve_number: ArrayLike) -> Floats:
    """Potential maximum retention, US form.

    Parameters
    ----------
    curve_number : float or array
        Curve number, ratio 0.2 [-].

    Returns
    -------
    float or array
        Retention S [in].

    Raises
    ------
    RangeError
        Where a curve number is not in (0, 100].

    Notes
    -----
    ``S = 1000 / CN - 10`` (NEH 630 ch. 10 eq. 10-13; Technical Release 55 eq. 2-4).

    Examples
    --------
    Technical Release 55 (1986), example 4-1: CN 75 has Ia = 0.2 S = 0.667 in.

    >>> round(0.2 * float(retention_in(75)), 3)
    0.667
    """
    return 1000.0 / checked_curve_number("curve_number", curve_number) - 10.0


def retention_mm(curve_number: ArrayLike, initial_abstraction_ratio: float = 0.2) -> Floats:
    """Potential maximum retention.

    Parameters
    ----------
    curve_number : float or array
        Curve number, ratio 0.2 [-].
    initial_abstraction_ratio : {0.2, 0.05}
        Ratio Ia / S that the retention is for.

    Returns
    -------
    float or array
        Retention S [mm].

    Raises
    ------
    RangeError
        Where a curve number is not in (0, 100], or the ratio has no published retention.

    Notes
    -----
    Ratio 0.2: ``S = 25400 / CN - 254`` (mm). Ratio 0.05: ``S0.05 = 1.33 S0.20^1.15``, both in **inches** (R. H.
    Hawkins, R. Jiang, D. E. Woodward, A. T. Hjelmfelt and J. E. Van Mullem, Proc. 2nd Federal Interagency Hydrologic
    Modeling Conf., 2002; Hawkins et al., Curve Number Hydrology, ASCE, 2009).

    Examples
    --------
    >>> round(float(retention_mm(80)), 1), round(float(retention_mm(80, 0.05)) / 25.4, 3)
    (63.5, 3.815)
    """
    ratio = check_ratio(initial_abstraction_ratio)
    if ratio == 0.2:
        return 25400.0 / checked_curve_number("curve_number", curve_number) - 254.0
    return _retention_005_in(retention_in(curve_number)) * MM_PER_IN


def _retention_005_in(retention_020_in: Floats) -> Floats:
    # CN 100 with a rounding below zero must not become a NaN.
    return 1.33 * np.maximum(retention_020_in, 0.0) ** 1.15


def check_ratio(initial_abstraction_ratio: float) -> float:
    """Return the initial abstraction ratio; refuse one without a published retention (see `RATIOS`)."""
    if initial_abstraction_ratio not in RATIOS:
        raise RangeError(
            f"initial_abstraction_ratio is {initial_abstraction_ratio:g}: it must be 0.2 or 0.05, "
            "the two for which retentions are published"
        )
    return float(initial_abstraction_ratio)


def runoff_depth(depth: Floats, retention: Floats, ratio: float) -> Floats:
    """Runoff in the unit of depth and retention, both checked: the core of `runoff_mm` and `runoff_in`."""
    effective = np.maximum(depth - ratio * retention, 0.0)
    # Without retention all rain runs off; without rain there is nothing to divide by.
    divisor = effective + retention
    return effective * effective / np.where(divisor > 0.0, divisor, 1.0)  # NEH 630 eq. 10-11


def runoff_mm(depth_mm: ArrayLike, curve_number: ArrayLike, initial_abstraction_ratio: float = 0.2) -> Floats:
    """Storm runoff by curve number.

    Parameters
    ----------
    depth_mm : float or array
        Storm depth P [mm].
    curve_number : float or array
        Curve number, ratio 0.2 [-].
    initial_abstraction_ratio : {0.2, 0.05}
        Ratio Ia / S; for 0.05 the retention is converted (see `retention_mm`).

    Returns
    -------
    float or array
        Runoff Q [mm].

    Raises
    ------
    RangeError
        Where a depth is negative or not finite, a curve number not in (0, 100], or the ratio unknown.

    Notes
    -----
    ``Q = (P - Ia)^2 / (P - Ia + S)`` for P over Ia, else 0 (NEH 630 ch. 10 eq. 10-11).

    Examples
    --------
    >>> round(float(runoff_mm(6.0 * 25.4, 75)) / 25.4, 2)
    3.28
    """
    retention = retention_mm(curve_number, initial_abstraction_ratio)
    return runoff_depth(not_negative("depth_mm", depth_mm), retention, initial_abstraction_ratio)


def runoff_in(depth_in: ArrayLike, curve_number: ArrayLike, initial_abstraction_ratio: float = 0.2) -> Floats:
    """Storm runoff by curve number, US form: as `runoff_mm`, depths in inches.

    Parameters
    ----------
    depth_in : float or array
        Storm depth P [in].
    curve_number : float or array
        Curve number, ratio 0.2 [-].
    initial_abstraction_ratio : {0.2, 0.05}
        Ratio Ia / S.

    Returns
    -------
    float or array
        Runoff Q [in].

    Raises
    ------
    RangeError
        As `runoff_mm`.

    Examples
    --------
    Technical Release 55 (1986), examples 2-2 and 2-3: 6.0 in of rain on CN 75 and 77.

    >>> runoff_in(6.0, [75, 77]).round(2).tolist()
    [3.28, 3.48]
    """
    retention = retention_in(curve_number)
    if check_ratio(initial_abstraction_ratio) == 0.05:
        retention = _retention_005_in(retention)
    return runoff_depth(not_negative("depth_in", depth_in), retention, initial_abstraction_ratio)


def composite_curve_number(
    pervious_curve_number: ArrayLike, impervious_pct: ArrayLike, connected_fraction: ArrayLike = 1.0
) -> Floats:
    """Curve number of a patch that is partly impervious.

    Parameters
    ----------
    pervious_curve_number : float or array
        Curve number of the pervious part [-].
    impervious_pct : float or array
        Impervious share of the patch [%].
    connected_fraction : float or array
        Share of the impervious area that drains directly to the drainage system, 0 to 1 [-].

    Returns
    -------
    float or array
        Composite curve number, class II and ratio 0.2 [-].

    Raises
    ------
    RangeError
        Where a curve number, a percentage or a fraction is out of its range.

    Notes
    -----
    ``CNc = CNp + Pimp/100 (98 - CNp)``, and with unconnected area up to 30 % impervious
    ``CNc = CNp + Pimp/100 (98 - CNp)(1 - 0.5 R)``, R = unconnected over total impervious area (Technical Release 55,
    1986, ch. 2, figs. 2-3 and 2-4, equations of app. F). Over 30 % all of it counts as connected, as TR-55 says:
    there is too little pervious area left to take the runoff in.

    Examples
    --------
    Technical Release 55 (1986), example 2-3: half-acre lots, 35 % impervious, open space in good condition, groups B
    and C.

    >>> composite_curve_number([61, 74], 35).round(1).tolist()
    [74.0, 82.4]
    """
    pervious = checked_curve_number("pervious_curve_number", pervious_curve_number)
    impervious = within("impervious_pct", impervious_pct, 0.0, 100.0)
    unconnected = 1.0 - within("connected_fraction", connected_fraction, 0.0, 1.0)
    unconnected = np.where(impervious <= UNCONNECTED_LIMIT_PCT, unconnected, 0.0)
    return pervious + impervious / 100.0 * (98.0 - pervious) * (1.0 - 0.5 * unconnected)


def moisture_curve_number(curve_number: ArrayLike, moisture: MoistureClass) -> Floats:
    """Curve number of another antecedent runoff condition.

    Parameters
    ----------
    curve_number : float or array
        Curve number of class II, ratio 0.2 [-].
    moisture : {"I", "II", "III"}
        Dry, average or wet condition.

    Returns
    -------
    float or array
        Curve number of that class, ratio 0.2 [-].

    Raises
    ------
    RangeError
        Where a curve number is not in (0, 100], or the class is unknown.

    Notes
    -----
    NEH 630 ch. 10 table 10-1; between its rows linear, our own choice. The formulas in textbooks differ from the
    table by up to 2: the table is taken.

    Examples
    --------
    >>> moisture_curve_number([80, 47.5], "I").tolist(), float(moisture_curve_number(80, "III"))
    ([63.0, 28.5], 91.0)
    """
    curve = checked_curve_number("curve_number", curve_number)
    if moisture == "II":
        return curve
    if moisture not in ("I", "III"):
        raise RangeError(f"moisture is {moisture!r}: it must be I, II or III")
    published = table("arc_conversion_neh_10_1")
    rows = published.floats("class_ii")[::-1]
    return np.interp(curve, rows, published.floats(f"class_{moisture.lower()}")[::-1])


def effective_curve_number(runoff_mm: ArrayLike, depth_mm: ArrayLike, initial_abstraction_ratio: float = 0.2) -> Floats:
    """Curve number that gives a known runoff: the inverse of the runoff equation.

    Parameters
    ----------
    runoff_mm : float or array
        Runoff Q [mm].
    depth_mm : float or array
        Storm depth P [mm].
    initial_abstraction_ratio : {0.2, 0.05}
        Ratio Ia / S of the curve number returned. It is on the scale of that ratio: with 0.05 it is
        ``1000 / (10 + S0.05)``, S in inches.

    Returns
    -------
    float or array
        Curve number [-]; NaN where there is no runoff, which any low enough curve number gives.

    Raises
    ------
    RangeError
        Where runoff or depth is negative or not finite, runoff exceeds depth, or the ratio is unknown.

    Notes
    -----
    With r the ratio, ``S = [2 r P + (1 - r) Q - sqrt(((1 - r) Q)^2 + 4 r P Q)] / (2 r^2)``; for r = 0.2 this is
    ``S = 5 [P + 2 Q - sqrt(4 Q^2 + 5 P Q)]`` (R. H. Hawkins, J. Irrig. Drain. Div. ASCE 99, 1973).

    Examples
    --------
    >>> round(float(effective_curve_number(3.28 * 25.4, 6.0 * 25.4)), 1)
    75.0
    """
    ratio = check_ratio(initial_abstraction_ratio)
    runoff, depth = not_negative("runoff_mm", runoff_mm), not_negative("depth_mm", depth_mm)
    excess = np.max(np.atleast_1d(runoff - depth), initial=0.0)
    if excess > 1e-9:
        raise RangeError(f"runoff_mm exceeds depth_mm by {excess:g}: no curve number gives more runoff than rain")
    spread = np.sqrt(((1.0 - ratio) * runoff) ** 2 + 4.0 * ratio * depth * runoff)
    retention = (2.0 * ratio * depth + (1.0 - ratio) * runoff - spread) / (2.0 * ratio**2)
    curve = 25400.0 / (254.0 + np.maximum(retention, 0.0))
    return np.where(runoff > 0.0, curve, np.nan)
