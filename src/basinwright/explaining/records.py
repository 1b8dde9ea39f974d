"""What a "how" record is made of: words, a formula in the trade's symbols, inputs, sources.

A formula is Python arithmetic over its symbols, and it is what is computed: what is printed cannot differ from it.
Each input says its value, its unit and where it came from: other cells of the tables, an option of the project, a
published row, cells of the terrain.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright import published
from basinwright.units import SHOWN, UNITS

if TYPE_CHECKING:
    from basinwright.explaining.reading import Here
    from basinwright.registry import Source

FACTORS = {unit: factor for unit, (_, factor) in UNITS.items()}
for _quantity in SHOWN.values():
    FACTORS |= {_quantity.us_unit: _quantity.inside_per_us, _quantity.si_unit: 1.0}
"""From each unit to the one used inside."""


@dataclass(frozen=True)
class Ref:
    """A cell of a table: the table's name, its row, the column's stem, the return period put in where it has one."""

    table: str
    row: Mapping[str, str]
    stem: str
    period: str = ""


@dataclass(frozen=True)
class PublishedRow:
    """A row of a published table.

    Parameters
    ----------
    table : str
        Its name in `basinwright.published`.
    row : mapping
        The cells as printed.
    source : Source
        Document, edition, table and page.
    """

    table: str
    row: Mapping[str, str]
    source: Source


@dataclass(frozen=True)
class Value:
    """What a symbol of a formula stands for.

    Parameters
    ----------
    value : float, array or callable
        In `unit`; a callable is a function of the formula.
    unit : str
        Its unit.
    about : str
        What it is and where it comes from, where `refs` do not say it.
    refs : tuple of Ref
        The cells it was read from.
    rows : tuple of PublishedRow
        The published rows it was read from.
    """

    value: Any
    unit: str
    about: str
    refs: tuple[Ref, ...] = ()
    rows: tuple[PublishedRow, ...] = ()


Get = Callable[["Here"], Value]


@dataclass(frozen=True)
class How:
    """How the numbers of a column come to be.

    Parameters
    ----------
    words : str
        In a sentence: computed how, measured on what, given by whom.
    formula : str
        Arithmetic over the symbols of `inputs`; empty where nothing is computed from other numbers.
    inputs : mapping of str to callable
        What each symbol stands for.
    unit : str
        Unit of the formula's result; empty where it is the column's.
    source : Source or str
        Where the formula was published.
    rows : callable, optional
        The published rows that it took from.
    places : callable, optional
        Cells of the terrain, pixels and files that it began from, in words.
    """

    words: str
    formula: str = ""
    inputs: Mapping[str, Get] = field(default_factory=dict)
    unit: str = ""
    source: Source | str = ""
    rows: Callable[[Here], Sequence[PublishedRow]] | None = None
    places: Callable[[Here], Sequence[str]] | None = None


Choice = How | Callable[["Here"], How]
"""A record, or the choice of one by the row: its regime, its method, the project's options."""


def cell(
    stem: str, unit: str = "", table: str = "", period: bool = False, scale: tuple[float, str] | None = None
) -> Get:
    """Return the reader of another cell: of the same row, or of the outlet's in `table`.

    ``scale`` is a factor with the unit that it gives, such as (0.01, "ft/ft") of a slope in per cent.
    """

    def get(here: Here) -> Value:
        return here.cell(stem, unit, table, here.period if period else "", scale)

    return get


def column(table: str, stem: str, unit: str = "", where: Callable[[Mapping[str, str]], bool] | None = None) -> Get:
    """Return the reader of a column of the outlet's rows in a table."""
    return lambda here: here.column(table, stem, unit, where)


def option(key: str, unit: str = "", inside: str = "") -> Get:
    """Return the reader of an option of the project; ``inside`` is the unit in which it is kept."""

    def get(here: Here) -> Value:
        section, _, name = key.partition(".")
        value = getattr(getattr(here.run.project, section), name)
        number = value * FACTORS[inside] / FACTORS[unit] if unit and inside else value
        return Value(number, unit or inside, f"option {key}")

    return get


def row_of(table: str, key: str, column: str = "key") -> PublishedRow:
    """Return a row of a published table by its key."""
    entry = published.table(table)
    return PublishedRow(table, next(row for row in entry.rows if row[column] == key), entry.source)


def _part(x: Any) -> Any:
    return np.maximum(x, 0.0)


FUNCTIONS: dict[str, Callable[..., Any]] = {
    "sum": lambda values: float(np.sum(values)),
    "max": lambda *values: float(np.max(np.concatenate([np.atleast_1d(np.asarray(v, float)) for v in values]))),
    "min": lambda *values: float(np.min(np.concatenate([np.atleast_1d(np.asarray(v, float)) for v in values]))),
    "sqrt": np.sqrt,
    "above0": _part,
}
"""What formulas may call besides the functions among their inputs; above0(x) is x, or 0 where x is negative."""


def evaluate(formula: str, values: Mapping[str, Any]) -> float:
    """Compute a formula of this package's own records."""
    return float(eval(formula, {"__builtins__": {}}, FUNCTIONS | dict(values)))


def filled(formula: str, values: Mapping[str, Any]) -> str:
    """Put the numbers in the place of the symbols."""
    return readable(re.sub(r"[A-Za-z_]\w*", lambda match: _figure(match.group(), values), formula))


def readable(formula: str) -> str:
    """Write a formula as it is printed."""
    return re.sub(r" ?\*\* ?", "^", formula).replace(" * ", " × ")


def _figure(symbol: str, values: Mapping[str, Any]) -> str:
    if symbol not in values or callable(values[symbol]):
        return symbol
    return figure(values[symbol])


def figure(value: Any) -> str:
    """Write a number with six significant figures; of many the first, the last and how many."""
    if isinstance(value, str):
        return value
    numbers = np.atleast_1d(np.asarray(value, dtype=np.float64))
    if numbers.size == 1:
        text = f"{float(numbers[0]):.6g}"
        return f"({text})" if text.startswith("-") else text
    few = [f"{number:.4g}" for number in numbers.tolist()]
    shown = few if len(few) <= 4 else [*few[:2], "…", few[-1]]
    return f"[{', '.join(shown)}; {len(few)} values]"
