"""Time of concentration by Kirpich (1940)."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method
from basinwright.units import KM2_PER_AC, M_PER_FT

KIRPICH_AREA = Range(1.0 * KM2_PER_AC, 112.0 * KM2_PER_AC, "1 to 112 ac")
KIRPICH_SLOPE = Range(3.0, 10.0, "3 to 10 %")


def kirpich_min(length_ft: Floats, slope: Floats) -> Floats:
    """Return Kirpich's time [min] from length [ft] and slope [ft/ft], the form of Tennessee."""
    return 0.0078 * length_ft**0.77 * slope**-0.385


@method(
    "timing",
    "kirpich",
    name="Kirpich (1940)",
    form="Tc = 0.0078 L^0.77 S^-0.385; min, ft, ft/ft",
    inputs=("path_length_m", "path_slope_pct"),
    source=Source(
        "Z. P. Kirpich, Time of Concentration of Small Agricultural Watersheds, Civil Engineering 10(6)",
        "1940",
        "p. 362",
        "form of Tennessee, as reprinted by V. T. Chow, D. R. Maidment and L. W. Mays, Applied Hydrology, 1988, "
        "table 15.1.2; from memory of that table",
    ),
    valid_range={"area_km2": KIRPICH_AREA, "path_slope_pct": KIRPICH_SLOPE},
    limits="Fitted on seven rural basins in Tennessee with well-defined channels. L and S are those of the whole "
    "longest path, the usual practice. Reprints advise x 2 for overland flow on grass, x 0.4 on concrete or asphalt, "
    "x 0.2 for concrete channels: not applied here.",
)
def kirpich_tc_h(path_length_m: ArrayLike, path_slope_pct: ArrayLike) -> Floats:
    """Time of concentration by Kirpich, the form of Tennessee.

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
    Texas Department of Transportation, Hydraulic Design Manual, ch. 4: 4780 ft at 50/5280; printed about 32 min.

    >>> round(float(kirpich_tc_h(4780 * 0.3048, 100 * 50 / 5280)) * 60)
    32
    """
    length_ft = positive("path_length_m", path_length_m) / M_PER_FT
    return kirpich_min(length_ft, positive("path_slope_pct", path_slope_pct) / 100.0) / 60.0
