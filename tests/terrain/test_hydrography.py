"""Mapped streams, barriers and sinks on terrain whose answers are known."""

import numpy as np
import pytest
from hydrographies import DCOL, DROW, lines, on_grid, prescribed, routed, steps
from matplotlib.cbook import get_sample_data
from projects import transform_of, v_valley
from rasterio.crs import CRS
from scipy import ndimage

from basinwright.basins import delineate
from basinwright.basins.contact import contact_lengths_m, sink_areas_km2
from basinwright.grid import Grid
from basinwright.kernels import EXIT, SINK
from basinwright.terrain import Conditioning, Constraints, condition_and_route
from basinwright.terrain.hydrography import sink_spills

ROWS, COLS, AXIS, HEAD = 80, 61, 30, 10
BREACH = Conditioning("breach")


def valley(noise=0.0, seed=0):
    return v_valley(ROWS, COLS, 0.1, 0.02) + np.random.default_rng(seed).normal(0.0, 1.0, (ROWS, COLS)) * noise


def along(col, first=HEAD, last=ROWS):
    return [(col + 0.5, first + 0.5), (col + 0.5, last + 0.5)]


def cells_of(terrain):
    return terrain.area_grid / 100.0


@pytest.mark.parametrize("off", [-5, -4, -3, -2, -1, 0, 1, 2, 3, 4, 5])
def test_a_stream_off_its_valley_takes_all_its_water(off):
    found, terrain = routed(valley(), streams=lines(along(AXIS + off)))
    area = cells_of(terrain)
    mapped = area[:, AXIS + off]
    assert mapped[-1] == ROWS * COLS  # the whole valley, by the way that was mapped
    below = slice(HEAD + 5, None)
    rows = np.arange(ROWS)[below]
    # Everything uphill of a row, but what still comes to the stream by diagonal steps.
    assert (mapped[below] >= (rows + 1) * COLS - 2 * 30 * 31).all()
    beside = area[:, AXIS - 6 : AXIS + 7].copy()
    beside[:, 6 + off] = 0.0
    assert (beside[below].max(axis=1) < 0.1 * mapped[below]).all()
    assert found.facts["stream_cells"] == ROWS - HEAD
    assert (found.facts["led_cells"] > 0) == (off != 0)


def test_beyond_its_reach_a_stream_leaves_the_valley_alone():
    found, terrain = routed(valley(), streams=lines(along(AXIS + 7)))
    assert found.facts["led_cells"] == 0
    assert cells_of(terrain)[-1, AXIS] > cells_of(terrain)[-1, AXIS + 7] > 1000


@pytest.mark.parametrize("seed", range(3))
def test_a_stream_off_a_meandering_noisy_valley_has_no_second_channel_beside_it(seed):
    rng = np.random.default_rng(seed)
    row = np.arange(100)
    axis = 30 + 5 * np.sin(row / 13.0) + np.cumsum(rng.normal(0, 0.2, 100))
    z = np.abs(np.arange(61) - axis[:, None]) + 0.2 * (99 - row)[:, None]
    z = z + ndimage.gaussian_filter(rng.normal(0, 2.0, z.shape), 1.5)
    found, terrain = routed(z, streams=lines(np.column_stack([axis + 3.5, row + 0.5])[8:]))
    mapped = found.line_of >= 0
    apart, nearest = ndimage.distance_transform_edt(~mapped, return_indices=True)
    area = terrain.area_grid
    share = np.where(~mapped & (apart <= 5), area / area[tuple(nearest)], 0.0)
    assert share[20:].max() < 0.5  # a tributary or two on their last cells
    assert area[mapped].max() > 0.8 * area.size * 100.0


def test_elevations_never_rise_along_a_stream_and_are_only_lowered():
    z = valley(noise=1.0)
    found, terrain = routed(z, streams=lines(along(AXIS + 2)))
    rows, cols, _, below_rows, below_cols = steps(terrain)
    level = terrain.conditioned_grid
    assert (level[below_rows, below_cols] <= level[rows, cols]).all()
    cut = found.constraints.cut_cells
    assert (found.constraints.cut_m < z.astype(np.float32)[terrain.rows_cols(cut)]).all()
    stays = prescribed(found, terrain)
    fixed = on_grid(found.constraints.fixed, terrain)
    np.testing.assert_array_equal(terrain.directions_grid[stays], fixed[stays])


def test_the_direction_of_digitising_does_not_matter():
    course = [(AXIS + 2.5, HEAD + 0.5), (AXIS - 3.5, 40.5), (AXIS + 1.5, ROWS + 0.5)]
    _, down = routed(valley(0.3), streams=lines(course))
    _, up = routed(valley(0.3), streams=lines(course[::-1]))
    np.testing.assert_array_equal(down.directions, up.directions)
    np.testing.assert_array_equal(down.conditioned_m, up.conditioned_m)


@pytest.mark.parametrize("missing", [1, 2, 3, 4])
def test_gaps_of_a_few_cells_are_bridged(missing):
    parts = along(AXIS + 3, HEAD, 40), along(AXIS + 3, 41 + missing, ROWS)
    found, terrain = routed(valley(), streams=lines(*parts))
    assert found.facts["gaps_bridged"] == 1
    assert (terrain.directions_grid[HEAD:-1, AXIS + 3] == 4).all()  # south, across the gap too
    assert cells_of(terrain)[-1, AXIS + 3] == ROWS * COLS


def test_heads_of_two_streams_are_not_joined_over_a_divide():
    row, col = np.mgrid[:ROWS, :COLS]
    z = 100.0 - np.abs(row - 40) * 2.0 + np.abs(col - AXIS)
    found, terrain = routed(z, streams=lines(along(AXIS, 0, 37), along(AXIS, 42, ROWS)))
    assert found.facts["gaps_bridged"] == 0
    assert terrain.directions_grid[20, AXIS] == 0
    assert terrain.directions_grid[60, AXIS] == 4


def test_a_loop_opens_where_its_two_ways_meet_and_drains_by_one_mouth():
    braid = [(30.5, 30.5), (24.5, 36.5), (24.5, 50.5), (30.5, 56.5)]
    found, terrain = routed(valley(), streams=lines(along(AXIS), braid))
    codes = terrain.directions_grid
    assert cells_of(terrain)[-1, AXIS] == ROWS * COLS
    assert (codes[37:50, 24] == 4).all()  # the far branch runs down the valley too, from its highest cell
    on_rim = np.zeros(codes.shape, bool)
    on_rim[-1, AXIS] = True
    np.testing.assert_array_equal((found.line_of >= 0) & (codes == EXIT), on_rim)


def test_a_closed_ring_far_from_any_way_out_drains_over_one_of_its_cells():
    ring = [(20.5, 20.5), (40.5, 20.5), (40.5, 40.5), (20.5, 40.5), (20.5, 20.5)]
    row, col = np.mgrid[:ROWS, :COLS]
    bowl = np.hypot(row - 30, col - 30).astype(float)  # its mouth lies inside what it encloses
    found, terrain = routed(bowl, streams=lines(ring))
    assert terrain.order.size == ROWS * COLS
    assert 76 <= found.facts["stream_cells"] <= 80  # corners are cut


def test_a_meander_is_not_cut_short_at_its_neck():
    loop = [(20.5, 20.5), (20.5, 30.5), (40.5, 30.5), (40.5, 32.5), (20.5, 32.5), (20.5, 60.5)]
    z = np.full((ROWS, COLS), 100.0) - np.mgrid[:ROWS, :COLS][0] * 0.001
    found, terrain = routed(z, streams=lines(loop))
    codes = terrain.directions_grid
    assert codes[25, 20] == 4
    assert codes[30, 30] == 2  # out ...
    assert codes[32, 30] == 6  # ... and back, though the two runs lie two cells apart
    assert found.facts["directions_given_up"] == 0


def test_water_does_not_slip_through_a_diagonal_stream():
    row, col = np.mgrid[:50, :50]
    z = 200.0 - row - 0.9 * col  # falls south-east, across the stream
    found, terrain = routed(z.astype(float), streams=lines([(45.5, 4.5), (4.5, 45.5), (0.0, 50.0)]))
    rows, cols, _, below_rows, below_cols = steps(terrain)
    side, below_side = rows + cols - 49, below_rows + below_cols - 49
    inside = (np.minimum(rows, cols) > 5) & (np.maximum(rows, cols) < 44)
    assert not (inside & (side < 0) & (below_side > 0)).any()
    assert found.facts["led_cells"] == 0  # a stream across a slope: what lies below it drains away


def test_nothing_prescribed_is_the_plain_fill_bit_for_bit():
    rng = np.random.default_rng(5)
    z = ndimage.gaussian_filter(rng.normal(size=(60, 50)), 1.5).astype(np.float32)
    z[20:23, 10:14] = np.nan
    size = np.full(60, 10.0)
    plain = condition_and_route(z, size, size, size * size)
    _, constrained = routed(z)
    np.testing.assert_array_equal(plain.conditioned_m, constrained.conditioned_m)
    np.testing.assert_array_equal(plain.directions, constrained.directions)


def test_a_lake_in_which_one_step_is_barred_drains_as_without_but_for_that_step():
    z = valley(0.5)
    z[60] = 2000.0  # a dam across the valley
    size = np.full(ROWS, 10.0)
    plain = condition_and_route(z, size, size, size * size)
    walls = np.zeros(plain.directions.size, np.uint8)
    cell = int(plain.cells_at(np.array([50]), np.array([AXIS]))[0])
    code = int(plain.directions[cell])
    below = cell + int(DROW[code]) * (COLS + 2) + int(DCOL[code])
    walls[cell], walls[below] = 1 << code, 1 << (code + 4) % 8
    barred = condition_and_route(z, size, size, size * size, constraints=Constraints(walls=walls))
    np.testing.assert_array_equal(barred.conditioned_m, plain.conditioned_m)
    assert np.flatnonzero(barred.directions != plain.directions).tolist() == [cell]


def test_a_barrier_stops_water_but_where_a_stream_crosses_it():
    levee = lines([(-1.0, 50.2), (COLS + 1.0, 50.2)])
    _, stopped = routed(valley(), barriers=levee)
    _, culvert = routed(valley(), barriers=levee, streams=lines(along(AXIS)))
    for terrain, through in ((stopped, 0), (culvert, 1)):
        rows, _, _, below_rows, _ = steps(terrain)
        assert np.count_nonzero((rows <= 50 - 1) & (below_rows >= 50)) == through
    assert cells_of(stopped)[-1, AXIS] == (ROWS - 50) * COLS
    assert cells_of(culvert)[-1, AXIS] == ROWS * COLS
    # With no culvert water stands behind the levee up to the lowest way out: the head of the valley.
    assert stopped.conditioned_grid[49, AXIS] == np.float32(valley()[0, AXIS])


@pytest.mark.parametrize("angle", [0.0, 17.0, 45.0, 63.0, 90.0])
def test_a_barrier_is_tight_at_any_angle(angle):
    row, col = np.mgrid[:60, :60]
    way = np.radians(angle)
    side = (col + 0.5 - 30) * np.cos(way) + (row + 0.5 - 30) * np.sin(way)
    reach = np.array([-80.0, 80.0])
    wall = list(zip(30 - np.sin(way) * reach, 30 + np.cos(way) * reach, strict=True))
    _, terrain = routed(100.0 - side, barriers=lines(wall))  # water runs straight against it
    rows, cols, _, below_rows, below_cols = steps(terrain)
    before, after = side[rows, cols], side[below_rows, below_cols]
    assert not ((np.sign(before) != np.sign(after)) & (np.abs(before) > 1e-3) & (np.abs(after) > 1e-3)).any()


def test_ground_that_a_barrier_encloses_keeps_its_water_at_its_lowest_cell():
    ring = [(20.2, 20.3), (40.2, 20.3), (40.2, 40.3), (20.2, 40.3), (20.2, 20.3)]
    found, terrain = routed(valley(), barriers=lines(ring))
    assert found.facts["enclosed"] == 1
    assert np.argwhere(terrain.directions_grid == SINK).tolist() == [[39, AXIS]]
    assert cells_of(terrain)[39, AXIS] == 20 * 20
    basins = delineate(terrain, terrain.cells_at(np.array([ROWS - 1]), np.array([AXIS])))
    kept = sink_areas_km2(terrain, basins, sink_spills(terrain, found.constraints))
    assert kept[0] * 1e4 == pytest.approx(400)  # over the levee at its lowest place, back into the valley


def test_sinks_keep_their_water_and_the_area_that_would_spill_is_told():
    sinks = np.zeros((ROWS, COLS), bool)
    sinks[40, 10] = sinks[40, 5] = True  # one above the other on the same way down the valley's side
    sinks[60:63, 50:53] = True
    _, without = routed(valley())
    found, terrain = routed(valley(), sinks=sinks)
    np.testing.assert_array_equal(terrain.directions_grid == SINK, sinks)
    assert found.facts["sink_cells"] == 11
    mouth = terrain.cells_at(np.array([ROWS - 1, 50]), np.array([AXIS, AXIS]))
    basins = delineate(terrain, mouth)
    kept = sink_areas_km2(terrain, basins, sink_spills(terrain, found.constraints))
    np.testing.assert_allclose(kept * 1e6, without.area_m2[mouth] - terrain.area_m2[mouth], rtol=1e-12)
    assert kept[0] > kept[1] > 0  # the third lies below the second outlet
    alone = sink_areas_km2(terrain, delineate(terrain, mouth[1:]), sink_spills(terrain, found.constraints))
    assert alone[0] == kept[1]


def test_a_stream_ends_in_a_sink_and_begins_anew_below_it():
    sinks = np.zeros((ROWS, COLS), bool)
    sinks[40:44, AXIS - 2 : AXIS + 3] = True
    _, terrain = routed(valley(), sinks=sinks, streams=lines(along(AXIS)))
    assert terrain.directions_grid[39, AXIS] == 4
    assert cells_of(terrain)[40, AXIS] > 1000
    assert terrain.directions_grid[50, AXIS] == 4
    assert cells_of(terrain)[-1, AXIS] < (ROWS - 39) * COLS


def test_boundary_at_the_edges_and_against_voids_is_measured():
    z = valley()
    z[40:42, 0:3] = np.nan
    z[20, 20] = np.nan
    _, terrain = routed(z)
    grid = Grid(ROWS, COLS, transform_of(), CRS.from_epsg(32614).to_wkt())
    mouth = terrain.cells_at(np.array([ROWS - 1]), np.array([AXIS]))
    basins = delineate(terrain, mouth)
    lengths = contact_lengths_m(grid, terrain, basins)
    inside = terrain.grid(basins.label) == 0
    assert lengths["north"][0] == pytest.approx(10.0 * inside[0].sum())
    assert lengths["south"][0] == pytest.approx(10.0 * inside[-1].sum())
    assert lengths["west"][0] == pytest.approx(10.0 * inside[:, 0].sum())
    assert lengths["east"][0] == pytest.approx(10.0 * inside[:, -1].sum())
    void = np.isnan(z)
    sides = sum(
        np.count_nonzero(np.roll(void, 1, axis)[here] & inside[here])
        + np.count_nonzero(void[here] & np.roll(inside, 1, axis)[here])
        for axis, here in ((0, np.s_[1:]), (1, np.s_[:, 1:]))
    )
    assert lengths["void"][0] == pytest.approx(10.0 * sides)


@pytest.mark.parametrize("shift", [(1, 0), (-3, 2)])
def test_real_streams_drawn_beside_their_valleys_carry_the_water_of_these(shift):
    """The channel network of a real terrain, moved by some cells, against itself where it was."""
    z = get_sample_data("jacksboro_fault_dem.npz")["elevation"].astype(np.float32)  # SRTM, Tennessee
    size = np.full(len(z), 30.0)
    plain = condition_and_route(z, size, size, size * size, BREACH)
    right, down = shift
    rows, cols, _, below_rows, below_cols = steps(plain)
    channel = plain.area_grid >= 800 * 900.0
    along_it = channel[rows, cols]
    ways = np.stack([np.column_stack([cols, rows]), np.column_stack([below_cols, below_rows])], axis=1)[along_it] + 0.5
    found, moved = routed(z, 30.0, BREACH, streams=lines(*np.add(ways, [right, down])))

    at = np.argwhere(channel)
    there = np.add(at, [down, right])
    inside = ((there >= 0) & (there < z.shape)).all(axis=1)
    at, there = tuple(at[inside].T), tuple(there[inside].T)
    assert np.mean(moved.directions_grid[there] == plain.directions_grid[at]) > 0.98
    carried = moved.area_grid[there] / plain.area_grid[at]
    assert np.mean(np.abs(carried - 1.0) < 0.1) > 0.75  # the rest near confluences, which lie elsewhere now
    mapped = found.line_of >= 0
    apart, nearest = ndimage.distance_transform_edt(~mapped, return_indices=True)
    beside = ~mapped & (apart <= 5) & (moved.area_grid > 1600 * 900.0)
    double = beside & (moved.area_grid > 0.5 * moved.area_grid[tuple(nearest)])
    assert np.count_nonzero(double) < 0.01 * np.count_nonzero(mapped)
