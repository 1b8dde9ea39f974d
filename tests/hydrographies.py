"""Mapped hydrography for tests: lines in cells, and terrain routed under it.

found, terrain = routed(v_valley(100, 81, 0.1, 0.02), streams=lines([(43.5, 10.5), (43.5, 100)]))
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from basinwright.kernels import FREE
from basinwright.terrain import Conditioning, Terrain, condition_and_route
from basinwright.terrain.hydrography import Hydrography, Lines, prescribe

FILL = Conditioning()
DROW = np.array([-1, -1, 0, 1, 1, 1, 0, -1])
DCOL = np.array([0, 1, 1, 1, 0, -1, -1, -1])


def lines(*parts: Sequence[tuple[float, float]]) -> Lines:
    """Return lines of (column, row) vertices: the centre of the upper left cell is (0.5, 0.5)."""
    xy = np.concatenate([np.asarray(part, float) for part in parts])
    return Lines(xy[:, 0], xy[:, 1], np.cumsum([0, *(len(part) for part in parts)]))


def routed(
    z: NDArray[Any], cell: float = 10.0, conditioning: Conditioning = FILL, **mapped: Any
) -> tuple[Hydrography, Terrain]:
    """Route a terrain of square cells under mapped hydrography."""
    size = np.full(len(z), cell)
    found = prescribe(z, size, size, size * size, **mapped)
    return found, condition_and_route(z, size, size, size * size, conditioning, found.constraints)


def on_grid(padded: NDArray[Any] | None, terrain: Terrain) -> NDArray[Any]:
    """Return the raster proper of a padded array."""
    assert padded is not None
    return terrain.grid(padded)


def steps(terrain: Terrain) -> tuple[NDArray[Any], ...]:
    """Return rows, columns and directions of the cells that drain to a neighbour, and the neighbours."""
    codes = terrain.directions_grid
    rows, cols = np.nonzero(codes < 8)
    code = codes[rows, cols]
    return rows, cols, code, rows + DROW[code], cols + DCOL[code]


def prescribed(found: Hydrography, terrain: Terrain) -> NDArray[np.bool_]:
    """Return the cells with a prescribed direction."""
    return np.asarray(on_grid(found.constraints.fixed, terrain) != FREE)
