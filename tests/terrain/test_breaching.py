"""Breaching on ground whose right drainage is known: embankments, divides, walls, sinks, random terrain."""

import importlib.util
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from routed import DCOL, DROW, check_routing, data, flood, geographic_rows, small_terrains
from scipy import sparse

from basinwright.kernels import EXIT, VOID, E, W
from basinwright.terrain import Conditioning, Constraints, condition_and_route

CELL_M = 10.0
AXIS, HALF = 15, 15
NROWS = 60
ROAD = 30
"""First row of an embankment of three rows across the valley."""


def condition(z, depth_m=10.0, length_m=1000.0, dx=CELL_M, dy=CELL_M, *, mode="breach", constraints=None, threads=1):
    nrows = len(z)
    dx, dy = np.broadcast_to(dx, nrows), np.broadcast_to(dy, nrows)
    how = Conditioning(mode, depth_m, length_m)
    return condition_and_route(np.asarray(z, np.float32), dx, dy, dx * dy, how, constraints, threads)


def valley(side=0.5, fall=0.2):
    """A valley that falls southwards, closed at its head, its axis in the middle column [m]."""
    row, col = np.mgrid[:NROWS, : 2 * HALF + 1]
    return 100.0 + side * np.abs(col - AXIS) - fall * row + 20.0 * (row == 0)


def embankment(z, crown_m=3.0, sag_col=None, sag_m=1.0):
    """A level road on a fill of three rows, lower about one column."""
    crown = np.full(z.shape[1], z[ROAD, AXIS] + crown_m)
    if sag_col is not None:
        crown[sag_col - 1 : sag_col + 2] -= sag_m
    road = z.copy()
    road[ROAD : ROAD + 3] = np.maximum(z[ROAD : ROAD + 3], crown)
    return road


def crossing(terrain, row=ROAD + 1):
    """The column in which most water passes a row."""
    return int(np.argmax(terrain.area_grid[row]))


def cuts(z, terrain):
    """Depth of every cut [m], 0 elsewhere."""
    return np.maximum(0.0, -terrain.change_m(np.asarray(z, np.float64)))


@pytest.mark.parametrize("side", [0.2, 0.5, 2.0])
@pytest.mark.parametrize("crown_m", [0.5, 3.0, 9.0])
def test_an_embankment_is_breached_where_the_valley_runs(side, crown_m):
    z = embankment(valley(side), crown_m)
    terrain = condition(z)
    check_routing(z, terrain)
    assert crossing(terrain) == AXIS
    # Down to the foot, which lies a row upstream and is itself raised to the lowest cell beside it.
    assert cuts(z, terrain).max() == pytest.approx(crown_m - 0.2 - 0.2, abs=1e-4)
    assert np.count_nonzero(cuts(z, terrain)) == 3
    filled = condition(z, mode="fill")
    assert crossing(filled) in (AXIS, 0, 2 * HALF)  # over the level crown: the middle only by chance
    assert filled.deepest_fill_m == pytest.approx(min(crown_m, 15 * side + 0.2) - 0.2, abs=0.3)  # or over the sides


@pytest.mark.parametrize("sag_col", [8, 9, 22])
def test_a_sag_in_the_road_does_not_take_the_stream_with_it(sag_col):
    z = embankment(valley(0.2), 2.5, sag_col)
    assert crossing(condition(z)) == AXIS
    assert abs(crossing(condition(z, mode="fill")) - sag_col) <= 1


@pytest.mark.parametrize("seed", range(5))
def test_noise_does_not_lead_the_breach_astray(seed):
    noise = np.random.default_rng(seed).normal(0, 0.1, (NROWS, 2 * HALF + 1))
    z = embankment(valley(0.2) + noise, 2.5, sag_col=8)
    terrain = condition(z)
    check_routing(z, terrain)
    assert abs(crossing(terrain) - AXIS) <= 1
    assert abs(crossing(condition(z + 0.0, mode="fill")) - 8) <= 2


@pytest.mark.parametrize("fall", [0.0, 0.1], ids=["level floor", "falling floor"])
@pytest.mark.parametrize("width", [9, 15, 21])
def test_on_a_flat_floor_the_cut_lies_in_the_middle_third(width, fall):
    z = valley(0.5, fall)
    row, col = np.mgrid[:NROWS, : 2 * HALF + 1]
    floor = np.abs(col - AXIS) <= width // 2
    z[1:][floor[1:]] = (100.0 - fall * row)[1:][floor[1:]]
    z[ROAD + 3 :] -= 0.2  # below the road the ground is lower, else nothing drains a level floor
    z = embankment(z, 2.0)
    terrain = condition(z)
    check_routing(z, terrain)
    assert abs(crossing(terrain) - AXIS) <= width / 6
    assert (cuts(z, terrain)[ROAD] > 0).sum() == 1


def test_least_cost_is_that_of_an_independent_shortest_path():
    rng = np.random.default_rng(3)
    for _ in range(10):
        z = 50.0 + rng.random((15, 17)) * 8.0
        z[7, 8] = 50.0 - 1.0  # a pit of two cells, the only ones that matter ...
        z[7, 9] = 50.0 - 1.0
        z[:, 0] = 45.0  # ... and lower ground on one side
        z[[0, -1]] = z[:, -1:] = 90.0
        terrain = condition(z, depth_m=30.0)
        made = (cuts(z, terrain) > 0) & (terrain.conditioned_grid == np.float32(49.0))
        assert made.sum() >= 7
        z = single_cells_raised(z)
        only_there = np.where(made | (z < 49.5), z, np.inf)
        least = least_cost(z, 49.0, (7, 8), 30.0)
        assert least_cost(only_there, 49.0, (7, 8), 30.0) == pytest.approx(least, rel=1e-5)


def single_cells_raised(z):
    """Cells below all their neighbours raised to the lowest of them, the rim aside."""
    around = np.array([np.roll(z, (i, j), (0, 1)) for i in (-1, 0, 1) for j in (-1, 0, 1) if i or j]).min(0)
    around[[0, -1]] = around[:, [0, -1]] = -np.inf
    return np.maximum(z, around)


def least_cost(z, level, start, depth_m):
    """Cost of the cheapest cut from a cell to any cell with lower ground beside it, by scipy's shortest paths."""
    nrows, ncols = z.shape
    rows, cols = np.mgrid[:nrows, :ncols]
    weights = sparse.lil_matrix((z.size, z.size))
    for k in range(8):
        r, c = rows + DROW[k], cols + DCOL[k]
        inside = (r >= 0) & (r < nrows) & (c >= 0) & (c < ncols)
        for a, b in zip(np.argwhere(inside), np.column_stack([r[inside], c[inside]]), strict=True):
            depth = z[tuple(b)] - level
            if depth <= depth_m:
                step = np.hypot(DROW[k], DCOL[k])
                weights[a[0] * ncols + a[1], b[0] * ncols + b[1]] = step * np.sqrt(max(depth, 0.0)) + 1e-9
    cost = sparse.csgraph.dijkstra(weights.tocsr(), indices=start[0] * ncols + start[1]).reshape(z.shape)
    lowest = np.pad(z, 1, constant_values=-np.inf)
    lower = np.min([lowest[1 + DROW[k] : nrows + 1 + DROW[k], 1 + DCOL[k] : ncols + 1 + DCOL[k]] for k in range(8)], 0)
    return cost[(lower < level) & (z >= level)].min()


def test_a_dam_above_the_depth_limit_is_cut_no_deeper():
    z = embankment(valley(2.0), crown_m=8.0)
    terrain = condition(z, depth_m=5.0)
    check_routing(z, terrain)
    assert (terrain.breached_second, terrain.failed) == (1, 0)
    assert 4.0 < cuts(z, terrain).max() <= 5.0
    assert terrain.deepest_fill_m > 2.5  # the lake is filled up to where the cut begins
    assert crossing(terrain) == AXIS


def test_a_broad_ridge_is_not_cut():
    z = valley(2.0)
    z[ROAD : ROAD + 14] = np.maximum(z[ROAD : ROAD + 14], z[ROAD, AXIS] + 2.0)  # 140 m of ridge
    assert condition(z, length_m=130.0).cut_cells == 0
    np.testing.assert_array_equal(condition(z, length_m=130.0).conditioned_grid, flood(z.astype(np.float32)))
    assert crossing(condition(z, length_m=160.0), ROAD + 5) == AXIS
    assert condition(z, length_m=160.0).breached > 0


def test_limits_are_distances_on_the_ground():
    """An embankment four cells thick; at 60 degrees north cells of a second are twice as high as wide."""
    dx, dy = geographic_rows(NROWS, second=1.0, north=60.0)
    assert dx.max() * 5 < 100 < dy.min() * 4
    z = valley(2.0)
    z[ROAD : ROAD + 4] = np.maximum(z[ROAD : ROAD + 4], z[ROAD, AXIS] + 2.0)
    southwards = condition(z, 5.0, 100.0, dx, dy)
    assert (southwards.cut_cells, southwards.breached) == (0, 0)
    z = z[:, : 2 * HALF + 1].T.copy()
    dx, dy = geographic_rows(len(z), second=1.0, north=60.0)
    eastwards = condition(z, 5.0, 100.0, dx, dy)
    assert (eastwards.cut_cells, eastwards.failed) == (4, 0)


def fractal(n, seed):
    place = Path(__file__).parents[1] / "bench" / "terrains.py"  # no package: the benchmark runs as a script
    spec = importlib.util.spec_from_file_location("bench_terrains", place)
    terrains = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(terrains)
    return terrains.rough(n, seed, relief_m=150.0)


def lowered(z, terrain):
    """Depth of cuts (positive) and fill (negative), exactly."""
    return np.where(np.isfinite(z), z.astype(np.float32).astype(np.float64) - terrain.conditioned_grid, 0.0)


def check_conditioned(z, terrain, depth_m):
    """Never above the filled surface, never cut below the limit, no depression left."""
    check_routing(z, terrain)
    surface = data(terrain, terrain.conditioned_grid)
    filled = flood(z)
    assert (surface <= filled)[np.isfinite(z)].all()
    assert lowered(z, terrain).max() <= depth_m
    np.testing.assert_array_equal(flood(surface), surface)
    stand = np.unique(z[np.isfinite(z)])
    moved = np.isfinite(z) & (surface != z)
    assert np.isin(surface[moved], stand).all()  # every level is one of the terrain
    assert terrain.pits == terrain.breached + terrain.breached_second + terrain.failed
    change = -lowered(z, terrain)
    assert (terrain.filled_cells, terrain.cut_cells) == ((change > 0).sum(), (change < 0).sum())
    assert (terrain.deepest_fill_m, terrain.deepest_cut_m) == (max(0.0, change.max()), max(0.0, -change.min()))


@settings(max_examples=80, deadline=None)
@given(z=small_terrains(), depth_m=st.sampled_from([0.5, 2.0, 50.0]), length_m=st.sampled_from([15.0, 40.0, 5000.0]))
def test_any_terrain_drains_within_the_limits(z, depth_m, length_m):
    check_conditioned(z, condition(z, depth_m, length_m), depth_m)


@pytest.mark.parametrize("whole_metres", [False, True])
@pytest.mark.parametrize(("depth_m", "length_m"), [(10.0, 1000.0), (2.0, 60.0)])
def test_fractal_terrain_drains_within_the_limits_whatever_the_threads(whole_metres, depth_m, length_m):
    z = fractal(160, seed=5)
    z = np.rint(z) if whole_metres else z
    z[50:53, 40:90] = np.nan
    terrain = condition(z, depth_m, length_m)
    check_conditioned(z, terrain, depth_m)
    assert terrain.breached > 50
    assert terrain.breached_second > 0
    assert terrain.failed > 0 or depth_m > 2.0
    again = condition(z, depth_m, length_m, threads=3)
    assert again.conditioned_m.tobytes() == terrain.conditioned_m.tobytes()
    assert again.directions.tobytes() == terrain.directions.tobytes()


def test_where_no_pit_fails_nothing_is_filled():
    """Besides single cells raised to their lowest neighbour."""
    z = fractal(100, seed=2) * 0.2
    terrain = condition(z, depth_m=100.0, length_m=100_000.0)
    assert (terrain.failed, terrain.breached_second) == (0, 0)
    assert terrain.pits > 10
    lowest = np.min([np.roll(z, (i, j), (0, 1)) for i in (-1, 0, 1) for j in (-1, 0, 1) if i or j], axis=0)
    raised = lowered(z, terrain) < 0
    assert raised.any()
    assert (terrain.conditioned_grid[raised] <= lowest[raised]).all()


def test_a_pit_drains_by_another_pits_cut():
    """Water that cannot leave alone leaves by a neighbour's channel: its lake is not cut a second way out."""
    z = np.full((9, 30), 30.0)
    z[4, 1:] = 20.0
    z[4, 5:9] = 10.0  # a long pit far from lower ground ...
    z[4, 20:22] = 12.0  # ... and one near it
    z[4, 29] = 5.0
    terrain = condition(z, depth_m=8.5, length_m=85.0)
    check_conditioned(z, terrain, 8.5)
    assert terrain.breached == 1
    assert terrain.conditioned_grid[4, 22] == 12.0


def test_all_edges_of_the_raster_are_ways_out():
    z = np.full((7, 9), 20.0)
    z[3, 4:6] = 12.0
    terrain = condition(z)
    check_conditioned(z, terrain, 10.0)
    assert terrain.failed == 0
    assert terrain.cut_cells == 3


def padded(shape, dtype, value=0):
    return np.full((shape[0] + 2, shape[1] + 2), value, dtype)


def between(z, terrain_rows, below):
    """Walls between some row and the row below it, all along."""
    walls = padded(z.shape, np.uint8)
    walls[terrain_rows + 1, 1:-1] |= sum(1 << k for k in below)
    return walls


def test_a_cut_does_not_pass_a_wall():
    z = np.full((11, 11), 20.0)
    z[5, 5:7] = 12.0
    z[7:, :] = 11.0  # lower ground two rows to the south, behind a wall
    walls = between(z, 5, (3, 4, 5)) | between(z, 6, ())
    walls[7, 1:-1] |= 1 << 7 | 1 << 0 | 1 << 1
    free = condition(z)
    assert free.conditioned_grid[6].min() == 12.0
    kernel_only = breached_surface(z, Constraints(walls=walls.ravel()))
    assert kernel_only[6].min() == 20.0
    assert (kernel_only[:6] == 12.0).sum() > 2
    with_hole = walls.copy()
    with_hole[6, 6:8] = with_hole[7, 6:8] = 0  # an opening in the wall is a way through
    assert (breached_surface(z, Constraints(walls=with_hole.ravel()))[6] == 12.0).sum() == 1


def test_sinks_take_water_and_keep_it():
    z = np.full((15, 15), 20.0)
    z[4, 4:6] = 12.0
    z[4, 8] = 12.5
    ends = padded(z.shape, bool)
    ends[5, 9] = True
    surface = breached_surface(z, Constraints(ends=ends.ravel()))
    assert (surface[4, 4:8] == 12.0).all()  # towards the sink
    assert (surface < 20.0).sum() == 5


def test_mapped_streams_are_never_pits_and_never_cut():
    z = np.full((15, 15), 20.0)
    z[7, 2:] = 14.0
    fixed = padded(z.shape, np.uint8, 255)
    fixed[8, 3:15] = E
    z[9, 5:7] = 12.0  # lower than the stream: nothing to be had there
    z[12:, 5] = 5.0
    surface = breached_surface(z, Constraints(fixed=fixed.ravel()))
    assert (surface[7, 2:14] == 14.0).all()
    assert (surface[10:12, 4:8] == 12.0).any()
    z[9, 5:7] = 16.0
    surface = breached_surface(z, Constraints(fixed=fixed.ravel()))
    assert (surface[8, 4:8] == 16.0).sum() == 1  # into the stream


def breached_surface(z, constraints):
    """The conditioned surface alone, as directions along walls and into sinks are another step's."""
    from basinwright.terrain.breaching import breach
    from basinwright.terrain.routing import pad, step_lengths_um

    flat, _ = pad(np.asarray(z, np.float32))
    size = np.full(len(z), CELL_M)
    work = np.empty(flat.size, np.uint8), np.empty(flat.size, np.int32), np.empty(flat.size, np.int32)
    breach(flat, *z.shape, step_lengths_um(size, size), 10.0, 1000.0, constraints, work, threads=1)
    return flat.reshape(z.shape[0] + 2, -1)[1:-1, 1:-1]


def test_void_and_exit_codes_are_those_of_filling():
    z = fractal(40, seed=1)
    z[10:20, 10:20] = np.nan
    by_fill, by_breach = condition(z, mode="fill"), condition(z)
    assert ((by_breach.directions_grid == VOID) == (by_fill.directions_grid == VOID)).all()
    assert (by_breach.directions_grid == EXIT).any()
    assert W in by_breach.directions_grid
