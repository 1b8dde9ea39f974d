"""Time of concentration by the California Culverts Practice (1942)."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Source, method
from basinwright.timing.methods.kirpich import KIRPICH_AREA, KIRPICH_SLOPE
from basinwright.units import M_PER_FT, M_PER_MI


@method(
    "timing",
    "california_culverts",
    name="California Culverts Practice (1942)",
    form="Tc = (11.9 L^3 / H)^0.385; h, mi, ft",
    inputs=("path_length_m", "path_slope_pct"),
    source=Source(
        "California Division of Highways, California Culverts Practice",
        "1942",
        "as reprinted by V. T. Chow, D. R. Maidment and L. W. Mays, Applied Hydrology, 1988, table 15.1.2",
        "from memory of that table",
    ),
    valid_range={"area_km2": KIRPICH_AREA, "path_slope_pct": KIRPICH_SLOPE},
    limits="Essentially Kirpich's equation (the same within 0.2 %), put forward for small mountainous basins in "
    "California; Kirpich's data are taken as its range. H is the fall of the longest path from divide to outlet.",
)
def california_culverts_tc_h(path_length_m: ArrayLike, path_slope_pct: ArrayLike) -> Floats:
    """Time of concentration by the California Culverts Practice.

    Parameters
    ----------
    path_length_m : float or array
        Length of the longest flow path [m].
    path_slope_pct : float or array
        Fall of the path over its length [%]; with the length it gives H.

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
    >>> round(float(california_culverts_tc_h(5000.0, 3.0)), 2)
    0.88
    """
    length_m = positive("path_length_m", path_length_m)
    fall_ft = length_m * positive("path_slope_pct", path_slope_pct) / 100.0 / M_PER_FT
    return _hours(length_m / M_PER_MI, fall_ft)


def _hours(length_mi: Floats, fall_ft: Floats) -> Floats:
    return (11.9 * length_mi**3 / fall_ft) ** 0.385
