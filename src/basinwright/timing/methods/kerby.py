"""Time of concentration of overland flow by Kerby (1959)."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method
from basinwright.units import KM2_PER_AC, M_PER_FT

OVERLAND_LENGTH = Range(0.0, 1200.0 * M_PER_FT, "up to 1200 ft")


def kerby_min(length_ft: Floats, retardance: Floats, slope: Floats) -> Floats:
    """Return Kerby's time [min] from length [ft], retardance [-] and slope [ft/ft]."""
    return 0.828 * (length_ft * retardance) ** 0.467 * slope**-0.235


@method(
    "timing",
    "kerby",
    name="Kerby (1959)",
    form="Tc = 0.828 (L N)^0.467 S^-0.235; min, ft, ft/ft",
    inputs=("path_length_m", "path_slope_pct", "retardance_n"),
    source=Source(
        "W. S. Kerby, Time of Concentration for Overland Flow, Civil Engineering 29(3)",
        "1959",
        "p. 174",
        "form of Texas Department of Transportation, Hydraulic Design Manual, ch. 4, eq. 4-14, from a stored copy of "
        "the online manual",
    ),
    valid_range={
        "path_length_m": OVERLAND_LENGTH,
        "area_km2": Range(0.0, 10.0 * KM2_PER_AC, "up to 10 ac"),
        "path_slope_pct": Range(0.0, 1.0, "up to 1 %"),
    },
    limits="Overland flow only: a basin without channels. N is Kerby's retardance (table kerby_retardance), not a "
    "Manning n, and is not interpolated between rows.",
)
def kerby_tc_h(path_length_m: ArrayLike, path_slope_pct: ArrayLike, retardance_n: ArrayLike) -> Floats:
    """Time of concentration of overland flow by Kerby.

    Parameters
    ----------
    path_length_m : float or array
        Length of overland flow [m].
    path_slope_pct : float or array
        Its fall over its length [%].
    retardance_n : float or array
        Kerby's retardance N [-], table `kerby_retardance`.

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
    Texas Department of Transportation, Hydraulic Design Manual, ch. 4: 500 ft at 2 %, N 0.40; printed about 25 min.

    >>> round(float(kerby_tc_h(500 * 0.3048, 2.0, 0.40)) * 60)
    25
    """
    length_ft = positive("path_length_m", path_length_m) / M_PER_FT
    slope = positive("path_slope_pct", path_slope_pct) / 100.0
    return kerby_min(length_ft, positive("retardance_n", retardance_n), slope) / 60.0
