"""Time of concentration of overland flow by the kinematic wave."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.numbers import Floats, positive
from basinwright.registry import Range, Source, method
from basinwright.units import M_PER_FT, MM_PER_IN

_TOLERANCE = 1e-10
_MOST_ROUNDS = 100


def kinematic_wave_at_intensity_h(
    path_length_m: ArrayLike, path_slope_pct: ArrayLike, sheet_n: ArrayLike, intensity_mm_per_h: ArrayLike
) -> Floats:
    """Time to equilibrium of a plane under steady rain.

    Parameters
    ----------
    path_length_m : float or array
        Length of overland flow [m].
    path_slope_pct : float or array
        Its fall over its length [%].
    sheet_n : float or array
        Manning n of sheet flow [-].
    intensity_mm_per_h : float or array
        Rain intensity [mm/h].

    Returns
    -------
    float or array
        Time [h].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``t = 0.94 (n L)^0.6 / (i^0.4 S^0.3)``: min, ft, in/h, ft/ft. The theory gives ``t = (L / (alpha i^(2/3)))^0.6``
    with ``alpha = 1.486 S^0.5 / n``, which makes the constant 0.939; 0.933 also circulates.

    Examples
    --------
    >>> round(float(kinematic_wave_at_intensity_h(200 * 0.3048, 1.0, 0.015, 254.0)) * 60, 2)
    2.88
    """
    return (
        _minutes(
            positive("path_length_m", path_length_m) / M_PER_FT,
            positive("path_slope_pct", path_slope_pct) / 100.0,
            positive("sheet_n", sheet_n),
            positive("intensity_mm_per_h", intensity_mm_per_h) / MM_PER_IN,
        )
        / 60.0
    )


def _minutes(length_ft: Floats, slope: Floats, n: Floats, intensity_in_per_h: Floats) -> Floats:
    return 0.94 * (n * length_ft) ** 0.6 / (intensity_in_per_h**0.4 * slope**0.3)


@method(
    "timing",
    "kinematic_wave",
    name="Kinematic wave (Morgali and Linsley 1965)",
    form="Tc = 0.94 (n L)^0.6 / (i^0.4 S^0.3) with i the intensity of duration Tc; min, ft, in/h, ft/ft",
    inputs=("path_length_m", "path_slope_pct", "sheet_n", "intensity_mm_per_h"),
    source=Source(
        "J. R. Morgali and R. K. Linsley, Computer Analysis of Overland Flow, Journal of the Hydraulics Division, ASCE "
        "91(HY3)",
        "1965",
        "as reprinted by V. T. Chow, D. R. Maidment and L. W. Mays, Applied Hydrology, 1988, table 15.1.2",
        "from memory of that table",
    ),
    valid_range={"path_length_m": Range(0.0, 100.0 * M_PER_FT, "up to 100 ft (sheet flow, NEH 630 ch. 15, 2010)")},
    limits="Overland flow on a plane: a basin that is one sheet-flow reach. Needs a depth-duration-frequency table.",
)
def kinematic_wave_tc_h(
    path_length_m: ArrayLike,
    path_slope_pct: ArrayLike,
    sheet_n: ArrayLike,
    intensity_mm_per_h: Callable[[Floats], Floats],
) -> Floats:
    """Time of concentration by the kinematic wave, with the intensity whose duration is that time.

    Parameters
    ----------
    path_length_m, path_slope_pct, sheet_n : float or array
        As in `kinematic_wave_at_intensity_h`.
    intensity_mm_per_h : callable
        Mean intensity [mm/h] of the design rain by duration [h], on arrays.

    Returns
    -------
    float or array
        Time of concentration [h].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero, or no time satisfies both because the rain's intensity rises
        or its depth falls with duration.

    Notes
    -----
    The time is inserted into the intensity until it stands still. As long as intensity does not rise and depth does
    not fall with duration, each round shrinks the error at least to 0.4 of it.

    Examples
    --------
    A steady rain needs no search.

    >>> hours = kinematic_wave_tc_h(60.96, 1.0, 0.015, lambda duration_h: 254.0 + 0.0 * duration_h)
    >>> round(float(hours) * 60, 2)
    2.88
    """
    time_h = kinematic_wave_at_intensity_h(path_length_m, path_slope_pct, sheet_n, 25.4)
    for _ in range(_MOST_ROUNDS):
        before = time_h
        time_h = kinematic_wave_at_intensity_h(path_length_m, path_slope_pct, sheet_n, intensity_mm_per_h(before))
        if np.all(np.abs(time_h - before) <= _TOLERANCE * time_h):
            return time_h
    raise RangeError("intensity_mm_per_h finds no time: with duration, intensity must not rise and depth must not fall")
