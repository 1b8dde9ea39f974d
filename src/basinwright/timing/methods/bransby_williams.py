"""Time of concentration by Bransby Williams (1922)."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method


@method(
    "timing",
    "bransby_williams",
    name="Bransby Williams (1922)",
    form="Tc = 14.6 L / (A^0.1 S^0.2); min, km, km2, m/m",
    inputs=("path_length_m", "area_km2", "path_slope_pct"),
    source=Source(
        "G. Bransby Williams, Flood Discharge and the Dimensions of Spillways in India, The Engineer 134",
        "1922",
        "as reprinted in metric units",
        "from secondary copies; the original relation, as derived by A. Ladson (2017), gives 14.5",
    ),
    valid_range={"area_km2": Range(0.0, 130.0, "up to about 130 km2 (50 mi2)")},
    limits="Rural basins. S is the fall of the longest path over its length; Australian practice takes the equal-area "
    "slope.",
)
def bransby_williams_tc_h(path_length_m: ArrayLike, area_km2: ArrayLike, path_slope_pct: ArrayLike) -> Floats:
    """Time of concentration by Bransby Williams.

    Parameters
    ----------
    path_length_m : float or array
        Length of the longest flow path [m].
    area_km2 : float or array
        Drainage area [km2].
    path_slope_pct : float or array
        Fall of the path over its length [%].

    Returns
    -------
    float or array
        Time of concentration [h].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Examples
    --------
    >>> round(float(bransby_williams_tc_h(5000.0, 10.0, 3.0)) * 60)
    117
    """
    length_km = positive("path_length_m", path_length_m) / 1000.0
    return (
        _minutes(length_km, positive("area_km2", area_km2), positive("path_slope_pct", path_slope_pct) / 100.0) / 60.0
    )


def _minutes(length_km: Floats, area_km2: Floats, slope: Floats) -> Floats:
    return 14.6 * length_km / (area_km2**0.1 * slope**0.2)
