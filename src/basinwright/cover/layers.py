"""Land cover and hydrologic soil groups on the terrain's grid, from rasters or polygons of any CRS and resolution."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from basinwright.errors import InputRejected
from basinwright.grid import Grid
from basinwright.io.rasters import Location, align_record, read_blocks_onto
from basinwright.io.vectors import as_text, code_order, rasterize_polygons
from basinwright.schemes import GROUPS, Scheme
from basinwright.terrain.workspace import IN_MEMORY, Workspace

if TYPE_CHECKING:
    from numpy.typing import NDArray

NONE = -1
"""Position of a cell that has no class."""

MAX_CLASSES = 32_767
"""Classes that a layer may have: positions are int16."""

ASSUMED = "assumed"
"""Label of cells without soils for which `soils.missing` stands in."""

_SINGLE_OR_DUAL = (*GROUPS, "A/D", "B/D", "C/D")


@dataclass(frozen=True)
class CoverLayer:
    """Land cover on the grid.

    Parameters
    ----------
    classes : ndarray of int16, shape (nrows, ncols)
        Position of each cell's class in `codes`; -1 where the layer has none.
    codes : tuple of str
        Class codes, sorted; those that the scheme lists (by code or name) as the scheme writes them.
    record : dict
        How the layer was brought onto the grid, for the manifest.
    """

    classes: NDArray[np.int16]
    codes: tuple[str, ...]
    record: dict[str, Any]

    def sheet_n(self, scheme: Scheme) -> NDArray[np.float64]:
        """Return Manning n of sheet flow by class, NaN where the scheme does not list it, shape (classes,)."""
        found = [scheme.find(code) for code in self.codes]
        return np.array([entry.sheet_n if entry else np.nan for entry in found], dtype=np.float64)

    def open_water(self, scheme: Scheme) -> NDArray[np.bool_]:
        """Return whether each class is open water, shape (classes,)."""
        found = [scheme.find(code) for code in self.codes]
        return np.array([entry is not None and entry.open_water for entry in found], dtype=np.bool_)


@dataclass(frozen=True)
class SoilLayer:
    """Hydrologic soil groups on the grid, dual groups resolved.

    Parameters
    ----------
    groups : ndarray of int16, shape (nrows, ncols)
        Position of each cell's group in `labels`; -1 where the layer has none.
    labels : tuple of str
        ``A`` to ``D``, then `ASSUMED`, then the values of the layer that stand for no group.
    missing : str or None
        The group that stands in where soils are unmapped.
    record : dict
        How the layer was brought onto the grid, for the manifest.
    """

    groups: NDArray[np.int16]
    labels: tuple[str, ...]
    missing: str | None
    record: dict[str, Any]


def align_cover(
    grid: Grid,
    scheme: Scheme,
    *,
    raster: Location | None = None,
    vector: Location | None = None,
    field: str | None = None,
    layer: str | None = None,
    space: Workspace = IN_MEMORY,
) -> CoverLayer:
    """Bring land cover onto the grid: of a raster the cell under the centre, of polygons the one around it.

    Parameters
    ----------
    grid : Grid
        The working grid.
    scheme : Scheme
        Whose codes and names the layer uses.
    raster, vector : Path or str
        One of the two.
    field, layer : str, optional
        Of the vector: the column of the class, and the layer where there are several.
    space : Workspace
        Where the classes lie, as ``cover.classes``.

    Raises
    ------
    InputRejected
        Where the layer cannot be read or holds no classes.
    """

    def canonical(text: str) -> str:
        entry = scheme.find(text)
        return entry.code if entry else text

    cells = space.result("cover.classes", grid.shape, np.int16)
    classes, texts, record = _read(grid, cells, raster, vector, field, layer)
    codes = _relabel(classes, texts, canonical)
    return CoverLayer(classes, codes, record)


def align_soils(
    grid: Grid,
    *,
    raster: Location | None = None,
    vector: Location | None = None,
    field: str | None = None,
    layer: str | None = None,
    group: str | None = None,
    groups: Mapping[str, str] | None = None,
    dual_groups: Literal["undrained", "drained"] = "undrained",
    missing: str | None = None,
    space: Workspace = IN_MEMORY,
) -> SoilLayer:
    """Bring hydrologic soil groups onto the grid.

    Parameters
    ----------
    grid : Grid
        The working grid.
    raster, vector : Path or str
        One of the two, unless `group` is given.
    field, layer : str, optional
        Of the vector: the column of the group, and the layer where there are several.
    group : str, optional
        One group everywhere.
    groups : mapping, optional
        Group by value of the layer; values that are groups themselves (``B``, ``B/D``) need no entry.
    dual_groups : {"undrained", "drained"}
        Which letter of a dual group counts: undrained the second, drained the first (NEH 630 chapter 7,
        section 630.0702: the first letter applies to the drained condition, the second to the undrained).
    missing : str, optional
        The group that stands in where the layer has none.
    space : Workspace
        Where the groups lie, as ``soils.groups``.

    Raises
    ------
    InputRejected
        Where the layer cannot be read or holds no classes.
    """
    known = (*GROUPS, ASSUMED)
    cells = space.result("soils.groups", grid.shape, np.int16)
    if group is not None:
        cells[:] = GROUPS.index(group)
        return SoilLayer(cells, known, missing, {"group": group, "method": "one group everywhere"})

    def resolved(text: str) -> str:
        found = (groups or {}).get(text, text)
        if found not in _SINGLE_OR_DUAL:
            return text
        return found[-1] if dual_groups == "undrained" else found[0]

    cells, texts, record = _read(grid, cells, raster, vector, field, layer)
    labels = _relabel(cells, texts, resolved, first=known)
    if missing is not None:
        assumed = 0
        for rows in cells:
            unmapped = rows == NONE
            rows[unmapped] = known.index(ASSUMED)
            assumed += int(unmapped.sum())
        record = {**record, "assumed_group": missing, "assumed_cells": assumed}
    return SoilLayer(cells, labels, missing, {**record, "dual_groups": dual_groups})


def _read(
    grid: Grid,
    cells: NDArray[np.int16],
    raster: Location | None,
    vector: Location | None,
    field: str | None,
    layer: str | None,
) -> tuple[NDArray[np.int16], list[str], dict[str, Any]]:
    """Return positions (-1 none), the texts they stand for, and the record for the manifest."""
    if raster is not None:
        return cells, _read_classes(raster, grid, cells), align_record(raster, grid)
    if vector is None or field is None:
        raise ValueError("give a raster, or a vector with its field")
    counted, texts, record = rasterize_polygons(vector, field, grid, layer)
    if len(texts) > MAX_CLASSES:
        raise _no_classes(vector, f"column {field}", len(texts))
    for into, numbers in zip(cells, counted, strict=True):
        into[:] = numbers.astype(np.int16) - np.int16(1)
    return cells, texts, record


def _no_classes(path: Location, where: str, count: int) -> InputRejected:
    what = f"holds over {count - 1} different values: these are no classes"
    return InputRejected.one(str(path), where, what, "name a layer of classes")


def _read_classes(path: Location, grid: Grid, cells: NDArray[np.int16]) -> list[str]:
    """Read a raster of classes onto the grid: positions in the list of its values as text, which is returned."""
    cells[:] = NONE
    position: dict[Any, int] = {}
    for first, block in read_blocks_onto(path, grid):
        filled = ~np.ma.getmaskarray(block)
        values = _values_of(block.data[filled])
        for value in values.tolist():
            position.setdefault(value, len(position))
        if len(position) > MAX_CLASSES:
            raise _no_classes(path, "cells", len(position))
        of_value = np.array([position[value] for value in values.tolist()], dtype=np.int16)
        if values.size:
            cells[first : first + len(block)][filled] = of_value[np.searchsorted(values, block.data[filled])]
    return [as_text(value) for value in position]


def _values_of(cells: NDArray[Any]) -> NDArray[Any]:
    """Return the distinct values, sorted (np.unique sorts all cells; counting is many times faster)."""
    if cells.dtype.kind in "iu" and cells.size:
        low, high = int(cells.min()), int(cells.max())
        if high - low <= np.iinfo(np.uint16).max:
            present = np.bincount((cells.astype(np.int64) - low).ravel())
            return (np.flatnonzero(present) + low).astype(cells.dtype)
    return np.unique(cells)


def _relabel(
    cells: NDArray[np.int16], texts: Sequence[str], canonical: Callable[[str], str], first: Sequence[str] = ()
) -> tuple[str, ...]:
    """Turn cells, in place, into positions in the sorted list of canonical texts, those of `first` before all."""
    named = [canonical(text) for text in texts]
    labels = (*first, *sorted(set(named) - set(first), key=code_order))
    place = {label: index for index, label in enumerate(labels)}
    # The last entry is for cells without a class: their position is -1.
    lookup = np.array([*(place[name] for name in named), NONE], dtype=np.int16)
    for rows in cells:
        rows[:] = lookup[rows]
    return labels
