"""Time of concentration by the Federal Aviation Administration (1970)."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive, within
from basinwright.registry import Range, Source, method
from basinwright.units import KM2_PER_AC, M_PER_FT


@method(
    "timing",
    "faa",
    name="Federal Aviation Administration (1970)",
    form="Tc = 1.8 (1.1 - C) L^0.5 / S^(1/3); min, ft, %",
    inputs=("path_length_m", "path_slope_pct", "runoff_coefficient"),
    source=Source(
        "U.S. Federal Aviation Administration, Airport Drainage, Advisory Circular 150/5320-5B",
        "1970",
        "as reprinted by V. T. Chow, D. R. Maidment and L. W. Mays, Applied Hydrology, 1988, table 15.1.2",
        "from memory of that table",
    ),
    valid_range={
        "area_km2": Range(0.0, 200.0 * KM2_PER_AC, "up to 200 ac (common practice for the rational method)"),
    },
    limits="From airfield drainage data of the Corps of Engineers; used for overland flow in urban basins. C is the "
    "runoff coefficient of the rational method.",
)
def faa_tc_h(path_length_m: ArrayLike, path_slope_pct: ArrayLike, runoff_coefficient: ArrayLike) -> Floats:
    """Time of concentration by the equation of the Federal Aviation Administration.

    Parameters
    ----------
    path_length_m : float or array
        Length of overland flow [m].
    path_slope_pct : float or array
        Its fall over its length [%].
    runoff_coefficient : float or array
        Coefficient of the rational method [-], 0 to 1.

    Returns
    -------
    float or array
        Time of concentration [h].

    Raises
    ------
    RangeError
        Where length or slope is not finite and above zero, or the coefficient is not between 0 and 1.

    Examples
    --------
    >>> round(float(faa_tc_h(200 * 0.3048, 2.0, 0.4)) * 60, 1)
    14.1
    """
    c = within("runoff_coefficient", runoff_coefficient, 0.0, 1.0)
    length_ft = positive("path_length_m", path_length_m) / M_PER_FT
    return _minutes(length_ft, positive("path_slope_pct", path_slope_pct), c) / 60.0


def _minutes(length_ft: Floats, slope_pct: Floats, c: Floats) -> Floats:
    return 1.8 * (1.1 - c) * length_ft**0.5 / slope_pct ** (1.0 / 3.0)
