"""The same project on coarser cells: variants whose terrain is the mean of whole blocks of the base's cells."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from basinwright.errors import InputRejected, Problem
from basinwright.hydrology import Columns, Results, cell_sizes_table, swings_with_cell_sizes
from basinwright.pipeline.variants import ground_of
from basinwright.units import QuantityError, parse_quantity

if TYPE_CHECKING:
    from basinwright.grid import Grid
    from basinwright.pipeline.inputs import Inputs
    from basinwright.project import Project
    from basinwright.store import Store

TABLE = "cell_sizes"
_LEAST_CELLS = 3
"""Rows and columns that a coarser terrain must still have."""


@dataclass(frozen=True)
class CellSize:
    """A coarser cell size.

    Parameters
    ----------
    asked : str
        As the user wrote it.
    cells : int
        Cells of the base along a side of one of these.
    """

    asked: str
    cells: int


def read_sizes(texts: Sequence[str], grid: Grid) -> list[CellSize]:
    """Return the cell sizes asked for, each as a whole number of the terrain's cells, the finest first.

    Raises
    ------
    InputRejected
        With every size that is none, not coarser than the terrain's cells, or the same as another one.
    """
    native, problems, sizes = grid.cell_size_m, list[Problem](), dict[int, CellSize]()
    for text in texts:
        try:
            size_m = parse_quantity(text, "length")
        except QuantityError as error:
            problems.append(_problem(text, error.what, error.fix))
            continue
        cells = round(size_m / native) if size_m < 1e9 else 10**9
        if cells < 2:
            what = f"is not coarser than the terrain's own cells of {native:.4g} m"
            problems.append(_problem(text, what, f"give at least {2 * native:.4g} m"))
        elif min(grid.nrows, grid.ncols) < _LEAST_CELLS * cells:
            what = f"leaves under {_LEAST_CELLS} rows or columns of the terrain"
            problems.append(_problem(text, what, "give smaller cells"))
        elif cells in sizes:
            what = f"is {cells} x {cells} of the terrain's cells, as {sizes[cells].asked!r} is"
            problems.append(_problem(text, what, "leave one of them out"))
        else:
            sizes[cells] = CellSize(text, cells)
    if problems:
        raise InputRejected(problems)
    return [sizes[cells] for cells in sorted(sizes)]


def _problem(text: str, what: str, fix: str) -> Problem:
    return Problem("command line", f"--also-at {text!r}", what, fix)


def run_sizes(
    inputs: Inputs, sizes: Sequence[CellSize], base: Columns, store: Store
) -> tuple[list[dict[str, Any]], Columns | None]:
    """Run a project on coarser cells over the store of its base.

    Returns
    -------
    list of dict
        What the manifest says of each size.
    columns or None
        ``cell_sizes.csv``; None where no size was asked for.
    """
    from basinwright.pipeline import terrain_half

    if not sizes:
        return [], None
    runs, outlets = [], [(inputs.plan.grid.cell_size_m, base)]
    for size in sizes:
        coarse = _on_coarser_cells(inputs, size.cells)
        grid = coarse.plan.grid
        name = f"cells of {grid.cell_size_m:.4g} m"
        with store.running(name):
            half = terrain_half.run(coarse, store)
            depends_on = {"tables": half.keys(), "options": coarse.project.model_dump(mode="json")}
            with store.watched("hydrology", "Timing, runoff and peaks", depends_on):
                results = ground_of(coarse, half, half.flags()).compute(series=False)
        outlets.append((grid.cell_size_m, results.tables["outlets"]))
        about = {"asked": size.asked, "cells": size.cells, "method": f"mean of {size.cells} x {size.cells} cells"}
        runs.append({**about, "grid": grid.describe(), "stages": store.described(name)})
    return runs, cell_sizes_table(base, outlets, inputs.project)


def add(results: Results, table: Columns | None, project: Project) -> None:
    """Put ``cell_sizes.csv`` among the tables of a run, and the cell size among the inputs that swings.csv ranks."""
    if table is None:
        return
    results.tables[TABLE] = table
    if "swings" in results.tables:
        results.tables["swings"] = swings_with_cell_sizes(results.tables["swings"], table, project)


def _on_coarser_cells(inputs: Inputs, cells: int) -> Inputs:
    """Return a project's inputs with its terrain on coarser cells; what is not compared is left out."""
    project = inputs.project.model_copy(update={"uncertainty": None, "check": None, "scenario": []})
    plan = replace(inputs.plan, grid=inputs.plan.grid.coarsened(cells))
    return replace(inputs, project=project, plan=plan, regional=None, scenarios={}, coarsened=cells)
