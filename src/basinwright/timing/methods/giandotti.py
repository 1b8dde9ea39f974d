"""Time of concentration by Giandotti (1934)."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method


@method(
    "timing",
    "giandotti",
    name="Giandotti (1934)",
    form="Tc = (4 A^0.5 + 1.5 L) / (0.8 Hm^0.5); h, km2, km, m",
    inputs=("area_km2", "path_length_m", "mean_elevation_above_outlet_m"),
    source=Source(
        "M. Giandotti, Previsione delle piene e delle magre dei corsi d'acqua, Memorie e studi idrografici 8, Servizio "
        "Idrografico Italiano",
        "1934",
        "as used in Italian practice",
        "from secondary copies; a denominator of 25.3 (L S)^0.5 also circulates and is not the author's",
    ),
    valid_range={"area_km2": Range(170.0, 70000.0, "170 to 70 000 km2")},
    limits="Fitted on Italian basins; used far below its range in practice. Hm is the basin's mean elevation minus the "
    "outlet's.",
)
def giandotti_tc_h(area_km2: ArrayLike, path_length_m: ArrayLike, mean_elevation_above_outlet_m: ArrayLike) -> Floats:
    """Time of concentration by Giandotti.

    Parameters
    ----------
    area_km2 : float or array
        Drainage area [km2].
    path_length_m : float or array
        Length of the longest flow path [m].
    mean_elevation_above_outlet_m : float or array
        Mean elevation of the basin minus the elevation of the outlet [m].

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
    The Chisone at San Martino, Politecnico di Torino, course of hydrology 2012/2013; printed 6.212 h.

    >>> round(float(giandotti_tc_h(581.0, 56276.0, 1324.0)), 3)
    6.212
    """
    return _hours(
        positive("area_km2", area_km2),
        positive("path_length_m", path_length_m) / 1000.0,
        positive("mean_elevation_above_outlet_m", mean_elevation_above_outlet_m),
    )


def _hours(area_km2: Floats, length_km: Floats, mean_height_m: Floats) -> Floats:
    return (4.0 * area_km2**0.5 + 1.5 * length_km) / (0.8 * mean_height_m**0.5)
