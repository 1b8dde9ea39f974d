"""Dimensionless unit hydrographs scaled by time to peak and peak rate factor.

Each is a curve of q/qp over t/Tp with ``qp = PRF A Q / Tp``. Its ordinates are read at multiples of the unit duration
and scaled so that their volume is 1.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike

from basinwright.hydrograph.unit_hydrograph import (
    PEAK_RATE_FACTOR,
    VOLUME_FACTOR,
    UnitHydrographs,
    normalised,
    row_offsets,
    step_numbers,
)
from basinwright.numbers import Floats, Integers, not_negative, positive, within
from basinwright.published import table
from basinwright.registry import Range, Source, method

_NEH_16 = "U.S. Natural Resources Conservation Service, National Engineering Handbook Part 630, chapter 16"

PEAK_RATE_FACTORS = (100.0, 600.0)
"""Range of peak rate factors (NEH 630 ch. 16): very flat and swampy to steep; from memory of the print."""

DELMARVA_PEAK_RATE_FACTOR = 284.0

TRIANGLE_BASE = 8.0 / 3.0
"""Base over time to peak, printed 2.67: the base that gives the triangle the volume 1 with a factor of 484."""

_GAMMA_END = 1e-5
"""A gamma hydrograph ends where its flow falls under this share of the peak."""


def _sampled(
    unit_duration_h: ArrayLike,
    time_to_peak_h: ArrayLike,
    base_over_peak_time: Floats | float,
    ratio_at: Callable[[Floats, Integers], Floats],
    peak_rate_factor: Floats | float,
) -> UnitHydrographs:
    """Read a dimensionless curve at multiples of the unit duration of each outlet.

    ``ratio_at(time_ratio, outlet)`` gives q/qp at t/Tp for the outlet of each ordinate.
    """
    duration, peak_time = np.broadcast_arrays(
        np.atleast_1d(positive("unit_duration_h", unit_duration_h)),
        np.atleast_1d(positive("time_to_peak_h", time_to_peak_h)),
    )
    # A base that is a whole number of steps but for a rounding needs no further step.
    steps = np.ceil(base_over_peak_time * peak_time / duration - 1e-9).astype(np.int64)
    offsets = row_offsets(np.maximum(steps, 1) + 1)
    outlet = np.repeat(np.arange(duration.size), np.diff(offsets))
    time_ratio = step_numbers(offsets) * duration[outlet] / peak_time[outlet]
    ratio = np.where(
        time_ratio < np.broadcast_to(base_over_peak_time, duration.shape)[outlet], ratio_at(time_ratio, outlet), 0.0
    )
    return normalised(offsets, ratio, duration, peak_time, peak_rate_factor / VOLUME_FACTOR / peak_time)


@method(
    "unit_hydrograph",
    "curvilinear",
    name="NRCS curvilinear dimensionless unit hydrograph",
    form="q/qp by t/Tp from table 16-1; qp = 484 A Q / Tp (cfs, mi2, in, h); base 5 Tp",
    inputs=("unit_duration_h", "time_to_peak_h"),
    source=table("dimensionless_uh_neh_16_1").source,
    limits="average of many small agricultural basins; steep or very flat basins have other peak rate factors",
)
def curvilinear(unit_duration_h: ArrayLike, time_to_peak_h: ArrayLike) -> UnitHydrographs:
    """NRCS curvilinear unit hydrographs.

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain [h].
    time_to_peak_h : float or array, shape (n,)
        Time to peak [h].

    Returns
    -------
    UnitHydrographs

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Examples
    --------
    >>> unit = curvilinear(0.1, 1.0)
    >>> (unit.share / unit.share.max()).round(3)[[2, 5, 10, 15, 20]].tolist()
    [0.1, 0.47, 1.0, 0.68, 0.28]
    """
    return _sampled(
        unit_duration_h, time_to_peak_h, 5.0, lambda time_ratio, _: curvilinear_ratio(time_ratio), PEAK_RATE_FACTOR
    )


def curvilinear_ratio(time_ratio: ArrayLike) -> Floats:
    """Flow over peak flow of the NRCS curvilinear unit hydrograph.

    Parameters
    ----------
    time_ratio : float or array
        Time over time to peak, t/Tp [-].

    Returns
    -------
    float or array
        q/qp, linear between the rows of NEH 630 ch. 16 table 16-1, 0 from t/Tp 5 on [-].

    Raises
    ------
    RangeError
        Where a ratio is negative or not finite.

    Examples
    --------
    >>> curvilinear_ratio([0.5, 1.0, 1.5, 5.0]).tolist()
    [0.47, 1.0, 0.68, 0.0]
    """
    return _tabulated("dimensionless_uh_neh_16_1", time_ratio)


def _tabulated(name: str, time_ratio: ArrayLike) -> Floats:
    published = table(name)
    times, ratios = published.floats("time_ratio"), published.floats("flow_ratio")
    return np.interp(not_negative("time_ratio", time_ratio), times, ratios, right=0.0)


@method(
    "unit_hydrograph",
    "triangular",
    name="NRCS triangular unit hydrograph",
    form="rises to qp at Tp and falls to 0 at 2.67 Tp; qp = 484 A Q / Tp (cfs, mi2, in, h)",
    inputs=("unit_duration_h", "time_to_peak_h"),
    source=Source(_NEH_16, "2007", "figure 16-1, eq. 16-6", "from memory; the base is 8/3 where 2.67 is printed"),
    limits="the same volume under the rising limb as the curvilinear one, without its tail",
)
def triangular(unit_duration_h: ArrayLike, time_to_peak_h: ArrayLike) -> UnitHydrographs:
    """NRCS triangular unit hydrographs (parameters as `curvilinear`).

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain [h].
    time_to_peak_h : float or array, shape (n,)
        Time to peak [h].

    Returns
    -------
    UnitHydrographs

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Examples
    --------
    >>> unit = triangular(1.0, 3.0)
    >>> (unit.share * 12).round(9).tolist()
    [0.0, 1.0, 2.0, 3.0, 2.4, 1.8, 1.2, 0.6, 0.0]
    """
    return _sampled(
        unit_duration_h,
        time_to_peak_h,
        TRIANGLE_BASE,
        lambda time_ratio, _: triangular_ratio(time_ratio),
        PEAK_RATE_FACTOR,
    )


def triangular_ratio(time_ratio: ArrayLike) -> Floats:
    """Flow over peak flow of the NRCS triangular unit hydrograph.

    Parameters
    ----------
    time_ratio : float or array
        Time over time to peak, t/Tp [-].

    Returns
    -------
    float or array
        q/qp [-].

    Raises
    ------
    RangeError
        Where a ratio is negative or not finite.

    Examples
    --------
    >>> triangular_ratio([0.5, 1.0, 11 / 6, 3.0]).round(9).tolist()
    [0.5, 1.0, 0.5, 0.0]
    """
    ratio = not_negative("time_ratio", time_ratio)
    return np.maximum(np.minimum(ratio, (TRIANGLE_BASE - ratio) / (TRIANGLE_BASE - 1.0)), 0.0)


@method(
    "unit_hydrograph",
    "gamma",
    name="Gamma unit hydrograph of any peak rate factor",
    form="q/qp = [(t/Tp) exp(1 - t/Tp)]^m; PRF = 645.33 m^(m+1) e^(-m) / Gamma(m+1)",
    inputs=("unit_duration_h", "time_to_peak_h", "peak_rate_factor"),
    source=Source(_NEH_16, "2007", "appendix 16B, table 16B-5", "from memory; PRF 400 agrees with a secondary copy"),
    valid_range={"peak_rate_factor": Range(*PEAK_RATE_FACTORS, "100 to 600")},
    limits="the analyst chooses the factor: 600 for steep, 484 for average, 300 and less for flat basins",
)
def gamma(unit_duration_h: ArrayLike, time_to_peak_h: ArrayLike, peak_rate_factor: ArrayLike) -> UnitHydrographs:
    """Gamma unit hydrographs.

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain [h].
    time_to_peak_h : float or array, shape (n,)
        Time to peak [h].
    peak_rate_factor : float or array, shape (n,)
        Peak rate factor [cfs h / (mi2 in)].

    Returns
    -------
    UnitHydrographs
        Ending where the flow falls under 1e-5 of the peak.

    Raises
    ------
    RangeError
        Where a duration or time is not above zero, or a factor is outside 1 to 2000.

    Examples
    --------
    NEH 630 table 16B-5, factor 400: q/qp at t/Tp 0.5 and 1.5; printed .6081 and .7839.

    >>> unit = gamma(0.1, 1.0, 400.0)
    >>> (unit.share / unit.share.max()).round(3)[[5, 15]].tolist()
    [0.608, 0.784]
    """
    times = np.broadcast_arrays(np.atleast_1d(unit_duration_h), time_to_peak_h, peak_rate_factor)
    factors = times[2].astype(np.float64)
    exponent = gamma_exponent(factors)
    return _sampled(
        times[0],
        times[1],
        _gamma_base(exponent),
        lambda time_ratio, outlet: _gamma_ratio(time_ratio, exponent[outlet]),
        factors,
    )


def gamma_ratio(time_ratio: ArrayLike, peak_rate_factor: ArrayLike) -> Floats:
    """Flow over peak flow of the gamma unit hydrograph.

    Parameters
    ----------
    time_ratio : float or array
        Time over time to peak, t/Tp [-].
    peak_rate_factor : float or array
        Peak rate factor [cfs h / (mi2 in)].

    Returns
    -------
    float or array
        q/qp [-].

    Raises
    ------
    RangeError
        Where a ratio is negative or not finite, or a factor is outside 1 to 2000.

    Examples
    --------
    NEH 630 table 16B-5, factor 400: printed .6081 at t/Tp 0.5.

    >>> round(float(gamma_ratio(0.5, 400.0)), 3)
    0.608
    """
    return _gamma_ratio(not_negative("time_ratio", time_ratio), gamma_exponent(peak_rate_factor))


def _gamma_ratio(time_ratio: Floats, exponent: Floats) -> Floats:
    return (time_ratio * np.exp(1.0 - time_ratio)) ** exponent


def _gamma_base(exponent: Floats) -> Floats:
    """Ratio t/Tp after the peak at which a gamma hydrograph has fallen to `_GAMMA_END` of it."""
    # x - ln x = 1 + ln(1 / end) / m, solved by its own iteration, which contracts by 1/x for x over 1.
    right = 1.0 - np.log(_GAMMA_END) / exponent
    base = right.copy()
    for _ in range(100):
        base = right + np.log(base)
    return base


def peak_rate_factor(exponent: ArrayLike) -> Floats:
    """Peak rate factor of a gamma unit hydrograph from its exponent.

    Parameters
    ----------
    exponent : float or array
        Exponent m [-].

    Returns
    -------
    float or array
        Peak rate factor [cfs h / (mi2 in)].

    Raises
    ------
    RangeError
        Where the exponent is not finite and above zero.

    Notes
    -----
    ``PRF = 645.33 m^(m+1) e^(-m) / Gamma(m+1)`` (NEH 630 ch. 16 app. 16B; C. T. Haan, B. J. Barfield and J. C. Hayes,
    Design Hydrology and Sedimentology for Small Catchments, 1994).

    Examples
    --------
    >>> round(float(peak_rate_factor(3.7)), 1)
    484.2
    """
    return np.vectorize(_factor, otypes=[np.float64])(positive("exponent", exponent))


def _factor(m: float) -> float:
    return VOLUME_FACTOR * math.exp((m + 1.0) * math.log(m) - m - math.lgamma(m + 1.0))


def gamma_exponent(peak_rate_factor: ArrayLike) -> Floats:
    """Exponent of the gamma unit hydrograph with a given peak rate factor: the inverse of `peak_rate_factor`.

    Parameters
    ----------
    peak_rate_factor : float or array
        Peak rate factor [cfs h / (mi2 in)], 1 to 2000.

    Returns
    -------
    float or array
        Exponent m [-].

    Raises
    ------
    RangeError
        Where a factor is outside 1 to 2000.

    Examples
    --------
    >>> round(float(gamma_exponent(484.0)), 4)
    3.6969
    """
    factors = within("peak_rate_factor", peak_rate_factor, 1.0, 2000.0)
    different, which = np.unique(factors, return_inverse=True)
    return np.array([_exponent(float(factor)) for factor in different])[which].reshape(factors.shape)


def _exponent(factor: float) -> float:
    # The factor rises with the exponent; halve the interval of its logarithm until it cannot be halved.
    low, high = math.log(1e-6), math.log(1e3)
    while True:
        middle = 0.5 * (low + high)
        if middle in (low, high):
            return math.exp(middle)
        if _factor(math.exp(middle)) < factor:
            low = middle
        else:
            high = middle


@method(
    "unit_hydrograph",
    "delmarva",
    name="Delmarva dimensionless unit hydrograph (Welle, Woodward and Moody 1980)",
    form="q/qp by t/Tp from the table; qp = 284 A Q / Tp (cfs, mi2, in, h); base 9.8 Tp",
    inputs=("unit_duration_h", "time_to_peak_h"),
    source=table("dimensionless_uh_delmarva").source,
    limits="flat coastal plain: the Delmarva peninsula and land like it",
)
def delmarva(unit_duration_h: ArrayLike, time_to_peak_h: ArrayLike) -> UnitHydrographs:
    """Delmarva unit hydrographs, for flat coastal plains.

    Parameters
    ----------
    unit_duration_h : float or array, shape (n,)
        Duration of the excess rain [h].
    time_to_peak_h : float or array, shape (n,)
        Time to peak [h].

    Returns
    -------
    UnitHydrographs

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Examples
    --------
    >>> unit = delmarva(0.2, 1.0)
    >>> (unit.share / unit.share.max()).round(3)[[1, 5, 10]].tolist()
    [0.111, 1.0, 0.584]
    """
    return _sampled(
        unit_duration_h,
        time_to_peak_h,
        9.8,
        lambda time_ratio, _: delmarva_ratio(time_ratio),
        DELMARVA_PEAK_RATE_FACTOR,
    )


def delmarva_ratio(time_ratio: ArrayLike) -> Floats:
    """Flow over peak flow of the Delmarva unit hydrograph.

    Parameters
    ----------
    time_ratio : float or array
        Time over time to peak, t/Tp [-].

    Returns
    -------
    float or array
        q/qp, linear between the published ordinates, 0 from t/Tp 9.8 on [-].

    Raises
    ------
    RangeError
        Where a ratio is negative or not finite.

    Examples
    --------
    >>> delmarva_ratio([0.2, 1.0, 2.0]).tolist()
    [0.111, 1.0, 0.584]
    """
    return _tabulated("dimensionless_uh_delmarva", time_ratio)
