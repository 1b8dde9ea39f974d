"""Mapped hydrography turned into constraints: streams that are followed, barriers, sinks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from basinwright.kernels import NO_CELL, SINK
from basinwright.terrain.constraints import Constraints, drain
from basinwright.terrain.routing import Terrain, pad, route
from basinwright.terrain.summable import summable_areas_m2

REACH_CELLS = 5
"""How far a mapped stream may lie off its valley, and how wide a gap in its lines may be."""
_REACH = 5 * REACH_CELLS + 2
"""The same in the distances of the corridors, half a cell added for the laying of the lines."""
LEAST_RUN_CELLS = 10
"""Twice the reach: water that crosses the corridor at right angles, such as the larger stream at a mapped stream's
mouth, stays within reach of fewer cells."""
LEAST_RUN_JOINING_CELLS = 3
"""For a natural channel that joins the mapped one anyway."""
LEAST_SHARE = 0.1
"""Of the mapped channel's contributing area: less beside it is hillside, not a second channel."""
LEAST_CELLS = 10.0
_ROUNDS = 3
_SHIFT = (1.37e-4, 2.91e-4)
"""Barriers are moved by this part of a cell, so that none runs exactly through the centres of cells."""


@dataclass(frozen=True, eq=False)
class Lines:
    """Lines in cells: columns to the right and rows down from the raster's upper left corner.

    Attributes
    ----------
    x, y : float64 arrays, shape (vertices,)
    bounds : int64 array, shape (lines + 1,)
        Where the vertices of each line begin; the last is where they end.
    """

    x: np.ndarray
    y: np.ndarray
    bounds: np.ndarray


@dataclass(frozen=True, eq=False)
class Hydrography:
    """What mapped hydrography means for a terrain.

    Attributes
    ----------
    constraints : Constraints
    line_of : int32 array, shape (nrows, ncols)
        The first line of the stream layer on each cell, -1 where there is none.
    facts : dict of str to int
        ``stream_cells`` on mapped lines, ``gaps_bridged``, ``led_cells`` (beside mapped lines, led into them),
        ``directions_given_up`` (of mapped cells, for drainage), ``enclosed`` (grounds that walls enclose, which keep
        their water), ``barred_steps``, ``sink_cells``.
    """

    constraints: Constraints
    line_of: np.ndarray
    facts: dict[str, int]


def prescribe(
    elevation_m: np.ndarray,
    dx_m: np.ndarray,
    dy_m: np.ndarray,
    cell_area_m2: np.ndarray,
    *,
    streams: Lines | None = None,
    barriers: Lines | None = None,
    sinks: np.ndarray | None = None,
    crest_m: float = 5.0,
) -> Hydrography:
    """Turn mapped streams, barriers and sinks into constraints for conditioning and routing.

    **Streams.** Lines are laid on the grid as chains of neighbouring cells. Each connected part gets one mouth: of its
    loose ends, its contacts with the raster's rim and with sinks the one from which water leaves at the lowest
    level; every other cell drains towards it, whatever the direction of digitising. Loops open where that costs the
    least climb. A mouth inside the raster that another part lies near, within `REACH_CELLS`, is joined to it if that
    part's own mouth is lower. Elevations are cut so that they never rise along a stream, and water does not cross its
    diagonal steps.

    A line off its valley stays where it was mapped and takes the water: a natural channel that runs beside it, within
    `REACH_CELLS`, with at least `LEAST_SHARE` of its contributing area, is led into it by the straight way cell by
    cell, and the stream is cut down to it. It must run beside it for `LEAST_RUN_CELLS`, or for
    `LEAST_RUN_JOINING_CELLS` where it joins the stream anyway. Ground between that rises over both by more than
    `crest_m`, or a barrier, separates them.

    **Barriers** are walls between the cells whose centres they part; a stream's own steps lead through (a culvert).

    **Sinks** keep the water of their cells. Ground that walls enclose on all sides keeps its water too, at its lowest
    cell. A stream does not lead through a sink.

    Parameters
    ----------
    elevation_m : float array, shape (nrows, ncols) [m]
        NaN in voids.
    dx_m, dy_m : arrays, shape (nrows,) [m]
    cell_area_m2 : array, shape (nrows,) [m2]
    streams, barriers : Lines, optional
    sinks : bool array, shape (nrows, ncols), optional
    crest_m : float [m]

    Returns
    -------
    Hydrography
    """
    from basinwright.kernels import constraints as kernel

    nrows, ncols = elevation_m.shape
    ground = _Ground(elevation_m, dx_m, dy_m, cell_area_m2)
    walls, fixed, ends = Constraints().arrays(ground.z.size)
    if barriers is not None:
        kernel.wall_off(barriers.x + _SHIFT[0], barriers.y + _SHIFT[1], barriers.bounds, nrows, ncols, walls)
    if sinks is not None:
        ground.inner(ends)[...] = sinks & np.isfinite(ground.inner(ground.z))
    facts = {"barred_steps": int(np.bitwise_count(walls).sum()) // 2, "sink_cells": int(ends.sum())}
    line_of = np.full(ground.z.size, NO_CELL, np.int32)
    before = ground.z.copy()
    if streams is not None:
        facts |= _follow(ground, streams, walls, fixed, ends, line_of, crest_m)
    level = np.empty_like(ground.z)
    work = np.empty(ground.z.size, np.int32)
    given_up, enclosed = kernel.constrained_levels(ground.z, nrows, ncols, walls, fixed, ends, work, level)
    facts |= {"directions_given_up": given_up, "enclosed": enclosed}
    cut = np.flatnonzero(ground.z < before).astype(np.int32)
    constraints = Constraints(walls, ends, fixed, cut, ground.z[cut])
    return Hydrography(constraints, ground.inner(line_of).copy(), facts)


def lines_on_cells(elevation_m: np.ndarray, streams: Lines) -> np.ndarray:
    """The first line on each cell, -1 where there is none.

    Parameters
    ----------
    elevation_m : float array, shape (nrows, ncols) [m]
    streams : Lines

    Returns
    -------
    int32 array, shape (nrows, ncols)
    """
    from basinwright.kernels import hydrography as kernel

    ground = _Ground(elevation_m, np.ones(len(elevation_m)), np.ones(len(elevation_m)), np.ones(len(elevation_m)))
    line_of = np.full(ground.z.size, NO_CELL, np.int32)
    links = np.zeros(ground.z.size, np.uint8)
    kernel.lay_lines(streams.x, streams.y, streams.bounds, ground.z, ground.nrows, ground.ncols, links, line_of)
    return ground.inner(line_of).copy()


class _Ground:
    """Elevations as the kernels take them, and cell sizes."""

    def __init__(self, elevation_m: np.ndarray, dx_m: np.ndarray, dy_m: np.ndarray, cell_area_m2: np.ndarray) -> None:
        self.nrows, self.ncols = elevation_m.shape
        z, _ = pad(elevation_m)
        self.z = np.where(np.isinf(z), np.float32(np.inf), z)
        self.dx, self.dy = (np.ascontiguousarray(size, np.float64) for size in (dx_m, dy_m))
        self.row_area = summable_areas_m2(np.asarray(cell_area_m2, np.float64), self.ncols)

    def inner(self, padded: np.ndarray) -> np.ndarray:
        """View of a padded array as the raster proper."""
        return padded.reshape(self.nrows + 2, self.ncols + 2)[1:-1, 1:-1]


def _follow(
    ground: _Ground, streams: Lines, walls: np.ndarray, fixed: np.ndarray, ends: np.ndarray, line_of: np.ndarray,
    crest_m: float,
) -> dict[str, int]:  # fmt: skip
    """Prescribe the directions of mapped streams, and of what is led into them; cut the ground along them."""
    from scipy.ndimage import minimum_filter

    from basinwright.kernels import constraints as constraint_kernel
    from basinwright.kernels import hydrography as kernel

    z, nrows, ncols = ground.z, ground.nrows, ground.ncols
    stride = ncols + 2
    natural = np.empty_like(z)
    work = np.empty(z.size, np.int32)
    constraint_kernel.constrained_levels(z, nrows, ncols, walls, np.full_like(fixed, 255), ends.copy(), work, natural)
    # The lowest level within reach: a mouth that lies beside its valley, up a slope, is still the lowest end.
    natural = minimum_filter(natural.reshape(nrows + 2, stride), size=2 * REACH_CELLS + 1).reshape(-1)
    links = np.zeros(z.size, np.uint8)
    kernel.lay_lines(streams.x, streams.y, streams.bounds, z, nrows, ncols, links, line_of)
    network = _orient(ground, natural, links, line_of, fixed, ends)
    gaps = kernel.find_gaps(z, natural, nrows, ncols, ends, *network[:2], network[3], REACH_CELLS)
    bridged = kernel.join_straight(*gaps, z, stride, ends, links, line_of)
    if bridged:
        network = _orient(ground, natural, links, line_of, fixed, ends)
    cells, slot, along, mouth = network
    kernel.cut_along(z, stride, fixed, cells)
    kernel.wall_crossings(stride, fixed, cells, walls)
    facts = {"stream_cells": int(cells.size), "gaps_bridged": int(bridged), "led_cells": 0}
    if cells.size == 0:
        return facts

    apart, towards = np.empty(z.size, np.uint8), np.empty(z.size, np.uint8)
    nearest = np.empty(z.size, np.int32)
    kernel.corridors(z, stride, walls, ends, cells, _REACH, apart, towards, nearest)
    for _ in range(_ROUNDS):
        level, code, _ = drain(z, nrows, ncols, ground.dx, ground.dy, Constraints(walls, ends, fixed))
        area, order = route(code, nrows, ncols, ground.row_area)
        led = kernel.lead_in(
            level, code, order, area, ncols, ground.row_area, slot, along, mouth, apart, towards, nearest,
            LEAST_RUN_CELLS, LEAST_RUN_JOINING_CELLS, LEAST_SHARE, LEAST_CELLS, crest_m, fixed,
        )  # fmt: skip
        facts["led_cells"] += int(led)
        kernel.cut_along(z, stride, fixed, np.flatnonzero(fixed != 255).astype(np.int32))
        if led == 0:
            break
    return facts


def _orient(
    ground: _Ground, natural: np.ndarray, links: np.ndarray, line_of: np.ndarray, fixed: np.ndarray, ends: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Directions on the mapped network, and its cells, their places, steps to the mouth and mouths."""
    from basinwright.kernels import hydrography as kernel

    cells = np.flatnonzero(line_of >= 0).astype(np.int32)
    slot = np.full(ground.z.size, NO_CELL, np.int32)
    slot[cells] = np.arange(cells.size)
    along, mouth = np.empty(cells.size, np.int32), np.empty(cells.size, np.int32)
    kernel.orient(ground.z, natural, ground.nrows, ground.ncols, links, ends, cells, slot, fixed, along, mouth)
    return cells, slot, along, mouth


@dataclass(frozen=True, eq=False)
class Sinks:
    """Where sinks would spill, by cell that keeps its water.

    Attributes
    ----------
    cells : int32 array, shape (n,)
        Padded indices.
    spill_cells : int32 array, shape (n,)
        The cell to which the sink's water would go if it rose until it spilt, over barriers only where they enclose
        it; -1 for out of the raster.
        Cells that hang together are one sink.
    next_sink : int32 array, shape (n,)
        Position in `cells` of the one that the spilt water would come to next; -1 for none.
    """

    cells: np.ndarray
    spill_cells: np.ndarray
    next_sink: np.ndarray


def sink_spills(terrain: Terrain, constraints: Constraints | None) -> Sinks:
    """Find where every sink of a routed terrain would spill.

    Parameters
    ----------
    terrain : Terrain
    constraints : Constraints, optional
        As for the routing.

    Returns
    -------
    Sinks
    """
    from scipy.ndimage import label

    from basinwright.kernels import hydrography as kernel
    from basinwright.kernels import labels

    keeps = terrain.directions == SINK
    cells = np.flatnonzero(keeps).astype(np.int32)
    if cells.size == 0:
        return Sinks(cells, cells.copy(), cells.copy())
    shape = (terrain.nrows + 2, terrain.ncols + 2)
    number = label(keeps.reshape(shape), structure=np.ones((3, 3)))[0].reshape(-1)[cells] - 1
    at_cell = np.empty(terrain.directions.size, np.int32)
    distance_um = np.empty(terrain.directions.size, np.int64)
    between, between_um = np.empty(cells.size, np.int32), np.empty(cells.size, np.int64)
    labels.label_cells(
        terrain.directions, terrain.order, terrain.ncols, terrain.step_um, cells, at_cell, distance_um, between,
        between_um,
    )  # fmt: skip
    sink = np.append(number, NO_CELL).astype(np.int32)[at_cell]
    del distance_um
    walls, fixed, _ = (constraints or Constraints()).arrays(sink.size)
    level = np.empty(sink.size, np.float32)
    spill = np.empty(int(number.max()) + 1, np.int32)
    kernel.spills(terrain.conditioned_m, terrain.nrows, terrain.ncols, walls, fixed, sink, level, spill)
    if (enclosed := spill == kernel.UNREACHED).any():
        over = np.empty_like(spill)
        walls[:] = 0
        kernel.spills(terrain.conditioned_m, terrain.nrows, terrain.ncols, walls, fixed, sink, level, over)
        spill = np.where(enclosed, np.maximum(over, NO_CELL), spill)
    spill_cells = spill[number]
    next_sink = np.where(spill_cells >= 0, at_cell[spill_cells], NO_CELL).astype(np.int32)
    return Sinks(cells, spill_cells, next_sink)
