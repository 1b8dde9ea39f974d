"""Conditioning, directions and contributing area: speed, memory, compile time."""

from __future__ import annotations

import os
import tempfile
import time

import numpy as np
from harness import Row, best_of, peak_over_start_bytes, terrain

CELL_M = 10.0
_WORK = "filling, flats, directions and contributing area, {{cells}} cells of {} terrain"
_PYSHEDS = "pysheds 0.5: fill_pits, fill_depressions, resolve_flats, flowdir, accumulation"
_PYFLWDIR = "pyflwdir 0.5.12: from_dem, upstream_area"


def _versus(name: str, peer: str, peer_name: str, target: float) -> Row:
    return Row(
        name=f"terrain-{name}-{peer}",
        work=_WORK.format(name),
        unit="s",
        ours="ours",
        peer=peer,
        peer_name=peer_name,
        target=target,
        goal="ratio",
        args=(name,),
    )


ROWS = [
    _versus("rough", "pysheds", _PYSHEDS, 12),
    _versus("smooth", "pysheds", _PYSHEDS, 20),
    _versus("river-like", "pysheds", _PYSHEDS, 35),
    _versus("rough", "pyflwdir", _PYFLWDIR, 4),
    _versus("smooth", "pyflwdir", _PYFLWDIR, 5.5),
    _versus("river-like", "pyflwdir", _PYFLWDIR, 10),
    Row(
        name="terrain-memory",
        work="peak resident memory over start of the same on {cells} cells of rough terrain",
        unit="bytes per cell",
        ours="memory",
        target=40,
        goal="at_most",
        args=("rough",),
    ),
    Row(
        name="terrain-growth",
        work="time per cell on {cells} cells of stationary rough terrain over that on a sixteenth of the cells",
        unit="ratio",
        ours="growth",
        target=1.15,
        goal="at_most",
        args=("stationary",),
        cells=64_000_000,
    ),
    Row(
        name="kernels-compile",
        work="first call of all terrain kernels with an empty cache, imports included",
        unit="s",
        ours="compile_cold",
        target=45,
        goal="at_most",
    ),
]


def _route(elevation_m: np.ndarray) -> object:
    from basinwright.terrain import condition_and_route

    size = np.full(elevation_m.shape[0], CELL_M)
    return condition_and_route(elevation_m, size, size, size * size)


def _small() -> np.ndarray:
    return np.random.default_rng(0).random((64, 64), np.float32)


def ours(cells: int, name: str) -> float:
    """Seconds of `condition_and_route`, its statistics of filling included."""
    elevation = terrain(name, cells)
    _route(_small())
    return best_of(lambda: _route(elevation))


def pysheds(cells: int, name: str) -> float:
    """Seconds of pysheds' chain of the same purpose."""
    from affine import Affine
    from pysheds.grid import Grid
    from pysheds.view import Raster, ViewFinder

    def chain(elevation_m: np.ndarray) -> object:
        nodata = elevation_m.dtype.type(-9999)
        view = ViewFinder(Affine.scale(CELL_M, -CELL_M), elevation_m.shape, nodata=nodata)
        grid = Grid(viewfinder=view)
        filled = grid.fill_depressions(grid.fill_pits(Raster(elevation_m, viewfinder=view)))
        directions = grid.flowdir(grid.resolve_flats(filled))
        return grid.accumulation(directions)

    elevation = terrain(name, cells)
    chain(_small())
    return best_of(lambda: chain(elevation), repeats=1)


def pyflwdir(cells: int, name: str) -> float:
    """Seconds of pyflwdir's way from elevations to contributing area."""
    import pyflwdir as library
    from affine import Affine

    def chain(elevation_m: np.ndarray) -> object:
        transform = Affine.scale(CELL_M, -CELL_M)
        flow = library.from_dem(elevation_m, nodata=-9999.0, transform=transform, latlon=False, outlets="edge")
        return flow.upstream_area(unit="m2")

    elevation = terrain(name, cells)
    chain(_small())
    return best_of(lambda: chain(elevation), repeats=1)


def memory(cells: int, name: str) -> float:
    """Bytes per cell over the resident size with the input loaded and the kernels warm."""
    elevation = terrain(name, cells)
    _route(_small())
    return peak_over_start_bytes(lambda: _route(elevation)) / elevation.size


def growth(cells: int, name: str) -> float:
    """Time per cell of the large terrain over that of one with a sixteenth of its cells."""
    small = terrain(name, cells // 16)
    large = terrain(name, cells)
    _route(_small())
    return (best_of(lambda: _route(large), 2) / large.size) / (best_of(lambda: _route(small)) / small.size)


def compile_cold(_cells: int) -> float:
    """Seconds of a first small run without any machine code kept."""
    with tempfile.TemporaryDirectory() as folder:
        os.environ["NUMBA_CACHE_DIR"] = folder
        start = time.perf_counter()
        _route(_small())
        return time.perf_counter() - start
