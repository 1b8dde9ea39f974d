"""Snapping, case by case, in a valley between two planes: row r of its axis drains 21 (r + 1) cells."""

import numpy as np
import pytest

from basinwright.basins import search_distance_m, snap

ROWS, COLS, AXIS = 41, 21, 10
CELL_KM2 = 1e-4  # 10 m x 10 m


@pytest.fixture(scope="module")
def valley(landscape):
    row, col = np.mgrid[:ROWS, :COLS]
    return landscape(100 + 0.5 * abs(col - AXIS) - 0.1 * row)


def point(valley, row, col):
    """Map coordinates of a fractional cell; whole numbers are centres."""
    x, y = valley.grid.xy(np.atleast_1d(row), np.atleast_1d(col))
    return x, y


def cell_of(valley, snapped):
    row, col = valley.terrain.rows_cols(snapped.cell)
    return list(zip(row.tolist(), col.tolist(), strict=True))


def test_default_distance_is_three_cells_or_30_m(landscape):
    plane = np.arange(9.0).reshape(3, 3)
    assert search_distance_m(landscape(plane, cell=(25, 25)).grid) == 75
    assert search_distance_m(landscape(plane, cell=(2, 2)).grid) == 30


def test_runs_down_its_own_flow_line_to_the_first_channel_cell(valley):
    snapped = snap(valley.grid, valley.terrain, *point(valley, 20, AXIS + 2), stream_area_km2=100 * CELL_KM2)
    assert cell_of(valley, snapped) == [(20, AXIS)]
    assert snapped.snap_m == pytest.approx([20.0])
    assert (snapped.x, snapped.y) == point(valley, 20, AXIS)


def test_keeps_the_points_own_cell_where_the_channel_is_farther(valley):
    snapped = snap(valley.grid, valley.terrain, *point(valley, 20, AXIS + 4), stream_area_km2=100 * CELL_KM2)
    assert cell_of(valley, snapped) == [(20, AXIS + 4)]
    assert snapped.snap_m.tolist() == [0.0]
    wider = snap(
        valley.grid, valley.terrain, *point(valley, 20, AXIS + 4), stream_area_km2=100 * CELL_KM2, within_m=40.0
    )
    assert cell_of(valley, wider) == [(20, AXIS)]


def test_a_point_in_a_channel_cell_stays_and_is_not_moved(valley):
    snapped = snap(valley.grid, valley.terrain, *point(valley, 20.4, AXIS - 0.4), stream_area_km2=100 * CELL_KM2)
    assert cell_of(valley, snapped) == [(20, AXIS)]
    assert snapped.snap_m.tolist() == [0.0]


def test_distance_is_from_the_point_not_from_its_cell(valley):
    snapped = snap(valley.grid, valley.terrain, *point(valley, 20.3, AXIS + 1.1), stream_area_km2=100 * CELL_KM2)
    assert snapped.snap_m == pytest.approx([np.hypot(3.0, 11.0)])


def test_expected_area_finds_the_nearest_cell_within_ten_percent(valley):
    # Axis rows 22 to 26 drain 483, 504, 525, 546 and 567 cells; 10 % of 540 reaches down to 486.
    snapped = snap(
        valley.grid, valley.terrain, *point(valley, 21, AXIS), stream_area_km2=1.0, expected_area_km2=[540 * CELL_KM2]
    )
    assert cell_of(valley, snapped) == [(23, AXIS)]
    assert snapped.snap_m == pytest.approx([20.0])
    assert snapped.expected_met.all()


def test_without_a_cell_of_the_expected_area_the_flow_line_decides(valley):
    snapped = snap(
        valley.grid, valley.terrain, *point(valley, 5, AXIS + 1), stream_area_km2=100 * CELL_KM2,
        expected_area_km2=[800 * CELL_KM2],
    )  # fmt: skip
    assert cell_of(valley, snapped) == [(5, AXIS)]
    assert not snapped.expected_met.any()


def test_far_is_over_half_of_the_search_distance(valley):
    def far(col, within):
        return snap(
            valley.grid, valley.terrain, *point(valley, 20, col), stream_area_km2=0.01, within_m=within
        ).far.tolist()

    assert far(AXIS + 2, 30.0) == [True]  # 20 m of 30
    assert far(AXIS + 2, 40.0) == [False]  # exactly half
    assert far(AXIS, 30.0) == [False]


def test_one_stem_alone_is_not_ambiguous(valley):
    # Within 60 m the axis' own area changes by more than 2 x (row 8: 189 cells, row 2: 63): still one flow line.
    snapped = snap(valley.grid, valley.terrain, *point(valley, 8, AXIS), stream_area_km2=60 * CELL_KM2, within_m=60.0)
    assert not snapped.ambiguous.any()


@pytest.fixture(scope="module")
def fork(landscape):
    """Two straight ditches 4 cells apart, joining at the bottom; the left one drains a field twice as wide and more."""
    row, col = np.mgrid[:40, :40]
    ground = 100 + 0.5 * np.minimum(abs(col - 26), abs(col - 30)) - 0.1 * row
    return landscape(ground)


def test_another_flow_line_of_much_different_area_is_ambiguous(fork):
    area = fork.terrain.area_grid
    assert area[20, 26] > 2 * area[20, 30]
    x, y = fork.grid.xy([20, 20, 20], [26, 30, 26])
    common = {"stream_area_km2": 100 * CELL_KM2}
    assert snap(fork.grid, fork.terrain, x, y, within_m=45.0, **common).ambiguous.all()
    assert not snap(fork.grid, fork.terrain, x, y, within_m=35.0, **common).ambiguous.any()


def test_a_line_of_similar_area_or_under_the_stream_area_is_no_doubt(landscape, fork):
    row, col = np.mgrid[:40, :40]
    twins = landscape(100 + 0.5 * np.minimum(abs(col - 18), abs(col - 22)) - 0.1 * row)
    x, y = twins.grid.xy([20], [18])
    assert not snap(twins.grid, twins.terrain, x, y, within_m=45.0, stream_area_km2=0.01).ambiguous.any()
    x, y = fork.grid.xy([20], [26])
    only_left = fork.terrain.area_grid[20, 26] / 1e6
    assert not snap(fork.grid, fork.terrain, x, y, within_m=45.0, stream_area_km2=only_left).ambiguous.any()


def test_an_expected_area_that_is_met_still_says_that_another_line_is_near(fork):
    x, y = fork.grid.xy([20], [28])
    area = float(fork.terrain.area_grid[20, 30]) / 1e6
    snapped = snap(fork.grid, fork.terrain, x, y, within_m=45.0, stream_area_km2=0.01, expected_area_km2=[area])
    assert fork.terrain.rows_cols(snapped.cell)[1] == [30]
    assert snapped.ambiguous.all()


def test_a_tributary_that_joins_nearby_is_another_line(landscape):
    row, col = np.mgrid[:31, :31]
    z = 100 + 0.5 * abs(col - 15) - 0.1 * row
    z[20, 16:] = 98 + 0.05 * np.arange(1, 16)  # a side ditch that falls to the axis at row 20
    side = landscape(z)
    x, y = side.grid.xy([20], [15])
    channel = side.terrain.area_grid[20, 16] / 1e6
    assert side.terrain.area_grid[20, 15] > 2 * side.terrain.area_grid[20, 16]
    assert snap(side.grid, side.terrain, x, y, stream_area_km2=channel).ambiguous.all()


def test_outside_and_void_fail_with_a_reason_and_the_others_go_on(landscape):
    z = 100 - np.mgrid[:20, :20][0] * 1.0
    z[5, 5] = np.nan
    ground = landscape(z)
    x, y = ground.grid.xy([5, -3, 10, 10], [5, 2, 10, 20])
    snapped = snap(ground.grid, ground.terrain, x, y, stream_area_km2=1.0, expected_area_km2=[0.0001] * 4)
    assert (snapped.cell >= 0).tolist() == [False, False, True, False]
    assert ["void" in reason for reason in snapped.failed] == [True, False, False, False]
    assert ["outside" in reason for reason in snapped.failed] == [False, True, False, True]
    assert np.isnan(snapped.snap_m[[0, 1, 3]]).all()
    assert np.isnan(snapped.x[0])


def test_true_distances_on_a_geographic_grid(landscape):
    size = 1 / 3600  # about 23.6 m x 30.8 m at 40 N
    row, col = np.mgrid[:21, :21]
    ground = landscape(100 + 2.0 * abs(col - 10) - 0.1 * row, cell=(size, size), corner=(-80.0, 40.0), crs="EPSG:4326")
    x, y = ground.grid.xy([10], [12])
    snapped = snap(ground.grid, ground.terrain, x, y, stream_area_km2=0.05, within_m=60.0)
    assert ground.terrain.rows_cols(snapped.cell)[1] == [10]
    assert snapped.snap_m == pytest.approx([2 * 23.73], abs=0.1)  # cos 39.997 x 30.92 m a second, by 2


def test_a_cell_with_exactly_the_stream_area_is_a_channel(landscape):
    ground = landscape(1000.0 - np.mgrid[:701, :3][0])  # row r of a column drains r + 1 cells: 700 are 0.07 km2
    x, y = ground.grid.xy([698], [1])
    snapped = snap(ground.grid, ground.terrain, x, y, stream_area_km2=0.07)
    assert ground.terrain.rows_cols(snapped.cell)[0] == [699]
