"""Time of concentration by Johnstone and Cross (1949)."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method
from basinwright.units import KM2_PER_MI2, M_PER_FT, M_PER_MI


@method(
    "timing",
    "johnstone_cross",
    name="Johnstone and Cross (1949)",
    form="Tc = 5 (L / S)^0.5; h, mi, ft/mi",
    inputs=("path_length_m", "path_slope_pct"),
    source=Source(
        "D. Johnstone and W. P. Cross, Elements of Applied Hydrology, Ronald Press",
        "1949",
        "as reprinted in surveys of the time of concentration",
        "from memory of reprints",
    ),
    valid_range={"area_km2": Range(25.0 * KM2_PER_MI2, 1624.0 * KM2_PER_MI2, "25 to 1624 mi2")},
    limits="Fitted on basins of the Scioto and Sandusky rivers, Ohio. L and S are those of the longest path.",
)
def johnstone_cross_tc_h(path_length_m: ArrayLike, path_slope_pct: ArrayLike) -> Floats:
    """Time of concentration by Johnstone and Cross.

    Parameters
    ----------
    path_length_m : float or array
        Length of the longest flow path [m].
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
    >>> round(float(johnstone_cross_tc_h(5000.0, 3.0)) * 60)
    42
    """
    length_mi = positive("path_length_m", path_length_m) / M_PER_MI
    return _hours(length_mi, positive("path_slope_pct", path_slope_pct) / 100.0 * (M_PER_MI / M_PER_FT))


def _hours(length_mi: Floats, slope_ft_per_mi: Floats) -> Floats:
    return 5.0 * (length_mi / slope_ft_per_mi) ** 0.5
