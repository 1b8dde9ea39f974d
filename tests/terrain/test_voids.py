"""Interior voids: small ones are a membrane between the cells around them."""

import numpy as np
import pytest
from projects import inclined_plane

from basinwright.terrain.voids import fill_small_voids

SIZE = np.full(30, 10.0)


def filled(z, largest_m2, dx=SIZE, dy=SIZE):
    filled = z.copy()
    return filled, fill_small_voids(filled, dx, dy, dx * dy, largest_m2)


@pytest.mark.parametrize("stretch", [1.0, 0.6])
def test_a_plane_is_continued_exactly(stretch):
    plane = inclined_plane(30, 40, 0.1, 30.0)
    z = plane.copy()
    z[10:16, 20:27] = np.nan
    z[3, 3] = np.nan
    result, facts = filled(z, 1e4, dx=SIZE * stretch)
    np.testing.assert_allclose(result, plane, rtol=0, atol=1e-9)
    assert facts == {"voids_filled": 2, "void_cells_filled": 43, "voids_left": 0}


def test_voids_over_the_size_and_at_the_rim_stay():
    z = np.ones((30, 40))
    z[10:12, 10:12] = np.nan  # 400 m2
    z[20, 20:25] = np.nan  # 500 m2
    z[0, 5] = np.nan
    result, facts = filled(z, 400.0)
    assert not np.isnan(result[10:12, 10:12]).any()
    assert np.isnan(result[20, 20:25]).all()
    assert np.isnan(result[0, 5])
    assert facts == {"voids_filled": 1, "void_cells_filled": 4, "voids_left": 1}


def test_cells_that_touch_at_a_corner_are_one_void():
    z = np.ones((30, 40))
    z[10, 10] = z[11, 11] = np.nan
    assert filled(z, 150.0)[1]["voids_left"] == 1
    assert filled(z, 200.0)[1]["voids_filled"] == 1


def test_the_membrane_has_no_pit_or_peak_of_its_own():
    rng = np.random.default_rng(1)
    z = rng.normal(0, 5, (30, 40))
    around = z[8:18, 8:21].copy()
    z[9:17, 9:20] = np.nan
    result, _ = filled(z, 1e5)
    inner = result[9:17, 9:20]
    around[1:-1, 1:-1] = np.nan
    assert np.nanmin(around) < inner.min()
    assert inner.max() < np.nanmax(around)
    middle = inner[1:-1, 1:-1]
    beside = np.stack([inner[:-2, 1:-1], inner[2:, 1:-1], inner[1:-1, :-2], inner[1:-1, 2:]])
    assert ((middle >= beside.min(axis=0)) & (middle <= beside.max(axis=0))).all()
