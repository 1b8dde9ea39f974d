"""Measures of whole basins, by one pass over the raster and one up the forest of outlets."""

from __future__ import annotations

import numpy as np

from basinwright.basins.delineation import Basins
from basinwright.grid import Grid
from basinwright.terrain import Terrain
from basinwright.terrain.land_slope import horn_slope_blocks
from basinwright.terrain.network import channel_test
from basinwright.terrain.summable import quantum

_SUMS = ("area", "cells", "contact", "elevation", "slope", "row", "col", "filled")


def measure(grid: Grid, terrain: Terrain, elevation_m: np.ndarray, basins: Basins) -> dict[str, np.ndarray]:
    """Size, relief, land slope, centroid, filling and contact of every outlet's whole basin.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    elevation_m : float array, shape (nrows, ncols) [m]
        Unconditioned; NaN in voids.
    basins : Basins

    Returns
    -------
    dict of arrays, shape (n,)
        ``downstream_outlet`` (index, -1 for none), ``area_km2``, ``cells``, ``relief_m`` (highest minus lowest
        unconditioned elevation), ``mean_elevation_m``, ``basin_slope_pct`` (mean land slope, Horn 1981,
        weighted by area), ``centroid_x``, ``centroid_y`` (centre of area, map coordinates),
        ``path_length_m`` (longest flow path), ``filled_volume_m3``, ``deepest_cut_inside_m`` (by conditioning),
        ``contact_cells`` (cells at the raster's edge or beside a void, the outlet's own included). Outlets that
        failed have NaN; 0 cells.
    """
    sums, lowest, highest, deepest_cut = _by_label(grid, terrain, elevation_m, basins)
    whole = dict(zip(_SUMS, basins.whole_sums(sums).T, strict=True))
    area = whole["area"]
    centroid_x, centroid_y = grid.xy(whole["row"] / area, whole["col"] / area)
    by_label = {
        "area_km2": area / 1e6,
        "relief_m": highest - lowest,
        "mean_elevation_m": whole["elevation"] / area,
        "basin_slope_pct": whole["slope"] / area,
        "centroid_x": centroid_x,
        "centroid_y": centroid_y,
        "path_length_m": basins.farthest_um / 1e6,
        "filled_volume_m3": whole["filled"],
        "deepest_cut_inside_m": deepest_cut,
    }
    columns = {"downstream_outlet": basins.downstream_outlet}
    columns |= {name: basins.by_outlet(values) for name, values in by_label.items()}
    for name, counts in (("cells", whole["cells"]), ("contact_cells", whole["contact"])):
        columns[name] = basins.by_outlet(counts.astype(np.int64), failed=0)
    return columns


def drainage_density_per_km(
    terrain: Terrain, basins: Basins, stream_area_km2: float, channels: np.ndarray | None = None
) -> np.ndarray:
    """Length of the channels in every outlet's whole basin over its area (Horton 1932).

    Parameters
    ----------
    terrain : Terrain
    basins : Basins
    stream_area_km2 : float [km2]
        Contributing area at which channels begin.
    channels : bool array, shape (cells,), optional
        The channels themselves; see `basinwright.terrain.network.channel_test`.

    Returns
    -------
    float64 array, shape (n,) [1/km]
        0 where no channel lies above the outlet; NaN where it failed.

    References
    ----------
    Horton, R. E. (1932). Drainage-basin characteristics. Transactions, American Geophysical Union, 13(1), 350-361.
    """
    from basinwright.kernels import network, reduce

    channel_area_m2, least_m2 = channel_test(terrain, stream_area_km2, channels)
    length_um = np.zeros(basins.n_labels, np.int64)
    network.add_channel_length(
        terrain.directions, channel_area_m2, basins.label, terrain.ncols, terrain.step_um, least_m2, length_um,
    )  # fmt: skip
    area_m2 = np.zeros(basins.n_labels)
    reduce.add_area(
        basins.label, terrain.ncols, terrain.row_area_m2, 0, terrain.nrows, area_m2, np.zeros(basins.n_labels, np.int64)
    )
    whole = basins.whole_sums(np.column_stack([length_um.astype(np.float64), area_m2]))
    return basins.by_outlet((whole[:, 0] / 1e6) / whole[:, 1] * 1000.0)


def _by_label(
    grid: Grid, terrain: Terrain, elevation_m: np.ndarray, basins: Basins
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Sums over sub-basins, shape (labels, sums); lowest, highest elevation and deepest cut of whole basins."""
    from basinwright.kernels import forest, reduce

    n, ncols, label = basins.n_labels, terrain.ncols, basins.label
    by_area, by_count = terrain.row_area_m2, np.ones(terrain.nrows)
    sums = {name: np.zeros(n) for name in _SUMS}
    cells = np.zeros(n, np.int64)
    reduce.add_area(label, ncols, by_area, 0, terrain.nrows, sums["area"], cells)
    sums["cells"][:] = cells

    ground, change = _Extremes(n), _Extremes(n)
    quanta = _quanta(grid, terrain, elevation_m)
    weight = np.empty(n)
    for first, slope in horn_slope_blocks(elevation_m, grid.dx_m, grid.dy_m):
        rows = slice(first, first + len(slope))
        elevation = np.ascontiguousarray(elevation_m[rows], np.float64)
        rise = terrain.change_m(elevation_m, rows).astype(np.float64)
        for extremes, block in ((ground, elevation), (change, rise)):
            reduce.keep_extremes(label, ncols, first, block, *extremes.arrays)
        values = {
            "elevation": elevation,
            "slope": slope,
            "row": np.broadcast_to(np.arange(first, first + len(slope), dtype=float)[:, None], slope.shape),
            "col": np.broadcast_to(np.arange(ncols, dtype=float), slope.shape),
            "filled": np.maximum(rise, 0.0),
            "contact": _contact(terrain, rows),
        }
        for name, block in values.items():
            weights = by_count if name == "contact" else by_area
            reduce.add_values(
                label, ncols, weights, first, np.ascontiguousarray(block), quanta[name], sums[name], weight
            )
    for extremes in (ground, change):
        forest.combine_extremes(basins.parent, basins.upstream_first, *extremes.arrays)
    return np.column_stack([sums[name] for name in _SUMS]), *ground.arrays[:2], np.maximum(0.0, -change.arrays[0])


class _Extremes:
    """Lowest and highest value by label, and the cell of the highest."""

    def __init__(self, n: int) -> None:
        self.arrays = np.full(n, np.inf), np.full(n, -np.inf), np.full(n, -1, np.int32)


def _quanta(grid: Grid, terrain: Terrain, elevation_m: np.ndarray) -> dict[str, float]:
    """Steps of the fixed-point sums: from bounds that hold for the raster, whatever the outlets are."""
    total_m2 = float(terrain.row_area_m2.sum()) * terrain.ncols
    low, high = np.inf, -np.inf
    for row in elevation_m:
        finite = row[np.isfinite(row)]
        low = min(low, float(np.min(finite, initial=np.inf)))
        high = max(high, float(np.max(finite, initial=-np.inf)))
    # A gradient spans at most twice the relief over a cell in both directions: under 200 % of relief / size.
    steepest_pct = 200.0 * (high - low) / min(grid.dx_m.min(), grid.dy_m.min())
    return {
        "elevation": quantum(max(abs(low), abs(high)) * total_m2),
        "slope": quantum(steepest_pct * total_m2),
        "row": quantum(grid.nrows * total_m2),
        "col": quantum(grid.ncols * total_m2),
        "filled": quantum(terrain.deepest_fill_m * total_m2),
        "contact": 1.0,
    }


def _contact(terrain: Terrain, rows: slice) -> np.ndarray:
    """1.0 for every cell of some rows with the raster's edge or a void among its eight neighbours, else 0.0."""
    padded = terrain.conditioned_m.reshape(terrain.nrows + 2, terrain.ncols + 2)
    missing = np.isinf(padded[rows.start : rows.stop + 2])
    beside = missing[:, :-2] | missing[:, 1:-1] | missing[:, 2:]
    return (beside[:-2] | beside[1:-1] | beside[2:]).astype(np.float64)
