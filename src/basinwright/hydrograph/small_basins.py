"""Peaks of small basins without a hydrograph: the rational method, and the graphical method as a cross-check."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.numbers import Floats, not_negative, positive, within
from basinwright.published import table
from basinwright.runoff import retention_in, runoff_in
from basinwright.units import KM2_PER_AC, KM2_PER_MI2, M3S_PER_CFS, MM_PER_IN

RATIONAL_LIMIT_KM2 = 200 * KM2_PER_AC
"""Largest area for the rational method [km2]: 200 acres, common practice."""

GRAPHICAL_TC_H = (0.1, 10.0)
"""Range of Tc of the graphical method [h] (Technical Release 55, 1986, ch. 4)."""


def rational_peak_m3s(area_km2: ArrayLike, intensity_mm_per_h: ArrayLike, runoff_coefficient: ArrayLike) -> Floats:
    """Peak flow by the rational method.

    Parameters
    ----------
    area_km2 : float or array
        Drainage area [km2]; not over `RATIONAL_LIMIT_KM2`, common practice (the caller flags it).
    intensity_mm_per_h : float or array
        Mean intensity of the rain of the duration Tc [mm/h].
    runoff_coefficient : float or array
        Runoff coefficient C, 0 to 1 [-].

    Returns
    -------
    float or array
        Peak [m3/s].

    Raises
    ------
    RangeError
        Where area or intensity is negative or not finite, or the coefficient is outside 0 to 1.

    Notes
    -----
    ``Q = C i A``: cfs, in/h, acres (E. Kuichling, Trans. ASCE 20, 1889). The exact factor of these units is 1.0083; the
    published form leaves it out, and metric texts (Q = C i A / 360) keep it.

    Examples
    --------
    10 acres, 3 in/h, C 0.5: 15 cfs.

    >>> round(float(rational_peak_m3s(10 * 0.0040468564224, 3 * 25.4, 0.5)) / 0.028316846592, 6)
    15.0
    """
    area_ac = not_negative("area_km2", area_km2) / KM2_PER_AC
    intensity_in_per_h = not_negative("intensity_mm_per_h", intensity_mm_per_h) / MM_PER_IN
    coefficient = within("runoff_coefficient", runoff_coefficient, 0.0, 1.0)
    return coefficient * intensity_in_per_h * area_ac * M3S_PER_CFS


@dataclass(frozen=True)
class GraphicalPeak:
    """A peak by the graphical method, with what it was made of.

    Parameters
    ----------
    runoff_mm : array
        Runoff [mm].
    initial_abstraction_mm : array
        Ia = 0.2 S [mm].
    ia_over_p : array
        Initial abstraction over depth [-].
    unit_peak_m3s_per_km2_mm : array
        Unit peak discharge qu [m3/s per km2 and mm].
    peak_m3s : array
        Peak [m3/s].
    limited : bool array
        Whether Ia/P lay outside the table and its nearest row was taken, as the method says: accuracy is reduced.
    """

    runoff_mm: Floats
    initial_abstraction_mm: Floats
    ia_over_p: Floats
    unit_peak_m3s_per_km2_mm: Floats
    peak_m3s: Floats
    limited: np.ndarray


def graphical_peak(
    area_km2: ArrayLike,
    tc_h: ArrayLike,
    curve_number: ArrayLike,
    depth_mm: ArrayLike,
    distribution: str,
    pond_pct: ArrayLike = 0.0,
) -> GraphicalPeak:
    """Peak flow of a 24-hour storm by the graphical method.

    Parameters
    ----------
    area_km2 : float or array
        Drainage area [km2].
    tc_h : float or array
        Time of concentration, 0.1 to 10 [h].
    curve_number : float or array
        Curve number of the basin, ratio 0.2 [-].
    depth_mm : float or array
        24-hour depth [mm].
    distribution : str
        ``type_i``, ``type_ia``, ``type_ii`` or ``type_iii``.
    pond_pct : float or array
        Ponds and swamps spread over the basin and not on the flow path, 0 to 5 [%].

    Returns
    -------
    GraphicalPeak

    Raises
    ------
    RangeError
        Where a number is outside the method's range, or the distribution has no coefficients.

    Notes
    -----
    ``qp = qu A Q Fp``, ``log10 qu = C0 + C1 log10 Tc + C2 (log10 Tc)^2``: cfs per mi2 and inch, h (Technical Release
    55, 1986, ch. 4, app. F). Between rows of Ia/P qu is linear, between those of table 4-2 Fp is. One curve number
    stands for the basin, which should be homogeneous.

    Examples
    --------
    Technical Release 55 (1986), example 4-1: 0.39 mi2, Tc 1.53 h, CN 75, 6.0 in, Type II; printed qu 270, qp 345.

    >>> peak = graphical_peak(0.39 * 2.589988110336, 1.53, 75, 6.0 * 25.4, "type_ii")
    >>> round(float(peak.ia_over_p), 2), round(float(peak.peak_m3s) / 0.028316846592)
    (0.11, 344)
    """
    area_mi2 = positive("area_km2", area_km2) / KM2_PER_MI2
    depth_in = positive("depth_mm", depth_mm) / MM_PER_IN
    tc = within("tc_h", tc_h, *GRAPHICAL_TC_H)
    initial_in = 0.2 * retention_in(curve_number)
    ratio = initial_in / depth_in
    unit_peak, limited = _unit_peak(distribution, tc, ratio)
    runoff = runoff_in(depth_in, curve_number)
    peak_cfs = unit_peak * area_mi2 * runoff * _pond_factor(pond_pct)  # TR-55 eq. 4-1
    return GraphicalPeak(
        runoff * MM_PER_IN,
        initial_in * MM_PER_IN,
        ratio,
        unit_peak * M3S_PER_CFS / KM2_PER_MI2 / MM_PER_IN,
        peak_cfs * M3S_PER_CFS,
        limited,
    )


def _unit_peak(distribution: str, tc_h: Floats, ia_over_p: Floats) -> tuple[Floats, np.ndarray]:
    """Unit peak discharge [cfs per mi2 and inch], and whether Ia/P lies outside the table."""
    published = table("graphical_peak_tr55")
    rows = [row for row in published.rows if row["distribution"] == distribution]
    if not rows:
        known = ", ".join(dict.fromkeys(row["distribution"] for row in published.rows))
        raise RangeError(f"distribution is {distribution!r}: the graphical method has coefficients for {known}")
    columns = {name: np.array([float(row[name]) for row in rows]) for name in ("ia_over_p", "c0", "c1", "c2")}
    log_tc = np.log10(tc_h)[..., None]
    each = 10.0 ** (columns["c0"] + columns["c1"] * log_tc + columns["c2"] * log_tc**2)  # TR-55 app. F
    known_ratios = columns["ia_over_p"]
    ratio, each = np.broadcast_arrays(ia_over_p[..., None], each)
    ratio = ratio[..., 0]
    above = np.clip(np.searchsorted(known_ratios, ratio), 1, known_ratios.size - 1)
    low, high = known_ratios[above - 1], known_ratios[above]
    part = np.clip((ratio - low) / (high - low), 0.0, 1.0)
    at_low = np.take_along_axis(each, (above - 1)[..., None], axis=-1)[..., 0]
    at_high = np.take_along_axis(each, above[..., None], axis=-1)[..., 0]
    return at_low + part * (at_high - at_low), (ratio < known_ratios[0]) | (ratio > known_ratios[-1])


def _pond_factor(pond_pct: ArrayLike) -> Floats:
    published = table("pond_factor_tr55")
    shares = published.floats("pond_pct")
    return np.interp(within("pond_pct", pond_pct, shares[0], shares[-1]), shares, published.floats("factor"))
