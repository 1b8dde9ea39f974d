"""A finished run as the explanations read it: its tables as text, its options, and what its store still holds."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.errors import InputRejected
from basinwright.explaining.records import FACTORS, Ref, Value
from basinwright.outputs import hydrographs_nc
from basinwright.pipeline import manifest
from basinwright.store import STORE, Entry
from basinwright.tables import ALL, HYDROGRAPHS, OUTLETS, Table, read_csv

if TYPE_CHECKING:
    from numpy.typing import NDArray

TABLES: dict[str, Table] = {table.name: table for table in ALL}
Row = Mapping[str, str]


class RunView:
    """A finished run.

    Parameters
    ----------
    folder : Path
        The run's folder.

    Raises
    ------
    InputRejected
        Where it holds no run.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.about = manifest.read(folder)
        self.project, self.settings = manifest.settings(self.about)
        self.system = self.project.project.units
        self.record = manifest.record(self.about)
        self._rows: dict[str, dict[str, list[Row]]] = {}
        self.kept: dict[str, Any] = {}  # what is costly to find again for one outlet

    @property
    def periods(self) -> list[str]:
        """Return periods as written."""
        return self.project.storm.periods

    @cached_property
    def position(self) -> dict[str, int]:
        """Place of each outlet in the run."""
        first = self.record.first["outlets"]["outlet_id"].tolist()
        return {outlet_id: i for i, outlet_id in enumerate(first)}

    def rows(self, table: str, outlet_id: str, first: bool = False) -> list[Row]:
        """Return the rows of an outlet as they stand, or as the run first wrote them."""
        name = f"first {table}" if first else table
        if name not in self._rows:
            grouped: dict[str, list[Row]] = {}
            frame = self.record.first[table] if first else self._frame(table)
            columns = [str(column) for column in frame.columns]
            for cells in frame.itertuples(index=False, name=None):
                row = dict(zip(columns, cells, strict=True))
                grouped.setdefault(row["outlet_id"], []).append(row)
            self._rows[name] = grouped
        return self._rows[name].get(outlet_id, [])

    def _frame(self, table: str) -> Any:
        import pandas as pd

        path, netcdf = self.folder / f"{table}.csv", self.folder / hydrographs_nc.FILE
        if table == HYDROGRAPHS.name and not path.is_file() and netcdf.is_file():
            frame = hydrographs_nc.read_hydrographs(netcdf)
            names = {column.stem: column.name(self.system) for column in HYDROGRAPHS.columns}
            return (
                frame.rename(columns=names)
                .astype(object)
                .map(lambda cell: cell if isinstance(cell, str) else repr(cell))
            )
        return read_csv(path) if path.is_file() else pd.DataFrame({"outlet_id": []})

    def stage(self, name: str) -> Entry | None:
        """Return what a stage left in the run's store, None where it is not there."""
        for stage in self.about["stages"]:
            if stage["stage"] == name and "key" in stage:
                entry = Entry(name, stage["key"], self.folder / STORE / f"{name}-{stage['key']}")
                return entry if entry.folder.is_dir() else None
        return None

    def here(self, table: str, row: Row, stem: str, period: str = "") -> Here:
        """Return a place in the tables."""
        return Here(self, TABLES[table], row, stem, period)

    def require_outlet(self, outlet_id: str) -> Row:
        """Return the row of an outlet.

        Raises
        ------
        InputRejected
            Where there is none of this id.
        """
        from difflib import get_close_matches

        found = self.rows(OUTLETS.name, outlet_id)
        if found:
            return found[0]
        near = get_close_matches(outlet_id, list(self.position), n=1)
        fix = f"did you mean {near[0]!r}?" if near else "outlets.csv lists them"
        raise InputRejected.one(str(self.folder / "outlets.csv"), "outlet_id", f"has no {outlet_id!r}", fix)


@dataclass(frozen=True)
class Here:
    """One cell of one table of a run, from which other cells are read.

    Parameters
    ----------
    run : RunView
    table : Table
    row : mapping
        Its row as text.
    stem : str
        The column's stem.
    period : str
        The return period of the column, where it has one.
    """

    run: RunView
    table: Table
    row: Row
    stem: str
    period: str = ""

    @property
    def outlet_id(self) -> str:
        """Its outlet."""
        return self.row["outlet_id"]

    @property
    def name(self) -> str:
        """Name of its column in the file."""
        return self.table.column(self.stem).name(self.run.system, self.period)

    @property
    def unit(self) -> str:
        """Unit of its column."""
        return self.table.column(self.stem).unit_in(self.run.system)

    @property
    def text(self) -> str:
        """The cell as it stands in the file; empty where the column is not there."""
        return self.row.get(self.name, "")

    @property
    def outlet(self) -> Row:
        """The outlet's row in outlets.csv."""
        return self.run.require_outlet(self.outlet_id)

    def at(self, table: str, row: Row, stem: str, period: str = "") -> Here:
        """Return another place."""
        return self.run.here(table, row, stem, period)

    def rows(self, table: str, where: Callable[[Row], bool] | None = None, first: bool = False) -> list[Row]:
        """Return the outlet's rows in a table."""
        return [row for row in self.run.rows(table, self.outlet_id, first) if where is None or where(row)]

    def number(self, unit: str = "") -> float:
        """Return the cell as a number, in another unit where one is named; NaN where it is empty."""
        value = float(self.text) if self.text else np.nan
        return value if not unit or unit == self.unit else value * FACTORS[self.unit] / FACTORS[unit]

    def cell(
        self, stem: str, unit: str = "", table: str = "", period: str = "", scale: tuple[float, str] | None = None
    ) -> Value:
        """Read a cell of the same row, or of the outlet's row in another table."""
        row = self.rows(table)[0] if table and table != self.table.name else self.row
        place = self.at(table or self.table.name, row, stem, period)
        value, named = place.number(unit), unit or place.unit
        if scale is not None:
            value, named = value * scale[0], scale[1]
        return Value(value, named, place.table.column(stem).meaning, (Ref(place.table.name, row, stem, period),))

    def column(self, table: str, stem: str, unit: str = "", where: Callable[[Row], bool] | None = None) -> Value:
        """Read a column of the outlet's rows in a table."""
        places = [self.at(table, row, stem) for row in self.rows(table, where)]
        values: NDArray[np.float64] = np.array([place.number(unit) for place in places], dtype=np.float64)
        refs = tuple(Ref(table, place.row, stem) for place in places)
        about = f"{TABLES[table].column(stem).meaning}, each row"
        return Value(values, unit or TABLES[table].column(stem).unit_in(self.run.system), about, refs)
