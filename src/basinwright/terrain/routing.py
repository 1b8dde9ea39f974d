"""Conditioning and routing of a rectangle of terrain in memory."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from basinwright.errors import TerrainError
from basinwright.terrain.breaching import Pits, breach
from basinwright.terrain.constraints import Constraints, drain
from basinwright.terrain.encoding import to_azimuth
from basinwright.terrain.summable import summable_areas_m2
from basinwright.terrain.tiling import Tiling

_BLOCK_ROWS = 256
_MOST_CELLS = 2**31 - 1


@dataclass(frozen=True)
class Conditioning:
    """How depressions are made to drain.

    Parameters
    ----------
    mode : {"fill", "breach"}
        Fill them to their lowest rim, or cut a way out of them within the limits and fill only the rest.
    depth_m : float [m]
        The deepest cut below the terrain.
    length_m : float [m]
        The longest cut, measured along it on the ground.
    """

    mode: Literal["fill", "breach"] = "fill"
    depth_m: float = 5.0
    length_m: float = 100.0


@dataclass(frozen=True, eq=False)
class Terrain:
    """Conditioned terrain with flow directions, contributing area and order, as flat padded arrays.

    Cell (row, col) has the index ``(row + 1) * (ncols + 2) + col + 1``; see `basinwright.kernels`. The
    properties that end in ``_grid`` are views of the raster proper, shape (nrows, ncols).

    Attributes
    ----------
    nrows, ncols : int
    conditioned_m : float32 array, shape (cells,) [m]
        Elevations without depressions; +inf in voids and in the halo.
    directions : uint8 array, shape (cells,)
        0 to 7 clockwise from north, EXIT, SINK or VOID.
    area_m2 : float64 array, shape (cells,) [m2]
        Contributing area, the cell's own included; 0 in voids.
    order : int32 array, shape (data_cells,)
        Cells from the divides downstream: every cell after all cells that drain into it. Where the terrain was routed
        by tiles: tile by tile, as padded indices on the tile, every cell after all of its tile that drain into it.
    row_area_m2 : float64 array, shape (nrows,) [m2]
        Area of a cell of each row, rounded so that sums are exact.
    step_um : int64 array, shape (nrows, 8) [micrometres]
        Length of a step out of a cell, by row and direction.
    data_cells, flat_cells : int
        Cells with elevation; of these, cells without a lower neighbour after conditioning.
    filled_cells, filled_volume_m3, deepest_fill_m
        Cells raised by conditioning, by how much in all and at most.
    cut_cells, cut_volume_m3, deepest_cut_m
        Cells cut by conditioning, by how much in all and at most.
    raised_pits, pits, breached, breached_second, failed : int
        By breaching (`terrain.breaching.Pits`): single cells raised to their lowest neighbour; further pits; pits
        with a way out within the limits; pits that have one once they are partly filled; pits that were filled.
    largest_rounding_m : float
        Largest change of an elevation by rounding it to float32; 0 for float32 input and for whole numbers
        up to 2**24.
    row_edges, col_edges : int64 arrays
        Where the raster was cut into tiles, None where it was not.
    order_bounds : int64 array, shape (tiles + 1,)
        Tile i owns ``order[order_bounds[i]:order_bounds[i + 1]]``; None without tiles.
    """

    nrows: int
    ncols: int
    conditioned_m: np.ndarray
    directions: np.ndarray
    area_m2: np.ndarray
    order: np.ndarray
    row_area_m2: np.ndarray
    step_um: np.ndarray
    data_cells: int
    flat_cells: int
    filled_cells: int
    filled_volume_m3: float
    deepest_fill_m: float
    cut_cells: int
    cut_volume_m3: float
    deepest_cut_m: float
    largest_rounding_m: float
    raised_pits: int = 0
    pits: int = 0
    breached: int = 0
    breached_second: int = 0
    failed: int = 0
    row_edges: np.ndarray | None = None
    col_edges: np.ndarray | None = None
    order_bounds: np.ndarray | None = None

    @property
    def tiling(self) -> Tiling:
        """How the raster is cut into tiles; one where it is not."""
        if self.row_edges is None or self.col_edges is None:
            return Tiling((0, self.nrows), (0, self.ncols))
        return Tiling(tuple(self.row_edges.tolist()), tuple(self.col_edges.tolist()))

    def grid(self, padded: np.ndarray) -> np.ndarray:
        """View of a flat padded array as the raster proper, shape (nrows, ncols)."""
        return padded.reshape(self.nrows + 2, self.ncols + 2)[1:-1, 1:-1]

    @property
    def conditioned_grid(self) -> np.ndarray:
        """Conditioned elevations [m], +inf in voids."""
        return self.grid(self.conditioned_m)

    def change_m(self, elevation_m: np.ndarray, rows: slice = slice(None)) -> np.ndarray:
        """By how much conditioning raised (positive) or cut (negative) some rows, float32 [m]; 0 in voids.

        Parameters
        ----------
        elevation_m : float array, shape (nrows, ncols) [m]
            The terrain before.
        rows : slice
        """
        conditioned = self.conditioned_grid[rows]
        with np.errstate(invalid="ignore", over="ignore"):
            change = conditioned - elevation_m[rows].astype(np.float32)
        return np.where(np.isfinite(conditioned), change, np.float32(0))

    @property
    def directions_grid(self) -> np.ndarray:
        """Direction codes."""
        return self.grid(self.directions)

    @property
    def area_grid(self) -> np.ndarray:
        """Contributing area [m2]."""
        return self.grid(self.area_m2)

    def azimuths(self) -> np.ndarray:
        """Directions as azimuths, uint16, shape (nrows, ncols) [degrees]; a copy."""
        return to_azimuth(self.directions_grid)

    def cells_at(self, rows: np.ndarray, cols: np.ndarray) -> np.ndarray:
        """Padded indices, int32, of cells inside the raster."""
        index = (np.asarray(rows, np.int64) + 1) * (self.ncols + 2) + np.asarray(cols, np.int64) + 1
        return index.astype(np.int32)

    def rows_cols(self, cells: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Rows and columns, int64, of padded indices."""
        rows, cols = np.divmod(np.asarray(cells, np.int64), self.ncols + 2)
        return rows - 1, cols - 1


def step_lengths_um(dx_m: np.ndarray, dy_m: np.ndarray) -> np.ndarray:
    """Length of a step out of a cell by row and direction, in whole micrometres so that sums are exact.

    Parameters
    ----------
    dx_m, dy_m : arrays, shape (nrows,) [m]
        Cell sizes. A step into a neighbouring row is measured with the sizes of the row it leaves.

    Returns
    -------
    int64 array, shape (nrows, 8) [micrometres]
    """
    dx = np.asarray(dx_m, np.float64)
    dy = np.asarray(dy_m, np.float64)
    diagonal = np.hypot(dx, dy)
    metres = np.stack([dy, diagonal, dx, diagonal, dy, diagonal, dx, diagonal], axis=1)
    return np.rint(metres * 1e6).astype(np.int64)


def condition_and_route(
    elevation_m: np.ndarray,
    dx_m: np.ndarray,
    dy_m: np.ndarray,
    cell_area_m2: np.ndarray,
    conditioning: Conditioning = Conditioning(),
    constraints: Constraints | None = None,
    threads: int = 1,
) -> Terrain:
    """Fill or breach depressions, route every cell by D8, resolve flats and sum contributing areas.

    A cell at the rim or beside a void drains inward if it has a lower neighbour; else water leaves there. Every
    cell with elevation drains to such an exit.

    Parameters
    ----------
    elevation_m : float array, shape (nrows, ncols) [m]
        Rows from north to south. NaN (or infinite) in voids. float64 is rounded to float32, by at most a
        quarter of a millimetre below 8192 m and half a millimetre above; `Terrain.largest_rounding_m` says how
        much it was. float32 and whole numbers up to 2**24 stay as they are.
    dx_m, dy_m : arrays, shape (nrows,) [m]
        Cell sizes of each row, positive.
    cell_area_m2 : array, shape (nrows,) [m2]
        Area of a cell of each row, positive.
    conditioning : Conditioning
    constraints : Constraints, optional
        What maps prescribe.
    threads : int
        The result does not depend on it.

    Returns
    -------
    Terrain

    Raises
    ------
    TerrainError
        No cell has an elevation; more than 2**31 - 1 cells; sizes that do not fit; undrained cells or a
        cycle (never expected).
    """
    from basinwright.kernels import accumulate, directions, fill, flats

    if elevation_m.ndim != 2 or elevation_m.size == 0:
        raise TerrainError(f"elevations must be a raster of rows and columns, not of shape {elevation_m.shape}")
    nrows, ncols = elevation_m.shape
    dx, dy, cell_area = sizes_by_row(nrows, ncols, dx_m, dy_m, cell_area_m2)
    cells = (nrows + 2) * (ncols + 2)

    z, largest_rounding = pad(elevation_m)
    step_um = step_lengths_um(dx, dy)
    work = np.empty(cells, np.uint8), np.empty(cells, np.int32), np.empty(cells, np.int32)
    pits = Pits()
    if constraints is not None:
        constraints.cut(z)
    if conditioning.mode == "breach":
        limits = conditioning.depth_m, conditioning.length_m
        pits = breach(z, nrows, ncols, step_um, *limits, constraints, work, threads)
    elif constraints is None:
        fill.fill_everywhere(z, nrows, ncols, *work)
    if constraints is not None:
        z, code, flat_cells = drain(z, nrows, ncols, dx, dy, constraints)
    else:
        code = work[0]
        directions.steepest_descent(z, nrows, ncols, dx, dy, code)
        flat_cells = flats.resolve_flats(z, code, nrows, ncols, work[1], work[2])
    del work
    data_cells, undrained = accumulate.count_cells(code)
    if data_cells == 0:
        raise TerrainError("no cell of the terrain has an elevation: is its nodata value right?")
    if undrained:
        raise TerrainError(f"{undrained} of {data_cells} cells do not drain after conditioning")

    row_area = summable_areas_m2(cell_area, ncols)
    area, order = route(code, nrows, ncols, row_area)
    if order.size != data_cells:
        raise TerrainError(f"{data_cells - order.size} of {data_cells} cells lie on or below a cycle of directions")

    return Terrain(
        nrows=nrows,
        ncols=ncols,
        conditioned_m=z,
        directions=code,
        area_m2=area,
        order=order,
        row_area_m2=row_area,
        step_um=step_um,
        data_cells=data_cells,
        flat_cells=flat_cells,
        **measure_conditioning(elevation_m, z, row_area),
        **vars(pits),
        largest_rounding_m=largest_rounding,
    )


def route(directions: np.ndarray, nrows: int, ncols: int, row_area_m2: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Contributing area, and the order of cells from the divides downstream.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
        Finished directions.
    nrows, ncols : int
    row_area_m2 : float64 array, shape (nrows,) [m2]
        Rounded so that sums are exact.

    Returns
    -------
    area_m2 : float64 array, shape (cells,) [m2]
    order : int32 array, shape (visited,)
        Fewer than the cells with elevation mean a cycle.
    """
    from basinwright.kernels import accumulate

    area = np.empty(directions.size, np.float64)
    order = np.empty(directions.size, np.int32)
    visited = accumulate.contributing_area(directions, nrows, ncols, row_area_m2, area, order)
    return area, order[:visited]


def sizes_by_row(
    nrows: int, ncols: int, dx_m: np.ndarray, dy_m: np.ndarray, cell_area_m2: np.ndarray
) -> list[np.ndarray]:
    """Cell sizes as float64 arrays, checked.

    Raises
    ------
    TerrainError
        Sizes that do not fit; more than 2**31 - 1 cells.
    """
    sizes = [np.ascontiguousarray(size, np.float64) for size in (dx_m, dy_m, cell_area_m2)]
    for name, size in zip(("dx_m", "dy_m", "cell_area_m2"), sizes, strict=True):
        if size.shape != (nrows,) or not (np.isfinite(size) & (size > 0)).all():
            raise TerrainError(f"{name} must hold a positive number for each of the {nrows} rows")
    if (nrows + 2) * (ncols + 2) > _MOST_CELLS:
        raise TerrainError(
            f"{nrows} x {ncols} cells are more than the {_MOST_CELLS} that can be routed at once: "
            "cut the terrain or use larger cells"
        )
    return sizes


def pad(elevation_m: np.ndarray) -> tuple[np.ndarray, float]:
    """Elevations as a flat padded float32 array with -inf in voids and halo, and the largest rounding [m]."""
    nrows, ncols = elevation_m.shape
    z = np.full((nrows + 2, ncols + 2), -np.inf, np.float32)
    largest_rounding = 0.0
    for first in range(0, nrows, _BLOCK_ROWS):
        given = elevation_m[first : first + _BLOCK_ROWS]
        here = z[first + 1 : first + 1 + len(given), 1:-1]
        with np.errstate(over="ignore"):
            here[...] = given
        here[~np.isfinite(here)] = -np.inf
        if given.dtype != np.float32:
            rounding = np.abs(here - given.astype(np.float64))
            largest_rounding = max(largest_rounding, float(np.max(rounding, initial=0.0, where=np.isfinite(here))))
    return z.reshape(-1), largest_rounding


def measure_conditioning(elevation_m: np.ndarray, conditioned: np.ndarray, row_area_m2: np.ndarray) -> dict[str, Any]:
    """Cells raised and cut, their volumes [m3] and the deepest of each [m], by their names in `Terrain`."""
    from basinwright.kernels.fill import measure_change

    nrows, ncols = elevation_m.shape
    row_filled, row_cut = np.empty(nrows), np.empty(nrows)
    cells = np.zeros(2, np.int64)
    deepest = np.zeros(2)
    for first in range(0, nrows, _BLOCK_ROWS):
        given = np.ascontiguousarray(elevation_m[first : first + _BLOCK_ROWS], np.float32)
        filled, deepest_fill, cut, deepest_cut = measure_change(conditioned, ncols, first, given, row_filled, row_cut)
        cells += filled, cut
        deepest = np.maximum(deepest, (deepest_fill, deepest_cut))
    return {
        "filled_cells": int(cells[0]),
        "filled_volume_m3": math.fsum(row_filled * row_area_m2),
        "deepest_fill_m": float(deepest[0]),
        "cut_cells": int(cells[1]),
        "cut_volume_m3": math.fsum(row_cut * row_area_m2),
        "deepest_cut_m": float(deepest[1]),
    }
