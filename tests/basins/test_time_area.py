"""Time-area curves on terrains where travel times are known on paper."""

import numpy as np
import pytest

from basinwright.basins import delineate
from basinwright.basins.time_area import BIN_H, farthest_in_time, time_area_curves, travel_times_us
from basinwright.kernels import forest, travel
from basinwright.terrain import condition_and_route


def steady(rows, length_m, fall_m, area_km2, source):
    """Water at 1 m/s everywhere."""
    return length_m / 3600.0


def inclined(nrows, ncols):
    z = np.arange(nrows, 0, -1.0)[:, None] + np.zeros(ncols)
    return condition_and_route(z, np.full(nrows, 36.0), np.full(nrows, 36.0), np.full(nrows, 36.0**2))


def test_a_strip_of_equal_cells_fills_evenly():
    terrain = inclined(11, 3)
    basins = delineate(terrain, terrain.cells_at(np.array([10]), np.array([1])))
    curve = time_area_curves(terrain, basins, travel_times_us(terrain, steady))
    # 36 m at 1 m/s: each cell up the strip is one bin of 0.01 h farther; the outlet's own cell is there at once.
    assert curve["travel_time_h"] == pytest.approx(BIN_H * np.arange(1, 12))
    assert curve["area_km2"] == pytest.approx(36.0**2 / 1e6 * np.arange(1, 12), rel=1e-12)


def test_nested_outlets_have_the_curves_of_their_whole_basins():
    terrain = inclined(40, 3)
    cells = terrain.cells_at(np.array([39, 20]), np.array([1, 1]))
    time_us = travel_times_us(terrain, steady)
    both = time_area_curves(terrain, delineate(terrain, cells), time_us)
    for i, cell in enumerate(cells):
        alone = time_area_curves(terrain, delineate(terrain, np.array([cell], np.int32)), time_us)
        mine = both["outlet"] == i
        assert np.array_equal(both["travel_time_h"][mine], alone["travel_time_h"])
        assert np.array_equal(both["area_km2"][mine], alone["area_km2"])


def test_last_row_is_the_basin_and_long_curves_are_thinned():
    rng = np.random.default_rng(3)
    z = rng.normal(0, 1, (60, 70)).cumsum(0).cumsum(1)
    n = len(z)
    terrain = condition_and_route(z, np.full(n, 900.0), np.full(n, 900.0), np.full(n, 810000.0))
    cell = np.argsort(terrain.area_grid.ravel())[-3:]
    rows, cols = np.unravel_index(cell, z.shape)
    basins = delineate(terrain, terrain.cells_at(rows, cols))
    curve = time_area_curves(terrain, basins, travel_times_us(terrain, steady))
    for i in range(3):
        mine = curve["outlet"] == i
        assert mine.sum() <= 100
        assert (np.diff(curve["travel_time_h"][mine]) > 0).all()
        assert (np.diff(curve["area_km2"][mine]) >= 0).all()
        assert curve["area_km2"][mine][-1] == pytest.approx(terrain.area_grid[rows[i], cols[i]] / 1e6, rel=1e-12)


def test_source_cells_are_those_nothing_drains_into():
    terrain = inclined(5, 3)
    seen = {}

    def remember(rows, length_m, fall_m, area_km2, source):
        seen.update(source=source, length=length_m, fall=fall_m)
        return length_m * 0

    travel_times_us(terrain, remember)
    assert seen["source"][0].all()
    assert not seen["source"][1:].any()
    assert (seen["length"][:4] == 36.0).all()
    assert (seen["length"][4] == 0.0).all()
    assert (seen["fall"][:4] == 1.0).all()


def brute_force(terrain, basins, step_h):
    """Farthest cell of every label by walking down from each cell of its whole basin."""
    stride = terrain.ncols + 2
    offsets = (-stride, 1 - stride, 1, stride + 1, stride, stride - 1, -1, -stride - 1)
    farthest = []
    for outlet in basins.label_cell.tolist():
        best, best_us = -1, -1
        for start in range(terrain.directions.size):
            cell, us = start, 0
            while terrain.directions[cell] < 8 and cell != outlet:
                us += step_h[cell]
                cell += offsets[terrain.directions[cell]]
            if cell == outlet and us > best_us:
                best, best_us = start, us
        farthest.append(best)
    return farthest


def test_farthest_in_time_is_found_by_walking_too():
    rng = np.random.default_rng(8)
    z = rng.random((14, 17)).cumsum(0)
    size = np.full(14, 10.0)
    terrain = condition_and_route(z, size, size, size * size)
    slow = rng.integers(1, 9, z.shape).astype(float)

    def uneven(rows, length_m, fall_m, area_km2, source):
        return slow[rows] * length_m / 3600.0

    for count in (1, 6, 30):
        data = np.flatnonzero(terrain.area_m2 > 0)
        basins = delineate(terrain, rng.choice(data, count, replace=False).astype(np.int32))
        step_us = np.zeros(terrain.directions.size, np.int64)
        steps = np.where(terrain.directions_grid % 2 == 1, np.sqrt(200.0), 10.0)
        terrain.grid(step_us)[:] = np.rint(slow * np.rint(steps * 1e6) / 1e6 / 3600.0 * 3.6e9)
        found = farthest_in_time(terrain, basins, travel_times_us(terrain, uneven))
        assert found.tolist() == brute_force(terrain, basins, step_us.tolist())


def test_curves_are_thinned_alike_compiled_and_plain():
    rng = np.random.default_rng(2)
    sizes = rng.integers(1, 40, 12)
    bounds = np.concatenate([[0], sizes.cumsum()]).astype(np.int64)
    area, labels = rng.random(bounds[-1]), rng.permutation(12).astype(np.int32)
    for function in (travel.thinned, travel.thinned.py_func):
        curve, number, within = function(bounds, area, labels, 7)
        for k, label in enumerate(labels):
            total = np.cumsum(area[bounds[label] : bounds[label + 1]])
            stride = -(-total.size // 7)
            kept = np.arange(total.size)[(total.size - 1) % stride :: stride]
            assert np.array_equal(number[curve == k], kept)
            assert np.array_equal(within[curve == k], total[kept])


def test_largest_of_whole_basins_compiled_and_plain():
    parent, order = np.array([2, 2, 4, 4, -1], np.int32), np.array([0, 1, 2, 3, 4], np.int32)
    for function in (forest.combine_largest, forest.combine_largest.py_func):
        largest = np.array([5, 9, 1, 3, 2], np.int64)
        function(parent, order, largest)
        assert largest.tolist() == [5, 9, 9, 3, 9]
