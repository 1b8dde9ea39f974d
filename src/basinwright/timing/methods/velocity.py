"""Time of concentration by the velocity method."""

from __future__ import annotations

from numpy.typing import ArrayLike

from basinwright.numbers import Floats, positive
from basinwright.registry import Source, method


@method(
    "timing",
    "velocity",
    name="Velocity method (NRCS 2010)",
    form="Tc = sum of the travel times of sheet, shallow concentrated, channel and open-water flow; h",
    inputs=("travel_time_h",),
    source=Source(
        "USDA Natural Resources Conservation Service, National Engineering Handbook, Part 630, chapter 15, "
        "Time of Concentration",
        "May 2010",
        "eq. 15-7",
        "from memory of the print",
    ),
    limits="Follows the water along the longest path; no range is published. As good as the roughness and the sections "
    "along it: slow sheet flow and the stage taken in channels decide most of it.",
)
def velocity_tc_h(travel_time_h: ArrayLike) -> Floats:
    """Time of concentration as the travel time along the longest flow path.

    Parameters
    ----------
    travel_time_h : float or array
        Sum of the travel times of the path's segments [h], see `time_segments` and `sum_by_outlet`.

    Returns
    -------
    float or array
        Time of concentration [h].

    Raises
    ------
    RangeError
        Where the time is not finite and above zero.

    Examples
    --------
    >>> float(velocity_tc_h(1.53))
    1.53
    """
    return positive("travel_time_h", travel_time_h)
