"""Makes the sample project: an invented county with its terrain, land cover, soils and road crossings.

The land is grown, not drawn: rivers cut into an uplifted bowl until they have a profile (slope falling as
contributing area to the power -0.45), in four rounds from 80-m to 10-m cells. Then come what people meet in real
terrain models: a flat valley floor, a lake, a road embankment without its culvert, centimetre noise, a void corner.

    python sample_data/make_sample.py [FOLDER]      (default: beside this script; about half a minute)

Seeded: the same environment gives the same bytes.
"""

import heapq
import sys
from dataclasses import dataclass
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import rasterio
import shapely
from numba import njit
from numpy.typing import ArrayLike, NDArray
from pyproj import Transformer
from rasterio.features import shapes, sieve
from rasterio.transform import from_origin
from scipy.ndimage import (
    binary_dilation,
    distance_transform_edt,
    gaussian_filter,
    gaussian_filter1d,
    label,
    map_coordinates,
    zoom,
)
from scipy.spatial import cKDTree

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Ints = NDArray[np.int64]
Points = list[tuple[float, float]]  # (x, y) in km east and north of the terrain's south-west corner

SEED = 3
CRS = "EPSG:32614"
COVER_CRS = "EPSG:5070"
SOILS_CRS = "EPSG:4326"
CELL_M = 10.0
WEST, SOUTH = 700_000.0, 4_280_000.0  # south-west corner of the terrain
ROWS, COLS = 900, 740  # the terrain as delivered
ABOVE, LEFT = 100, 80  # rows and columns of the larger grown land that lie outside it
DATUM_M = 340.0
FIXED_DATE = "2024-01-01T00:00:00.000Z"  # GeoPackages carry a date of change

# ---------------------------------------------------------------------------------------------- what the map shows
ROADS: dict[str, Points] = {
    "Harrow Road": [
        (-2, 4.9),
        (0.8, 4.45),
        (1.5, 3.95),
        (1.8, 3.85),
        (2.2, 3.85),
        (2.41, 3.85),
        (2.75, 3.75),
    ],
    "Tannery Road": [(3.3, 11), (3.4, 7.6), (3.40, 6.52), (3.65, 5.9), (3.75, 5.3), (3.2, 4.3), (2.75, 3.75)],
    "Cooper Hollow Road": [(2.75, 3.75), (3.35, 3.58), (3.6, 3.7), (4.4, 4.35), (6, 4.7), (9, 4.6)],
    "Ferry Road": [(2.75, 3.75), (3.0, 3.1), (3.0, 2.6), (2.76, 2.15), (2.3, 2.3), (1.6, 1.9)],
    "County Line Road": [(1.6, 1.9), (1.19, 1.2), (1.05, 0.4), (0.95, -2)],
    "Lakeside Road": [(3.0, 3.1), (3.3, 3.0), (3.58, 2.93), (4.0, 2.6), (5.2, 2.3), (9, 2.0)],
}
TOWN = (2.75, 3.75)
EMBANKMENT = (2.0, 3.85)  # where Harrow Road crosses a valley on a fill, its culvert not in the terrain
EMBANKMENT_HEIGHT_M = 3.2
LAKE_OUTLET = (3.58, 2.93)
SILL_M = 4.5
QUARRY = (4.85, 4.95)
VOID = -9999.0


# --------------------------------------------------------------------------------------------------------- drainage
STEPS = np.array([(-1, -1), (-1, 0), (-1, 1), (0, -1), (0, 1), (1, -1), (1, 0), (1, 1)])


@dataclass(frozen=True)
class Drainage:
    """Where water goes: flat index of each cell's receiver (-1: leaves the grid), cells from exits upwards, area."""

    filled: Floats
    receiver: Ints
    upwards: Ints
    area_m2: Floats


@njit(cache=True)
def _flood(z, rows, cols, exits):  # type: ignore[no-untyped-def]
    """Flood from the exits in order of elevation; each cell drains to its steepest neighbour flooded before it."""
    filled = z.copy()
    receiver = np.full(z.size, -1, np.int64)
    upwards = np.empty(z.size, np.int64)
    queued = np.zeros(z.size, np.bool_)
    flooded = np.zeros(z.size, np.bool_)
    queue = [(z[k], np.int64(i), k) for i, k in enumerate(exits)]
    for k in exits:
        queued[k] = True
    heapq.heapify(queue)
    ticket = exits.size  # first come, first served among equals
    done = 0
    while len(queue) > 0:
        level, _, k = heapq.heappop(queue)
        upwards[done] = k
        flooded[k] = True
        done += 1
        row, col = k // cols, k % cols
        steepest = 0.0
        for d in range(8):
            r, c = row + STEPS[d, 0], col + STEPS[d, 1]
            if r < 0 or r >= rows or c < 0 or c >= cols:
                continue
            n = r * cols + c
            if flooded[n]:
                fall = (level - filled[n]) / np.sqrt(np.float64(abs(STEPS[d, 0]) + abs(STEPS[d, 1])))
                if fall > steepest:
                    steepest = fall
                    receiver[k] = n
            elif not queued[n]:
                queued[n] = True
                receiver[n] = k
                filled[n] = max(filled[n], level)
                heapq.heappush(queue, (filled[n], ticket, n))
                ticket += 1
    return filled, receiver, upwards


@njit(cache=True)
def _gather(receiver, upwards, amount):  # type: ignore[no-untyped-def]
    total = amount.copy()
    for k in upwards[::-1]:
        if receiver[k] >= 0:
            total[receiver[k]] += total[k]
    return total


@njit(cache=True)
def _incise(z, receiver, upwards, erodibility, cols):  # type: ignore[no-untyped-def]
    """One implicit step of erosion in proportion to slope."""
    out = z.copy()
    for k in upwards:
        n = receiver[k]
        if n >= 0 and out[k] > out[n]:
            diagonal = k // cols != n // cols and k % cols != n % cols
            f = erodibility[k] / (1.4142135623730951 if diagonal else 1.0)
            out[k] = (out[k] + f * out[n]) / (1 + f)
    return out


@njit(cache=True)
def _fall_downstream(bed, receiver, upwards, is_channel):  # type: ignore[no-untyped-def]
    for k in upwards[::-1]:
        n = receiver[k]
        if n >= 0 and is_channel[k]:
            bed[n] = min(bed[n], bed[k])
    return bed


@njit(cache=True)
def _from_downstream(receiver, upwards, value, keeps):  # type: ignore[no-untyped-def]
    """Each cell takes the value of the first cell down its flow line that keeps its own."""
    for k in upwards:
        if receiver[k] >= 0 and not keeps[k]:
            value[k] = value[receiver[k]]
    return value


@njit(cache=True)
def _mark_upstream(receiver, upwards, mark):  # type: ignore[no-untyped-def]
    for k in upwards:
        if receiver[k] >= 0 and mark[receiver[k]]:
            mark[k] = True
    return mark


def drain(z: Floats, cell_m: float) -> Drainage:
    rows, cols = z.shape
    rim = np.zeros(z.shape, bool)
    rim[[0, -1], :] = rim[:, [0, -1]] = True
    filled, receiver, upwards = _flood(z.ravel(), rows, cols, np.flatnonzero(rim))
    area_m2 = _gather(receiver, upwards, np.full(z.size, cell_m**2))
    return Drainage(filled.reshape(z.shape), receiver, upwards, area_m2.reshape(z.shape))


def upstream_of(drainage: Drainage, cells: Flags) -> Flags:
    mark = _mark_upstream(drainage.receiver, drainage.upwards, cells.flatten())
    return mark.reshape(cells.shape)


# ------------------------------------------------------------------------------------------------------ grown land
def noise(rng: np.random.Generator, shape: tuple[int, ...], scale: float) -> Floats:
    """Smooth noise of unit variance; `scale` in cells."""
    field = gaussian_filter(rng.standard_normal(shape), scale, mode="wrap")
    return field / field.std()


def fractal(rng: np.random.Generator, shape: tuple[int, ...], scale: float, octaves: int) -> Floats:
    return np.sum([0.6**i * noise(rng, shape, scale / 2**i) for i in range(octaves)], axis=0)


def bowl(rng: np.random.Generator, cell_m: float, shape: tuple[int, int]) -> Floats:
    """Where it all begins: a trough that falls to the south, with divides some 3 km either side of a winding axis."""
    y, x = np.mgrid[0 : shape[0], 0 : shape[1]] * cell_m
    height, width = shape[0] * cell_m, shape[1] * cell_m
    across = np.abs(x - width / 2 - 450 * np.sin(y / 1500)) / 3300
    section = np.where(across < 1, across**1.3, 1 - 0.9 * (across - 1))
    northern_divide = 60 * np.clip((1500 - y) / 1500, 0, 1)
    south = y / height
    relief = 11 * fractal(rng, shape, 5000 / cell_m / 4, 4)
    return 70 * (1 - south) + 75 * section * (0.5 + 0.5 * (1 - south)) - northern_divide + relief


@dataclass(frozen=True)
class Round:
    """Erosion on one cell size; bends come from warping the land by `warp_m` over `warp_length_m` beforehand."""

    cell_m: float
    steps: int
    time: float
    warp_m: float = 0.0
    warp_length_m: float = 0.0
    roughness_m: float = 0.0


ROUNDS = (
    Round(80, 70, 6.0),
    Round(40, 40, 3.0, 90, 700, 0.8),
    Round(20, 14, 1.5, 45, 350, 0.3),
    Round(10, 6, 1.0, 18, 200, 0.1),
)


def refine(rng: np.random.Generator, z: Floats, to: Round) -> Floats:
    """Halve the cells and warp the land a little, or rivers would run in eight directions only."""
    z = zoom(z, 2, order=3, mode="nearest", grid_mode=True)
    scale = to.warp_length_m / to.cell_m / 4
    shift = [to.warp_m / to.cell_m * noise(rng, z.shape, scale) for _ in range(2)]
    z = map_coordinates(z, np.indices(z.shape) + shift, order=1, mode="nearest")
    return z + to.roughness_m * noise(rng, z.shape, 1.2)


def erode(rng: np.random.Generator, z: Floats, how: Round) -> Floats:
    """Uplift, rivers that cut, hillslopes that creep."""
    uplift, steepness, creep = 0.30, 4.2, 120.0
    hardness = np.exp(0.35 * fractal(rng, z.shape, 2500 / how.cell_m / 4, 3))
    for _ in range(how.steps):
        drainage = drain(z, how.cell_m)
        z = drainage.filled.copy()
        z[1:-1, 1:-1] += uplift * how.time
        cutting = uplift / steepness * how.time * hardness * drainage.area_m2**0.45 / how.cell_m
        z = _incise(z.ravel(), drainage.receiver, drainage.upwards, cutting.ravel(), z.shape[1]).reshape(z.shape)
        crept = gaussian_filter(z, np.sqrt(2 * creep * how.time) / how.cell_m, mode="nearest")
        z = np.where(drainage.area_m2 < 30_000, crept, z)
    return z


def grow_land(rng: np.random.Generator) -> Floats:
    z = bowl(rng, ROUNDS[0].cell_m, (139, 114))
    for i, how in enumerate(ROUNDS):
        if i:
            z = refine(rng, z, how)
        z = erode(rng, z, how)
    return z + DATUM_M


# ------------------------------------------------------------------------------------------------ places and lines
def cells_at(x_km: ArrayLike, y_km: ArrayLike) -> tuple[Ints, Ints]:
    """Rows and columns in the grown land."""
    row = ABOVE + ROWS - 1 - np.floor(np.multiply(y_km, 1000 / CELL_M)).astype(int)
    return row, LEFT + np.floor(np.multiply(x_km, 1000 / CELL_M)).astype(int)


def cell_centres(shape: tuple[int, int]) -> tuple[Floats, Floats]:
    """x and y of every cell [km]."""
    row, col = np.indices(shape)
    return (col - LEFT + 0.5) * CELL_M / 1000, (ROWS + ABOVE - row - 0.5) * CELL_M / 1000


def stream_near(drainage: Drainage, place: tuple[float, float], reach: int = 8) -> tuple[int, int]:
    """The cell with the largest contributing area within `reach` cells."""
    row, col = (int(i) for i in cells_at(*place))
    window = drainage.area_m2[row - reach : row + reach + 1, col - reach : col + reach + 1]
    i, j = np.unravel_index(window.argmax(), window.shape)
    return int(row - reach + i), int(col - reach + j)


def along(line: Points, step_km: float = 0.002) -> Floats:
    """Points every `step_km` along a line, corners rounded."""
    points = np.array(line, float)
    chainage = np.concatenate([[0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))])
    at = np.arange(0, chainage[-1], step_km)
    xy = np.column_stack([np.interp(at, chainage, points[:, i]) for i in (0, 1)])
    return gaussian_filter1d(xy, 0.05 / step_km, axis=0, mode="nearest")


def distance_m(shape: tuple[int, int], points: Floats) -> Floats:
    """Distance of every cell from the nearest of some points, to the cell."""
    row, col = cells_at(*points.T)
    inside = (row >= 0) & (row < shape[0]) & (col >= 0) & (col < shape[1])
    clear = np.ones(shape, bool)
    clear[row[inside], col[inside]] = False
    return distance_transform_edt(clear) * CELL_M


# ------------------------------------------------------------------------------------- valley floor, lake, channels
def trunk(drainage: Drainage, from_m2: float) -> Ints:
    """Rows and columns of the largest river, from the head of `from_m2` to the rim."""
    donors = drainage.area_m2.ravel()
    path = [int(donors.argmax())]
    upstream: dict[int, list[int]] = {}
    for k in np.flatnonzero(donors >= from_m2):
        upstream.setdefault(int(drainage.receiver[k]), []).append(int(k))
    while path[-1] in upstream:
        path.append(max(upstream[path[-1]], key=lambda k: donors[k]))
    return np.column_stack(np.unravel_index(path[::-1], drainage.filled.shape))


def lay_valley_floor(rng: np.random.Generator, z: Floats) -> tuple[Floats, Floats]:
    """Widen the main valley into a flat floor with a winding river; also returns how much a cell is floor, 0 to 1."""
    drainage = drain(z, CELL_M)
    path = trunk(drainage, 8e6)
    area_m2 = drainage.area_m2[tuple(path.T)]
    axis = gaussian_filter1d(path.astype(float), 15, axis=0, mode="nearest")
    level = gaussian_filter1d(z[tuple(path.T)], 15, mode="nearest")
    width = np.interp(area_m2, [8e6, 14e6, 30e6], [3.0, 10.0, 15.0])  # half width in cells
    width = gaussian_filter1d(width * np.exp(0.3 * noise(rng, width.shape, 20)), 10)

    distance, at = cKDTree(axis).query(np.argwhere(np.isfinite(z)))
    distance *= np.exp(0.25 * noise(rng, z.shape, 9)).ravel()  # bluffs are not drawn with a compass
    weight = 1 - np.clip((distance - width[at]) / (0.4 * width[at] + 2), 0, 1)
    floor = level[at] + 1.2 + 0.03 * distance  # rises gently to its edges
    weight = gaussian_filter(weight.reshape(z.shape), 1.5)
    z = weight * gaussian_filter(floor.reshape(z.shape), 1.0) + (1 - weight) * z
    return wind_river(rng, z, axis, level + 0.2, width), weight


def wind_river(rng: np.random.Generator, z: Floats, axis: Floats, bed: Floats, width: Floats) -> Floats:
    """Cut a bed a cell wide that swings about the valley's axis inside its floor (half `width`, in cells)."""
    tangent = np.gradient(axis, axis=0)
    normal = np.column_stack([-tangent[:, 1], tangent[:, 0]]) / np.hypot(*tangent.T)[:, None]
    wave_length = 32 * np.exp(0.2 * noise(rng, width.shape, 25))
    bend = 0.5 * width * np.sin(np.cumsum(2 * np.pi / wave_length)) * (0.9 + 0.25 * noise(rng, width.shape, 12))
    river = gaussian_filter1d(axis + normal * bend[:, None], 3, axis=0, mode="nearest")
    fine = np.linspace(0, len(river) - 1, 20 * len(river))
    cells = np.column_stack([np.interp(fine, np.arange(len(river)), river[:, i]) for i in (0, 1)]).round().astype(int)
    inside = ((cells >= 0) & (cells < z.shape)).all(axis=1)
    np.minimum.at(z, tuple(cells[inside].T), np.interp(fine, np.arange(len(river)), bed)[inside])
    return z


@dataclass(frozen=True)
class Lake:
    water: Flags
    level_m: float


def dam_lake(z: Floats) -> tuple[Floats, Lake]:
    """An old slide has dammed a valley: a smooth sill, and flat water behind it."""
    sill = stream_near(drain(z, CELL_M), LAKE_OUTLET)
    row, col = np.indices(z.shape)
    z = z + SILL_M * np.exp(-0.5 * ((row - sill[0]) ** 2 + (col - sill[1]) ** 2) / 11**2)
    drainage = drain(z, CELL_M)
    ponds, _ = label(drainage.filled - z > 0.02)
    water = ponds == np.bincount(ponds[ponds > 0]).argmax()
    return np.where(water, drainage.filled, z), Lake(water, float(drainage.filled[water].max()))


def carve_channels(rng: np.random.Generator, z: Floats, lake: Lake) -> Floats:
    """Small relief on all ground, then channels a cell wide that fall all the way, deeper with contributing area."""
    relief = 0.10 * noise(rng, z.shape, 2.0) + 0.15 * noise(rng, z.shape, 5.0)
    z = np.where(lake.water, z, z + relief)
    drainage = drain(z, CELL_M)
    is_channel = (drainage.area_m2 > 3e4) & ~lake.water
    z = np.maximum(z, drainage.filled - 0.3)  # hollows have silted up
    bed = np.where(is_channel, drainage.filled - 0.45 * (drainage.area_m2 / 1e6) ** 0.3, z)
    into_lake = upstream_of(drainage, lake.water)
    shore = binary_dilation(lake.water, np.ones((3, 3)))
    bed[into_lake | shore] = np.maximum(bed[into_lake | shore], lake.level_m)
    bed = _fall_downstream(bed.ravel(), drainage.receiver, drainage.upwards, is_channel.ravel())
    return bed.reshape(z.shape)


def build_embankment(z: Floats) -> Floats:
    """A road fill two cells wide from side to side; its culvert is not in the terrain, so it dams the stream."""
    stream = stream_near(drain(z, CELL_M), EMBANKMENT, 4)
    x, y = cell_centres(z.shape)
    at_stream = np.hypot(x - x[stream], y - y[stream]) * 1000
    crest = z[stream] + EMBANKMENT_HEIGHT_M + 0.002 * at_stream  # the road sags to the crossing
    low = (at_stream < 150) & (z < crest)
    centreline = cKDTree(along(ROADS["Harrow Road"]))
    off_road_m = np.full(z.shape, np.inf)
    off_road_m[low] = centreline.query(np.column_stack([x[low], y[low]]))[0] * 1000
    return np.where(off_road_m <= CELL_M, crest, z)


def measure(rng: np.random.Generator, z: Floats, lake: Lake) -> Floats:
    """Centimetre noise on land, as of a survey from the air; water is flattened."""
    errors_m = 0.02 * rng.standard_normal(z.shape) + 0.02 * noise(rng, z.shape, 1.5)
    return np.where(lake.water, z, z + errors_m)


def deliver(z: Floats) -> NDArray[np.float32]:
    """Cut to the extent, round to centimetres (it packs better) and leave a corner void."""
    terrain = z[ABOVE : ABOVE + ROWS, LEFT : LEFT + COLS].round(2).astype(np.float32)
    row, col = np.indices(terrain.shape)
    terrain[row + (COLS - 1 - col) < 14 + 3 * np.sin(row)] = VOID
    return terrain


# ------------------------------------------------------------------------------------------------- cover and soils
@dataclass(frozen=True)
class Setting:
    """What land cover and soils depend on."""

    slope: Floats
    above_stream_m: Floats
    prominence_m: Floats  # above the mean of the surroundings
    floor: Floats  # 0 to 1, from lay_valley_floor
    river_m: Floats  # distance to a stream of over 2 km2
    water: Flags


def describe(z: Floats, floor: Floats, lake: Lake) -> Setting:
    drainage = drain(z, CELL_M)
    streams = drainage.area_m2 > 2e5
    below = _from_downstream(drainage.receiver, drainage.upwards, drainage.filled.flatten(), streams.ravel())
    return Setting(
        slope=np.hypot(*np.gradient(gaussian_filter(z, 1.5), CELL_M)),
        above_stream_m=drainage.filled - below.reshape(z.shape),
        prominence_m=z - gaussian_filter(z, 40),
        floor=floor,
        river_m=distance_transform_edt(drainage.area_m2 < 2e6) * CELL_M,
        water=lake.water,
    )


def plots(rng: np.random.Generator, x: Floats, y: Floats) -> Floats:
    """A random number per field; fields are oblongs of the survey grid, 250 by 400 m."""
    number = rng.random((64, 64))
    return number[np.floor(y / 0.40).astype(int) % 64, np.floor(x / 0.25).astype(int) % 64]


def cover_land(rng: np.random.Generator, at: Setting) -> NDArray[np.uint8]:
    """NLCD classes: woods on steep and high ground, fields in the valleys, a town, wetland on the floor."""
    shape = at.slope.shape
    x, y = cell_centres(shape)
    field = plots(rng, x, y)
    patch, kind = noise(rng, shape, 12), noise(rng, shape, 18)
    wooded = 10 * at.slope + at.prominence_m / 20 + 0.55 * patch
    in_town = np.hypot(x - TOWN[0], 1.3 * (y - TOWN[1])) * np.exp(0.25 * noise(rng, shape, 5))
    roadside = np.concatenate([along(line) for line in ROADS.values()])
    off_road = distance_m(shape, roadside)
    off_farm = distance_m(shape, roadside[::170] + 0.06)
    dry = at.floor < 0.5

    cover = np.full(shape, 81, np.uint8)
    cover[(at.prominence_m > 5) & (field > 0.6)] = 71
    cover[(at.slope < 0.06) & (field < 0.45)] = 82
    cover[(at.floor > 0.5) & (field < 0.85)] = 82
    cover[wooded > 0.9] = 52
    cover[wooded > 1.0] = 41
    cover[(wooded > 1.0) & (kind > 1.0)] = 43
    cover[(wooded > 1.0) & (kind > 1.6)] = 42
    cover[(at.river_m < 25 + 15 * patch) & dry] = 41
    cover[(at.river_m < 35 + 30 * patch) & ~dry] = 90
    cover[(at.floor > 0.9) & (kind > 0.8) & (at.river_m < 120)] = 95
    cover[np.hypot(x - QUARRY[0], y - QUARRY[1]) + 0.02 * patch < 0.13] = 31
    for radius_km, code in ((0.75, 21), (0.50, 22), (0.28, 23), (0.14, 24)):
        cover[(in_town < radius_km) & dry & (at.river_m > 30)] = code
    cover[(off_farm < 30) & dry] = 22
    cover[(off_road < 16) & (in_town > 0.28)] = 21
    shore = distance_transform_edt(~at.water) * CELL_M
    cover[(shore < 60) & (at.above_stream_m < 0.7) & (cover != 21)] = 95
    cover[at.water] = 11
    return cover


def grow_town(cover: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """The same land with the town grown over fields and pasture to 1.5 km round its middle, denser inside 0.9 km."""
    x, y = cell_centres(cover.shape)
    from_middle = np.hypot(x - TOWN[0], 1.3 * (y - TOWN[1]))
    open_land = np.isin(cover, (71, 81, 82))
    grown = cover.copy()
    grown[open_land & (from_middle < 1.5)] = 22
    grown[(open_land | np.isin(cover, (21, 22))) & (from_middle < 0.9)] = 23
    return grown


SOIL_GROUPS = ("A", "B", "C", "D", "A/D", "B/D", "C/D")


def lay_soils(rng: np.random.Generator, at: Setting) -> NDArray[np.uint8]:
    """Index into SOIL_GROUPS: wet alluvium with dual groups, deep loam below, thin soil over rock above."""
    shape = at.slope.shape
    parent, wet = noise(rng, shape, 24), noise(rng, shape, 20)
    group = np.where(parent > 0.3, 2, 1)
    group[(at.slope > 0.12) & (parent > -0.6)] = 2
    group[(at.prominence_m > 12) & (parent > 0.1)] = 3
    group[(at.above_stream_m < 9) & (at.floor < 0.5) & (at.river_m < 400) & (wet > 1.2)] = 0
    group[(at.above_stream_m < 1.2) & (at.river_m < 150)] = 6
    group[at.floor > 0.4] = 5
    group[(at.floor > 0.4) & (wet > 0.9)] = 6
    group[(at.floor > 0.4) & (wet < -1.0)] = 4
    share = [gaussian_filter((group == i).astype(np.float32), 5) for i in range(len(SOIL_GROUPS))]
    return np.argmax(share, axis=0).astype(np.uint8)


# ---------------------------------------------------------------------------------------------------------- outlets
@dataclass(frozen=True)
class Crossing:
    """A road crossing: the largest stream within `reach` cells of `place`, digitised `off_m` east and north of it."""

    crossing_id: str
    road: str
    place: tuple[float, float]
    off_m: tuple[float, float] = (0.0, 0.0)
    reach: int = 2
    area_mi2: float | None = None
    capacity_cfs: float | None = None
    basis: str | None = None


CROSSINGS = (
    Crossing("TC-001", "Tannery Road", (3.40, 6.525), (2, -3), 2, 2.8, 950, "HW/D = 1.2 at inlet"),
    Crossing("TC-002", "Harrow Road (bridge)", (2.41, 3.85), (-3, 1), 2, None, 3000, "1 ft below low chord"),
    Crossing("TC-003", "Harrow Road (culvert)", EMBANKMENT, (1, 2), 2, None, 300, "top of embankment"),
    Crossing("TC-004", "Ferry Road", (2.766, 2.146), (-20, -9), 0, 10.2, 2400, "1 ft below low chord"),
    Crossing("TC-005", "Lakeside Road", (3.56, 2.91), (3, 2), 2, None, 1150, "HW/D = 1.5 at inlet"),
    Crossing("TC-006", "County Line Road", (1.045, 0.405), (-2, -3), 1, None, 120, "HW/D = 1.2 at inlet"),
    Crossing("TC-007", "Mill Lane", (2.58, 3.59), (1, 1), 2, None, 85, "HW/D = 1.2 at inlet"),
    Crossing("TC-008", "Cooper Hollow Road", (3.39, 3.605), (6, 23), 0),
)


def place_crossings(natural: Drainage) -> gpd.GeoDataFrame:
    """Points beside the streams of the land before the road fill."""
    records, points = [], []
    for crossing in CROSSINGS:
        row, col = stream_near(natural, crossing.place, crossing.reach)
        x = WEST + (col - LEFT + 0.5) * CELL_M + crossing.off_m[0]
        y = SOUTH + (ROWS + ABOVE - row - 0.5) * CELL_M + crossing.off_m[1]
        points.append(shapely.Point(x, y))
        records.append(
            {
                "crossing_id": crossing.crossing_id,
                "road": crossing.road,
                "area_mi2": crossing.area_mi2,
                "capacity_cfs": crossing.capacity_cfs,
                "basis": crossing.basis,
            }
        )
    frame = pd.DataFrame(records).astype({"area_mi2": float, "capacity_cfs": float})
    return gpd.GeoDataFrame(frame, geometry=points, crs=CRS)


# ---------------------------------------------------------------------------------------------------------- writing
def write_raster(
    path: Path, array: NDArray[np.generic], crs: str, corner: tuple[float, float], cell_m: float, **profile: object
) -> None:
    """A tiled GeoTIFF; `corner` is the north-west one."""
    profile |= {"driver": "GTiff", "compress": "deflate", "zlevel": 9, "tiled": True, "crs": crs, "count": 1}
    profile |= {"height": array.shape[0], "width": array.shape[1], "dtype": array.dtype}
    transform = from_origin(*corner, cell_m, cell_m)
    with rasterio.open(path, "w", transform=transform, blockxsize=256, blockysize=256, **profile) as file:
        file.write(array, 1)


def write_terrain(path: Path, z: NDArray[np.float32]) -> None:
    write_raster(path, z, CRS, (WEST, SOUTH + ROWS * CELL_M), CELL_M, nodata=VOID, predictor=3)
    with rasterio.open(path, "r+") as file:
        file.set_band_unit(1, "m")


def write_cover(path: Path, cover: NDArray[np.uint8]) -> None:
    """Sample the cover at the centres of a 30-m grid in another projection, as national land cover comes."""
    cell, margin = 30.0, 300.0
    reach = (WEST - margin, SOUTH - margin, WEST + COLS * CELL_M + margin, SOUTH + ROWS * CELL_M + margin)
    extent = Transformer.from_crs(CRS, COVER_CRS, always_xy=True).transform_bounds(*reach)
    west, south, east, north = np.array(extent) // cell * cell + 15
    x, y = np.meshgrid(np.arange(west, east, cell) + cell / 2, np.arange(north, south, -cell) - cell / 2)
    x, y = Transformer.from_crs(COVER_CRS, CRS, always_xy=True).transform(x, y)
    row, col = cells_at((x - WEST) / 1000, (y - SOUTH) / 1000)
    write_raster(path, cover[row, col], COVER_CRS, (west, north), cell)


def write_layer(path: Path, layer: str, frame: gpd.GeoDataFrame) -> None:
    path.unlink(missing_ok=True)
    pyogrio.write_dataframe(frame, path, layer=layer, driver="GPKG")


def write_soils(path: Path, group: NDArray[np.uint8]) -> None:
    """Gap-free polygons: outlined from cells, simplified as one coverage, in geographic coordinates."""
    margin = 30
    window = np.s_[ABOVE - margin : ABOVE + ROWS + margin, LEFT - margin : LEFT + COLS + margin]
    corner = (WEST - margin * CELL_M, SOUTH + (ROWS + margin) * CELL_M)
    unit = sieve(group[window], 400)
    outlines = list(shapes(unit, transform=from_origin(*corner, CELL_M, CELL_M)))
    polygons = shapely.segmentize([shapely.geometry.shape(outline) for outline, _ in outlines], CELL_M)
    polygons = shapely.transform(polygons, np.round)  # neighbours share every vertex
    polygons = shapely.coverage_simplify(polygons, 25.0)
    hsg = [SOIL_GROUPS[int(value)] for _, value in outlines]
    write_layer(path, "soils", gpd.GeoDataFrame({"hsg": hsg}, geometry=list(polygons), crs=CRS).to_crs(SOILS_CRS))


def main(folder: Path) -> None:
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": FIXED_DATE})
    # One generator per part, so that a change in one leaves the others as they are.
    valley, small_relief, cover, soils, errors = (np.random.default_rng((SEED, i)) for i in range(5))
    z = grow_land(np.random.default_rng(SEED))
    z, floor = lay_valley_floor(valley, z)
    z, lake = dam_lake(z)
    z = carve_channels(small_relief, z, lake)
    natural = measure(errors, z, lake)
    setting = describe(z, floor, lake)
    write_terrain(folder / "dem.tif", deliver(build_embankment(natural)))
    land = cover_land(cover, setting)
    write_cover(folder / "landcover.tif", land)
    write_cover(folder / "landcover_proposed.tif", grow_town(land))
    write_soils(folder / "soils.gpkg", lay_soils(soils, setting))
    write_layer(folder / "outlets.gpkg", "outlets", place_crossings(drain(natural, CELL_M)))


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
