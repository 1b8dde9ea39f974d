"""The user's table of regional regression equations."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from basinwright.confidence import Equation, read_equations
from basinwright.pipeline.design_storm import read_rows
from basinwright.project import Project

KEY = "check.regression"


def read(path: Path) -> dict[str, Any]:
    """Read the table as plain values, for the manifest and for `equations`.

    Raises
    ------
    InputRejected
        Where it is no readable CSV.
    """
    names, rows = read_rows(path, KEY)
    return {"file": path.name, "names": names, "rows": [{name: row.get(name) or "" for name in names} for row in rows]}


def equations(project: Project, table: Mapping[str, Any] | None) -> list[Equation]:
    """Return the equations of a table already read; none where there is no table.

    Raises
    ------
    InputRejected
        With every fault of the table.
    """
    if table is None:
        return []
    return read_equations(table["names"], table["rows"], project.storm.periods, table["file"])
