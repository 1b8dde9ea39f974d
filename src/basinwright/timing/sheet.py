"""Sheet flow: its travel time, and the length beyond which it concentrates.

Source: USDA NRCS, National Engineering Handbook, Part 630, chapter 15 (May 2010), from Overton and Meadows (1976)
and Welle and Woodward (1986); the same form stands in Technical Release 55 (1986), equation 3-3.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.units import M_PER_FT, MM_PER_IN

SHEET_FLOW_SOURCE = "NEH 630 ch. 15 (2010) eq. 15-8"


def sheet_flow_time_h(
    length_m: ArrayLike, roughness_n: ArrayLike, two_year_depth_mm: ArrayLike, slope: ArrayLike
) -> Floats:
    """Travel time of sheet flow, kinematic form of the NRCS.

    Parameters
    ----------
    length_m : float or array
        Length of the sheet reach [m].
    roughness_n : float or array
        Manning n of sheet flow [-], NEH 630 table 15-1: not that of channels.
    two_year_depth_mm : float or array
        2-year 24-hour rainfall [mm].
    slope : float or array
        Fall over length [m/m].

    Returns
    -------
    float or array
        Travel time [h].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``T = 0.007 (n l)^0.8 / (P2^0.5 S^0.4)``: h, ft, in, ft/ft. The time grows as length^0.8: a reach must not be
    cut and its pieces added.

    Examples
    --------
    Technical Release 55 (1986), example 3-1: dense grass, 100 ft at 0.01, 3.6 in; printed 0.30 h.

    >>> round(float(sheet_flow_time_h(30.48, 0.24, 91.44, 0.01)), 2)
    0.3
    """
    return _kinematic_h(
        positive("length_m", length_m) / M_PER_FT,
        positive("roughness_n", roughness_n),
        positive("two_year_depth_mm", two_year_depth_mm) / MM_PER_IN,
        positive("slope", slope),
    )


def _kinematic_h(length_ft: Floats, n: Floats, depth_in: Floats, slope: Floats) -> Floats:
    return 0.007 * (n * length_ft) ** 0.8 / (depth_in**0.5 * slope**0.4)  # NEH 630 eq. 15-8


def sheet_limit_m(roughness_n: ArrayLike, slope: ArrayLike) -> Floats:
    """Length at which sheet flow becomes concentrated, by McCuen and Spiess.

    Parameters
    ----------
    roughness_n : float or array
        Manning n of sheet flow [-].
    slope : float or array
        Fall over length [m/m].

    Returns
    -------
    float or array
        Largest length of sheet flow [m].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``l = 100 sqrt(S) / n``: ft, ft/ft. R. H. McCuen and J. M. Spiess, Assessment of Kinematic Wave Time of
    Concentration, J. Hydraul. Eng. 121(3), 1995; NEH 630 ch. 15 eq. 15-9, which also holds sheet flow to 100 ft.

    Examples
    --------
    NEH 630 ch. 15 table 15-2: range, n 0.13, slope 0.01: 77 ft.

    >>> round(float(sheet_limit_m(0.13, 0.01)) / 0.3048)
    77
    """
    limit_ft = 100.0 * np.sqrt(positive("slope", slope)) / positive("roughness_n", roughness_n)  # NEH 630 eq. 15-9
    return limit_ft * M_PER_FT
