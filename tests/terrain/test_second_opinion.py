"""pysheds 0.5 and pyflwdir 0.5.12 as independent witnesses."""

import numpy as np
import pytest
from conformance import kit
from conformance.kit import CELL_M, Ground, Routed

from basinwright.audit import Drawn, _causes, pysheds_cache
from basinwright.kernels import EXIT, VOID, labels
from basinwright.terrain import Conditioning, condition_and_route

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


# Area at 200 random channel cells of real terrain, each program by its own conditioning.

CHANNEL_CELLS = 60
COUNT = 200


def accumulated(down):
    """Cells that drain through each cell, by plain Python."""
    below = down.ravel()
    cells, waiting = np.ones(below.size), np.bincount(below[below >= 0], minlength=below.size)
    ready = np.flatnonzero(waiting == 0).tolist()
    while ready:
        cell = ready.pop()
        if (n := below[cell]) >= 0:
            cells[n] += cells[cell]
            waiting[n] -= 1
            if waiting[n] == 0:
                ready.append(n)
    return cells.reshape(down.shape)


def drawn(down, outlet, surface):
    basin = Routed(down, None).basin(outlet)
    down = down.copy()
    down[outlet] = -1
    return Drawn(basin, down.ravel(), surface)


def parting(ours, theirs, cells, surfaces, z):
    """Relative differences in area at some cells, and the main cause of each over 1 %."""
    areas = accumulated(ours), accumulated(theirs)
    off, causes = [], []
    for row, col in cells:
        around = areas[1][row - 1 : row + 2, col - 1 : col + 2].ravel()  # a river may be drawn a cell apart
        nearest = int(np.argmin(np.abs(around - areas[0][row, col])))
        off.append(abs(around[nearest] / areas[0][row, col] - 1))
        if off[-1] > 0.01:
            theirs_at = row - 1 + nearest // 3, col - 1 + nearest % 3
            km2 = _causes(
                drawn(ours, (row, col), surfaces[0]), drawn(theirs, theirs_at, surfaces[1]), z, np.ones(z.shape),
                (CELL_M, CELL_M),
            )  # fmt: skip
            causes.append(next(iter(km2)))
    return np.array(off), causes


@pytest.fixture(scope="module")
def srtm():
    from matplotlib.cbook import get_sample_data

    z = get_sample_data("jacksboro_fault_dem.npz")["elevation"].astype(float)
    size = np.full(z.shape[0], CELL_M)
    modes = ("fill", "breach")
    surface = {m: condition_and_route(z, size, size, size**2, Conditioning(m)).conditioned_grid for m in modes}
    ground = Ground("srtm", "", z, ())
    down = {mode: kit.basinwright(ground, mode).down for mode in modes}
    inner = np.zeros(z.shape, bool)
    inner[3:-3, 3:-3] = True
    channels = np.argwhere((accumulated(down["fill"]) >= CHANNEL_CELLS) & inner)
    cells = channels[np.random.default_rng(9).choice(len(channels), COUNT, replace=False)]
    return ground, down, surface, cells


@pytest.mark.parametrize(("mode", "share", "near"), [("fill", 0.90, 0.95), ("breach", 0.85, 0.90)])
def test_pysheds_has_the_same_area_at_random_channel_cells(srtm, mode, share, near):
    """Within 1 % at nine of ten where both fill; every other cell with a cause, and a flat, a tie or a cut it is."""
    ground, down, surface, cells = srtm
    off, causes = parting(
        down[mode], kit.pysheds(ground).down, cells, (surface[mode], surface["fill"]), ground.elevation_m
    )
    assert (off <= 0.01).mean() >= share
    assert (off <= 0.05).mean() >= near
    assert len(causes) == (off > 0.01).sum()
    assert set(causes) <= {"edge", "flat", "tie"} | ({"cut"} if mode == "breach" else set())


def test_pyflwdir_parts_where_its_rule_does(srtm):
    """pyflwdir steps along the order of its flood, not down the steepest slope: within 5 % at three of four cells.

    Where it differs by more than 1 %, its step is less steep than ours on the same filled surface, or the ground flat.
    """
    ground, down, surface, cells = srtm
    theirs = kit.pyflwdir(ground).down
    off, causes = parting(down["fill"], theirs, cells, (surface["fill"],) * 2, ground.elevation_m)
    assert (off <= 0.05).mean() >= 0.75
    assert set(causes) <= {"edge", "flat", "tie", "other"}
    ncols = ground.elevation_m.shape[1]
    z, here = surface["fill"].ravel().astype(float), np.arange(ground.elevation_m.size)

    def slope(below):
        below = np.where(below.ravel() >= 0, below.ravel(), here)
        rows, cols = np.abs(np.array(np.divmod(below, ncols)) - np.divmod(here, ncols))
        return (z[here] - z[below]) / np.maximum(np.hypot(rows, cols), 1)

    part = (down["fill"] != theirs).ravel() & (theirs.ravel() >= 0) & (down["fill"].ravel() >= 0)
    assert (slope(theirs)[part] <= slope(down["fill"])[part] + 1e-9).all()


def test_pyflwdir_sums_our_directions_to_the_same_areas(srtm):
    library = pytest.importorskip("pyflwdir")
    ground, down, _, _ = srtm
    size = np.full(ground.elevation_m.shape[0], CELL_M)
    terrain = condition_and_route(ground.elevation_m, size, size, size**2)
    codes = np.array([64, 128, 1, 2, 4, 8, 16, 32, 0], np.uint8)[terrain.directions_grid]
    theirs = library.from_array(codes, ftype="d8", check_ftype=False).upstream_area(unit="cell")
    np.testing.assert_array_equal(terrain.area_grid / CELL_M**2, theirs)
    np.testing.assert_array_equal(accumulated(down["fill"]), theirs)
