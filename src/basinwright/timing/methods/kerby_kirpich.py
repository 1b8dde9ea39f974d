"""Time of concentration by Kerby for overland flow and Kirpich for the channel."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method
from basinwright.timing.methods.kerby import OVERLAND_LENGTH, kerby_min
from basinwright.timing.methods.kirpich import kirpich_min
from basinwright.units import KM2_PER_MI2, M_PER_FT, M_PER_MI


@method(
    "timing",
    "kerby_kirpich",
    name="Kerby-Kirpich (Roussel et al. 2005)",
    form="Tc = 0.828 (Lo N)^0.467 So^-0.235 + 0.0078 (L - Lo)^0.77 S^-0.385; min, ft, ft/ft",
    inputs=("overland_length_m", "overland_slope_pct", "retardance_n", "path_length_m", "path_slope_pct"),
    source=Source(
        "M. C. Roussel, D. B. Thompson, X. Fang, T. G. Cleveland and C. A. Garcia, Time-Parameter Estimation for "
        "Applicable Texas Watersheds, Texas Department of Transportation Research Report 0-4696-2",
        "2005",
        "as applied in Texas Department of Transportation, Hydraulic Design Manual, ch. 4",
        "from a stored copy of the online manual",
    ),
    valid_range={
        "area_km2": Range(0.25 * KM2_PER_MI2, 150.0 * KM2_PER_MI2, "0.25 to 150 mi2"),
        "path_length_m": Range(1.0 * M_PER_MI, 50.0 * M_PER_MI, "1 to 50 mi"),
        "path_slope_pct": Range(0.2, 2.0, "0.002 to 0.02 ft/ft"),
        "overland_length_m": OVERLAND_LENGTH,
    },
    limits="Texas watersheds without low topographic slopes. S is the fall of the whole path over its length, as in "
    "the manual's example.",
)
def kerby_kirpich_tc_h(
    overland_length_m: ArrayLike,
    overland_slope_pct: ArrayLike,
    retardance_n: ArrayLike,
    path_length_m: ArrayLike,
    path_slope_pct: ArrayLike,
) -> Floats:
    """Time of concentration as Kerby's overland time plus Kirpich's time on the rest of the path.

    Parameters
    ----------
    overland_length_m : float or array
        Length of overland flow at the head of the path [m], at most 1200 ft.
    overland_slope_pct : float or array
        Its fall over its length [%].
    retardance_n : float or array
        Kerby's retardance N [-], table `kerby_retardance`.
    path_length_m : float or array
        Length of the whole longest flow path [m].
    path_slope_pct : float or array
        Fall of the whole path over its length [%].

    Returns
    -------
    float or array
        Time of concentration [h]; NaN where the overland part is longer than the path.

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Examples
    --------
    Texas Department of Transportation, Hydraulic Design Manual, ch. 4: a path of 5280 ft falls 50 ft, 500 ft of it
    overland at 2 % with N 0.40; printed about 57 min.

    >>> round(float(kerby_kirpich_tc_h(500 * 0.3048, 2.0, 0.40, 5280 * 0.3048, 100 * 50 / 5280)) * 60)
    57
    """
    overland_ft = positive("overland_length_m", overland_length_m) / M_PER_FT
    channel_ft = positive("path_length_m", path_length_m) / M_PER_FT - overland_ft
    overland_slope = positive("overland_slope_pct", overland_slope_pct) / 100.0
    overland_min = kerby_min(overland_ft, positive("retardance_n", retardance_n), overland_slope)
    slope = positive("path_slope_pct", path_slope_pct) / 100.0
    channel_min = kirpich_min(np.where(channel_ft < 0, np.nan, channel_ft), slope)
    return (overland_min + channel_min) / 60.0
