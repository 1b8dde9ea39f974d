"""Time of concentration by Témez (1978)."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method


@method(
    "timing",
    "temez",
    name="Témez (1978)",
    form="Tc = 0.3 (L / J^0.25)^0.76; h, km, m/m",
    inputs=("path_length_m", "path_slope_pct"),
    source=Source(
        "J. R. Témez, Cálculo hidrometeorológico de caudales máximos en pequeñas cuencas naturales, Dirección General "
        "de Carreteras, Madrid",
        "1978",
        "as adopted by Instrucción 5.2-IC, Drenaje superficial (1990)",
        "from memory of the Instrucción",
    ),
    valid_range={"area_km2": Range(1.0, 3000.0, "1 to 3000 km2")},
    limits="Natural basins in Spain with times between 0.25 and 24 h. J is in m/m; copies that put it in percent give "
    "less than half the time.",
)
def temez_tc_h(path_length_m: ArrayLike, path_slope_pct: ArrayLike) -> Floats:
    """Time of concentration by Témez.

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
    >>> round(float(temez_tc_h(5000.0, 3.0)), 2)
    1.98
    """
    length_km = positive("path_length_m", path_length_m) / 1000.0
    return _hours(length_km, positive("path_slope_pct", path_slope_pct) / 100.0)


def _hours(length_km: Floats, slope: Floats) -> Floats:
    return 0.3 * (length_km / slope**0.25) ** 0.76
