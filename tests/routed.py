"""What the tests of terrain share: random ground, a textbook flood, and what holds of any routed terrain."""

import heapq
import math

import numpy as np
from hypothesis import strategies as st
from scipy import ndimage

from basinwright.kernels import EXIT, VOID

DROW = np.array([-1, -1, 0, 1, 1, 1, 0, -1])
DCOL = np.array([0, 1, 1, 1, 0, -1, -1, -1])
EIGHT = np.ones((3, 3), bool)


def geographic_rows(nrows, second=1.0, north=45.0):
    """Cell sizes [m] of rows of square cells in degrees on a sphere of 6,371 km."""
    metre = math.radians(second / 3600) * 6_371_000.0
    latitude = np.radians(north - (np.arange(nrows) + 0.5) * second / 3600)
    return metre * np.cos(latitude), np.full(nrows, metre)


def flood(z):
    """Filled elevations by the textbook flood from outside with one priority queue."""
    nrows, ncols = z.shape
    done = np.isnan(z)
    filled = z.copy()
    outside = ndimage.binary_dilation(np.pad(done, 1, constant_values=True), EIGHT)[1:-1, 1:-1]
    queue = [(z[r, c], r, c) for r, c in np.argwhere(outside & ~done)]
    for _, r, c in queue:
        done[r, c] = True
    heapq.heapify(queue)
    while queue:
        level, r, c = heapq.heappop(queue)
        for i, j in zip(r + DROW, c + DCOL, strict=True):
            if 0 <= i < nrows and 0 <= j < ncols and not done[i, j]:
                done[i, j] = True
                filled[i, j] = max(level, z[i, j])
                heapq.heappush(queue, (filled[i, j], i, j))
    return filled


def data(terrain, grid):
    """A copy of a grid with NaN where the terrain is void."""
    return np.where(np.isfinite(terrain.conditioned_grid), grid, np.nan)


def check_routing(z, terrain):
    """What holds on any terrain: drained, no cycle, never uphill, areas add up."""
    void = ~np.isfinite(z)
    codes, area, level = terrain.directions_grid, terrain.area_grid, terrain.conditioned_grid
    np.testing.assert_array_equal(codes == VOID, void)
    assert ((codes <= EXIT) | void).all()
    beside_void = ndimage.binary_dilation(np.pad(void, 1, constant_values=True), EIGHT)[1:-1, 1:-1]
    assert beside_void[codes == EXIT].all()
    position = np.full(terrain.directions.size, -1)
    position[terrain.order] = np.arange(terrain.data_cells)
    assert terrain.order.size == np.count_nonzero(~void) == np.unique(terrain.order).size
    own = np.broadcast_to(terrain.row_area_m2[:, None], z.shape)
    rows, cols = np.nonzero(codes < EXIT)
    code = codes[rows, cols]
    below = rows + DROW[code], cols + DCOL[code]
    assert (level[below] <= level[rows, cols]).all()
    assert (position[terrain.cells_at(*below)] > position[terrain.cells_at(rows, cols)]).all()
    collected = np.where(void, 0.0, own)
    np.add.at(collected, below, area[rows, cols])
    np.testing.assert_array_equal(area, collected)
    assert area[codes == EXIT].sum() == own[~void].sum()


@st.composite
def small_terrains(draw):
    """Random ground: rough or terraced, tilted or not, with any share of voids."""
    nrows, ncols = draw(st.integers(1, 10)), draw(st.integers(1, 10))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    steps = draw(st.sampled_from([1, 2, 4, 10, 0]))
    z = rng.integers(0, steps, (nrows, ncols)).astype(float) if steps else rng.normal(0, 3, (nrows, ncols))
    z += draw(st.sampled_from([0.0, 0.5])) * np.arange(ncols)
    z[rng.random(z.shape) < draw(st.sampled_from([0.0, 0.05, 0.4]))] = np.nan
    z[rng.integers(nrows), rng.integers(ncols)] = 1.0
    return z.astype(np.float32)
