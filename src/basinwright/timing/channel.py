"""Channels, lined channels and pipes: section, roughness and mean velocity.

Manning's constant is 1.486 in US units, as NEH 630 chapter 15 (2010) writes it and as its table 15-3 was computed.
Technical Release 55 (1986) rounds it to 1.49, which makes every velocity 0.27 % higher. The exact conversion of the
metric form, 0.3048^(-1/3), is 1.48592: 1.486 differs from it by 0.005 %.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from basinwright.numbers import Floats, not_negative, positive
from basinwright.units import M_PER_FT

GRAVITY_MPS2 = 9.80665
"""Standard acceleration of gravity [m/s2], exact by convention (NIST SP 330, 2019)."""

JARRETT_SLOPE = (0.002, 0.04)
"""Friction slopes of Jarrett's data [m/m]."""
JARRETT_HYDRAULIC_RADIUS_M = (0.5 * M_PER_FT, 7.0 * M_PER_FT)
"""Hydraulic radii of Jarrett's data [m], printed 0.5 to 7 ft."""


def manning_velocity_mps(hydraulic_radius_m: ArrayLike, slope: ArrayLike, roughness_n: ArrayLike) -> Floats:
    """Mean velocity by Manning's equation.

    Parameters
    ----------
    hydraulic_radius_m : float or array
        Flow area over wetted perimeter [m].
    slope : float or array
        Friction slope [m/m]; the bed slope in uniform flow.
    roughness_n : float or array
        Manning n [-].

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
    ``V = 1.486 / n R^(2/3) S^(1/2)``: ft/s, ft (NEH 630 ch. 15 eq. 15-10).

    Examples
    --------
    Technical Release 55 (1986), example 3-1: r 0.957 ft, s 0.005, n 0.05; printed 2.05 ft/s with 1.49 for 1.486.

    >>> round(float(manning_velocity_mps(0.957 * 0.3048, 0.005, 0.05)) / 0.3048 * 1.49 / 1.486, 2)
    2.05
    """
    radius_ft = positive("hydraulic_radius_m", hydraulic_radius_m) / M_PER_FT
    return _manning_fps(radius_ft, positive("slope", slope), positive("roughness_n", roughness_n)) * M_PER_FT


def _manning_fps(radius_ft: Floats, slope: Floats, n: Floats) -> Floats:
    return 1.486 / n * radius_ft ** (2.0 / 3.0) * slope**0.5  # NEH 630 eq. 15-10


def hydraulic_radius_m(width_m: ArrayLike, depth_m: ArrayLike, side_slope: ArrayLike = 0.0) -> Floats:
    """Hydraulic radius of a rectangular or trapezoidal section.

    Parameters
    ----------
    width_m : float or array
        Width at the bottom [m].
    depth_m : float or array
        Depth of flow [m].
    side_slope : float or array
        Horizontal over vertical of both sides [m/m]; 0 is a rectangle.

    Returns
    -------
    float or array
        Flow area over wetted perimeter [m].

    Raises
    ------
    RangeError
        Where width or depth is not above zero, or the side slope is negative.

    Notes
    -----
    ``R = (W + z D) D / (W + 2 D sqrt(1 + z^2))``; a rectangle gives ``W D / (W + 2 D)``.

    Examples
    --------
    Half a square of side 2 m, the hydraulically best rectangle: R is half the depth.

    >>> float(hydraulic_radius_m(2.0, 1.0))
    0.5
    """
    w, d = positive("width_m", width_m), positive("depth_m", depth_m)
    z = not_negative("side_slope", side_slope)
    return (w + z * d) * d / (w + 2.0 * d * np.sqrt(1.0 + z * z))


def full_pipe_velocity_mps(diameter_m: ArrayLike, slope: ArrayLike, roughness_n: ArrayLike) -> Floats:
    """Velocity of a circular pipe flowing full, by Manning's equation.

    Parameters
    ----------
    diameter_m : float or array
        Inside diameter [m].
    slope : float or array
        Slope of the hydraulic grade line [m/m].
    roughness_n : float or array
        Manning n [-].

    Returns
    -------
    float or array
        Velocity [m/s]; a pipe flowing half full has the same.

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    `manning_velocity_mps` with the hydraulic radius of the full circle, a quarter of the diameter. The discharge
    form that pipe handbooks print is ``Q = 0.463 / n D^(8/3) S^(1/2)``: cfs, ft.

    Examples
    --------
    A 24-inch pipe, n 0.013, slope 0.01: Q is 22.6 cfs by the discharge form, 7.2 ft/s over 3.14 ft2.

    >>> round(float(full_pipe_velocity_mps(0.6096, 0.01, 0.013)) / 0.3048, 1)
    7.2
    """
    return manning_velocity_mps(positive("diameter_m", diameter_m) / 4.0, slope, roughness_n)


def composite_roughness_n(wetted_perimeter_m: ArrayLike, roughness_n: ArrayLike) -> float:
    """Roughness of a section whose parts differ, by Horton and Einstein.

    Parameters
    ----------
    wetted_perimeter_m : array, shape (parts,)
        Wetted perimeter of each part [m].
    roughness_n : array, shape (parts,)
        Manning n of each part [-].

    Returns
    -------
    float
        Manning n of the whole section [-].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``n = (sum(P_i n_i^1.5) / P)^(2/3)``: each part is taken to flow at the mean velocity of the whole. V. T. Chow,
    Open-Channel Hydraulics, 1959, eq. 6-17, after Horton (1933) and Einstein (1934).

    Examples
    --------
    >>> round(composite_roughness_n([3.0, 3.0], [0.04, 0.04]), 6)
    0.04
    """
    perimeter = positive("wetted_perimeter_m", wetted_perimeter_m)
    n = positive("roughness_n", roughness_n)
    return float((np.sum(perimeter * n**1.5) / np.sum(perimeter)) ** (2.0 / 3.0))


def jarrett_roughness_n(slope: ArrayLike, hydraulic_radius_m: ArrayLike) -> Floats:
    """Manning n of steep natural channels, by Jarrett (1984).

    Parameters
    ----------
    slope : float or array
        Friction slope [m/m].
    hydraulic_radius_m : float or array
        Hydraulic radius [m].

    Returns
    -------
    float or array
        Manning n [-].

    Raises
    ------
    RangeError
        Where an argument is not finite and above zero.

    Notes
    -----
    ``n = 0.39 S^0.38 R^-0.16``: ft. R. D. Jarrett, Hydraulics of High-Gradient Streams, J. Hydraul. Eng. 110(11),
    1984, from 75 measurements on 21 reaches in Colorado; from memory of the paper. Its companion for velocity,
    ``V = 3.81 R^0.83 S^0.12`` (ft/s, ft), is Manning's equation with this n.

    Fitted on slopes of 0.002 to 0.04 and hydraulic radii of 0.5 to 7 ft (`JARRETT_SLOPE`,
    `JARRETT_HYDRAULIC_RADIUS_M`), stable beds of cobbles and boulders, no backwater.

    Examples
    --------
    >>> round(float(jarrett_roughness_n(0.02, 0.6096)), 3)
    0.079
    """
    radius_ft = positive("hydraulic_radius_m", hydraulic_radius_m) / M_PER_FT
    return 0.39 * positive("slope", slope) ** 0.38 * radius_ft**-0.16


def critical_velocity_mps(hydraulic_depth_m: ArrayLike) -> Floats:
    """Velocity at which flow is critical: Froude number 1.

    Parameters
    ----------
    hydraulic_depth_m : float or array
        Flow area over top width [m]; the depth of a rectangle.

    Returns
    -------
    float or array
        Velocity [m/s].

    Raises
    ------
    RangeError
        Where the depth is not finite and above zero.

    Notes
    -----
    ``V = sqrt(g D)``, V. T. Chow, Open-Channel Hydraulics, 1959, ch. 4.

    Examples
    --------
    >>> round(float(critical_velocity_mps(1.0)), 2)
    3.13
    """
    return np.sqrt(GRAVITY_MPS2 * positive("hydraulic_depth_m", hydraulic_depth_m))


def wave_velocity_mps(mean_depth_m: ArrayLike) -> Floats:
    """Velocity at which a flood crosses open water: that of a long wave.

    Parameters
    ----------
    mean_depth_m : float or array
        Mean depth of the water [m].

    Returns
    -------
    float or array
        Velocity [m/s].

    Raises
    ------
    RangeError
        Where the depth is not finite and above zero.

    Notes
    -----
    ``V = sqrt(g D)``, NEH 630 ch. 15 (2010), travel time through lakes and reservoirs. It carries the wave, not the
    water, and says nothing about attenuation by storage.

    Examples
    --------
    NEH Section 4 (1972) table 15.2: 2 ft, 8.0 ft/s.

    >>> round(float(wave_velocity_mps(2 * 0.3048)) / 0.3048, 1)
    8.0
    """
    return np.sqrt(GRAVITY_MPS2 * positive("mean_depth_m", mean_depth_m))
