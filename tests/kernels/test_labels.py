"""Labels, reductions and the forest of outlets against walks cell by cell."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.kernels import EXIT, NO_CELL, forest, labels, reduce, trace
from basinwright.terrain import condition_and_route
from basinwright.terrain.summable import quantum

DROW = (-1, -1, 0, 1, 1, 1, 0, -1)
DCOL = (0, 1, 1, 1, 0, -1, -1, -1)


def make_terrain(seed, nrows=14, ncols=11):
    """Random ground with voids and flats on cells whose size differs from row to row."""
    rng = np.random.default_rng(seed)
    z = rng.integers(0, 9, (nrows, ncols)).astype(np.float32)
    z[rng.random(z.shape) < 0.05] = np.nan
    dx = np.linspace(19.0, 25.0, nrows)
    dy = np.full(nrows, 30.9)
    return condition_and_route(z, dx, dy, dx * dy), z


def outlets_of(terrain, seed, count):
    rng = np.random.default_rng(seed + 1)
    return np.sort(rng.choice(terrain.order, min(count, terrain.data_cells), replace=False)).astype(np.int32)


def labelled(terrain, outlets):
    cells, n = terrain.directions.size, outlets.size
    label, distance = np.empty(cells, np.int32), np.empty(cells, np.int64)
    parent, parent_distance = np.empty(n, np.int32), np.empty(n, np.int64)
    labels.label_cells(
        terrain.directions, terrain.order, terrain.ncols, terrain.step_um, outlets,
        label, distance, parent, parent_distance,
    )  # fmt: skip
    return label, distance, parent, parent_distance


def walk(terrain, cell):
    """Cells and distances [um] from a cell down to its exit, by rows and columns."""
    row, col = (int(v) for v in terrain.rows_cols(cell))
    way = 0
    while True:
        yield int(terrain.cells_at(row, col)), way
        code = int(terrain.directions_grid[row, col])
        if code == EXIT:
            return
        way += int(terrain.step_um[row, code])
        row, col = row + DROW[code], col + DCOL[code]


def whole_basins(terrain, outlets, values, block_rows):
    """All reductions of the whole basins, over blocks of so many rows."""
    label, distance, parent, parent_distance = labelled(terrain, outlets)
    n = outlets.size
    sums, weight, area = np.zeros(n), np.zeros(n), np.zeros(n)
    cells = np.zeros(n, np.int64)
    classes = np.zeros((n, 3))
    lowest, highest, highest_cell = np.full(n, np.inf), np.full(n, -np.inf), np.full(n, -1, np.int32)
    farthest, farthest_cell = np.full(n, -1, np.int64), np.full(n, -1, np.int32)
    q = quantum(float(terrain.row_area_m2.sum()) * terrain.ncols)  # values are below 1
    kinds = np.where(np.isnan(values), -1, values * 3).astype(np.int32)
    for first in range(0, terrain.nrows, block_rows):
        end = min(first + block_rows, terrain.nrows)
        block = np.ascontiguousarray(values[first:end])
        reduce.add_area(label, terrain.ncols, terrain.row_area_m2, first, end, area, cells)
        reduce.add_values(label, terrain.ncols, terrain.row_area_m2, first, block, q, sums, weight)
        kind = np.ascontiguousarray(kinds[first:end])
        reduce.add_classes(label, terrain.ncols, terrain.row_area_m2, first, kind, classes)
        reduce.keep_extremes(label, terrain.ncols, first, block, lowest, highest, highest_cell)
        reduce.keep_farthest(label, terrain.ncols, distance, first, end, farthest, farthest_cell)
    order = forest.upstream_first(parent)
    table = np.column_stack([area, cells, sums, weight, classes])
    forest.combine_sums(parent, order, table)
    forest.combine_extremes(parent, order, lowest, highest, highest_cell)
    forest.combine_farthest(parent, order, parent_distance, farthest, farthest_cell)
    return [table, lowest, highest, highest_cell, farthest, farthest_cell]


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10_000), count=st.integers(1, 20))
def test_label_and_distance_are_those_of_a_walk_down(seed, count):
    terrain, _ = make_terrain(seed)
    outlets = outlets_of(terrain, seed, count)
    label, distance, parent, parent_distance = labelled(terrain, outlets)
    number = {int(cell): i for i, cell in enumerate(outlets)}
    for cell in terrain.order:
        met = next(((number[c], way) for c, way in walk(terrain, cell) if c in number), (NO_CELL, 0))
        assert (label[cell], distance[cell]) == met
    for i, cell in enumerate(outlets):
        below = [(number[c], way) for c, way in walk(terrain, cell) if c in number][1:]
        assert (parent[i], parent_distance[i]) == (below[0] if below else (NO_CELL, 0))
    assert (terrain.grid(label)[np.isinf(terrain.conditioned_grid)] == NO_CELL).all()


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10_000), count=st.integers(2, 20), block_rows=st.integers(1, 14))
def test_basins_depend_neither_on_other_outlets_nor_on_blocks(seed, count, block_rows):
    terrain, z = make_terrain(seed)
    values = np.random.default_rng(seed).random(z.shape)
    values[np.isnan(z)] = np.nan
    outlets = outlets_of(terrain, seed, count)
    together = whole_basins(terrain, outlets, values, block_rows)
    for i in range(outlets.size):
        alone = whole_basins(terrain, outlets[i : i + 1], values, terrain.nrows)
        for all_outlets, one in zip(together, alone, strict=True):
            np.testing.assert_array_equal(all_outlets[i], one[0])


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10_000), count=st.integers(1, 8))
def test_whole_basins_equal_sums_over_walks(seed, count):
    terrain, z = make_terrain(seed)
    values = np.random.default_rng(seed).random(z.shape)
    values[np.isnan(z)] = np.nan
    outlets = outlets_of(terrain, seed, count)
    result = whole_basins(terrain, outlets, values, 5)
    table, lowest, highest, highest_cell, farthest, farthest_cell = result
    ways = {int(cell): dict(walk(terrain, cell)) for cell in terrain.order}
    for i, outlet in enumerate(outlets.tolist()):
        basin = np.array(sorted(cell for cell, way in ways.items() if outlet in way))
        rows, cols = terrain.rows_cols(basin)
        area = terrain.row_area_m2[rows]
        value = values[rows, cols]
        assert table[i, 0] == area.sum() == terrain.area_m2[outlet]
        assert table[i, 1] == basin.size
        assert table[i, 2] == pytest.approx((value * area).sum(), rel=1e-9)  # in fixed point of the whole raster
        assert table[i, 3] == area.sum()
        kinds = (value * 3).astype(int)
        assert table[i, 4:].tolist() == [area[kinds == k].sum() for k in range(3)]
        assert (lowest[i], highest[i]) == (value.min(), value.max())
        assert highest_cell[i] == basin[value.argmax()]
        lengths = np.array([ways[cell][outlet] for cell in basin.tolist()])
        assert farthest[i] == lengths.max()
        assert farthest_cell[i] == basin[lengths == lengths.max()].min()


def test_ties_go_to_the_smallest_cell_index_whatever_the_order_of_blocks():
    label = np.zeros(5 * 5, np.int32)
    values = np.ones((3, 3))
    distance = np.full(25, 7, np.int64)
    lowest, highest, cell = np.full(1, np.inf), np.full(1, -np.inf), np.full(1, -1, np.int32)
    farthest, far_cell = np.full(1, -1, np.int64), np.full(1, -1, np.int32)
    for row in (2, 0, 1):
        reduce.keep_extremes(label, 3, row, values[row : row + 1], lowest, highest, cell)
        reduce.keep_farthest(label, 3, distance, row, row + 1, farthest, far_cell)
    assert cell[0] == far_cell[0] == 6


def test_forest_order_leaves_no_outlet_before_those_upstream():
    parent = np.array([3, 0, 0, -1, 3, 4, -1], np.int32)
    order = forest.upstream_first(parent).tolist()
    assert sorted(order) == list(range(7))
    for i, p in enumerate(parent):
        assert p < 0 or order.index(i) < order.index(p)


def test_paths_run_from_start_to_end_and_stop_at_an_exit():
    terrain, _ = make_terrain(3)
    start = int(terrain.order[0])
    way = list(walk(terrain, start))
    middle = way[len(way) // 2][0]
    elsewhere = int(next(c for c in terrain.order if c not in dict(way)))
    starts = np.array([start, -1, start, start, middle], np.int32)
    ends = np.array([middle, middle, elsewhere, start, middle], np.int32)
    bounds, cells = trace.trace_paths(terrain.directions, terrain.ncols, starts, ends)
    paths = [cells[a:b].tolist() for a, b in pairwise(bounds)]
    full = [c for c, _ in way]
    assert paths == [full[: len(way) // 2 + 1], [], full, [start], [middle]]
