"""Snyder's synthetic unit hydrograph, drawn through its peak, its two widths and the base that closes its volume."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.hydrograph.unit_hydrograph import (
    VOLUME_FACTOR,
    UnitHydrographs,
    normalised,
    row_offsets,
    step_numbers,
)
from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method
from basinwright.units import KM2_PER_MI2, M_PER_MI


def snyder_lag_h(path_length_m: ArrayLike, centroid_length_m: ArrayLike, ct: ArrayLike) -> Floats:
    """Snyder's basin lag, from the middle of the excess rain of standard duration to the peak.

    Parameters
    ----------
    path_length_m : float or array
        Length of the main stream from the outlet to the divide [m].
    centroid_length_m : float or array
        Length along it from the outlet to the point opposite the basin's centroid [m].
    ct : float or array
        Coefficient Ct, US units [-].

    Returns
    -------
    float or array
        Lag tp [h].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``tp = Ct (L Lca)^0.3``: h, mi (F. F. Snyder, Trans. Am. Geophys. Union 19, 1938). Metric texts print 0.75 Ct for
    lengths in km, or fold the 0.75 into Ct.

    Examples
    --------
    >>> round(float(snyder_lag_h(18 * 1609.344, 10 * 1609.344, 1.8)), 2)
    8.55
    """
    return _lag_h(
        positive("path_length_m", path_length_m) / M_PER_MI,
        positive("centroid_length_m", centroid_length_m) / M_PER_MI,
        positive("ct", ct),
    )


def _lag_h(length_mi: Floats, centroid_mi: Floats, ct: Floats) -> Floats:
    return ct * (length_mi * centroid_mi) ** 0.3


def snyder_standard_duration_h(lag_h: ArrayLike) -> Floats:
    """Duration of excess rain that Snyder's lag is for [h]: ``tr = tp / 5.5``.

    Examples
    --------
    >>> round(float(snyder_standard_duration_h(8.6)), 1)
    1.6
    """
    return positive("lag_h", lag_h) / 5.5


def snyder_adjusted_lag_h(lag_h: ArrayLike, unit_duration_h: ArrayLike) -> Floats:
    """Snyder's lag for another duration than the standard one [h]: ``tpR = tp + (tR - tr) / 4``.

    Examples
    --------
    >>> float(snyder_adjusted_lag_h(11.0, 4.0))
    11.5
    """
    lag = positive("lag_h", lag_h)
    return lag + (positive("unit_duration_h", unit_duration_h) - snyder_standard_duration_h(lag)) / 4.0


def snyder_peak_cfs_per_mi2_in(lag_h: ArrayLike, cp: ArrayLike) -> Floats:
    """Peak of Snyder's unit hydrograph per square mile and inch.

    Parameters
    ----------
    lag_h : float or array
        Lag [h], adjusted to the duration of the excess rain.
    cp : float or array
        Coefficient Cp, US units [-].

    Returns
    -------
    float or array
        Peak [cfs per mi2 and inch].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``Qp = 640 Cp A / tp``: cfs, mi2, h.

    Examples
    --------
    >>> round(100 * float(snyder_peak_cfs_per_mi2_in(8.6, 0.6)))
    4465
    """
    return 640.0 * positive("cp", cp) / positive("lag_h", lag_h)


def snyder_widths_h(peak_cfs_per_mi2_in: ArrayLike) -> tuple[Floats, Floats]:
    """Widths of Snyder's unit hydrograph at 50 and 75 % of its peak.

    Parameters
    ----------
    peak_cfs_per_mi2_in : float or array
        Peak of the 1-inch unit hydrograph per square mile [cfs per mi2 and inch].

    Returns
    -------
    w50_h, w75_h : float or array
        Widths [h].

    Raises
    ------
    RangeError
        Where the peak is not finite and above zero.

    Notes
    -----
    ``W50 = 770 (Qp/A)^-1.08``, ``W75 = 440 (Qp/A)^-1.08``: h, cfs/mi2 (U.S. Army Corps of Engineers, Engineering Manual
    1110-2-1405, 1959). Metric forms of these differ by 2.7 between a 1-cm and a 1-inch unit; only this pair is used.

    Examples
    --------
    >>> w50, w75 = snyder_widths_h(44.65)
    >>> round(float(w50), 1), round(float(w75), 1)
    (12.7, 7.3)
    """
    slowness = positive("peak_cfs_per_mi2_in", peak_cfs_per_mi2_in) ** -1.08
    return 770.0 * slowness, 440.0 * slowness


@method(
    "unit_hydrograph",
    "snyder",
    name="Snyder unit hydrograph (1938)",
    form="tp = Ct (L Lca)^0.3 (h, mi); Qp = 640 Cp A / tp (cfs, mi2); W50 = 770, W75 = 440 (Qp/A)^-1.08 h",
    inputs=("unit_duration_h", "area_km2", "path_length_m", "centroid_length_m", "ct", "cp"),
    source=Source(
        "F. F. Snyder, Synthetic Unit-Graphs, Trans. Am. Geophys. Union 19; widths: U.S. Army Corps of Engineers, "
        "Engineering Manual 1110-2-1405, 1959",
        "1938",
        "pp. 447-454",
        "from memory; a worked example in a secondary copy is reproduced",
    ),
    valid_range={
        "ct": Range(0.3, 6.0, "0.3 to 6 (1.8 to 2.2 in the Appalachians)"),
        "cp": Range(0.4, 0.94, "0.4 to 0.94 (0.56 to 0.69 in the Appalachians)"),
        "area_km2": Range(10 * KM2_PER_MI2, 10000 * KM2_PER_MI2, "10 to 10 000 mi2"),
    },
    limits="Appalachian Highlands; elsewhere Ct and Cp must come from gauged basins nearby",
)
def snyder(
    unit_duration_h: ArrayLike,
    area_km2: ArrayLike,
    path_length_m: ArrayLike,
    centroid_length_m: ArrayLike,
    ct: ArrayLike,
    cp: ArrayLike,
) -> UnitHydrographs:
    """Snyder's unit hydrographs.

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain [h].
    area_km2 : float or array, shape (n,)
        Drainage area [km2]; cancels out of the shape, kept for its range.
    path_length_m, centroid_length_m : float or array, shape (n,)
        See `snyder_lag_h` [m].
    ct, cp : float or array, shape (n,)
        Snyder's coefficients, US units [-].

    Returns
    -------
    UnitHydrographs
        Straight lines through the start, the widths at 50 and 75 % (a third of each before the peak, common
        practice), the peak and the base, which is placed so that the volume is 1.

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero, or peak and widths leave no room for a base.

    Examples
    --------
    >>> unit = snyder(1.0, 259.0, 18 * 1609.344, 10 * 1609.344, 1.8, 0.6)
    >>> round(float(unit.time_to_peak_h[0]), 2), round(float(unit.share.sum()), 9)
    (8.91, 1.0)
    """
    duration, lag, cp_rows = np.broadcast_arrays(
        np.atleast_1d(positive("unit_duration_h", unit_duration_h)),
        snyder_lag_h(path_length_m, centroid_length_m, ct),
        positive("cp", cp),
        positive("area_km2", area_km2),
    )[:3]
    lag = snyder_adjusted_lag_h(lag, duration)
    peak = snyder_peak_cfs_per_mi2_in(lag, cp_rows)
    time, ratio = _corners(lag + duration / 2.0, peak)
    offsets = row_offsets(np.ceil(time[:, -1] / duration - 1e-9).astype(np.int64) + 1)
    outlet = np.repeat(np.arange(duration.size), np.diff(offsets))
    at = step_numbers(offsets) * duration[outlet]
    flow = np.zeros(at.size)
    for corner in range(len(ratio) - 1):
        begin, end = time[outlet, corner], time[outlet, corner + 1]
        here = (at >= begin) & (at < end)
        slope = (ratio[corner + 1] - ratio[corner]) / (end - begin)
        flow[here] = (ratio[corner] + slope * (at - begin))[here]
    return normalised(offsets, flow, duration, lag + duration / 2.0, peak / VOLUME_FACTOR)


def _corners(peak_time_h: Floats, peak: Floats) -> tuple[Floats, tuple[float, ...]]:
    """Times of the corners of the polygon, shape (n, 7) [h], and their shares of the peak."""
    w50, w75 = snyder_widths_h(peak)
    rise_50, fall_50 = peak_time_h - w50 / 3.0, peak_time_h + w50 * 2.0 / 3.0
    rise_75, fall_75 = peak_time_h - w75 / 3.0, peak_time_h + w75 * 2.0 / 3.0
    # Areas under the corners up to the half-peak point of the falling limb, in peaks; the last triangle holds the rest.
    known = 0.25 * rise_50 + 0.625 * (w50 - w75) + 0.875 * w75
    base = fall_50 + 4.0 * (VOLUME_FACTOR / peak - known)
    wrong = (rise_50 <= 0.0) | (base <= fall_50)
    if wrong.any():
        raise RangeError(
            f"row {int(np.argmax(wrong))}: ct and cp: Snyder's peak and widths leave no volume for the rest of the "
            "unit hydrograph: check them against gauged basins"
        )
    times = np.stack((np.zeros_like(base), rise_50, rise_75, peak_time_h, fall_75, fall_50, base), axis=1)
    return times, (0.0, 0.5, 0.75, 1.0, 0.75, 0.5, 0.0)
