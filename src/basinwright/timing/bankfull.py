"""Bankfull width and depth from contributing area, by region.

Source: K. Bieger, H. Rathjens, P. M. Allen and J. G. Arnold, J. Am. Water Resour. Assoc. 51(3), 2015; the table
`bankfull_bieger_2015` carries the coefficients, the number of sites and the range of their drainage areas.
"""

from __future__ import annotations

import difflib
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from basinwright.errors import RangeError
from basinwright.numbers import Floats, positive
from basinwright.published import table

_TABLE = "bankfull_bieger_2015"


@dataclass(frozen=True)
class BankfullRelation:
    """Bankfull width and depth as powers of contributing area.

    Parameters
    ----------
    name : str
        What it is called in the column ``basis``.
    width : tuple of float
        a and b of ``W = a A^b`` [m of km2].
    depth : tuple of float
        a and b of ``D = a A^b`` [m of km2].
    area_low_km2, area_high_km2 : float
        Range of the drainage areas it was fitted on [km2]; infinite where unknown.
    """

    name: str
    width: tuple[float, float]
    depth: tuple[float, float]
    area_low_km2: float = 0.0
    area_high_km2: float = math.inf

    def __post_init__(self) -> None:
        for quantity, (coefficient, exponent) in (("width", self.width), ("depth", self.depth)):
            positive(f"{quantity} coefficient", coefficient)
            if not math.isfinite(exponent):
                raise RangeError(f"{quantity} exponent is {exponent}: it must be finite")

    def covers(self, area_km2: ArrayLike) -> NDArray[np.bool_]:
        """Say whether contributing areas [km2] lie within the data."""
        area = np.asarray(area_km2, dtype=np.float64)
        return (area >= self.area_low_km2) & (area <= self.area_high_km2)


def bankfull_regions() -> tuple[str, ...]:
    """Return the keys of the published regions: the nation, its divisions, their provinces."""
    return tuple(row["key"] for row in table(_TABLE).rows)


def bankfull_relation(region: str) -> BankfullRelation:
    """Return the published relation of a region.

    Parameters
    ----------
    region : str
        One of `bankfull_regions`.

    Returns
    -------
    BankfullRelation
        Where the paper's copy gives no range for a province, that of its division: the province's sites are part
        of it.

    Raises
    ------
    RangeError
        Naming the nearest known region.

    Examples
    --------
    >>> bankfull_relation("usa").width
    (2.7, 0.352)
    """
    rows = {row["key"]: row for row in table(_TABLE).rows}
    if region not in rows:
        near = difflib.get_close_matches(region, rows, n=1)
        hint = f" (nearest: {near[0]})" if near else ""
        raise RangeError(f"unknown bankfull region {region!r}{hint}: it must be one of {', '.join(rows)}")
    row = rows[region]
    data = row if row["area_low_km2"] else rows[row["division"]]
    return BankfullRelation(
        name=f"Bieger et al. (2015), {row['name']}",
        width=(float(row["width_coefficient"]), float(row["width_exponent"])),
        depth=(float(row["depth_coefficient"]), float(row["depth_exponent"])),
        area_low_km2=float(data["area_low_km2"]),
        area_high_km2=float(data["area_high_km2"]),
    )


def bankfull_width_m(area_km2: ArrayLike, relation: BankfullRelation | str = "usa") -> Floats:
    """Bankfull width of a stream.

    Parameters
    ----------
    area_km2 : float or array
        Contributing area [km2].
    relation : BankfullRelation or str
        The relation, or the key of a published region.

    Returns
    -------
    float or array
        Width [m].

    Raises
    ------
    RangeError
        Where an area is not finite and above zero, or the region is unknown.

    Examples
    --------
    At 1 km2 a power law is its coefficient.

    >>> float(bankfull_width_m(1.0, "piedmont"))
    2.84
    """
    a, b = _resolve(relation).width
    return a * positive("area_km2", area_km2) ** b


def bankfull_depth_m(area_km2: ArrayLike, relation: BankfullRelation | str = "usa") -> Floats:
    """Bankfull depth of a stream; see `bankfull_width_m`.

    Parameters
    ----------
    area_km2 : float or array
        Contributing area [km2].
    relation : BankfullRelation or str
        The relation, or the key of a published region.

    Returns
    -------
    float or array
        Mean depth [m].

    Raises
    ------
    RangeError
        Where an area is not finite and above zero, or the region is unknown.

    Examples
    --------
    >>> float(bankfull_depth_m(1.0, "piedmont"))
    0.26
    """
    a, b = _resolve(relation).depth
    return a * positive("area_km2", area_km2) ** b


def _resolve(relation: BankfullRelation | str) -> BankfullRelation:
    return bankfull_relation(relation) if isinstance(relation, str) else relation
