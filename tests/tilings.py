"""Terrains cut into tiles, for tests: small ones of every kind, and what must not depend on the cut."""

from pathlib import Path

import numpy as np
from hypothesis import strategies as st
from scipy import ndimage

from basinwright.terrain.tiled import condition_and_route_tiles
from basinwright.terrain.tiling import Tiling
from basinwright.terrain.workspace import Workspace

SAME = ("conditioned_m", "directions", "area_m2", "step_um", "row_area_m2")
SAME_FACTS = (
    "data_cells", "flat_cells", "filled_cells", "filled_volume_m3", "deepest_fill_m", "cut_cells", "cut_volume_m3",
    "deepest_cut_m", "raised_pits", "pits", "breached", "breached_second", "failed", "largest_rounding_m",
)  # fmt: skip


def cell_sizes(nrows, geographic=False):
    """Widths, heights [m] and areas [m2] of rows; geographic ones narrow towards the north."""
    dy = np.full(nrows, 30.0)
    dx = 30.0 * np.cos(np.radians(60.0 - np.arange(nrows) * 0.02)) if geographic else dy.copy()
    return dx, dy, dx * dy


def workspace(folder: Path):
    (folder / "scratch").mkdir(parents=True)
    return Workspace(folder, folder / "scratch")


def by_tiles(folder: Path, z, tiling, sizes=None, **options):
    space = workspace(folder)
    np.save(folder / "elevation.npy", z)
    return condition_and_route_tiles(folder / "elevation.npy", *(sizes or cell_sizes(len(z))), tiling, space, **options)


def check_same(tiled, whole):
    for name in SAME:
        np.testing.assert_array_equal(getattr(tiled, name), getattr(whole, name), err_msg=name)
    for name in SAME_FACTS:
        assert getattr(tiled, name) == getattr(whole, name), name


@st.composite
def cut_terrains(draw):
    """Random ground of every kind, and a random way to cut it into tiles."""
    side = draw(st.integers(3, 40))
    most = min(40, 5 * side)
    nrows, ncols = draw(st.integers(1, most)), draw(st.integers(1, most))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    kind = draw(st.sampled_from(["noise", "terraces", "smooth", "lakes"]))
    z = rng.normal(100, 3, (nrows, ncols))
    if kind == "terraces":
        z = np.floor(z / 2)
    elif kind == "smooth":
        z = ndimage.gaussian_filter(z, 3) * 10
    elif kind == "lakes":  # wide flats that cross many rims, walled in or not
        z = np.where(ndimage.gaussian_filter(z, 2) > 100, np.rint(z), 97.0)
    z += draw(st.sampled_from([0.0, 0.5])) * np.arange(ncols)
    z[rng.random(z.shape) < draw(st.sampled_from([0.0, 0.02, 0.3]))] = np.nan
    z[rng.integers(nrows), rng.integers(ncols)] = 1.0

    def edges(size):
        inner = np.arange(side, size, side) + rng.integers(-1, 2, len(range(side, size, side)))
        return (0, *inner[(inner > 0) & (inner < size)].tolist(), size)

    return z.astype(draw(st.sampled_from([np.float32, np.float64]))), Tiling(edges(nrows), edges(ncols))
