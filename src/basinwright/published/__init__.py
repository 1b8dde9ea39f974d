"""Tables of published numbers: one CSV each, rows as printed, beside a TOML sidecar with its source.

The sidecar of ``name.csv`` is ``name.toml``::

    title = "..."                     what the table is
    document = "..."                  author, title, publisher
    edition = "..."                   year or edition
    place = "..."                     chapter, table, page
    transcribed = "..."               by whom and from what (print, a named copy, memory)
    checked = "..."                   by whom and how
    license = "..."                   why it may be carried here
    [columns]
    area_km2 = "contributing area [km2]"
"""

from __future__ import annotations

import csv
import tomllib
from dataclasses import dataclass
from functools import cache
from importlib.resources import files

from basinwright.registry import Source


@dataclass(frozen=True)
class PublishedTable:
    """A published table.

    Parameters
    ----------
    name : str
        File name without its ending.
    title : str
        What it is.
    source : Source
        Where it was published, and how it reached us.
    checked : str
        By whom and how it was checked.
    columns : dict
        Meaning and unit of each column.
    rows : tuple of dict
        Cells as text, blanks kept.
    """

    name: str
    title: str
    source: Source
    checked: str
    columns: dict[str, str]
    rows: tuple[dict[str, str], ...]

    def floats(self, column: str) -> list[float]:
        """Return a column as numbers (blank becomes NaN)."""
        return [float(row[column]) if row[column] else float("nan") for row in self.rows]


def names() -> list[str]:
    """Return the names of all published tables shipped."""
    return sorted(entry.name[:-4] for entry in files(__name__).iterdir() if entry.name.endswith(".csv"))


@cache
def table(name: str) -> PublishedTable:
    """Read a published table.

    Parameters
    ----------
    name : str
        One of `names`.

    Raises
    ------
    KeyError
        Where no such table is shipped.
    """
    folder = files(__name__)
    if name not in names():
        raise KeyError(f"no published table {name!r}; shipped: {', '.join(names())}")
    about = tomllib.loads(folder.joinpath(f"{name}.toml").read_text(encoding="utf-8"))
    rows = tuple(csv.DictReader(folder.joinpath(f"{name}.csv").read_text(encoding="utf-8").splitlines()))
    source = Source(about["document"], about["edition"], about["place"], about["transcribed"])
    return PublishedTable(name, about["title"], source, about["checked"], about["columns"], rows)
