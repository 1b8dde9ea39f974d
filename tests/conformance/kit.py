"""Terrains with exact answers, and what a program that routes water makes of them.

    from conformance.kit import GROUNDS, answers
    answers(my_router)     # {ground: {question: number}}

A router takes a `Ground` and returns a `Routed`: the next cell down of every cell. Everything asked is read off that in
the same way for every router, so that answers can be compared. `SIDES` holds three routers: this package, pysheds and
pyflwdir. As a program, ``python -m conformance.kit SIDE`` prints the answers of one of them as JSON.
"""

from __future__ import annotations

import json
import math
import sys
import warnings
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np

CELL_M = 10.0
_STEPS = ((-1, 0), (-1, 1), (0, 1), (1, 1), (1, 0), (1, -1), (0, -1), (-1, -1))
"""Row and column of a step to the north, northeast, ... northwest."""


@dataclass(frozen=True, eq=False)
class Routed:
    """What a router says of a ground.

    Parameters
    ----------
    down : int64 array, shape (rows, cols)
        Flat index of the next cell down; -1 where water leaves the raster or ends.
    cell_area_m2 : float64 array, shape (rows,), or None
        By the router's own reckoning; None where it has none for such a grid.
    """

    down: np.ndarray
    cell_area_m2: np.ndarray | None

    @cached_property
    def end(self) -> np.ndarray:
        """Flat index of the cell where the water of each cell leaves or ends, itself included; shape (rows, cols)."""
        flat = self.down.ravel()
        last = np.where(flat >= 0, flat, np.arange(flat.size))
        for _ in range(int(flat.size).bit_length()):  # each pass doubles the way looked ahead
            last = last[last]
        return last.reshape(self.down.shape)

    def basin(self, cell: tuple[int, int]) -> np.ndarray:
        """Cells whose water passes a cell, itself included."""
        cut = self.down.copy()
        cut[cell] = -1
        return Routed(cut, self.cell_area_m2).end == cell[0] * cut.shape[1] + cell[1]

    def area_m2(self, cell: tuple[int, int]) -> float:
        """Area whose water passes a cell; NaN where the router has no areas."""
        if self.cell_area_m2 is None:
            return math.nan
        return float((self.basin(cell).sum(axis=1) * self.cell_area_m2).sum())

    def path(self, start: tuple[int, int]) -> np.ndarray:
        """Rows and columns from a cell down, shape (n, 2)."""
        ncols = self.down.shape[1]
        cells = [start[0] * ncols + start[1]]
        while (below := int(self.down.flat[cells[-1]])) >= 0 and len(cells) <= self.down.size:
            cells.append(below)
        return np.column_stack(np.divmod(cells, ncols))


@dataclass(frozen=True)
class Question:
    """One thing to ask of a routed ground.

    Parameters
    ----------
    text : str
        What is asked, with its unit.
    exact : float
        The answer on paper.
    ask : callable
        Reads the answer off.
    within : float
        Difference that still counts as right.
    """

    text: str
    exact: float
    ask: Callable[[Ground, Routed], float]
    within: float = 1e-6

    def right(self, answer: object) -> bool:
        """Whether an answer is right."""
        return isinstance(answer, int | float) and abs(answer - self.exact) <= self.within


@dataclass(frozen=True, eq=False)
class Ground:
    """A terrain with exact answers.

    Parameters
    ----------
    name, what : str
    elevation_m : (rows, cols) array
        NaN where void.
    questions : tuple of Question
    geographic : (lon, lat, cell), optional
        Western edge, northern edge and cell size in degrees; else cells are `CELL_M` wide.
    streams : list of (row, col) arrays, optional
        Lines that water must follow, through cell centres.
    sinks : bool array, optional
        Cells that keep their water.
    """

    name: str
    what: str
    elevation_m: np.ndarray
    questions: tuple[Question, ...]
    geographic: tuple[float, float, float] | None = None
    streams: list[np.ndarray] = field(default_factory=list)
    sinks: np.ndarray | None = None

    @property
    def mapped(self) -> bool:
        """Whether mapped streams or sinks are part of it."""
        return bool(self.streams) or self.sinks is not None

    @property
    def transform(self) -> Any:
        """Affine transform of a north-up raster."""
        from affine import Affine

        west, north, cell = self.geographic or (500_000.0, 4_000_000.0, CELL_M)
        return Affine(cell, 0.0, west, 0.0, -cell, north)


# --- questions that many grounds share -------------------------------------------------------------------------------


def undrained() -> Question:
    """Every cell's water must leave over the rim of the raster."""

    def ask(ground: Ground, routed: Routed) -> float:
        z = ground.elevation_m
        beside = np.zeros(z.shape, bool)
        void = np.pad(np.isnan(z), 1, constant_values=True)
        for row, col in _STEPS:
            beside |= void[1 + row : 1 + row + z.shape[0], 1 + col : 1 + col + z.shape[1]]
        return 100.0 * float((~beside.ravel()[routed.end[~np.isnan(z)]]).mean())

    return Question("water that ends inside, % of cells", 0.0, ask)


def area_at(cell: tuple[int, int], exact_km2: float, within: float = 1e-9) -> Question:
    """Contributing area of a cell."""
    text = "area at the outlet, km2"
    return Question(text, exact_km2, lambda _, routed: routed.area_m2(cell) / 1e6, max(within, 1e-9))


def crosses_at(start: tuple[int, int], row: int, col: float, within: float) -> Question:
    """How far from a column the path from a cell first enters a row, in cells."""

    def ask(_: Ground, routed: Routed) -> float:
        path = routed.path(start)
        there = path[path[:, 0] == row]
        return float(abs(there[0, 1] - col)) if there.size else math.inf

    return Question("path off the valley's axis where it crosses, cells", 0.0, ask, within)


def steepest(expected: np.ndarray) -> Question:
    """Share of cells, away from the rim, that step as the slope says; -1 in ``expected`` is not asked."""

    def ask(_: Ground, routed: Routed) -> float:
        rows, cols = np.nonzero(expected >= 0)
        step = np.array(_STEPS)[expected[rows, cols]]
        target = (rows + step[:, 0]) * expected.shape[1] + cols + step[:, 1]
        return 100.0 * float((routed.down[rows, cols] == target).mean())

    return Question("steps that are the steepest of eight, % of cells", 100.0, ask)


# --- grounds ---------------------------------------------------------------------------------------------------------


def _inside(shape: tuple[int, int], margin: int = 1) -> np.ndarray:
    inside = np.zeros(shape, bool)
    inside[margin:-margin, margin:-margin] = True
    return inside


def plane(azimuth_deg: float) -> Ground:
    """A plane of 5 %: every step goes to the neighbour nearest to its fall."""
    row, col = np.mgrid[:41, :41]
    a = math.radians(azimuth_deg)
    z = 500.0 - 0.05 * CELL_M * (col * math.sin(a) - row * math.cos(a))
    expected = np.where(_inside(z.shape), round(azimuth_deg / 45) % 8, -1)
    return Ground(
        f"plane, {azimuth_deg:g} degrees", f"falls by 5 % towards azimuth {azimuth_deg:g}", z,
        (steepest(expected), undrained()),
    )  # fmt: skip


def cone(sign: int) -> Ground:
    """A cone of 8 % round a point between cells, or a funnel that leaves over the rim only after it is conditioned."""
    n, top = 61, (29.37, 30.21)
    row, col = np.mgrid[:n, :n]
    z = 500.0 - sign * 0.08 * CELL_M * np.hypot(row - top[0], col - top[1])
    if sign < 0:
        return Ground("funnel", "falls by 8 % to a point: one pit as large as the raster", z, (undrained(),))
    drop = np.full((8, n, n), -np.inf)
    for code, (down, right) in enumerate(_STEPS):
        drop[code, 1:-1, 1:-1] = (z[1:-1, 1:-1] - z[1 + down : n - 1 + down, 1 + right : n - 1 + right]) / math.hypot(
            down, right
        )
    expected = np.where(_inside(z.shape), np.argmax(drop, axis=0), -1)
    return Ground("cone", "falls by 8 % from a point between cells", z, (steepest(expected), undrained()))


def valley_z(rows: int = 80, cols: int = 61, side: float = 0.3, along: float = 0.02) -> np.ndarray:
    """A valley that falls to the last row, its axis in the middle column."""
    row, col = np.mgrid[:rows, :cols]
    return 100.0 + CELL_M * (side * np.abs(col - cols // 2) + along * (rows - 1 - row))


def valley() -> Ground:
    """A straight valley: the sides run straight to its axis."""
    z = valley_z()

    def longest(_: Ground, routed: Routed) -> float:
        return 1.0 * len(routed.path((0, 0)))

    return Ground(
        "valley", "V-shaped, sides 30 %, axis 2 %", z,
        (
            area_at((79, 30), z.size * CELL_M**2 / 1e6),
            Question("cells of the path from the upper corner", 80.0 + 30.0, longest),
            undrained(),
        ),
    )  # fmt: skip


def oblique_valley(azimuth_deg: float) -> Ground:
    """A valley at an angle to the grid: the path stays within half a diagonal of its axis."""
    n = 121
    a = math.radians(azimuth_deg)
    east = (np.arange(n) - n // 2)[None, :] * CELL_M
    north = (n // 2 - np.arange(n))[:, None] * CELL_M
    along, across = east * math.sin(a) + north * math.cos(a), east * math.cos(a) - north * math.sin(a)
    z = 1000 + 0.3 * np.abs(across) - 0.02 * along

    def farthest(_: Ground, routed: Routed) -> float:
        path = routed.path((n // 2, n // 2))
        kept = path[(path >= 5).all(axis=1) & (path < n - 5).all(axis=1)]
        return float(np.abs(across[kept[:, 0], kept[:, 1]]).max() / CELL_M)

    return Ground(
        f"oblique valley, {azimuth_deg:g} degrees", f"V-shaped, its axis falls by 2 % to azimuth {azimuth_deg:g}", z,
        (Question("path off the axis, cells", 0.0, farthest, math.sqrt(0.5)), undrained()),
    )  # fmt: skip


def _walled(z: np.ndarray, height_m: float = 50.0) -> np.ndarray:
    """A wall down both sides and across the top."""
    z = z.copy()
    z[:, [0, -1]] += height_m
    z[0] += height_m
    return z


def stairs() -> Ground:
    """Level treads between walls: water goes straight down from step to step."""
    row, _ = np.mgrid[:60, :31]
    z = _walled(100.0 - 2.0 * (row // 10))

    def straight(_: Ground, routed: Routed) -> float:
        path = routed.path((1, 15))
        return float(len(path)) if path[-1, 0] == 59 else math.inf

    return Ground(
        "stairs", "six level treads of ten rows between walls", z,
        (Question("cells of the path down the middle", 59.0, straight), undrained()),
    )  # fmt: skip


def _lake(z: np.ndarray, bed_m: float) -> np.ndarray:
    """Put a lake of ten rows behind a sill with a notch of one cell on the axis; its bed lies below the surface."""
    level = z[40, 30]
    lake = np.zeros(z.shape, bool)
    lake[40:50] = z[40:50] <= level
    z[50] = np.maximum(z[50], level + 1.0)
    z[50, 30] = level - 0.1
    z[lake] = level - bed_m
    return z


def lake(bed_m: float) -> Ground:
    """A valley with a lake: its level surface, or a bed below the sill."""
    z = _lake(valley_z(side=0.02, along=0.005), bed_m)
    return Ground(
        f"lake, bed {bed_m:g} m down" if bed_m else "lake, level surface", "ten rows behind a notched sill", z,
        (area_at((79, 30), z.size * CELL_M**2 / 1e6), crosses_at((5, 30), 50, 30, 0.5), undrained()),
    )  # fmt: skip


def embankment(sag_m: float) -> Ground:
    """A road across a valley, three cells wide, 3 m over the axis; with a sag in its crest ten cells off the axis."""
    z = valley_z(side=0.02, along=0.005)
    z[0] += 50.0
    crest = np.full(61, z[41, 30] + 3.0)
    crest[39:42] -= sag_m
    z[40:43] = np.maximum(z[40:43], crest)
    return Ground(
        "embankment with a sag" if sag_m else "embankment",
        "a road 3 m high across a valley" + (f", {sag_m:g} m lower ten cells off the axis" if sag_m else ""), z,
        (area_at((79, 30), z.size * CELL_M**2 / 1e6), crosses_at((5, 30), 41, 30, 0.5), undrained()),
    )  # fmt: skip


def stream_off_valley(cells: int) -> Ground:
    """A mapped stream beside the axis of its valley: at the bottom it carries all the water."""
    z = valley_z(side=0.02, along=0.005)
    rows = np.arange(10, 80)
    line = np.column_stack([rows, np.full(rows.size, 30 + cells)]).astype(float)
    return Ground(
        f"stream {cells} cells off its valley", f"a mapped line {cells} cells beside the axis", z,
        (area_at((79, 30 + cells), z.size * CELL_M**2 / 1e6), undrained()), streams=[line],
    )  # fmt: skip


def _levee() -> np.ndarray:
    """A walled plateau that leaves through one cell of its last row, and a square pit behind a levee on it."""
    row, col = np.mgrid[:61, :61]
    ring = np.maximum(np.abs(row - 30), np.abs(col - 30))
    z = np.where(ring <= 20, 75.0 + ring, 101.0)
    z[ring == 21] = 105.0
    z[ring == 30] = 200.0
    z[60, 30] = 99.0
    return z


def nested_pits() -> Ground:
    """Two small pits inside a large one on a plateau: with nothing declared, all water leaves through the one exit."""
    z = _levee()
    for row, col in ((22, 24), (36, 38)):
        z[row - 2 : row + 3, col - 2 : col + 3] = 70.0
        z[row, col] = 65.0
    return Ground(
        "nested pits", "pits within a pit on a walled plateau with one exit", z,
        (area_at((60, 30), z.size * CELL_M**2 / 1e6), undrained()),
    )  # fmt: skip


def declared_sink() -> Ground:
    """The large pit keeps its water: the exit lacks the pit and its levee, 43 x 43 cells."""
    z = _levee()
    sinks = np.zeros(z.shape, bool)
    sinks[28:33, 28:33] = True
    return Ground(
        "declared sink", "the floor of the pit keeps its water", z,
        (area_at((60, 30), (z.size - 43**2) * CELL_M**2 / 1e6),), sinks=sinks,
    )  # fmt: skip


def geographic_valley() -> Ground:
    """A valley in cells of one arc second at 60 degrees north; its area is that of the geodesic polygon round it."""
    from pyproj import Geod

    row, col = np.mgrid[:80, :61]
    z = 100.0 + 4.5 * np.abs(col - 30) + 0.6 * (79 - row)
    west, north, cell = 10.0, 60.0, 1 / 3600
    east, south = west + 61 * cell, north - 80 * cell
    lon = np.linspace(west, east, 200)  # dense, because a parallel is no geodesic
    x = np.concatenate([lon, lon[::-1]])
    y = np.repeat([south, north], 200)
    exact_km2 = abs(Geod(ellps="WGS84").polygon_area_perimeter(x, y)[0]) / 1e6
    return Ground(
        "valley in degrees", "cells of 1 arc second at 60 degrees north, area on the ellipsoid", z,
        (area_at((79, 30), exact_km2, 1e-4 * exact_km2), undrained()), geographic=(west, north, cell),
    )  # fmt: skip


def geographic_plane() -> Ground:
    """A plane in such cells, half as wide as high: steepest to the east, though to the southeast in degrees."""
    row, col = np.mgrid[:41, :41]
    z = 500.0 - 4.0 * col - 4.0 * row
    expected = np.where(_inside(z.shape), 2, -1)
    return Ground(
        "plane in degrees", "4 m a cell to the east and to the south, cells 15 m wide and 31 m high", z,
        (steepest(expected), undrained()), geographic=(10.0, 60.0, 1 / 3600),
    )  # fmt: skip


GROUNDS: tuple[Ground, ...] = (
    *(plane(azimuth) for azimuth in (0, 15, 40, 90, 110, 160, 225, 290, 340)),
    cone(1),
    cone(-1),
    valley(),
    *(oblique_valley(azimuth) for azimuth in (100, 112.5, 125, 135, 160)),
    stairs(),
    lake(0.0),
    lake(2.0),
    embankment(0.0),
    embankment(0.5),
    nested_pits(),
    geographic_valley(),
    geographic_plane(),
    *(stream_off_valley(cells) for cells in (1, 2, 5)),
    declared_sink(),
)


# --- routers ---------------------------------------------------------------------------------------------------------


class NotOfferedError(Exception):
    """A router has no such input."""


def basinwright(ground: Ground, mode: str = "breach") -> Routed:
    """Route with this package."""
    from basinwright.grid import Grid
    from basinwright.terrain import Conditioning, condition_and_route
    from basinwright.terrain.hydrography import Lines, prescribe

    rows, cols = ground.elevation_m.shape
    crs = "EPSG:4326" if ground.geographic else "EPSG:32614"
    grid = Grid(rows, cols, ground.transform, wkt(crs))
    sizes = (grid.dx_m, grid.dy_m, grid.cell_area_m2)
    constraints = None
    if ground.mapped:
        lines = None
        if ground.streams:
            points = np.concatenate(ground.streams) + 0.5
            lines = Lines(points[:, 1], points[:, 0], np.cumsum([0, *map(len, ground.streams)]))
        constraints = prescribe(ground.elevation_m, *sizes, streams=lines, sinks=ground.sinks).constraints
    terrain = condition_and_route(ground.elevation_m, *sizes, Conditioning(mode), constraints)  # type: ignore[arg-type]
    codes = terrain.directions_grid.astype(np.int64)
    return Routed(_down(codes, codes < 8, np.arange(8)), grid.cell_area_m2)


def pysheds(ground: Ground) -> Routed:
    """Route with pysheds: pits, depressions and flats filled by its own rules."""
    from pyproj import Proj
    from pysheds import _sgrid
    from pysheds.grid import Grid
    from pysheds.view import Raster, ViewFinder

    _sgrid.count.recompile()  # numba cannot compile callers of a generator that it found in its cache
    if ground.mapped:
        raise NotOfferedError
    z = np.pad(ground.elevation_m, 1, constant_values=np.nan)  # it treats the outermost cells unlike the others
    proj = Proj("EPSG:4326" if ground.geographic else "EPSG:32614")
    view = ViewFinder(affine=ground.transform, shape=z.shape, crs=proj, nodata=np.float64(np.nan))
    grid = Grid(viewfinder=view)
    filled = grid.fill_depressions(grid.fill_pits(Raster(z, viewfinder=view)))
    codes = np.asarray(grid.flowdir(grid.resolve_flats(filled)))[1:-1, 1:-1]
    area = None if ground.geographic else np.full(codes.shape[0], CELL_M**2)
    return Routed(_down(codes, codes > 0, np.array([64, 128, 1, 2, 4, 8, 16, 32])), area)


def pyflwdir(ground: Ground) -> Routed:
    """Route with pyflwdir: `from_dem`, water leaves over the rim."""
    import pyflwdir as library

    if ground.mapped:
        raise NotOfferedError
    z = np.where(np.isnan(ground.elevation_m), -9999.0, ground.elevation_m).astype(np.float32)
    flow = library.from_dem(
        z, nodata=-9999.0, transform=ground.transform, latlon=ground.geographic is not None, outlets="edge"
    )
    down = np.asarray(flow.idxs_ds, np.int64).reshape(z.shape)
    down = np.where(down == np.arange(z.size).reshape(z.shape), -1, down)
    return Routed(down, np.asarray(flow.area, np.float64).reshape(z.shape)[:, 0])


def wkt(crs: str) -> str:
    """CRS as text."""
    from pyproj import CRS

    return str(CRS.from_user_input(crs).to_wkt())


def _down(codes: np.ndarray, moves: np.ndarray, known: np.ndarray) -> np.ndarray:
    """Flat index of the next cell by direction codes; ``known`` lists those of north, northeast, ..."""
    rows, cols = np.indices(codes.shape)
    down = np.full(codes.shape, -1, np.int64)
    for code, (south, east) in zip(known.tolist(), _STEPS, strict=True):
        here = moves & (codes == code)
        row, col = rows[here] + south, cols[here] + east
        inside = (row >= 0) & (row < codes.shape[0]) & (col >= 0) & (col < codes.shape[1])
        down[here] = np.where(inside, row * codes.shape[1] + col, -1)
    return down


Router = Callable[[Ground], Routed]
SIDES: dict[str, Router] = {"basinwright": basinwright, "pysheds": pysheds, "pyflwdir": pyflwdir}


def answers(router: Router, grounds: Iterable[Ground] = GROUNDS) -> dict[str, dict[str, float | str | None]]:
    """Answer every question of some grounds.

    Returns
    -------
    dict of ground to dict of question to number, None or str
        None where the router has no such input or no such quantity, the error in words where it failed.
    """
    found: dict[str, dict[str, float | str | None]] = {}
    for ground in grounds:
        try:
            routed = router(ground)
            values = [float(question.ask(ground, routed)) for question in ground.questions]
        except NotOfferedError:
            given: list[float | str | None] = [None] * len(ground.questions)
        except Exception as error:  # a peer's failure is a score
            given = [f"failed: {type(error).__name__}: {error}"] * len(ground.questions)
        else:
            given = [None if math.isnan(value) else round(value, 9) for value in values]
        found[ground.name] = {question.text: value for question, value in zip(ground.questions, given, strict=True)}
    return found


if __name__ == "__main__":
    warnings.simplefilter("ignore")
    print(json.dumps(answers(SIDES[sys.argv[1]])))
