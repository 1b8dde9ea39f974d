"""Shallow concentrated flow: velocity from slope and cover.

Source: USDA NRCS, National Engineering Handbook, Part 630, chapter 15 (May 2010), table 15-3 and figure 15-4.
The table `shallow_flow_neh` carries the coefficients.
"""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.numbers import Floats, positive
from basinwright.published import table
from basinwright.units import M_PER_FT

SHALLOW_FLOW_SOURCE = "NEH 630 ch. 15 (2010) table 15-3"


@cache
def shallow_coefficients_mps() -> dict[str, float]:
    """Velocity over root slope [m/s] by category, in the order of NEH 630 ch. 15 table 15-3.

    Returns
    -------
    dict
        Key of the table `shallow_flow_neh` -> coefficient [m/s].

    Examples
    --------
    >>> round(shallow_coefficients_mps()["short_grass"] / 0.3048, 3)
    6.962
    """
    rows = table("shallow_flow_neh").rows
    return {row["key"]: float(row["velocity_per_root_slope_fps"]) * M_PER_FT for row in rows}


def shallow_coefficient_mps(category: str) -> float:
    """Velocity over root slope of one category.

    Parameters
    ----------
    category : str
        Key of the table `shallow_flow_neh`.

    Returns
    -------
    float
        Coefficient [m/s].

    Raises
    ------
    RangeError
        Where the category is unknown; names all of them.

    Examples
    --------
    >>> round(shallow_coefficient_mps("pavement"), 3)
    6.196
    """
    known = shallow_coefficients_mps()
    if category not in known:
        raise RangeError(f"category is {category!r}: it must be one of {', '.join(known)}")
    return known[category]


def shallow_velocity_mps(coefficient_mps: ArrayLike, slope: ArrayLike) -> Floats:
    """Velocity of shallow concentrated flow.

    Parameters
    ----------
    coefficient_mps : float or array
        Velocity over root slope [m/s], see `shallow_coefficient_mps`.
    slope : float or array
        Fall over length [m/m].

    Returns
    -------
    float or array
        Velocity [m/s].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``V = k sqrt(S)``, k in ft/s in the table; on slopes under about 0.005 the figure of the handbook is an
    extrapolation (it starts there).

    Examples
    --------
    Technical Release 55 (1986), example 3-1: unpaved, slope 0.01; printed 1.6 ft/s.

    >>> round(float(shallow_velocity_mps(shallow_coefficient_mps("grassed_waterway"), 0.01)) / 0.3048, 1)
    1.6
    """
    return positive("coefficient_mps", coefficient_mps) * np.sqrt(positive("slope", slope))
