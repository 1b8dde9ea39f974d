"""Filling, directions, flats and contributing area on terrain whose answers are known."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from routed import DCOL, DROW, EIGHT, check_routing, data, flood, geographic_rows, small_terrains
from scipy import ndimage

from basinwright.errors import TerrainError
from basinwright.kernels import EXIT, NW, SE, VOID, E, N, S, W
from basinwright.terrain import condition_and_route
from basinwright.terrain.encoding import AZIMUTH_EXIT, AZIMUTH_NODATA, from_azimuth, to_azimuth
from basinwright.terrain.summable import quantum, summable_areas_m2


def route(z, dx=10.0, dy=10.0):
    nrows = len(z)
    dx, dy = np.broadcast_to(dx, nrows), np.broadcast_to(dy, nrows)
    return condition_and_route(np.asarray(z), dx, dy, dx * dy)


@settings(max_examples=60, deadline=None)
@given(z=small_terrains())
def test_any_terrain_drains_without_cycles_and_fills_exactly(z):
    dx, dy = geographic_rows(len(z), second=30.0)
    terrain = route(z, dx, dy)
    check_routing(z, terrain)
    expected = flood(z)
    np.testing.assert_array_equal(data(terrain, terrain.conditioned_grid), expected)
    depth = np.nan_to_num(expected - z.astype(np.float64))
    assert terrain.filled_cells == np.count_nonzero(depth)
    assert terrain.deepest_fill_m == depth.max()
    assert terrain.filled_volume_m3 == pytest.approx((depth.sum(axis=1) * dx * dy).sum(), rel=1e-9)


@pytest.mark.parametrize("seed", range(3))
def test_fill_of_nested_pits_and_wide_lakes_equals_the_textbook_flood(seed):
    rng = np.random.default_rng(seed)
    z = ndimage.gaussian_filter(rng.normal(size=(120, 90)), 1 + seed).astype(np.float32)
    z[40:44, 30:60] = np.nan
    terrain = route(z)
    np.testing.assert_array_equal(data(terrain, terrain.conditioned_grid), flood(z))
    check_routing(z, terrain)


def test_a_pit_in_a_pit_fills_to_the_lower_of_the_rims_outside_it():
    z = np.full((9, 9), 9.0, np.float32)
    z[2:7, 2:7] = 4.0  # a basin floor ...
    z[3:6, 3:6] = 6.0  # ... with an island ...
    z[4, 4] = 1.0  # ... with a pit
    z[0:2, 4] = 5.0  # the way out
    terrain = route(z)
    assert terrain.conditioned_grid[4, 4] == 6.0
    assert (terrain.conditioned_grid[2:7, 2] == 5.0).all()
    assert terrain.filled_cells == 16 + 1
    assert terrain.deepest_fill_m == 5.0
    assert terrain.filled_volume_m3 == (16 * 1.0 + 5.0) * 100.0


def test_an_inverted_cone_is_a_lake_at_the_level_of_its_lowest_rim():
    row, col = np.mgrid[-20:21, -20:21]
    cone = np.hypot(row, col).astype(np.float32)
    terrain = route(cone)
    assert terrain.deepest_fill_m == 20.0
    np.testing.assert_array_equal(terrain.conditioned_grid, np.maximum(cone, 20.0))


def test_a_cone_sheds_water_alike_on_all_sides():
    row, col = np.mgrid[-15:16, -15:16]
    terrain = route((100 - np.hypot(row, col)).astype(np.float32))
    assert terrain.filled_cells == 0
    codes = terrain.directions_grid
    off_axis = (np.abs(row) != np.abs(col)) & (row != 0) & (col != 0)  # on the axes of symmetry the peak ties
    turned = np.where(codes == EXIT, EXIT, (codes.astype(int) + 2) % 8)
    np.testing.assert_array_equal(np.rot90(turned, -1)[off_axis], codes[off_axis])
    inner = off_axis[1:-1, 1:-1]  # along the rim water runs to the corners, from its middle to one of two
    area = terrain.area_grid[1:-1, 1:-1]
    np.testing.assert_array_equal(np.rot90(area)[inner], area[inner])


@pytest.mark.parametrize("azimuth", [0, 10, 22, 23, 45, 80, 112, 135, 200, 250, 300, 337, 350])
@pytest.mark.parametrize("rows", ["square", "oblong", "geographic"])
def test_planes_drain_to_the_steepest_of_eight_by_true_distances(azimuth, rows):
    n = 40
    dx, dy = {
        "square": (np.full(n, 8.0), np.full(n, 8.0)),
        "oblong": (np.full(n, 12.0), np.full(n, 8.0)),
        "geographic": geographic_rows(n, second=30.0, north=60.0),
    }[rows]
    grad_east, grad_north = math.sin(math.radians(azimuth)), math.cos(math.radians(azimuth))  # downhill
    north = -np.cumsum(dy)
    # East of the same meridian is not the same distance in each row; the plane lies in the row's own metres.
    z = 5000.0 - grad_north * north[:, None] - grad_east * dx[:, None] * (np.arange(n) - n / 2)
    terrain = route(z.astype(np.float32), dx, dy)
    exact = z.astype(np.float32).astype(np.float64)
    r, c = np.mgrid[1 : n - 1, 1 : n - 1]
    slopes = []
    for k in range(8):
        length = np.hypot(DCOL[k] * dx[r], DROW[k] * dy[r])
        slopes.append((exact[r, c] - exact[r + DROW[k], c + DCOL[k]]) / length)
    slopes = np.array(slopes)
    chosen = np.take_along_axis(slopes, terrain.directions_grid[1:-1, 1:-1][None].astype(int), axis=0)[0]
    np.testing.assert_allclose(chosen, slopes.max(axis=0), rtol=1e-6)
    if rows == "square":  # the nearest azimuth, known without elevations
        nearest = round(azimuth / 45) % 8
        assert (terrain.directions_grid[1:-1, 1:-1] == nearest).all()


@pytest.mark.parametrize(("towards", "index"), [(N, 0), (S, -1)])
def test_area_on_a_plane_along_the_columns_is_rows_times_true_cell_area(towards, index):
    n = 30
    dx, dy = geographic_rows(n, second=30.0)
    fall = 1.0 if towards == S else -1.0
    z = np.repeat(1000.0 - fall * np.arange(n)[:, None] * 4.0, 12, axis=1)
    terrain = route(z, dx, dy)
    assert (np.delete(terrain.directions_grid, index, axis=0) == towards).all()
    assert (terrain.directions_grid[index] == EXIT).all()
    expected = np.cumsum(dx * dy) if towards == S else np.cumsum((dx * dy)[::-1])[::-1]
    np.testing.assert_allclose(terrain.area_grid, np.repeat(expected[:, None], 12, axis=1), rtol=1e-12)


def test_equal_descents_take_the_first_clockwise_from_north():
    z = np.array([[2, 0, 2], [0, 1, 0], [2, 0, 2]], np.float32)
    assert route(z).directions_grid[1, 1] == N
    assert route(np.array([[2, 2, 2], [0, 1, 0], [2, 0, 2]], np.float32)).directions_grid[1, 1] == E
    # A drop of sqrt(2) over the diagonal against 1 over the side: steeper by a hair
    z = np.array([[1 - 1.42, 2, 2], [2, 1, 0], [2, 2, 2]], np.float32)
    assert route(z).directions_grid[1, 1] == NW


def test_a_v_valley_collects_each_row_on_its_axis():
    nrows, half = 25, 10
    col = np.arange(-half, half + 1)
    z = 500.0 + 2.0 * np.abs(col)[None, :] - 0.5 * np.arange(nrows)[:, None]
    terrain = route(z.astype(np.float32))
    codes = terrain.directions_grid
    assert (codes[:-1, half] == S).all()
    assert (codes[:, :half] == E).all()
    assert (codes[:, half + 1 :] == W).all()
    cells = terrain.area_grid / 100.0
    assert cells[:, half].tolist() == [(r + 1) * (2 * half + 1) for r in range(nrows)]
    assert (cells[:, half - 1] == half).all()


def test_a_steep_diagonal_plane_drains_along_diagonals():
    n = 12
    z = 100.0 - np.add.outer(np.arange(n), np.arange(n)).astype(np.float32)
    terrain = route(z)
    assert (terrain.directions_grid[:-1, :-1] == SE).all()
    r, c = np.mgrid[: n - 1, : n - 1]
    np.testing.assert_array_equal(terrain.area_grid[:-1, :-1], (np.minimum(r, c) + 1) * 100.0)


def test_stairs_drain_down_each_tread():
    tread, ncols = 4, 21
    z = np.repeat(np.arange(8, 0, -1), tread)[:, None] * np.ones(ncols)
    z = np.pad(z, ((1, 0), (1, 1)), constant_values=50.0)  # walls on three sides
    terrain = route(z.astype(np.float32))
    check_routing(z, terrain)
    far_from_walls = terrain.directions_grid[1:-1, 1 + tread : -1 - tread]
    assert (far_from_walls == S).all()
    # At the walls the way leads away from them, except on the last row of a tread, where it drops.
    beside_wall = terrain.directions_grid[1:-1, 1]
    assert (beside_wall[np.arange(len(beside_wall)) % tread < tread - 2] == SE).all()


def steps_within(flat, sources):
    """Breadth-first steps from the sources across the cells of a flat, 1 at the sources, 0 where not reached."""
    steps = np.zeros(flat.shape, int)
    reached = sources & flat
    k = 1
    while (reached & (steps == 0)).any():
        steps[reached & (steps == 0)] = k
        reached = ndimage.binary_dilation(reached, EIGHT) & flat
        k += 1
    return steps


@pytest.mark.parametrize("seed", range(4))
def test_flats_flow_towards_lower_and_away_from_higher_ground(seed):
    rng = np.random.default_rng(seed)
    z = np.round(ndimage.gaussian_filter(rng.normal(size=(70, 60)), 4) * 40).astype(np.float32)
    terrain = route(z)
    level, codes = terrain.conditioned_grid, terrain.directions_grid
    edge = np.zeros(z.shape, bool)
    edge[[0, -1]] = edge[:, [0, -1]] = True
    lowest = ndimage.minimum_filter(level, footprint=EIGHT, mode="constant", cval=np.inf)
    flat = (lowest == level) & ~edge
    assert terrain.flat_cells == flat.sum() > 500
    groups, count = ndimage.label(flat, EIGHT)
    for group in range(1, count + 1):
        cells = groups == group
        height = level[cells].max()
        assert (level[cells] == height).all()
        beside = ndimage.binary_dilation(cells, EIGHT) & ~cells
        low = ndimage.binary_dilation(beside & (level == height), EIGHT)
        high = ndimage.binary_dilation(beside & (level > height), EIGHT)
        towards, away = steps_within(cells, low), steps_within(cells, high)
        assert (towards[cells] > 0).all()
        merit = 2 * towards - away
        for row, col in np.argwhere(cells):
            below = row + DROW[codes[row, col]], col + DCOL[codes[row, col]]
            if towards[row, col] == 1:
                assert not cells[below]
                assert level[below] == height
            else:
                window = (slice(row - 1, row + 2), slice(col - 1, col + 2))
                assert merit[below] == merit[window][cells[window]].min()


def test_rim_and_void_cells_drain_inward_where_they_can_else_out():
    z = np.array([[5, 5, 5, 5], [5, 3, 4, 5], [5, 5, 2, 5]], np.float32)
    terrain = route(z)
    assert terrain.directions_grid[0, 0] == SE
    assert terrain.directions_grid[2, 2] == EXIT
    assert terrain.area_grid[2, 2] == 12 * 100.0
    z = np.full((5, 5), 5.0, np.float32)
    z[2, 2] = np.nan
    z[1, 2] = 4.0
    terrain = route(z)
    assert terrain.directions_grid[1, 2] == EXIT
    assert terrain.directions_grid[2, 2] == VOID
    assert terrain.directions_grid[2, 1] == 1  # north-east, into the exit beside the void


def test_float64_terrain_is_rounded_to_float32_and_says_by_how_much():
    z = 8000.0 + np.random.default_rng(0).random((20, 20))
    terrain = route(z)
    assert terrain.largest_rounding_m == np.abs(z - z.astype(np.float32)).max()
    assert 0 < terrain.largest_rounding_m <= 2.0**-12
    assert route(z.astype(np.float32)).largest_rounding_m == 0
    whole = np.full((3, 3), 2.0**24)
    assert route(whole).largest_rounding_m == 0
    assert (route(whole).conditioned_grid == 2.0**24).all()


def test_elevations_with_the_smallest_possible_drops_still_drain():
    z = np.zeros((6, 6), np.float32)
    z[1:5, 1:5] = np.float32(1e-45) * np.arange(1, 17, dtype=np.float32).reshape(4, 4)
    check_routing(z, route(z, 1000.0, 1.0))


def test_the_given_array_is_not_changed_and_may_be_a_view():
    z = np.random.default_rng(2).random((40, 60)).astype(np.float32)
    view = z[::2, ::3]
    kept = z.copy()
    terrain = route(view)
    np.testing.assert_array_equal(z, kept)
    np.testing.assert_array_equal(terrain.conditioned_grid, route(view.copy()).conditioned_grid)


@pytest.mark.parametrize(
    ("z", "dx", "message"),
    [
        (np.full((3, 3), np.nan), [1.0, 1.0, 1.0], "no cell of the terrain has an elevation"),
        (np.zeros(3), [1.0], "must be a raster of rows and columns"),
        (np.zeros((0, 3)), [], "must be a raster of rows and columns"),
        (np.zeros((3, 3)), [1.0, 1.0], "dx_m must hold a positive number for each of the 3 rows"),
        (np.zeros((3, 3)), [1.0, 0.0, 1.0], "dx_m must hold a positive number"),
        (np.zeros((3, 3)), [1.0, np.nan, 1.0], "dx_m must hold a positive number"),
    ],
)
def test_terrain_that_cannot_be_routed_is_refused(z, dx, message):
    ones = np.ones(len(z))
    with pytest.raises(TerrainError, match=message):
        condition_and_route(z, np.array(dx), ones, ones)


def test_more_cells_than_an_index_can_number_are_refused():
    with pytest.raises(TerrainError, match="cut the terrain"):
        route(np.broadcast_to(np.float32(0), (50_000, 50_000)))


def test_a_cycle_leaves_cells_unvisited():
    from basinwright.kernels import accumulate

    codes = np.full((5, 5), VOID, np.uint8)
    codes[1:-1, 1:-1] = [[E, S, EXIT], [N, W, N], [N, N, N]]  # four cells in a ring, two more below it
    codes = codes.ravel()
    order, area = np.empty(25, np.int32), np.empty(25)
    assert accumulate.count_cells(codes) == (9, 0)
    assert accumulate.contributing_area(codes, 3, 3, np.ones(3), area, order) < 9


def test_azimuths_and_codes_are_inverse():
    codes = np.arange(10, dtype=np.uint8).reshape(2, 5)
    azimuths = to_azimuth(codes)
    assert azimuths.dtype == np.uint16
    assert azimuths.ravel().tolist() == [0, 45, 90, 135, 180, 225, 270, 315, AZIMUTH_EXIT, AZIMUTH_NODATA]
    np.testing.assert_array_equal(from_azimuth(azimuths), codes)
    for wrong in (44, 360, 65532):
        with pytest.raises(TerrainError, match=f"flow direction {wrong} is not an azimuth"):
            from_azimuth(np.array([0, wrong], np.uint16))


def test_cells_and_rows_and_columns_are_inverse():
    terrain = route(np.random.default_rng(1).random((5, 7)))
    rows, cols = np.mgrid[0:5, 0:7]
    cells = terrain.cells_at(rows, cols)
    np.testing.assert_array_equal(terrain.conditioned_m[cells], terrain.conditioned_grid)
    for given_index, found in zip((rows, cols), terrain.rows_cols(cells), strict=True):
        np.testing.assert_array_equal(given_index, found)


@settings(max_examples=50, deadline=None)
@given(bound=st.floats(1e-300, 1e300), seed=st.integers(0, 1000))
def test_sums_of_multiples_of_the_quantum_are_exact_in_any_order(bound, seed):
    rng = np.random.default_rng(seed)
    q = quantum(bound)
    assert math.frexp(q)[0] == 0.5  # a power of two
    terms = np.rint(rng.random(200) * bound / 200 / q) * q
    exact = math.fsum(terms)
    for _ in range(3):
        rng.shuffle(terms)
        assert sum(terms.tolist()) == exact


def test_summable_areas_stay_within_the_documented_change():
    area = np.linspace(61.7, 93.3, 4000)
    rounded = summable_areas_m2(area, 4000)
    assert np.abs(rounded / area - 1).max() <= 16e6 / 2**52 * area.mean() / area.min()
    with pytest.raises(ValueError, match="bound of a sum"):
        quantum(math.inf)
