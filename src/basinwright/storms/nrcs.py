"""The 24-hour rainfall distributions of the U.S. Soil Conservation Service (now NRCS).

Ordinates are those of the 0.1-hour tables. Between 11.5 and 12 h Type II is often quoted at 11.75 h only, as
.357 (Chow, Maidment and Mays 1988, table 14.4.3) or .387 (15-minute tables); the 0.1-hour table has .3544 at 11.7 h
and .4308 at 11.8 h. Half-hour ordinates are too coarse for short basins.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.numbers import Floats, within
from basinwright.published import table
from basinwright.registry import F, Range, method
from basinwright.storms.storm import Storm

_KEYS = ("type_i", "type_ia", "type_ii", "type_iii")


def _registered(suffix: str, region: str) -> Callable[[F], F]:
    """Register the function below as the distribution of a published table."""
    return method(
        "storm",
        f"type_{suffix}",
        name=f"NRCS 24-hour Type {suffix.upper()}",
        form="cumulative fraction of the 24-hour depth at 0.1-hour steps",
        inputs=("duration_h",),
        source=table(f"scs_type_{suffix}").source,
        valid_range={"duration_h": Range(24.0, 24.0, "24 h")},
        limits=f"24-hour storms only; {region}",
    )


def _storm(suffix: str, duration_h: float) -> Storm:
    label, published = f"Type {suffix.upper()}", table(f"scs_type_{suffix}")
    if duration_h != 24.0:
        raise RangeError(
            f"duration_h is {duration_h:g}: the {label} distribution is one of 24 hours and must not be scaled; "
            "use a balanced, nested or own storm for other durations"
        )
    return Storm(label, np.array(published.floats("hour")), np.array(published.floats("fraction")))


@_registered("i", "Hawaii, Alaska, the coastal side of the Sierra Nevada and the Cascades in California")
def type_i(duration_h: float = 24.0) -> Storm:
    """Return the NRCS 24-hour Type I storm; a duration other than 24 h raises `RangeError`."""
    return _storm("i", duration_h)


@_registered("ia", "the Pacific north-west coast; the least intense of the four")
def type_ia(duration_h: float = 24.0) -> Storm:
    """Return the NRCS 24-hour Type IA storm; a duration other than 24 h raises `RangeError`."""
    return _storm("ia", duration_h)


@_registered("ii", "most of the United States; the most intense of the four")
def type_ii(duration_h: float = 24.0) -> Storm:
    """Return the NRCS 24-hour Type II storm; a duration other than 24 h raises `RangeError`."""
    return _storm("ii", duration_h)


@_registered("iii", "the Gulf of Mexico and the Atlantic coast, where tropical storms bring the large depths")
def type_iii(duration_h: float = 24.0) -> Storm:
    """Return the NRCS 24-hour Type III storm; a duration other than 24 h raises `RangeError`."""
    return _storm("iii", duration_h)


def cumulative_fraction(distribution: str, time_h: ArrayLike) -> Floats:
    """Fraction of the 24-hour depth that has fallen by a time.

    Parameters
    ----------
    distribution : str
        Key of an NRCS distribution: ``type_i``, ``type_ia``, ``type_ii`` or ``type_iii``.
    time_h : float or array
        Time from the storm's start [h], 0 to 24.

    Returns
    -------
    float or array
        Fraction [-].

    Raises
    ------
    RangeError
        Where a time is outside the storm or the key names none of the four.

    Examples
    --------
    >>> float(cumulative_fraction("type_ii", 12.0))
    0.663
    """
    if distribution not in _KEYS:
        raise RangeError(f"distribution is {distribution!r}: it must be one of {', '.join(_KEYS)}")
    return _storm(distribution.removeprefix("type_"), 24.0).fraction_at(within("time_h", time_h, 0.0, 24.0))
