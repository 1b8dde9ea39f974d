"""A person's edits: what they changed in the tables of a run, checked, and which cells are to be computed again.

Three states of each table meet here, all as text: the *base* that the terrain gave, what was last *written*, and what
stands in the file *now*. A cell is edited where now differs from written; a dependent cell (a slope, a roughness, a
hydraulic radius, a curve number, a time of concentration) that a person filled is *held*: it stands until it is
emptied. Every other dependent cell is emptied before the hydrology runs, and so computed from the rest of its row.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from basinwright.errors import InputRejected, Problem
from basinwright.tables import COVER_SHARES, OUTLETS, SEGMENTS, Table
from basinwright.units import System

if TYPE_CHECKING:
    import pandas as pd

Row = dict[str, str]
Cell = tuple[str, str, str, str]
"""A cell: table, outlet id, row, column stem."""

EDITABLE = (OUTLETS, SEGMENTS, COVER_SHARES)
"""The tables that a person may edit."""

DEPENDENT: dict[str, tuple[str, ...]] = {
    "outlets": ("curve_number", "tc_h"),
    "segments": ("slope", "roughness", "hydraulic_radius", "hydraulic_radius_half"),
    "cover_shares": ("curve_number", "impervious_pct", "source"),
}
"""Editable cells that are computed where a person did not fill them, by table."""

_SAME = 1e-9
"""Relative difference under which two numbers are the same: spreadsheets keep 15 digits of 17."""


@dataclass
class Record:
    """What the manifest keeps so that edits can be told from computed values.

    Parameters
    ----------
    base, written : dict of str to DataFrame
        The editable tables, as the terrain gave them and as last written.
    held : set of tuple
        (table, outlet id, row, column stem) of the dependent cells that a person filled.
    """

    base: dict[str, pd.DataFrame]
    written: dict[str, pd.DataFrame]
    held: set[Cell] = field(default_factory=set)


def same(a: str, b: str) -> bool:
    """Say whether two cells hold the same value: the same text, or numbers that a spreadsheet would not tell apart."""
    if a == b:
        return True
    if a.lower() in ("true", "false"):
        return a.lower() == b.lower()
    try:
        return math.isclose(float(a), float(b), rel_tol=_SAME, abs_tol=1e-12)
    except ValueError:
        return False


class _Reader:
    """Collects what is wrong in one file."""

    def __init__(self, table: Table, system: System, periods: Sequence[str]) -> None:
        self.file = f"{table.name}.csv"
        self.problems: list[Problem] = []
        self.editable = {column.name(system) for column in table.columns if column.editable}
        self.name = {column.stem: column.name(system) for column in table.columns}
        self.stem = {column.name(system): column.stem for column in table.columns}
        self.numbers = {c.name(system) for c in table.columns if c.type == "number" and not c.per_return_period}
        self.dependents = [self.name[stem] for stem in DEPENDENT[table.name]]

    def wrong(self, line: int, column: str, what: str, fix: str) -> None:
        self.problems.append(Problem(self.file, f"row {line}, {column}", what, fix))

    def number(self, row: Row, column: str, line: int, low: float = -math.inf, high: float = math.inf) -> float:
        """Read a number; NaN with a problem where it is none or out of range."""
        try:
            value = float(row[column])
        except ValueError:
            value = math.nan
        if not math.isfinite(value):
            self.wrong(line, column, f"{row[column]!r} is not a finite number", "write a plain number")
            return math.nan
        if not low <= value <= high:
            self.wrong(line, column, f"{row[column]} is out of range", f"give a number from {low:g} to {high:g}")
            return math.nan
        return value

    def check_number(self, row: Row, column: str, line: int) -> None:
        if not row[column]:
            return
        stem = self.stem[column]
        low, high = _LIMITS.get(stem, (-math.inf, math.inf))
        self.number(row, column, line, low, high)


_LIMITS = {
    "slope": (1e-9, 10.0),
    "roughness": (1e-6, 1000.0),
    "hydraulic_radius": (1e-6, math.inf),
    "hydraulic_radius_half": (1e-6, math.inf),
    "from": (0.0, math.inf),
    "to": (0.0, math.inf),
    "area": (1e-12, math.inf),
    "path_length": (1e-9, math.inf),
    "basin_slope_pct": (1e-9, math.inf),
    "curve_number": (1.0, 100.0),
    "tc_h": (1e-6, math.inf),
    "impervious_pct": (0.0, 100.0),
}
"""What an edited number may be, by column stem."""


def apply(
    now: Mapping[str, pd.DataFrame], record: Record, system: System, periods: Sequence[str]
) -> tuple[dict[str, pd.DataFrame], set[Cell], set[tuple[str, str]]]:
    """Check a person's edits and prepare the tables for the hydrology.

    Parameters
    ----------
    now : mapping of str to DataFrame
        The editable tables as they stand, all cells text (`basinwright.tables.read_csv`).
    record : Record
        What the run's manifest keeps.
    system : {"us", "si"}
        Unit system of the project.
    periods : sequence of str
        Return periods of the project.

    Returns
    -------
    tables : dict of str to DataFrame
        The tables for the hydrology: edits in place, every dependent cell that is not held emptied.
    held : set of tuple
        The dependent cells that now stand as a person filled them.
    edited : set of (outlet id, segment)
        The segments that differ from the base.

    Raises
    ------
    InputRejected
        With every impossible edit: file, row, column and mend.
    """
    import pandas as pd

    problems: list[Problem] = []
    tables: dict[str, pd.DataFrame] = {}
    held = set(record.held)
    edited: set[tuple[str, str]] = set()
    for table in EDITABLE:
        reader = _Reader(table, system, periods)
        frame, written = now[table.name], record.written[table.name]
        if problem := _header_problem(reader, list(frame.columns), list(written.columns)):
            problems.append(problem)
            continue
        kept, changed = _by_outlet(frame, written)
        ids = set(written["outlet_id"])
        for outlet_id, rows in changed.items():
            if outlet_id not in ids:
                reader.wrong(
                    rows[0][0],
                    "outlet_id",
                    f"{outlet_id!r} is no outlet of this run",
                    "ids are text: keep them as they were",
                )
        written_rows, base_rows = _rows(written), _rows(record.base[table.name])
        result: dict[str, list[Row]] = {}
        for outlet_id in written_rows:
            old, base = written_rows[outlet_id], base_rows[outlet_id]
            if outlet_id in kept:
                result[outlet_id] = [dict(row) for row in old]
            else:
                rows = changed.get(outlet_id, [])
                edit = {"outlets": _edit_outlet, "segments": _edit_segments, "cover_shares": _edit_shares}[table.name]
                result[outlet_id] = edit(reader, outlet_id, rows, old, base, held)
            if table is SEGMENTS:
                edited |= _edited(reader, outlet_id, result[outlet_id], base, held)
            _empty_dependents(reader, table, outlet_id, result[outlet_id], base, held)
        problems += reader.problems
        tables[table.name] = pd.DataFrame(
            [row for rows in result.values() for row in rows], columns=list(written.columns), dtype=object
        )
    if problems:
        raise InputRejected(problems)
    return tables, held, edited


def _header_problem(reader: _Reader, now: list[str], written: list[str]) -> Problem | None:
    if sorted(now) == sorted(written):
        return None
    missing, extra = sorted(set(written) - set(now)), sorted(set(now) - set(written))
    what = "; ".join(
        part
        for part in (f"missing {', '.join(missing)}" * bool(missing), f"unknown {', '.join(extra)}" * bool(extra))
        if part
    )
    return Problem(reader.file, "header", what or "a column stands twice", "keep the columns as the run wrote them")


def _rows(frame: pd.DataFrame) -> dict[str, list[Row]]:
    grouped: dict[str, list[Row]] = {}
    names = [str(name) for name in frame.columns]
    for cells in frame.itertuples(index=False, name=None):
        row = dict(zip(names, cells, strict=True))
        grouped.setdefault(row["outlet_id"], []).append(row)
    return grouped


def _by_outlet(now: pd.DataFrame, written: pd.DataFrame) -> tuple[set[str], dict[str, list[tuple[int, Row]]]]:
    """Part the outlets into those whose rows are as written and those that changed, with their line numbers."""
    now = now[list(written.columns)]
    old: dict[str, list[tuple[str, ...]]] = {}
    for cells in written.itertuples(index=False, name=None):
        old.setdefault(cells[0], []).append(cells)
    new: dict[str, list[tuple[str, ...]]] = {}
    lines: dict[str, list[int]] = {}
    for line, cells in enumerate(now.itertuples(index=False, name=None), start=2):
        new.setdefault(cells[0], []).append(cells)
        lines.setdefault(cells[0], []).append(line)
    kept = {outlet_id for outlet_id, rows in new.items() if old.get(outlet_id) == rows}
    names = list(written.columns)
    changed = {
        outlet_id: [
            (line, {name: str(cell).strip() for name, cell in zip(names, cells, strict=True)})
            for line, cells in zip(lines[outlet_id], rows, strict=True)
        ]
        for outlet_id, rows in new.items()
        if outlet_id not in kept
    }
    return kept, changed


def _settle(
    reader: _Reader, table: str, row_key: str, line: int, row: Row, old: Row, held: set[Cell], free: Sequence[str] = ()
) -> Row:
    """Check one row against what was written and note which dependent cells a person filled or emptied."""
    settled = dict(row)
    for column, cell in row.items():
        if same(cell, old[column]):
            settled[column] = old[column]
            continue
        if column not in reader.editable and column not in free:
            reader.wrong(
                line,
                column,
                f"{cell!r} instead of {old[column]!r}: not a column to edit",
                "put the old value back; README, editing, lists the columns",
            )
            settled[column] = old[column]
            continue
        if column in reader.numbers:
            reader.check_number(row, column, line)
        if column in reader.dependents:
            cell_key = (table, row["outlet_id"], row_key, reader.stem[column])
            held.add(cell_key) if cell else held.discard(cell_key)
    return settled


def _edit_outlet(
    reader: _Reader, outlet_id: str, rows: list[tuple[int, Row]], old: list[Row], base: list[Row], held: set[Cell]
) -> list[Row]:
    if len(rows) != 1:
        line = rows[-1][0] if rows else 1
        what = "stands more than once" if rows else "is missing"
        reader.wrong(line, "outlet_id", f"outlet {outlet_id!r} {what}", "keep one row for each outlet")
        return [dict(old[0])]
    line, row = rows[0]
    terrain = ("area", "path_length", "basin_slope_pct")
    for stem in terrain:
        row[reader.name[stem]] = row[reader.name[stem]] or base[0][reader.name[stem]]  # emptied: as the terrain gave it
    settled = _settle(reader, "outlets", "", line, row, old[0], held)
    for stem in terrain:
        cell = ("outlets", outlet_id, "", stem)
        held.discard(cell) if same(settled[reader.name[stem]], base[0][reader.name[stem]]) else held.add(cell)
    return [settled]


def _edit_shares(
    reader: _Reader, outlet_id: str, rows: list[tuple[int, Row]], old: list[Row], base: list[Row], held: set[Cell]
) -> list[Row]:
    if not rows:
        reader.wrong(1, "outlet_id", f"outlet {outlet_id!r} has no row left", "keep at least one patch for each outlet")
        return [dict(row) for row in old]
    held -= {key for key in held if key[0] == "cover_shares" and key[1] == outlet_id and int(key[2]) > len(rows)}
    settled = []
    for number, (line, row) in enumerate(rows, start=1):
        reference = old[number - 1] if len(rows) == len(old) else _patch(row, old)
        for column in ("cover", "soil_group"):
            if not row[column]:
                reader.wrong(line, column, "empty", "name the class and the group of the patch")
        if not row[reader.name["area"]]:
            reader.wrong(line, reader.name["area"], "empty", "give the area of the patch")
        settled.append(_settle(reader, "cover_shares", str(number), line, row, reference, held))
    return settled


def _patch(row: Row, old: list[Row]) -> Row:
    """Return the written row of the same patch; a blank one where a person added it."""
    for candidate in old:
        if (candidate["cover"], candidate["soil_group"]) == (row["cover"], row["soil_group"]):
            return candidate
    return {**dict.fromkeys(row, ""), "outlet_id": row["outlet_id"]}


def _edit_segments(
    reader: _Reader, outlet_id: str, rows: list[tuple[int, Row]], old: list[Row], base: list[Row], held: set[Cell]
) -> list[Row]:
    start, end, top, bottom = (reader.name[stem] for stem in ("from", "to", "top_elevation", "bottom_elevation"))
    if not rows:
        if old:
            reader.wrong(
                1, "outlet_id", f"outlet {outlet_id!r} has no row left", "keep at least one segment for each outlet"
            )
        return [dict(row) for row in old]
    placed: list[tuple[float, float, int, Row]] = []
    for line, row in rows:
        low, high = reader.number(row, start, line, 0.0), reader.number(row, end, line, 0.0)
        if math.isnan(low) or math.isnan(high):
            return [dict(row) for row in old]
        if not high > low:
            reader.wrong(
                line,
                end,
                f"{row[end]} is not beyond {start} {row[start]}",
                "a segment runs downstream: give it a length over zero",
            )
            return [dict(row) for row in old]
        placed.append((low, high, line, row))
    placed.sort(key=lambda entry: entry[:3])

    by_number = {row["segment"]: row for row in old}
    taken: set[str] = set()
    following = max(int(number) for number in by_number)
    settled: list[Row] = []
    for low, high, line, row in placed:
        number = row["segment"]
        if number in by_number and number not in taken:
            reference, free = by_number[number], tuple[str, ...]()
        else:  # split off or added: everything in it is the person's, compared with the piece it was cut from
            if number and number not in by_number and not number.isdigit():
                reader.wrong(line, "segment", f"{number!r} is not a whole number", "leave it empty for an added row")
            following += 1
            number = row["segment"] = str(following)
            middle = 0.5 * (low + high)
            reference = {**next((piece for piece in old if float(piece[end]) >= middle), old[-1]), "segment": number}
            free = tuple(row)
            row["edited"] = reference["edited"] if not row["edited"] else row["edited"]
        taken.add(number)
        fresh = _settle(reader, "segments", number, line, row, reference, held, free)
        if fresh["regime"] not in SEGMENTS.column("regime").choices:
            reader.wrong(
                line,
                "regime",
                f"{fresh['regime']!r} is unknown",
                f"use one of {', '.join(SEGMENTS.column('regime').choices)}",
            )
        settled.append(fresh)

    deleted = [row for row in old if row["segment"] not in taken]
    held -= {key for key in held if key[0] == "segments" and key[1] == outlet_id and key[2] not in taken}
    before, lift = 0.0, ""
    for (low, high, line, _), row in zip(placed, settled, strict=True):
        if low - before > _tolerance(before):
            gone = [piece for piece in deleted if _within(piece, before, low, start, end)]
            covered = sum(float(piece[end]) - float(piece[start]) for piece in gone)
            if not math.isclose(covered, low - before, rel_tol=1e-6):
                reader.wrong(
                    line, start, f"a gap from {before:g} to {low:g}", "let each segment begin where the one above ends"
                )
            row[start] = gone[0][start] if gone else row[start]
            row[top] = lift or (gone[0][top] if gone else row[top])
        elif before - low > _tolerance(before):
            reader.wrong(
                line,
                start,
                f"overlaps the segment above, which ends at {before:g}",
                "let each segment begin where the one above ends",
            )
        before, lift = high, row[bottom]
    length = float(base[-1][end])
    if abs(length - before) > _tolerance(length):
        reader.wrong(
            placed[-1][2],
            end,
            f"the path ends at {length:g}, not at {before:g}",
            "let the last segment reach the outlet",
        )
    _fill_elevations(settled, base, start, end, top, bottom)
    return settled


def _tolerance(distance: float) -> float:
    return max(1e-6, 1e-9 * distance)


def _within(piece: Row, low: float, high: float, start: str, end: str) -> bool:
    return float(piece[start]) >= low - _tolerance(low) and float(piece[end]) <= high + _tolerance(high)


def _fill_elevations(rows: list[Row], base: list[Row], start: str, end: str, top: str, bottom: str) -> None:
    """Read an emptied elevation off the profile of the base."""
    import numpy as np

    distances = [float(base[0][start]), *(float(row[end]) for row in base)]
    elevations = [float(base[0][top]), *(float(row[bottom]) for row in base)]
    for row in rows:
        for column, at in ((top, start), (bottom, end)):
            if not row[column]:
                row[column] = repr(float(np.interp(float(row[at]), distances, elevations)))


def _edited(reader: _Reader, outlet_id: str, rows: list[Row], base: list[Row], held: set[Cell]) -> set[tuple[str, str]]:
    """List the segments of an outlet that differ from its base in a cell that a person may change."""
    by_number = {row["segment"]: row for row in base}
    columns = [column for column in reader.editable if column not in reader.dependents]
    filled = {number for table, its_id, number, _ in held if table == "segments" and its_id == outlet_id}
    return {
        (outlet_id, row["segment"])
        for row in rows
        if row["segment"] not in by_number
        or row["segment"] in filled
        or any(not same(row[column], by_number[row["segment"]][column]) for column in columns)
    }


def _empty_dependents(
    reader: _Reader, table: Table, outlet_id: str, rows: list[Row], base: list[Row], held: set[Cell]
) -> None:
    """Empty the dependent cells that no person filled, so that they are computed."""
    by_number = {row["segment"]: row for row in base} if table is SEGMENTS else {}
    shares = {(row["cover"], row["soil_group"]): row for row in base} if table is COVER_SHARES else {}
    for number, row in enumerate(rows, start=1):
        key = row["segment"] if table is SEGMENTS else str(number) if table is COVER_SHARES else ""
        for column in reader.dependents:
            if (table.name, outlet_id, key, reader.stem[column]) in held:
                continue
            if table is SEGMENTS and column == "roughness" and row["regime"] == "sheet":
                # The roughness of a sheet reach is weighted by length along the path: only the terrain knows it.
                first = by_number.get(row["segment"], base[0])
                if first["regime"] == "sheet" and same(first["cover"], row["cover"]):
                    row[column] = first[column]
                    continue
            if table is COVER_SHARES and (row["cover"], row["soil_group"]) in shares:
                row[column] = shares[row["cover"], row["soil_group"]][column]
                continue
            row[column] = ""
