"""pysheds 0.5 as an independent witness."""

import numpy as np
import pytest

from basinwright.audit import pysheds_cache
from basinwright.kernels import EXIT, VOID, labels
from basinwright.terrain import condition_and_route

pytestmark = [pytest.mark.slow, pytest.mark.xdist_group("pysheds")]  # compiled once, by one worker


@pytest.fixture(scope="module", autouse=True)
def _pysheds_in_a_cache_of_its_own():
    import numba

    ours, numba.config.CACHE_DIR = numba.config.CACHE_DIR, str(pysheds_cache().with_name("pysheds-in-tests"))
    try:
        import pysheds.grid  # noqa: F401 - compiles for a minute where the cache is cold
    finally:
        numba.config.CACHE_DIR = ours


# pysheds' codes for our 0 to 7, then exit and void.
DIRMAP = (1, 2, 3, 4, 5, 6, 7, 8)
CODES = np.array([*DIRMAP, 0, -1], np.int64)


def pysheds_grid(shape, nodata):
    affine = pytest.importorskip("affine")
    from pysheds.grid import Grid
    from pysheds.view import ViewFinder

    return Grid(viewfinder=ViewFinder(affine.Affine.scale(1.0, -1.0), shape, nodata=nodata))


def test_filled_floats_are_the_same_bits():
    from pysheds.view import Raster

    rng = np.random.default_rng(5)
    coarse = np.kron(rng.random((16, 16)), np.ones((10, 10)))
    z = (50 * coarse + rng.random((160, 160))).astype(np.float32)
    grid = pysheds_grid(z.shape, np.float64(-9999))
    theirs = grid.fill_depressions(Raster(z.astype(np.float64), viewfinder=grid.viewfinder))
    ones = np.ones(160)
    ours = condition_and_route(z, ones, ones, ones).conditioned_grid
    np.testing.assert_array_equal(ours, np.asarray(theirs))


def test_areas_and_catchments_of_the_same_directions_are_identical_on_real_terrain():
    from matplotlib.cbook import get_sample_data
    from pysheds.view import Raster

    z = get_sample_data("jacksboro_fault_dem.npz")["elevation"]  # SRTM, Tennessee
    ones = np.ones(z.shape[0])
    terrain = condition_and_route(z, ones, ones, ones)
    assert terrain.largest_rounding_m == 0
    codes = terrain.directions_grid
    assert (codes != VOID).all()
    grid = pysheds_grid(z.shape, np.int64(-1))
    flow = Raster(CODES[codes], viewfinder=grid.viewfinder)
    # Their outermost cells pass no water on: compare where no path has come along the rim.
    theirs = np.asarray(grid.accumulation(flow, dirmap=DIRMAP))
    inner = np.s_[1:-1, 1:-1]
    rim = np.ones(z.shape, bool)
    rim[inner] = False
    starts = terrain.cells_at(*np.nonzero(rim))
    along_rim = np.zeros(terrain.directions.size, bool)
    for cell in starts[terrain.directions[starts] != EXIT]:
        while not along_rim[cell]:
            along_rim[cell] = True
            row, col = terrain.rows_cols(cell)
            code = codes[row, col]
            if code == EXIT:
                break
            cell = terrain.cells_at(row + (-1, -1, 0, 1, 1, 1, 0, -1)[code], col + (0, 1, 1, 1, 0, -1, -1, -1)[code])
    compared = ~terrain.grid(along_rim) & ~rim
    assert compared.sum() > 0.8 * z.size
    np.testing.assert_array_equal(terrain.area_grid[compared], theirs[compared])

    # The largest basins whose outlets lie off those paths.
    candidates = np.argwhere(compared)
    order = np.argsort(-terrain.area_grid[compared])
    for row, col in candidates[order[[0, 50, 400, 3000]]]:
        outlet = terrain.cells_at([row], [col])
        label, distance = np.empty(terrain.directions.size, np.int32), np.empty(terrain.directions.size, np.int64)
        parent, way = np.empty(1, np.int32), np.empty(1, np.int64)
        labels.label_cells(
            terrain.directions, terrain.order, terrain.ncols, terrain.step_um, outlet, label, distance, parent, way
        )
        catchment = grid.catchment(x=col, y=row, fdir=flow, dirmap=DIRMAP, xytype="index")
        np.testing.assert_array_equal(terrain.grid(label) == 0, np.asarray(catchment))
