"""From one cell of one table back to what it began from: an explanation with those of its inputs inside."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from basinwright.errors import InputRejected
from basinwright.explaining.comparisons import COMPARISON_HOWS
from basinwright.explaining.others import (
    COVER_HOWS,
    CROSS_HOWS,
    FLAG_HOWS,
    HYDROGRAPH_HOWS,
    TIME_AREA_HOWS,
    TIMING_HOWS,
    UNIT_HOWS,
)
from basinwright.explaining.outlets import BASIN_HOWS, OUTLET_HOWS
from basinwright.explaining.reading import TABLES, Here, RunView
from basinwright.explaining.records import FACTORS, Choice, How, Value, evaluate, figure, filled, readable
from basinwright.explaining.segments import SEGMENT_HOWS
from basinwright.flags import FLAGS
from basinwright.tables import OUTLETS, SEGMENTS

HOWS: Mapping[str, Mapping[str, Choice]] = {
    "outlets": OUTLET_HOWS,
    "segments": SEGMENT_HOWS,
    "cover_shares": COVER_HOWS,
    "timing": TIMING_HOWS,
    "time_area": TIME_AREA_HOWS,
    "cross_checks": CROSS_HOWS,
    "unit_hydrographs": UNIT_HOWS,
    "hydrographs": HYDROGRAPH_HOWS,
    "basin_parameters": BASIN_HOWS,
    "flags": FLAG_HOWS,
    **COMPARISON_HOWS,
}
"""How each column comes to be, by table and stem: one record, or a choice of records, for every column."""

_UNRECORDED = How("there is no record of how this column comes to be")

SAME = 1e-9
"""Relative difference up to which the figure computed again is the table's."""
_MOST_ROWS = 3
"""Of an input with many rows, so many are explained in turn: those with the largest figures."""


@dataclass(frozen=True)
class Input:
    """An input of an explanation: symbol, figure, unit, what it is, the cells it came from and their explanations."""

    symbol: str
    figure: str
    unit: str
    about: str
    cells: tuple[str, ...] = ()
    published: tuple[dict[str, Any], ...] = ()
    explained: tuple[Explanation, ...] = ()


@dataclass(frozen=True)
class Explanation:
    """How one cell of one table came to be.

    Parameters
    ----------
    outlet_id, table, column : str
        Which cell: the file without its ending, and the column's name there.
    row : dict of str to str
        What names the row besides the outlet.
    value : str
        What stands in the file.
    unit, meaning : str
        Of the column, as the schema says.
    words : str
        How it came to be.
    formula, filled : str
        The formula, and the same with the numbers in the place of the symbols; empty where it was measured or given.
    formula_unit : str
        Unit of what the formula gives, where it is not the column's.
    recomputed : float or None
        What the formula gives, in the unit of the column.
    agrees : bool or None
        Whether that is the table's figure.
    source : str
        Where the formula was published.
    published : tuple of dict
        Rows of published tables: ``table``, ``row``, ``source``.
    places : tuple of str
        Cells of the terrain, pixels and files that it began from.
    edited : str
        What a person changed; empty where nobody did.
    flags : tuple of dict
        Flags of the outlet that bear on the run: ``flag``, ``severity``, ``message``, ``remedy``.
    inputs : tuple of Input
        The formula's inputs.
    """

    outlet_id: str
    table: str
    column: str
    row: dict[str, str]
    value: str
    unit: str
    meaning: str
    words: str
    formula: str = ""
    filled: str = ""
    formula_unit: str = ""
    recomputed: float | None = None
    agrees: bool | None = None
    source: str = ""
    published: tuple[dict[str, Any], ...] = ()
    places: tuple[str, ...] = ()
    edited: str = ""
    flags: tuple[dict[str, str], ...] = field(default=())
    inputs: tuple[Input, ...] = ()


def explain(
    run_dir: Path | RunView,
    outlet_id: str,
    column: str,
    *,
    depth: int = 1,
    table: str | None = None,
    where: Mapping[str, str] | None = None,
) -> Explanation:
    """Explain one number of a finished run.

    Parameters
    ----------
    run_dir : Path or RunView
        The run's folder.
    outlet_id : str
        The outlet.
    column : str
        Name of the column as it stands in the file, such as ``peak_10yr_cfs``, or with its table,
        ``segments.slope``.
    depth : int
        To what depth inputs are explained in turn: 0 names them only.
    table : str, optional
        The table, where more than one has the column; without it outlets.csv comes first.
    where : mapping, optional
        Which row, where the outlet has several: cells by column, such as ``{"segment": "3"}``.

    Returns
    -------
    Explanation

    Raises
    ------
    InputRejected
        Where there is no such outlet, column or row, or several rows.
    """
    run = run_dir if isinstance(run_dir, RunView) else RunView(run_dir)
    run.require_outlet(outlet_id)
    here = _find(run, outlet_id, column, table, where or {})
    return _explained(here, depth, with_flags=True)


def _find(run: RunView, outlet_id: str, column: str, table: str | None, where: Mapping[str, str]) -> Here:
    """Find the cell that is asked for."""
    from difflib import get_close_matches

    named, _, bare = column.rpartition(".") if column.partition(".")[0] in TABLES else ("", "", column)
    wanted = table or named
    if wanted and wanted not in TABLES:
        raise InputRejected.one("command line", "table", f"no table {wanted!r}", f"use one of {', '.join(TABLES)}")
    names = [wanted] if wanted else list(TABLES)
    names = [name for name in names if where.keys() <= _columns(run, name).keys()] or names
    for name in names:
        known = _columns(run, name)
        if bare not in known:
            continue
        rows = [
            row
            for row in run.rows(name, outlet_id)
            if all(_same(row.get(key, ""), value) for key, value in where.items())
        ]
        stem, period = known[bare]
        if len(rows) == 1:
            return run.here(name, rows[0], stem, period)
        if not rows:
            fix = f"look into {name}.csv for the rows of this outlet"
            raise InputRejected.one(str(run.folder / f"{name}.csv"), bare, f"no such row of outlet {outlet_id!r}", fix)
        key = [k for k in TABLES[name].key if k != "outlet_id"] or ["its columns"]
        fix = f"say which by --where, such as --where {key[-1]}={rows[0].get(key[-1], '...')}"
        what = f"{len(rows)} rows of outlet {outlet_id!r} fit (a row is named by {', '.join(key)})"
        raise InputRejected.one(str(run.folder / f"{name}.csv"), bare, what, fix)
    every = [column for name in names for column in _columns(run, name)]
    near = get_close_matches(bare, every, n=1)
    fix = f"did you mean {near[0]!r}?" if near else "docs/columns.md lists every column"
    raise InputRejected.one("command line", "COLUMN", f"no table of the run has a column {bare!r}", fix)


def _columns(run: RunView, table: str) -> dict[str, tuple[str, str]]:
    """Return stem and period of each column that a table can have, by name."""
    found = {}
    for column in TABLES[table].columns:
        for period in run.periods if column.per_return_period else [""]:
            found[column.name(run.system, period)] = (column.stem, period)
    return found


def _same(cell: str, wanted: str) -> bool:
    try:
        return math.isclose(float(cell), float(wanted), rel_tol=1e-9, abs_tol=1e-12)
    except ValueError:
        return cell == wanted


def _explained(here: Here, depth: int, with_flags: bool = False) -> Explanation:
    """Explain a cell, and its inputs to a depth."""
    record, edited = _record_of(here)
    values = {symbol: get(here) for symbol, get in record.inputs.items()} if here.text else {}
    recomputed = _recomputed(here, record, values)
    numbers = {symbol: value.value for symbol, value in values.items()}
    rows = () if record.rows is None or not here.text else tuple(record.rows(here))
    return Explanation(
        outlet_id=here.outlet_id,
        table=here.table.name,
        column=here.name,
        row={key: here.row[key] for key in _key(here) if key != "outlet_id"},
        value=here.text,
        unit=here.unit,
        meaning=here.table.column(here.stem).meaning,
        words=record.words if here.text else f"empty: {_why_empty(here)} ({record.words})",
        formula=readable(record.formula) if values else "",
        filled=filled(record.formula, numbers) if values else "",
        formula_unit=record.unit if values and record.unit != here.unit else "",
        recomputed=recomputed,
        agrees=None if recomputed is None else _agrees(here.text, recomputed),
        source=str(record.source),
        published=tuple({"table": row.table, "row": dict(row.row), "source": str(row.source)} for row in rows),
        places=tuple(record.places(here)) if record.places is not None and here.text else (),
        edited=edited,
        flags=tuple(_flags(here)) if with_flags else (),
        inputs=tuple(_input(here, symbol, value, depth) for symbol, value in values.items()),
    )


def _key(here: Here) -> list[str]:
    return [here.table.column(stem).name(here.run.system) for stem in here.table.key]


def _record_of(here: Here) -> tuple[How, str]:
    """Return the record of a cell, and what a person did to it."""
    table, row = here.table.name, here.row.get("segment", "") if here.table is SEGMENTS else ""
    run, place = here.run, (here.table.name, here.outlet_id, row, here.stem)
    first = next((r for r in _first_rows(here) if all(r[k] == here.row[k] for k in _key(here))), None)
    edited = ""
    if table in run.record.first and here.table.column(here.stem).editable and first is not None:
        before = first.get(here.name, "")
        if before != here.text and place in run.record.held:
            edited = f"a person changed it from {before or 'empty'}"
    if place in run.record.held:
        if place in run.record.supplied:
            return How("supplied with the outlet, in the outlet layer: it stands instead of the computed value"), edited
        return How("a person filled it in the table: it stands until it is emptied"), edited
    choice = HOWS.get(table, {}).get(here.stem, _UNRECORDED)
    return (choice if isinstance(choice, How) else choice(here)), edited


def _first_rows(here: Here) -> Sequence[Mapping[str, str]]:
    return here.rows(here.table.name, first=True) if here.table.name in here.run.record.first else []


def _recomputed(here: Here, record: How, values: Mapping[str, Value]) -> float | None:
    if not record.formula or not values:
        return None
    with np.errstate(all="ignore"):
        number = evaluate(record.formula, {symbol: value.value for symbol, value in values.items()})
    if record.unit and record.unit != here.unit:
        number *= _factor(record.unit) / _factor(here.unit)
    return None if math.isnan(number) else number


def _factor(unit: str) -> float:
    return FACTORS[unit]


def _agrees(text: str, number: float) -> bool:
    value = float(text)
    return math.isclose(value, number, rel_tol=SAME, abs_tol=SAME * max(1.0, abs(value)) * 1e-3)


def _why_empty(here: Here) -> str:
    if here.outlet.get("status") == "failed":
        return "the outlet could not be computed"
    return here.row.get("reason", "") or "nothing to say here"


def _flags(here: Here) -> list[dict[str, str]]:
    return [
        {
            "flag": row["flag"],
            "severity": row["severity"],
            "message": row["message"],
            "remedy": FLAGS[row["flag"]].remedy if row["flag"] in FLAGS else "",
        }
        for row in here.rows("flags")
    ]


def _input(here: Here, symbol: str, value: Value, depth: int) -> Input:
    places = [here.at(ref.table, ref.row, ref.stem, ref.period) for ref in value.refs]
    if len(places) > _MOST_ROWS:
        by_size = sorted(range(len(places)), key=lambda i: -abs(places[i].number()) if places[i].text else 0.0)
        places = [places[i] for i in sorted(by_size[:_MOST_ROWS])]
    return Input(
        symbol,
        "" if callable(value.value) else figure(value.value),
        value.unit,
        value.about,
        tuple(_cell_name(place) for place in places),
        tuple({"table": row.table, "row": dict(row.row), "source": str(row.source)} for row in value.rows),
        tuple(_explained(place, depth - 1) for place in places) if depth > 0 else (),
    )


def _cell_name(place: Here) -> str:
    key = ", ".join(f"{k} {place.row[k]}" for k in _key(place) if k != "outlet_id")
    owner = place.outlet_id if place.table is OUTLETS else key
    return f"{place.table.name}.csv {place.name}" + (f" ({owner})" if owner else "")
