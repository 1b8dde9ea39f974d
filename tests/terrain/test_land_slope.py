"""Land slope after Horn (1981)."""

import numpy as np
import pytest

from basinwright.terrain.land_slope import horn_slope_blocks


def slope(z, dx, dy, block_rows=256):
    dx, dy = np.broadcast_to(dx, len(z)), np.broadcast_to(dy, len(z))
    return np.vstack([block.copy() for _, block in horn_slope_blocks(z, dx, dy, block_rows)])


@pytest.mark.parametrize("azimuth", [0, 30, 45, 100, 225])
def test_a_plane_has_its_slope_up_to_the_rim(azimuth):
    east, north = np.sin(np.radians(azimuth)), np.cos(np.radians(azimuth))
    z = 300.0 + 0.12 * (north * -20.0 * np.arange(9)[:, None] + east * 10.0 * np.arange(8))
    np.testing.assert_allclose(slope(z, 10.0, 20.0), 12.0, rtol=1e-9)


def test_cell_sizes_are_those_of_each_row():
    dx = np.linspace(20.0, 30.0, 6)
    z = np.tile(np.arange(7) * 3.0, (6, 1))
    np.testing.assert_allclose(slope(z, dx, 30.0), np.repeat(300.0 / dx[:, None], 7, axis=1))


def test_the_published_weights():
    z = np.zeros((3, 3))
    z[0, 0], z[0, 1], z[1, 2] = 8.0, 4.0, 2.0  # by hand: east (2*2 - 8)/8 = -0.5, south -(8 + 2*4)/8 = -2
    assert slope(z, 1.0, 1.0)[1, 1] == pytest.approx(100 * np.hypot(0.5, 2.0))


def test_a_missing_neighbour_lies_on_the_line_through_its_opposite():
    z = np.add.outer(np.arange(7) * 1.0, np.arange(7) * 2.0)
    z[3, 3] = z[0, 4] = np.nan
    result = slope(z, 4.0, 4.0)
    np.testing.assert_array_equal(np.isnan(result), np.isnan(z))
    np.testing.assert_allclose(result[~np.isnan(z)], 100 * np.hypot(0.25, 0.5))
    lone = np.full((3, 3), np.nan)
    lone[1, 1] = 5.0
    assert slope(lone, 1.0, 1.0)[1, 1] == 0


@pytest.mark.parametrize("block_rows", [1, 4, 11])
def test_blocks_do_not_change_a_bit(block_rows):
    z = np.random.default_rng(0).normal(size=(11, 9))
    z[4, 4] = np.nan
    dx = np.linspace(9.0, 10.0, 11)
    np.testing.assert_array_equal(slope(z, dx, 10.0, block_rows), slope(z, dx, 10.0))
