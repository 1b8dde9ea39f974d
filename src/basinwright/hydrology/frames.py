"""Tables read by the stems of their schema."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.project import Project
from basinwright.tables import Table, texts

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

Columns = dict[str, Any]
"""A table as it is written: columns by name, in order."""


def columns_of(table: Table, project: Project, values: Mapping[str, Any]) -> Columns:
    """Return a table as it is written from values by stem in the units used inside, the return period put in."""
    return {
        entry.name: values[entry.stem] if entry.factor == 1.0 else np.asarray(values[entry.stem]) / entry.factor
        for entry in table.fields(project.project.units, project.storm.periods)
    }


def _numbers(column: pd.Series[Any]) -> NDArray[np.float64]:
    if column.dtype != object:
        return column.to_numpy(dtype=np.float64, copy=True)
    return np.array([float(cell) if cell else np.nan for cell in column.to_numpy().tolist()], dtype=np.float64)


class Frame:
    """A table read by the stems of its schema in the units used inside.

    Its columns are text as it stands in a file, empty where there is nothing, or numbers as they would be read from
    one, NaN where there is nothing.
    """

    def __init__(self, table: Table, frame: pd.DataFrame, project: Project) -> None:
        self.table, self.frame, self.project = table, frame, project
        self.system = project.project.units
        present = set(frame.columns)
        optional = [c.stem for c in table.columns if c.optional and c.name(self.system) in present]
        self.fields = table.fields(self.system, project.storm.periods, optional)
        self.outlet: NDArray[Any] = np.arange(len(frame), dtype=np.int64)

    def where(self, mask: NDArray[np.bool_]) -> Frame:
        """Return the rows of a mask."""
        return Frame(self.table, self.frame[mask], self.project)

    def of_outlets(self, index: Mapping[str, int]) -> Frame:
        """Return the rows of the outlets of an index, outlet by outlet, each row's outlet in ``outlet``."""
        at = self.frame["outlet_id"].map(index)
        rows = at[at.notna()].astype(np.int64).sort_values(kind="stable")
        chosen = Frame(self.table, self.frame.loc[rows.index], self.project)
        chosen.outlet = rows.to_numpy(dtype=np.int64)
        return chosen

    def _column(self, stem: str, period: str) -> tuple[str, float]:
        column = self.table.column(stem)
        return column.name(self.system, period), column.inside_per_shown(self.system)

    def has(self, stem: str) -> bool:
        """Say whether an optional column is there."""
        return self._column(stem, "")[0] in self.frame.columns

    def text(self, stem: str, period: str = "") -> NDArray[Any]:
        """Return a column as text."""
        column = self.frame[self._column(stem, period)[0]]
        return column.to_numpy() if column.dtype == object else np.array(texts(column.to_numpy()), dtype=object)

    def shown(self, stem: str, period: str = "") -> NDArray[np.float64]:
        """Return a column as the numbers that stand there, NaN where empty."""
        return _numbers(self.frame[self._column(stem, period)[0]])

    def inside(self, stem: str, shown: Mapping[str, Any]) -> NDArray[np.float64]:
        """Return a column by its stem with the period put in, in the unit used inside: as shown, or as it stands."""
        entry = next(entry for entry in self.fields if entry.stem == stem)
        return (shown[stem] if stem in shown else _numbers(self.frame[entry.name])) * entry.factor

    def number(self, stem: str, period: str = "") -> NDArray[np.float64]:
        """Return a column in the unit used inside, NaN where empty."""
        return self.shown(stem, period) * self._column(stem, period)[1]

    def by_text(self, stem: str, value_of: Callable[[str], Any], dtype: Any = np.float64) -> NDArray[Any]:
        """Return a value of each row that follows from the text of a column: worked out once for each text."""
        import pandas as pd

        codes, different = pd.factorize(self.text(stem))
        return np.array([value_of(text) for text in different.tolist()], dtype=dtype)[codes]

    def among(self, stem: str, chosen: Collection[str]) -> NDArray[np.bool_]:
        """Return which rows hold one of some texts in a column."""
        return self.by_text(stem, chosen.__contains__, dtype=bool)

    def completed(self, stem: str, computed: NDArray[Any]) -> NDArray[Any]:
        """Return a column with what was computed in its empty cells; what stands there stays as it is written."""
        column = self.frame[self._column(stem, "")[0]]
        if column.dtype == object:
            return np.where(column == "", computed.astype(object), column.to_numpy())
        return np.where(column.isna(), computed, column.to_numpy())

    def shown_of(self, computed: Mapping[str, Any]) -> dict[str, Any]:
        """Turn computed columns, by stem with the period put in, into the numbers to write."""
        factors = {entry.stem: entry.factor for entry in self.fields}
        return {stem: values / factors[stem] if factors[stem] != 1.0 else values for stem, values in computed.items()}

    def columns(self, replaced: Mapping[str, Any]) -> Columns:
        """Return the table as it is written: its own columns, but for the columns replaced by stem."""
        return {entry.name: replaced.get(entry.stem, self.frame[entry.name].to_numpy()) for entry in self.fields}
