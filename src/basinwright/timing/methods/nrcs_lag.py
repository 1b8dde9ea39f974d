"""Time of concentration by the NRCS watershed lag."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive, within
from basinwright.registry import Range, Source, method
from basinwright.units import KM2_PER_AC, KM2_PER_MI2, M_PER_FT


def nrcs_lag_h(path_length_m: ArrayLike, curve_number: ArrayLike, basin_slope_pct: ArrayLike) -> Floats:
    """Watershed lag by Mockus's equation.

    Parameters
    ----------
    path_length_m : float or array
        Flow length [m].
    curve_number : float or array
        Curve number, class II, ratio 0.2 [-]: the equation's retardance.
    basin_slope_pct : float or array
        Average land slope of the basin [%].

    Returns
    -------
    float or array
        Lag [h].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero, or a curve number is over 100.

    Notes
    -----
    ``L = l^0.8 (S + 1)^0.7 / (1900 Y^0.5)``, ``S = 1000 / CN - 10``: h, ft, in, %; NEH 630 ch. 15 eq. 15-4a.

    Examples
    --------
    >>> round(float(nrcs_lag_h(5000.0, 75.0, 3.0)), 2)
    2.0
    """
    cn = within("curve_number", positive("curve_number", curve_number), 0.0, 100.0)
    length_ft = positive("path_length_m", path_length_m) / M_PER_FT
    return _lag_h(length_ft, 1000.0 / cn - 10.0, positive("basin_slope_pct", basin_slope_pct))


def _lag_h(length_ft: Floats, retention_in: Floats, slope_pct: Floats) -> Floats:
    return length_ft**0.8 * (retention_in + 1.0) ** 0.7 / (1900.0 * slope_pct**0.5)  # NEH 630 eq. 15-4a


@method(
    "timing",
    "nrcs_lag",
    name="NRCS watershed lag (Mockus 1961)",
    form="L = l^0.8 (S + 1)^0.7 / (1900 Y^0.5); h, ft, in, %; Tc = L / 0.6",
    inputs=("path_length_m", "curve_number", "basin_slope_pct"),
    source=Source(
        "USDA Natural Resources Conservation Service, National Engineering Handbook, Part 630, chapter 15, "
        "Time of Concentration",
        "May 2010",
        "eq. 15-3, 15-4a",
        "from memory of the print",
    ),
    valid_range={
        "curve_number": Range(50.0, 95.0, "CN 50 to 95"),
        "area_km2": Range(1.3 * KM2_PER_AC, 19.0 * KM2_PER_MI2, "1.3 ac to 19 mi2"),
    },
    limits="Fitted on 24 rural basins of 1.3 ac to 9.2 mi2, most under 2000 ac; Folmar and Miller (2000) found 19 mi2 "
    "a reasonable upper limit. Natural basins, not urban ones.",
)
def nrcs_lag_tc_h(path_length_m: ArrayLike, curve_number: ArrayLike, basin_slope_pct: ArrayLike) -> Floats:
    """Time of concentration from the watershed lag, ``Tc = L / 0.6`` (NEH 630 ch. 15 eq. 15-3).

    Parameters
    ----------
    path_length_m, curve_number, basin_slope_pct : float or array
        As in `nrcs_lag_h`.

    Returns
    -------
    float or array
        Time of concentration [h].

    Raises
    ------
    RangeError
        As in `nrcs_lag_h`.

    Examples
    --------
    >>> round(float(nrcs_lag_tc_h(5000.0, 75.0, 3.0)), 2)
    3.33
    """
    return nrcs_lag_h(path_length_m, curve_number, basin_slope_pct) / 0.6
