"""Cover schemes: what each land-cover class means for runoff and flow.

A scheme is a CSV with a row per class; the shipped ones (`SHIPPED`) and a user's own are read and checked alike.
Curve numbers are for average moisture (class II) and an initial abstraction of 0.2 S.
"""

from __future__ import annotations

import csv
import difflib
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from basinwright import published
from basinwright.errors import InputRejected, Problem

GROUPS = ("A", "B", "C", "D")
"""Hydrologic soil groups, from the least runoff to the most."""

ANY_GROUP = "any"
"""Soil group of a patch whose class has one curve number on every group (open water, wetlands)."""

SHIPPED = ("nlcd", "nlcd_arid", "worldcover")
"""Schemes for the legend of the National Land Cover Database, humid and arid, and for ESA WorldCover."""

_CURVE_NUMBERS = tuple(f"cn_{group.lower()}" for group in GROUPS)
_PERVIOUS = tuple(f"pervious_cn_{group.lower()}" for group in GROUPS)

REQUIRED = ("code", *_CURVE_NUMBERS, "sheet_n", "shallow")
"""Columns that a scheme must have."""

OPTIONAL = (
    "name", "impervious_pct", *_PERVIOUS, "open_water", "retardance_n", "runoff_coefficient", "source",
)  # fmt: skip
"""Columns that it may have; without them: code, 0, own curve numbers, false, none, the file."""

_COLUMNS = (
    "code", "name", *_CURVE_NUMBERS, "sheet_n", "shallow", "impervious_pct", *_PERVIOUS, "open_water", "retardance_n",
    "runoff_coefficient", "source",
)  # fmt: skip
_BOOLEANS = {"true": True, "yes": True, "1": True, "false": False, "no": False, "0": False, "": False}


@dataclass(frozen=True)
class CoverClass:
    """One class of a land-cover legend.

    Parameters
    ----------
    code : str
        The value in the land-cover layer, as text.
    name : str
        What the legend calls it; look-ups accept it too.
    curve_number : mapping
        Curve number by soil group, the class's impervious share included.
    sheet_n : float
        Manning n of sheet flow.
    shallow : str
        Key of the shallow-flow table (NEH 630 chapter 15 table 15-3).
    impervious_pct : float
        Impervious share that `curve_number` includes [%].
    pervious_curve_number : mapping
        Curve number of the pervious part by soil group.
    open_water : bool
        Whether the class is open water.
    source : str
        Where the curve numbers were published.
    retardance_n : float
        Kerby's retardance coefficient of overland flow; NaN where not given.
    runoff_coefficient : float
        Runoff coefficient of the rational method; NaN where not given.
    """

    code: str
    name: str
    curve_number: Mapping[str, float]
    sheet_n: float
    shallow: str
    impervious_pct: float
    pervious_curve_number: Mapping[str, float]
    open_water: bool
    source: str
    retardance_n: float = math.nan
    runoff_coefficient: float = math.nan

    @property
    def needs_soil(self) -> bool:
        """Whether the curve number depends on the soil group."""
        return len(set(self.curve_number.values())) > 1

    def curve_number_on(self, group: str) -> float:
        """Return the curve number on a soil group, or on `ANY_GROUP` where it does not depend on soil.

        Raises
        ------
        KeyError
            Where it does depend on soil, or the group is none.
        """
        return self.curve_number["D" if group == ANY_GROUP and not self.needs_soil else group]


@dataclass(frozen=True)
class Scheme:
    """A cover scheme.

    Parameters
    ----------
    name : str
        Of a shipped scheme, or the file it was read from.
    classes : dict of str to CoverClass
        By code, in the order of the file.
    """

    name: str
    classes: dict[str, CoverClass]

    @cached_property
    def _by_name(self) -> dict[str, CoverClass]:
        return {entry.name: entry for entry in self.classes.values()}

    def find(self, text: str) -> CoverClass | None:
        """Return the class of a code or name, None where the scheme has none."""
        return self.classes.get(text) or self._by_name.get(text)

    def to_rows(self) -> list[dict[str, Any]]:
        """Return the scheme as plain values, a mapping per class, for `from_rows`."""
        return [
            {
                "code": entry.code,
                "name": entry.name,
                **{column: entry.curve_number[group] for column, group in zip(_CURVE_NUMBERS, GROUPS, strict=True)},
                "sheet_n": entry.sheet_n,
                "shallow": entry.shallow,
                "impervious_pct": entry.impervious_pct,
                **{column: entry.pervious_curve_number[group] for column, group in zip(_PERVIOUS, GROUPS, strict=True)},
                "open_water": entry.open_water,
                "retardance_n": None if math.isnan(entry.retardance_n) else entry.retardance_n,
                "runoff_coefficient": None if math.isnan(entry.runoff_coefficient) else entry.runoff_coefficient,
                "source": entry.source,
            }
            for entry in self.classes.values()
        ]

    @classmethod
    def from_rows(cls, name: str, rows: Iterable[Mapping[str, Any]]) -> Scheme:
        """Return the scheme that `to_rows` gave.

        Raises
        ------
        InputRejected
            Where the rows are no longer a scheme.
        """
        texts = [{column: "" if value is None else str(value) for column, value in row.items()} for row in rows]
        return _checked(name, _COLUMNS, texts)


def shallow_keys() -> list[str]:
    """Return the keys that the column ``shallow`` may hold."""
    return [row["key"] for row in published.table("shallow_flow_neh").rows]


def load_scheme(name: str) -> Scheme:
    """Return a shipped scheme.

    Parameters
    ----------
    name : str
        One of `SHIPPED`.

    Raises
    ------
    KeyError
        Where no such scheme is shipped.

    Examples
    --------
    >>> load_scheme("nlcd").find("Mixed Forest").curve_number["B"]
    60.0
    """
    if name not in SHIPPED:
        raise KeyError(f"no scheme {name!r} is shipped; shipped: {', '.join(SHIPPED)}")
    table = published.table(f"cover_{name}")
    return _checked(name, list(table.columns), [dict(row) for row in table.rows])


def read_scheme(path: Path) -> Scheme:
    """Read a scheme of the user's own: a CSV with the columns `REQUIRED` and any of `OPTIONAL`.

    Parameters
    ----------
    path : Path
        The file, UTF-8 with a header row.

    Raises
    ------
    InputRejected
        With every problem, by row and column.
    """
    file = str(path)
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            header, *rows = [row for row in csv.reader(stream) if any(row)] or [[]]
    except FileNotFoundError:
        fix = f"check the path, or use a shipped scheme: {', '.join(SHIPPED)}"
        raise InputRejected.one(file, "file", "does not exist", fix) from None
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        what = f"is not a readable CSV ({error})"
        raise InputRejected.one(file, "file", what, "save it as CSV in UTF-8") from None
    columns = [name.strip() for name in header]
    ragged = [str(number) for number, row in enumerate(rows, start=1) if len(row) != len(columns)]
    if ragged:
        what = f"another number of cells than the header in row {', '.join(ragged)}"
        raise InputRejected.one(file, "rows", what, "quote cells that hold a comma")
    return _checked(file, columns, [dict(zip(columns, row, strict=True)) for row in rows])


def _checked(file: str, columns: Sequence[str], rows: Sequence[Mapping[str, str]]) -> Scheme:
    """Return the scheme of these rows of text; reject it with every problem."""
    problems = _column_problems(file, columns)
    if problems:
        raise InputRejected(problems)
    if not rows:
        raise InputRejected.one(file, "rows", "has no classes", "write a row for each land-cover class")
    shallow = shallow_keys()
    classes: dict[str, CoverClass] = {}
    names: dict[str, str] = {}
    for number, row in enumerate(rows, start=1):
        reader = _RowReader(file, number, {column: text.strip() for column, text in row.items()}, shallow)
        entry = reader.cover_class()
        if entry.code in classes or entry.code in names:
            reader.reject("code", f"{entry.code!r} stands twice", "keep one row for each class")
        if entry.name != entry.code and (entry.name in names or entry.name in classes):
            reader.reject("name", f"{entry.name!r} stands twice", "give each class its own name")
        classes.setdefault(entry.code, entry)
        names.setdefault(entry.name, entry.code)
        problems += reader.problems
    if problems:
        raise InputRejected(problems)
    return Scheme(file, classes)


def _column_problems(file: str, columns: Sequence[str]) -> list[Problem]:
    """List columns that are missing, unknown or there twice."""
    problems = []
    unknown = [name for name in columns if name not in REQUIRED + OPTIONAL]
    for name in REQUIRED:
        if name not in columns:
            near = difflib.get_close_matches(name, unknown, n=1)
            fix = f"rename {near[0]!r} to it" if near else f"add it; a scheme has: {', '.join(REQUIRED)}"
            problems.append(Problem(file, f"column {name}", "is missing", fix))
    for name in unknown:
        near = difflib.get_close_matches(name, _COLUMNS, n=1)
        fix = f"did you mean {near[0]!r}?" if near else f"remove it; known: {', '.join(_COLUMNS)}"
        problems.append(Problem(file, f"column {name or '(without a name)'}", "is not a column of a scheme", fix))
    for name in sorted({name for name in columns if columns.count(name) > 1}):
        problems.append(Problem(file, f"column {name}", "stands twice", "keep one"))
    return problems


class _RowReader:
    """Reads one row of a scheme and keeps every problem found in it."""

    def __init__(self, file: str, number: int, row: Mapping[str, str], shallow: Sequence[str]) -> None:
        self._file, self._number, self._row, self._shallow = file, number, row, shallow
        self.problems: list[Problem] = []

    def reject(self, column: str, what: str, fix: str) -> None:
        self.problems.append(Problem(self._file, f"row {self._number}, column {column}", what, fix))

    def cover_class(self) -> CoverClass:
        row = self._row
        if not row["code"]:
            self.reject("code", "is empty", "write the value that the land-cover layer has")
        if row["shallow"] not in self._shallow:
            near = difflib.get_close_matches(row["shallow"], self._shallow, n=1)
            fix = f"did you mean {near[0]!r}?" if near else f"use one of {', '.join(self._shallow)}"
            self.reject("shallow", f"{row['shallow']!r} is not a kind of shallow flow", fix)
        water = row.get("open_water", "").lower()
        if water not in _BOOLEANS:
            self.reject("open_water", f"{row['open_water']!r} is neither true nor false", "write true or false")
        curve_numbers = self._curve_numbers(_CURVE_NUMBERS)
        own_pervious = any(row.get(column) for column in _PERVIOUS)
        return CoverClass(
            code=row["code"],
            name=row.get("name") or row["code"],
            curve_number=curve_numbers,
            sheet_n=self._number_in("sheet_n", 0.0, 1.0, low_included=False),
            shallow=row["shallow"],
            impervious_pct=self._number_in("impervious_pct", 0.0, 100.0) if row.get("impervious_pct") else 0.0,
            pervious_curve_number=self._curve_numbers(_PERVIOUS) if own_pervious else curve_numbers,
            open_water=_BOOLEANS.get(water, False),
            source=row.get("source") or Path(self._file).name,
            retardance_n=self._number_or_none("retardance_n"),
            runoff_coefficient=self._number_or_none("runoff_coefficient"),
        )

    def _curve_numbers(self, columns: Sequence[str]) -> dict[str, float]:
        values = [self._number_in(column, 0.0, 100.0, low_included=False) for column in columns]
        for (before, low), (after, high) in zip(
            zip(columns, values, strict=True), list(zip(columns, values, strict=True))[1:], strict=False
        ):
            if high < low:
                what = f"{high:g} is less than {before} ({low:g})"
                self.reject(after, what, "curve numbers do not fall from group A to D: check their order")
        return dict(zip(GROUPS, values, strict=True))

    def _number_or_none(self, column: str) -> float:
        return self._number_in(column, 0.0, 1.0, low_included=False) if self._row.get(column) else math.nan

    def _number_in(self, column: str, low: float, high: float, low_included: bool = True) -> float:
        text = self._row.get(column, "")
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        if not ((low <= value if low_included else low < value) and value <= high):
            bounds = f"from {low:g} to {high:g}" if low_included else f"over {low:g}, up to {high:g}"
            self.reject(column, f"{text!r} is not a number {bounds}" if text else "is empty", f"write one {bounds}")
            return math.nan
        return value
