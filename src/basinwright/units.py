"""The closed table of units: what a user may write, and the two systems in which results appear.

Inside, lengths are metres, areas km2, rainfall depths mm, times hours, speeds m/s, flows m3/s, shares
fractions, computer memory MB (a million bytes). Factors are exact by definition: international foot 0.3048 m and
inch 25.4 mm (NIST SP 811, 2008 edition, appendix B.8), mile 5280 ft, acre 43 560 ft2.
"""

from __future__ import annotations

import difflib
import math
import re
from dataclasses import dataclass
from typing import Literal

System = Literal["us", "si"]

M_PER_FT = 0.3048
M_PER_MI = 1609.344
MM_PER_IN = 25.4
KM2_PER_MI2 = 2.589988110336
KM2_PER_AC = 0.0040468564224
M3S_PER_CFS = 0.028316846592
"""One cubic foot per second in m3/s: 0.3048 cubed."""

# What a user may write: unit -> (dimension, factor to the unit used inside).
UNITS: dict[str, tuple[str, float]] = {
    "m": ("length", 1.0),
    "km": ("length", 1000.0),
    "ft": ("length", M_PER_FT),
    "mi": ("length", M_PER_MI),
    "m2": ("area", 1e-6),
    "km2": ("area", 1.0),
    "ha": ("area", 0.01),
    "ft2": ("area", 9.290304e-8),
    "ac": ("area", KM2_PER_AC),
    "mi2": ("area", KM2_PER_MI2),
    "mm": ("depth", 1.0),
    "cm": ("depth", 10.0),
    "in": ("depth", MM_PER_IN),
    "s": ("time", 1.0 / 3600.0),
    "min": ("time", 1.0 / 60.0),
    "h": ("time", 1.0),
    "d": ("time", 24.0),
    "m/s": ("speed", 1.0),
    "ft/s": ("speed", M_PER_FT),
    "m3/s": ("flow", 1.0),
    "cfs": ("flow", M3S_PER_CFS),
    "%": ("share", 0.01),
    "MB": ("memory", 1.0),
    "GB": ("memory", 1000.0),
}

INSIDE = {
    "length": "m",
    "area": "km2",
    "depth": "mm",
    "time": "h",
    "speed": "m/s",
    "flow": "m3/s",
    "share": "1",
    "memory": "MB",
}
"""The unit used inside, by dimension."""


class QuantityError(ValueError):
    """A quantity that cannot be read: what is wrong with it, and how to mend it."""

    def __init__(self, what: str, fix: str) -> None:
        self.what, self.fix = what, fix
        super().__init__(f"{what}: {fix}")


_QUANTITY = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*([^\s\d].*?)?\s*")


def units_of(dimension: str) -> list[str]:
    """Return the units that may be written for a dimension, smallest list a message can quote."""
    return [unit for unit, (kind, _) in UNITS.items() if kind == dimension]


def parse_quantity(text: object, dimension: str) -> float:
    """Read a quantity such as ``"0.25 km2"``.

    Parameters
    ----------
    text : object
        What the user wrote; only a string with number and unit is accepted.
    dimension : str
        The dimension it must have, a key of `INSIDE`.

    Returns
    -------
    float
        The value in the unit used inside.

    Raises
    ------
    QuantityError
        No unit, an unknown one, one of another kind, or not a finite number.

    Examples
    --------
    >>> parse_quantity("100 ft", "length")
    30.48
    """
    known = units_of(dimension)
    choice = f"use one of {', '.join(known)}"
    if not isinstance(text, str):
        raise QuantityError(f"{text!r} has no unit", f'write it as text, such as "{text} {known[0]}"; {choice}')
    match = _QUANTITY.fullmatch(text)
    if match is None or not math.isfinite(float(match.group(1))):
        raise QuantityError(f"{text!r} is not a finite number with a unit", choice)
    number, unit = float(match.group(1)), match.group(2)
    if unit is None:
        raise QuantityError(f"{text!r} has no unit", choice)
    if unit not in UNITS:
        near = difflib.get_close_matches(unit.lower(), UNITS, n=1)
        hint = f" (nearest: {near[0]})" if near else ""
        raise QuantityError(f"{text!r} has the unknown unit {unit!r}{hint}", choice)
    kind, factor = UNITS[unit]
    if kind != dimension:
        raise QuantityError(f"{text!r} is of the kind {kind}, not {dimension}", choice)
    value = number * factor
    if not math.isfinite(value):
        raise QuantityError(f"{text!r} is too large", choice)
    return value


@dataclass(frozen=True)
class Shown:
    """How a quantity appears in the tables: the suffix of its columns and the factor, per system.

    Parameters
    ----------
    us, si : str
        Suffix of the column name.
    us_unit, si_unit : str
        The unit as written in the schema.
    inside_per_us : float
        One US unit in the unit used inside (the SI unit is always the one inside).
    """

    us: str
    si: str
    us_unit: str
    si_unit: str
    inside_per_us: float

    def suffix(self, system: System) -> str:
        """Return the column suffix, such as ``ft``."""
        return self.us if system == "us" else self.si

    def unit(self, system: System) -> str:
        """Return the unit as written in the schema."""
        return self.us_unit if system == "us" else self.si_unit

    def inside_per_shown(self, system: System) -> float:
        """Return the factor from the shown number to the one used inside."""
        return self.inside_per_us if system == "us" else 1.0


SHOWN: dict[str, Shown] = {
    "length": Shown("ft", "m", "ft", "m", M_PER_FT),
    "area": Shown("mi2", "km2", "mi2", "km2", KM2_PER_MI2),
    "depth": Shown("in", "mm", "in", "mm", MM_PER_IN),
    "flow": Shown("cfs", "m3s", "ft3/s", "m3/s", M3S_PER_CFS),
    "per_length": Shown("per_mi", "per_km", "1/mi", "1/km", 1000.0 / M_PER_MI),
    "speed": Shown("fps", "mps", "ft/s", "m/s", M_PER_FT),
    "unit_flow": Shown("cfs_per_in", "m3s_per_mm", "ft3/s/in", "m3/s/mm", M3S_PER_CFS / MM_PER_IN),
}
"""The quantities whose columns change name with the unit system of the project."""

_SUFFIX_UNITS = {"mi2": "mi2", "km2": "km2", "ac": "ac", "ha": "ha", "m2": "m2", "ft2": "ft2", "cfs": "cfs",
                 "m3s": "m3/s", "in": "in", "mm": "mm", "cm": "cm", "ft": "ft", "m": "m", "h": "h"}  # fmt: skip


def unit_of_suffix(column: str, dimension: str) -> tuple[str, float] | None:
    """Return the unit that a column's suffix names, with its factor to the unit used inside.

    Parameters
    ----------
    column : str
        Such as ``area_mi2`` or ``capacity_cfs``.
    dimension : str
        The dimension it must have.

    Returns
    -------
    tuple of str and float, or None
        None where the suffix names no unit of this dimension.
    """
    unit = _SUFFIX_UNITS.get(column.rsplit("_", 1)[-1].lower())
    if unit is None or UNITS[unit][0] != dimension:
        return None
    return unit, UNITS[unit][1]
