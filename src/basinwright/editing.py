"""A person's edits: what they changed in the tables of a run, checked, and which cells are to be computed again.

Three states of each table meet here, all as text: as the run *first* wrote it, as it was last *written*, and as it
stands *now*. The columns that may be edited are of two kinds:

- What only a person or the terrain can say (a regime, a class, a distance, an elevation, an area) counts as it stands.
- A *dependent* cell (a slope, a roughness, a curve number, a time of concentration) is *held* where a person filled or
  changed it: it stands until it is emptied. Every other one is emptied here, and so computed from the rest of its row.

A row that reads again as the run first wrote it is as the run first wrote it: an edit is undone by typing the old
value.
"""

from __future__ import annotations

import csv
import math
from bisect import bisect_left
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, ClassVar

from basinwright.errors import InputRejected, Problem
from basinwright.schemes import ANY_GROUP, GROUPS, Scheme
from basinwright.tables import COVER_SHARES, OUTLETS, SEGMENTS, Table
from basinwright.units import System

if TYPE_CHECKING:
    import pandas as pd

Row = dict[str, str]
Cell = tuple[str, str, str, str]
"""A cell: table, outlet id, row within the outlet (number of the segment or patch, empty in outlets), column stem."""

EDITABLE = (OUTLETS, SEGMENTS, COVER_SHARES)
"""The tables that a person may edit."""

LIMITS: Mapping[str, tuple[float, float]] = {
    "from": (0.0, 1e9),
    "to": (0.0, 1e9),
    "top_elevation": (-1e5, 1e5),
    "bottom_elevation": (-1e5, 1e5),
    "slope": (1e-6, 10.0),
    "roughness": (1e-3, 1e3),
    "hydraulic_radius": (1e-3, 1e3),
    "hydraulic_radius_half": (1e-3, 1e3),
    "area": (1e-9, 1e9),
    "path_length": (1e-3, 1e9),
    "basin_slope_pct": (1e-3, 1e3),
    "curve_number": (1.0, 100.0),
    "tc_h": (3e-3, 1e3),
    "impervious_pct": (0.0, 100.0),
}
"""What an edited number may be, by column stem: wider than any basin, but it catches a slip of the decimal point."""

_SAME = 1e-9
"""Relative difference under which two numbers are the same: spreadsheets keep 15 digits of 17."""


@dataclass
class Record:
    """What the manifest keeps so that edits can be told from computed values.

    Parameters
    ----------
    first, written : dict of str to DataFrame
        The editable tables as the run first wrote them, and as they were last written.
    supplied, held : set of Cell
        The dependent cells that stood as given when the run first wrote them (the outlet layer supplied them), and
        those that do in ``written``.
    mapped_roughness : bool
        Whether channels have the roughness of mapped lines, which stands where nobody changed it.
    """

    first: dict[str, pd.DataFrame]
    written: dict[str, pd.DataFrame]
    supplied: set[Cell] = field(default_factory=set)
    held: set[Cell] = field(default_factory=set)
    mapped_roughness: bool = False


@dataclass(frozen=True)
class Edited:
    """The tables of a run with a person's edits in place.

    Parameters
    ----------
    tables : dict of str to DataFrame
        For the hydrology: every dependent cell that is not held is empty.
    held : set of Cell
        The dependent cells that stand as given, and the cells of outlets.csv that differ from the terrain's.
    segments, shares : set of (outlet id, row)
        The segments and patches that differ from what the run first wrote; an empty row stands for one taken away.
    """

    tables: dict[str, pd.DataFrame]
    held: set[Cell]
    segments: set[tuple[str, str]] = field(default_factory=set)
    shares: set[tuple[str, str]] = field(default_factory=set)


def same(a: str, b: str) -> bool:
    """Say whether two cells hold the same value: the same text, or numbers that a spreadsheet would not tell apart."""
    if a == b:
        return True
    try:
        return math.isclose(float(a), float(b), rel_tol=_SAME, abs_tol=1e-12)
    except ValueError:
        return a.lower() == b.lower() and a.lower() in ("true", "false")


def apply(folder: Path, record: Record, system: System, scheme: Scheme) -> Edited:
    """Read the tables of a run as they stand, check what a person changed, and prepare them for the hydrology.

    Parameters
    ----------
    folder : Path
        The run's folder.
    record : Record
        What the run's manifest keeps.
    system : {"us", "si"}
        Unit system of the project.
    scheme : Scheme
        The project's land-cover scheme: what its classes give need not be filled.

    Returns
    -------
    Edited

    Raises
    ------
    InputRejected
        With every impossible edit: file, row, column and mend.
    """
    import pandas as pd

    # The outlets come last: whether one is as the run first wrote it depends on its segments and shares too.
    editors = [kind(record, system, scheme) for kind in _EDITORS]
    tables: dict[str, pd.DataFrame] = {}
    edited_outlets: set[str] = set()
    for editor in editors:
        now = editor.read(folder / editor.file)
        if now is None:
            continue
        rows = editor.apply(now, edited_outlets)
        edited_outlets |= {outlet_id for outlet_id, _ in editor.edited}
        columns = list(record.written[editor.table.name].columns)
        tables[editor.table.name] = pd.DataFrame(rows, columns=columns, dtype=object)
    if problems := [problem for editor in editors for problem in editor.problems]:
        raise InputRejected(problems)
    held = set[Cell]().union(*(editor.held for editor in editors))
    return Edited(tables, held, editors[0].edited, editors[1].edited)


def as_first(record: Record, system: System, scheme: Scheme) -> dict[str, pd.DataFrame]:
    """Return the tables as the terrain half handed them to the hydrology, before any edit."""
    import pandas as pd

    record = Record(record.first, record.first, record.supplied, record.supplied, record.mapped_roughness)
    tables = {}
    for kind in (_SegmentEditor, _ShareEditor, _OutletEditor):
        editor, frame = kind(record, system, scheme), record.first[kind.table.name]
        rows = [row for of_outlet in by_outlet(frame).values() for row in of_outlet]
        kept = editor.apply(enumerate(rows, start=2), set())
        tables[editor.table.name] = pd.DataFrame(kept, columns=list(frame.columns), dtype=object)
    return tables


@dataclass
class _Line:
    """A row as it stands now, beside the earlier rows that it is compared with.

    Parameters
    ----------
    number : int
        Its line in the file; the header is line 1.
    row : dict
        Its cells.
    key : str
        What it is called within its outlet from now on.
    before : dict
        The row as last written; for an added row the one that it was cut from, or an empty one.
    before_key : str
        What that row was called.
    first : dict or None
        The row as the run first wrote it; None where there is none.
    added : bool
        Whether it did not stand in the table as last written.
    """

    number: int
    row: Row
    key: str
    before: Row
    before_key: str
    first: Row | None
    added: bool = False


class _Editor:
    """One table while its edits are checked; everything that is wrong is collected."""

    table: ClassVar[Table]
    dependent_stems: ClassVar[tuple[str, ...]]
    """Editable cells that are computed where no person filled them."""

    def __init__(self, record: Record, system: System, scheme: Scheme) -> None:
        self.record, self.scheme = record, scheme
        self.file = f"{self.table.name}.csv"
        self.name = {column.stem: column.name(system) for column in self.table.columns}
        editable = [column for column in self.table.columns if column.editable]
        self.dependent = {self.name[stem]: stem for stem in self.dependent_stems}
        self.independent = [self.name[c.stem] for c in editable if c.stem not in self.dependent_stems]
        chosen = {*self.dependent, *self.independent, "segment"}
        self.fixed = [str(name) for name in record.written[self.table.name].columns if name not in chosen]
        self.limits = {self.name[c.stem]: LIMITS[c.stem] for c in editable if c.type == "number"}
        self.problems: list[Problem] = []
        self.held: set[Cell] = set()
        self.edited: set[tuple[str, str]] = set()

    def match(self, outlet_id: str, now: list[tuple[int, Row]], before: list[Row], first: list[Row]) -> list[_Line]:
        """Say which earlier row each row of an outlet is to be compared with; none where that makes no sense."""
        raise NotImplementedError

    def adjust(self, line: _Line, row: Row, filled: Row) -> None:
        """Check a row that differs from what was written, and which of its filled cells still stand."""

    def key_of(self, row: Row, place: int) -> str:
        """Return what a row is called that stands at a place within its outlet, counted from 1."""
        return ""

    def otherwise(self, column: str, row: Row, first: Row | None) -> str:
        """Return what a dependent cell holds that no person filled: empty where the hydrology computes it."""
        return ""

    def finish(self, outlet_id: str, rows: list[Row], first: list[Row]) -> None:
        """Put the settled rows of an outlet in order among themselves."""

    def wrong(self, line: int, column: str, what: str, fix: str) -> None:
        """Note a problem."""
        self.problems.append(Problem(self.file, f"row {line}, {column}", what, fix))

    def number(self, line: int, column: str, text: str) -> float:
        """Read a number; NaN with a problem noted where it is none or out of its limits."""
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        low, high = self.limits[column]
        if not math.isfinite(value):
            self.wrong(line, column, f"{text!r} is not a finite number", "write a plain number")
        elif not low <= value <= high:
            self.wrong(line, column, f"{text} is out of range", f"give a number from {low:g} to {high:g}")
        else:
            return value
        return math.nan

    def read(self, path: Path) -> list[tuple[int, Row]] | None:
        """Read the rows that stand in the file with their lines; None, with a problem, where it is no such table."""
        columns = [str(name) for name in self.record.written[self.table.name].columns]
        try:
            with path.open(encoding="utf-8-sig", newline="") as stream:
                header, *rows = list(csv.reader(stream)) or [[]]
        except FileNotFoundError:
            self.problems.append(Problem(self.file, "file", "does not exist", f"put it back into {path.parent}"))
            return None
        except (OSError, UnicodeDecodeError, csv.Error) as error:
            self.problems.append(Problem(self.file, "file", f"cannot be read ({error})", "save it as CSV in UTF-8"))
            return None
        header = [name.strip() for name in header]
        if sorted(header) != sorted(columns):
            lists = {"missing": sorted(set(columns) - set(header)), "unknown": sorted(set(header) - set(columns))}
            what = "; ".join(f"{kind} {', '.join(map(repr, names))}" for kind, names in lists.items() if names)
            fix = "keep the columns, and the commas between them, as the run wrote them"
            self.problems.append(Problem(self.file, "header", what or "a column stands twice", fix))
            return None
        lines = []
        for number, cells in enumerate(rows, start=2):
            if len(cells) == len(header):
                if any(cells):  # spreadsheets leave rows of empty cells at the end
                    lines.append((number, dict(zip(header, cells, strict=True))))
            elif cells:
                what = f"{len(cells)} cells where the header has {len(header)}"
                self.wrong(number, "cells", what, "keep every comma, and quote a cell that holds one")
        return lines

    def apply(self, now: Iterable[tuple[int, Row]], edited_elsewhere: set[str]) -> list[Row]:
        """Return the rows for the hydrology, outlet by outlet in the order of the run."""
        frames = self.record.written[self.table.name], self.record.first[self.table.name]
        written = by_outlet(frames[0])
        first = written if frames[0] is frames[1] else by_outlet(frames[1])
        held, supplied = (by_row(cells, self.table.name) for cells in (self.record.held, self.record.supplied))
        standing: dict[str, list[tuple[int, Row]]] = {outlet_id: [] for outlet_id in written}
        for number, row in now:
            if row["outlet_id"] in standing:
                standing[row["outlet_id"]].append((number, row))
            else:
                what = f"{row['outlet_id']!r} is no outlet with rows in this table"
                self.wrong(number, "outlet_id", what, "ids are text: keep each as the run wrote it")
        every: list[Row] = []
        for outlet_id, lines in standing.items():
            rows: list[Row] = []
            if [row for _, row in lines] == written[outlet_id] == first[outlet_id]:  # as it is with nearly all
                for place, row in enumerate(written[outlet_id], start=1):
                    key = self.key_of(row, place)
                    given = supplied.get((outlet_id, key), set())
                    empty = [column for column, stem in self.dependent.items() if stem not in given]
                    rows.append(row | {column: self.otherwise(column, row, row) for column in empty})
                    self.held |= {(self.table.name, outlet_id, key, stem) for stem in given}
                self.finish(outlet_id, rows, first[outlet_id])
                every += rows
                continue
            for line in self.match(outlet_id, lines, written[outlet_id], first[outlet_id]):
                given = {self.name[stem] for stem in supplied.get((outlet_id, line.key), set())}
                stood = {self.name[stem] for stem in held.get((outlet_id, line.before_key), set())}
                if line.first is not None and self.is_of(line.first, line) and not self.is_of(line.before, line):
                    line.before, stood = line.first, given  # a copy of the file as the run first wrote it
                row, filled = self.settle(line, stood)
                if line.first is not None and outlet_id not in edited_elsewhere:
                    filled = self.as_first(row, filled, line.first, given)
                if line.first is None or self.differs(row, filled, line.first, given):
                    self.edited.add((outlet_id, line.key))
                row |= {
                    column: filled.get(column, self.otherwise(column, row, line.first)) for column in self.dependent
                }
                self.held |= {(self.table.name, outlet_id, line.key, self.dependent[column]) for column in filled}
                rows.append(row)
            if len(rows) != len(first[outlet_id]):
                self.edited.add((outlet_id, ""))
            self.finish(outlet_id, rows, first[outlet_id])
            every += rows
        return every

    def is_of(self, earlier: Row, line: _Line) -> bool:
        """Say whether a row was read from the file that held the earlier row: its computed cells are the same."""
        return line.added or all(same(line.row[column], earlier[column]) for column in self.fixed)

    def settle(self, line: _Line, stood: set[str]) -> tuple[Row, Row]:
        """Return a row with the edits in it, and those of its dependent cells that stand as given.

        ``stood`` names the dependent columns that did in the row that it is compared with.
        """
        now, before = line.row, line.before
        row, changed = dict(before), line.added
        for column in () if line.added else self.fixed:
            if not same(now[column], before[column]):
                what = f"{now[column]!r} instead of {before[column]!r} in a column that is not to be edited"
                self.wrong(line.number, column, what, "put the old value back; README lists the columns to edit")
        for column in self.independent:
            text = now[column].strip()
            if same(text, before[column]):
                text = before[column]
            else:
                changed = True
                if column in self.limits:
                    self.number(line.number, column, text)
            row[column] = line.first[column] if line.first is not None and same(text, line.first[column]) else text
        filled: Row = {}
        for column in self.dependent:
            text = now[column].strip()
            if same(text, before[column]):
                if text and column in stood:
                    filled[column] = before[column]
                continue
            changed = True
            if text and column in self.limits:
                self.number(line.number, column, text)
            if text:
                filled[column] = text
        if changed:
            self.adjust(line, row, filled)
        return row, filled

    def as_first(self, row: Row, filled: Row, first: Row, given: set[str]) -> Row:
        """Return the filled cells; only those that were given at first, where the whole row reads as it did then."""
        is_as_first = (
            given <= filled.keys()
            and all(row[column] == first[column] for column in self.independent)
            and all(same(text, first[column]) for column, text in filled.items())
        )
        return {column: first[column] for column in given} if is_as_first else filled

    def differs(self, row: Row, filled: Row, first: Row, given: set[str]) -> bool:
        """Say whether a row differs from the first one in anything that a person decides."""
        return (
            filled.keys() != given
            or any(filled[column] != first[column] for column in given)
            or any(row[column] != first[column] for column in self.independent)
        )


class _OutletEditor(_Editor):
    """Edits of outlets.csv."""

    table = OUTLETS
    dependent_stems = ("curve_number", "tc_h")

    def match(self, outlet_id: str, now: list[tuple[int, Row]], before: list[Row], first: list[Row]) -> list[_Line]:
        """Pair the one row of the outlet with itself; an emptied figure of the terrain is the terrain's again."""
        if len(now) != 1:
            where, what = (now[-1][0], "stands more than once") if now else (1, "is missing")
            self.wrong(where, "outlet_id", f"outlet {outlet_id!r} {what}", "keep one row for each outlet")
            return []
        number, row = now[0]
        for column in self.independent:
            row[column] = row[column].strip() or first[0][column]
        return [_Line(number, row, "", before[0], "", first[0])]

    def adjust(self, line: _Line, row: Row, filled: Row) -> None:
        """Refuse to edit an outlet that the terrain could not serve."""
        if line.first is not None and not line.first[self.name["area"]]:
            what, fix = "the outlet failed, so that no edit reaches it", "mend what flags.csv names and run again"
            self.wrong(line.number, "outlet_id", what, fix)

    def finish(self, outlet_id: str, rows: list[Row], first: list[Row]) -> None:
        """Count a changed figure of the terrain among the supplied ones."""
        stems = {name: stem for stem, name in self.name.items()}
        for row in rows:
            changed = [column for column in self.independent if row[column] != first[0][column]]
            self.held |= {(self.table.name, outlet_id, "", stems[column]) for column in changed}


class _ShareEditor(_Editor):
    """Edits of cover_shares.csv."""

    table = COVER_SHARES
    dependent_stems = ("curve_number", "impervious_pct", "source")

    def match(self, outlet_id: str, now: list[tuple[int, Row]], before: list[Row], first: list[Row]) -> list[_Line]:
        """Pair patches by what identifies them best, one after another: everything, the area, class and group."""
        if not now and before:
            self.wrong(1, "outlet_id", f"outlet {outlet_id!r} has no row left", "keep at least one patch")
        earlier = self._pairs([row for _, row in now], before)
        order = sorted(range(len(now)), key=lambda place: (earlier[place] is None, earlier[place] or 0, place))
        original = self._pairs([now[place][1] for place in order], first)
        blank = {**dict.fromkeys(before[0], ""), "outlet_id": outlet_id}
        lines = []
        for key, (place, at_first) in enumerate(zip(order, original, strict=True), start=1):
            (number, row), at = now[place], earlier[place]
            line = _Line(number, row, str(key), blank, "", None if at_first is None else first[at_first], added=True)
            if at is not None:
                line.before, line.before_key, line.added = before[at], str(at + 1), False
            lines.append(line)
        return lines

    def _pairs(self, rows: Sequence[Row], earlier: Sequence[Row]) -> list[int | None]:
        pairs: list[int | None] = [None] * len(rows)
        free = dict.fromkeys(range(len(earlier)))
        area = self.name["area"]
        for columns in (("cover", "soil_group", area), (area,), ("cover", "soil_group"), ()):
            for place, row in enumerate(rows):
                if pairs[place] is None:
                    fits = (at for at in free if all(same(row[name], earlier[at][name]) for name in columns))
                    if (at := next(fits, None)) is not None:
                        pairs[place] = at
                        del free[at]
        return pairs

    def key_of(self, row: Row, place: int) -> str:
        """Return the number of the patch."""
        return str(place)

    def otherwise(self, column: str, row: Row, first: Row | None) -> str:
        """Return what the run first had on this class and group: it may be composite with mapped impervious area."""
        same_patch = first is not None and all(same(row[name], first[name]) for name in ("cover", "soil_group"))
        return first[column] if first is not None and same_patch else ""

    def adjust(self, line: _Line, row: Row, filled: Row) -> None:
        """Check class and group; of a class that the scheme has not, what stands beside it is a person's."""
        cover, group = self.scheme.find(row["cover"]), row["soil_group"]
        if cover is None:
            filled |= {column: line.row[column].strip() for column in self.dependent if line.row[column].strip()}
        if not row["cover"]:
            self.wrong(line.number, "cover", "empty", "name the class of the patch")
        elif cover is None and "curve_number" not in filled:
            what = f"{row['cover']!r} is no class of the scheme"
            self.wrong(line.number, "cover", what, "name one of its classes, or give the patch its curve_number")
        if group not in (*GROUPS, ANY_GROUP):
            self.wrong(line.number, "soil_group", f"{group!r} is no soil group", f"use one of {', '.join(GROUPS)}")
        elif group == ANY_GROUP and cover is not None and cover.needs_soil and "curve_number" not in filled:
            what = f"the curve number of {row['cover']!r} depends on the group"
            self.wrong(line.number, "soil_group", what, f"use one of {', '.join(GROUPS)}")


class _SegmentEditor(_Editor):
    """Edits of segments.csv."""

    table = SEGMENTS
    dependent_stems = ("slope", "roughness", "hydraulic_radius", "hydraulic_radius_half")
    section_stems: ClassVar[tuple[str, ...]] = ("roughness", "hydraulic_radius", "hydraulic_radius_half")
    """Dependent cells that mean something else in another regime."""

    def key_of(self, row: Row, place: int) -> str:
        """Return the number of the segment, which it keeps whatever is added or deleted before it."""
        return row["segment"]

    def match(self, outlet_id: str, now: list[tuple[int, Row]], before: list[Row], first: list[Row]) -> list[_Line]:
        """Put the rows in downstream order and pair them by number; a row without one of its own is an added one."""
        start, end = self.name["from"], self.name["to"]
        if not now:
            if before:
                self.wrong(1, "outlet_id", f"outlet {outlet_id!r} has no row left", "keep at least one segment")
            return []
        known = len(self.problems)
        placed = []
        for number, row in now:
            low, high = self.number(number, start, row[start]), self.number(number, end, row[end])
            if high <= low:
                what = f"{row[end]} is not beyond {start} {row[start]}"
                self.wrong(number, end, what, "a segment runs downstream: give it a length over zero")
            placed.append((low, high, number, row))
        if len(self.problems) > known:
            return []
        placed.sort(key=lambda entry: entry[:3])
        by_number, by_first = ({row["segment"]: row for row in rows} for rows in (before, first))
        following = max(map(int, [*by_number, *by_first]))
        lines: list[_Line] = []
        taken: set[str] = set()
        for low, high, number, row in placed:
            key = row["segment"].strip().removesuffix(".0")
            own = key not in taken
            if own and key in by_number:
                line = _Line(number, row, key, by_number[key], key, by_first.get(key))
            elif own and key in by_first:
                line = _Line(number, row, key, by_first[key], key, by_first[key], added=True)
            else:
                middle = 0.5 * (low + high)
                around = next((piece for piece in before if float(piece[end]) >= middle), before[-1])
                cut_from = by_number.get(key, around)
                following += 1
                line = _Line(number, row, str(following), cut_from, cut_from["segment"], None, added=True)
            row["segment"] = line.before["segment"]
            taken.add(line.key)
            lines.append(line)
        deleted = [row for row in before if row["segment"] not in taken]
        self._join(lines, deleted, float(first[-1][end]))
        self._fill(lines, first)
        return lines

    def _join(self, lines: list[_Line], deleted: list[Row], length: float) -> None:
        """Let each segment begin where the one above ends: give the length of deleted ones to the next downstream."""
        start, end, top = self.name["from"], self.name["to"], self.name["top_elevation"]
        fix = "let each segment begin where the one above ends"
        before = 0.0
        for line in lines:
            row, low = line.row, float(line.row[start])
            if low < before - tolerance(before):
                self.wrong(line.number, start, f"overlaps the segment above, which ends at {before:g}", fix)
            elif low > before + tolerance(before):
                gone = [piece for piece in deleted if float(piece[start]) >= before - tolerance(before)
                        and float(piece[end]) <= low + tolerance(low)]  # fmt: skip
                covered = sum(float(piece[end]) - float(piece[start]) for piece in gone)
                if math.isclose(covered, low - before, rel_tol=1e-6):
                    row[start] = gone[0][start]
                    if same(row[top], line.before[top]):
                        row[top] = gone[0][top]
                else:
                    self.wrong(line.number, start, f"a gap from {before:g} to {low:g}", fix)
            before = float(row[end])
        if abs(before - length) > tolerance(length):
            what = f"the path ends at {length:g}, not at {before:g}"
            self.wrong(lines[-1].number, end, what, "let the last segment reach the outlet")

    def _fill(self, lines: list[_Line], first: list[Row]) -> None:
        """Find the elevations at the cuts of a split segment, and read those that were emptied off the profile."""
        start, end = self.name["from"], self.name["to"]
        top, bottom = self.name["top_elevation"], self.name["bottom_elevation"]
        for above, below in pairwise(lines):
            if above.before is not below.before or not (above.added or below.added):
                continue
            whole = above.before
            as_copied = [
                not line.row[column].strip() or same(line.row[column], whole[column])
                for line, column in ((above, bottom), (below, top))
            ]
            if all(as_copied):
                at = profile([whole], (start, end, top, bottom), float(above.row[end]))
                above.row[bottom] = below.row[top] = at
            elif as_copied[0]:
                above.row[bottom] = below.row[top]
            elif as_copied[1]:
                below.row[top] = above.row[bottom]
        for line in lines:
            for column, at in ((top, start), (bottom, end)):
                if not line.row[column].strip():
                    line.row[column] = profile(first, (start, end, top, bottom), float(line.row[at]))
            if line.added:
                for column in ("regime", "cover"):
                    line.row[column] = line.row[column].strip() or line.before[column]

    def adjust(self, line: _Line, row: Row, filled: Row) -> None:
        """Check the regime; in another regime only what was filled for it stands; a class must give its roughness."""
        row["segment"] = line.key
        regimes = SEGMENTS.column("regime").choices
        if row["regime"] not in regimes:
            self.wrong(line.number, "regime", f"{row['regime']!r} is unknown", f"use one of {', '.join(regimes)}")
        if row["regime"] != line.before["regime"]:
            for stem in self.section_stems:
                column = self.name[stem]
                if column in filled and same(filled[column], line.before[column]):
                    del filled[column]
        if row["regime"] in ("sheet", "shallow") and self.scheme.find(row["cover"]) is None:
            if row["regime"] == line.before["regime"] and line.row["roughness"].strip():
                filled.setdefault("roughness", line.row["roughness"].strip())
            if "roughness" not in filled:
                what = f"{row['cover']!r} is no class of the scheme"
                self.wrong(line.number, "cover", what, "name one of its classes, or give the segment its roughness")

    def finish(self, outlet_id: str, rows: list[Row], first: list[Row]) -> None:
        """Close the joints to the last digit, and give sheet flow the roughness that the terrain had weighted."""
        start, end = self.name["from"], self.name["to"]
        for above, below in pairwise(rows):
            below[start] = above[end]
        if rows:
            rows[-1][end] = first[-1][end]
        for row in rows:
            sheet = first[0]["regime"] == row["regime"] == "sheet" and row["cover"] == first[0]["cover"]
            if sheet and not row["roughness"]:
                row["roughness"] = first[0]["roughness"]
            if self.record.mapped_roughness and row["regime"] == "channel" and not row["roughness"]:
                middle = 0.5 * (float(row[start]) + float(row[end]))
                whole = next((piece for piece in first if float(piece[end]) >= middle), first[-1])
                row["roughness"] = whole["roughness"] if whole["regime"] == "channel" else ""


_EDITORS: tuple[type[_Editor], ...] = (_SegmentEditor, _ShareEditor, _OutletEditor)


def dependent_stems(table: str) -> tuple[str, ...]:
    """Return the stems of a table's editable cells that are computed where no person filled them."""
    return next(editor.dependent_stems for editor in _EDITORS if editor.table.name == table)


def by_outlet(frame: pd.DataFrame) -> dict[str, list[Row]]:
    """Return the rows of a table by outlet, in the order of the table."""
    grouped: dict[str, list[Row]] = {}
    names = [str(name) for name in frame.columns]
    for cells in frame.itertuples(index=False, name=None):
        row = dict(zip(names, cells, strict=True))
        grouped.setdefault(row["outlet_id"], []).append(row)
    return grouped


def by_row(cells: Iterable[Cell], table: str) -> dict[tuple[str, str], set[str]]:
    """Return the stems of the cells of a table, by outlet and row."""
    grouped: dict[tuple[str, str], set[str]] = {}
    for name, outlet_id, row, stem in cells:
        if name == table:
            grouped.setdefault((outlet_id, row), set()).add(stem)
    return grouped


def tolerance(distance: float) -> float:
    """Return within what two distances from the divide are the same."""
    return max(1e-6, _SAME * distance)


def profile(rows: Sequence[Row], columns: Sequence[str], distance: float) -> str:
    """Read an elevation off the straight lines between the ends of rows: start, end, top and bottom columns."""
    start, end, top, bottom = columns
    row = rows[min(bisect_left(rows, distance, key=lambda row: float(row[end])), len(rows) - 1)]
    low, high, above, below = (float(row[column]) for column in (start, end, top, bottom))
    if distance in (low, high):
        return row[top] if distance == low else row[bottom]
    return repr(above + (below - above) * (distance - low) / (high - low))
