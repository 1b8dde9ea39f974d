"""Text of the pages: figures as an engineer signs them, units in words, text from input made harmless to the eye."""

from __future__ import annotations

import re
import unicodedata

from basinwright.numbers import three_figures
from basinwright.tables import OUTLETS, Column
from basinwright.units import System

_UNITS = {
    "mi2": "mi²",
    "km2": "km²",
    "ft3/s": "cfs",
    "m3/s": "m³/s",
    "ft3/s/in": "cfs per in",
    "m3/s/mm": "m³/s per mm",
    "degree": "°",
    "1": "",
    "CRS unit": "",
}
_HIDDEN = re.compile("[\u202a-\u202e\u2066-\u2069\ufff9-\ufffb]")  # they reorder or hide what stands beside them


def unit_label(unit: str) -> str:
    """Return a unit of the schema as the trade writes it."""
    return _UNITS.get(unit, unit)


def unit_of(column: Column, system: System) -> str:
    """Return the unit of a column as the trade writes it; empty where it has none."""
    return unit_label(column.unit_in(system))


def plain(text: object) -> str:
    """Return text from input with every character that cannot be seen, or that turns others round, made visible."""
    shown = _HIDDEN.sub("\N{REPLACEMENT CHARACTER}", str(text))
    return "".join(
        "\N{REPLACEMENT CHARACTER}" if unicodedata.category(char) in ("Cc", "Cs", "Cn") and char not in "\t\n" else char
        for char in shown
    ).strip()


def short(text: object, most: int = 60) -> str:
    """Return text from input, cut where it is over-long."""
    shown = plain(text)
    return shown if len(shown) <= most else shown[: most - 1].rstrip() + "…"


def file_stem(text: str) -> str:
    """Return the part of an id that is safe in a file name on any system; may be empty."""
    ascii_only = unicodedata.normalize("NFKD", text).encode("ascii", "ignore").decode()
    return re.sub(r"[^a-z0-9]+", "-", ascii_only.lower())[:40].strip("-")


def figure(value: float | None) -> str:
    """Return a number with three significant figures; a dash where there is none."""
    return "–" if value is None or value != value else three_figures(value)


def with_unit(value: float, stem: str, system: System) -> str:
    """Return a value of outlets.csv with its unit."""
    return f"{figure(value)} {unit_of(OUTLETS.column(stem), system)}".strip()


def station(value: float | None, system: System) -> str:
    """Return a distance along a path as a place: to the foot or to 0.1 m."""
    return "–" if value is None or value != value else f"{value:,.0f}" if system == "us" else f"{value:,.1f}"


def elevation(value: float | None, system: System) -> str:
    """Return an elevation: to 0.1 ft or to 0.01 m."""
    return "–" if value is None or value != value else f"{value:,.1f}" if system == "us" else f"{value:,.2f}"


def listed(items: list[str], most: int = 12) -> str:
    """Return a list as words, its first items."""
    return ", ".join(items[:most]) + (f" and {len(items) - most} more" if len(items) > most else "")


def count(number: int, noun: str) -> str:
    """Return a number of things in words: ``1 outlet``, ``2 outlets``."""
    return f"{number:,} {noun}" if number == 1 else f"{number:,} {noun}s"
