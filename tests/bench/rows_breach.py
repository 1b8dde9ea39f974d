"""Breaching: speed beside pysheds and beside filling, growth, and whether water finds its way under roads."""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import terrains
from harness import Row, best_of, terrain

CELL_M = 10.0
DEPTH_M, LENGTH_M = 10.0, 1000.0
THREADS = 2
_PYSHEDS = "pysheds 0.5: fill_pits, fill_depressions, resolve_flats, flowdir"


def _versus(name: str, peer: str, peer_name: str, target: float) -> Row:
    return Row(
        name=f"breach-{name.replace(' ', '-')}-{peer}",
        work=f"breaching (100 cells, 10 m) to directions, {THREADS} threads, {{cells}} cells of {name} terrain",
        unit="s",
        ours="breaching",
        peer=peer,
        peer_name=peer_name,
        target=target,
        goal="ratio",
        args=(name,),
    )


ROWS = [
    _versus("river-like", "pysheds", _PYSHEDS, 100),
    _versus("rough", "pysheds", _PYSHEDS, 6),
    _versus("river-like", "filling", "our own filling to directions", 1 / 0.3),
    _versus("rough", "filling", "our own filling to directions", 1 / 2.0),
    _versus("noisy plain", "filling", "our own filling to directions", 1 / 2.5),
    Row(
        name="breach-quarries",
        work="breaching to directions where a few pits have to be filled, {cells} cells of river-like terrain",
        unit="ns per cell",
        ours="per_cell",
        target=25,
        goal="at_most",
        args=("quarried",),
        cells=64_000_000,
    ),
    Row(
        name="breach-growth",
        work="time per cell of breaching on {cells} cells of river-like terrain over that on a sixteenth of the cells",
        unit="ratio",
        ours="growth",
        target=1.15,
        goal="at_most",
        args=("river-like",),
        cells=64_000_000,
    ),
    Row(
        name="breach-roads",
        work="channel cells with the right area within one cell under a net of graded roads, {cells} cells",
        unit="percent",
        ours="right_all",
        target=94,
        goal="at_least",
        cells=4_000_000,
    ),
    Row(
        name="breach-under-roads",
        work="the same of the channel cells under a road",
        unit="percent",
        ours="right_under_roads",
        target=80,
        goal="at_least",
        cells=4_000_000,
    ),
]


def _to_directions(elevation_m: np.ndarray, mode: str) -> np.ndarray:
    from basinwright.kernels import directions, fill, flats
    from basinwright.terrain.breaching import breach
    from basinwright.terrain.routing import pad, step_lengths_um

    nrows, ncols = elevation_m.shape
    size = np.full(nrows, CELL_M)
    z, _ = pad(elevation_m)
    work = np.empty(z.size, np.uint8), np.empty(z.size, np.int32), np.empty(z.size, np.int32)
    if mode == "breach":
        breach(z, nrows, ncols, step_lengths_um(size, size), DEPTH_M, LENGTH_M, None, work, THREADS)
    else:
        fill.fill_everywhere(z, nrows, ncols, *work)
    directions.steepest_descent(z, nrows, ncols, size, size, work[0])
    flats.resolve_flats(z, work[0], nrows, ncols, work[1], work[2])
    return work[0]


def _warm(chain: Callable[[np.ndarray], object]) -> None:
    chain(np.random.default_rng(0).random((64, 64), np.float32) * 100)


def breaching(cells: int, name: str) -> float:
    """Seconds of breaching, directions and flats."""
    elevation = terrain(name, cells)
    _warm(lambda z: _to_directions(z, "breach"))
    return best_of(lambda: _to_directions(elevation, "breach"), 2)


def filling(cells: int, name: str) -> float:
    """Seconds of filling, directions and flats."""
    elevation = terrain(name, cells)
    _warm(lambda z: _to_directions(z, "fill"))
    return best_of(lambda: _to_directions(elevation, "fill"), 2)


def pysheds(cells: int, name: str) -> float:
    """Seconds of pysheds' chain of the same purpose, which fills."""
    from affine import Affine
    from pysheds.grid import Grid
    from pysheds.view import Raster, ViewFinder

    def chain(elevation_m: np.ndarray) -> object:
        nodata = elevation_m.dtype.type(-9999)
        view = ViewFinder(Affine.scale(CELL_M, -CELL_M), elevation_m.shape, nodata=nodata)
        grid = Grid(viewfinder=view)
        return grid.flowdir(
            grid.resolve_flats(grid.fill_depressions(grid.fill_pits(Raster(elevation_m, viewfinder=view))))
        )

    elevation = terrain(name, cells)
    _warm(chain)
    start = time.perf_counter()
    chain(elevation)
    return time.perf_counter() - start


def per_cell(cells: int, name: str) -> float:
    """Nanoseconds per cell of breaching to directions."""
    return breaching(cells, name) / cells * 1e9


def growth(cells: int, name: str) -> float:
    """Time per cell of the large terrain over that of one with a sixteenth of its cells."""
    return breaching(cells, name) / (16 * breaching(cells // 16, name))


def _right(cells: int, mode: str) -> tuple[float, float]:
    """Channel cells with the right area within one cell, of all and of those under roads [percent]."""
    from basinwright.terrain import Conditioning, condition_and_route

    n = int(np.sqrt(cells))
    z, truth, road = terrains.graded_roads(n)
    size = np.full(n, CELL_M)
    how = Conditioning("breach" if mode == "breach" else "fill", DEPTH_M, LENGTH_M)
    area = condition_and_route(z, size, size, size * size, how, threads=THREADS).area_grid / CELL_M**2
    near = np.pad(area, 1)
    right = np.zeros(area.shape, bool)
    for i in range(3):
        for j in range(3):
            right |= np.abs(near[i : i + n, j : j + n] / truth - 1.0) <= 0.1
    channel = truth >= 1000
    return 100.0 * right[channel].mean(), 100.0 * right[channel & road].mean()


def right_all(cells: int) -> float:
    """Of all channel cells."""
    return float(_right(cells, "breach")[0])


def right_under_roads(cells: int) -> float:
    """Of those under roads."""
    return float(_right(cells, "breach")[1])
