"""Directions published elsewhere instead of our own."""

import numpy as np
import pytest
from hydrographies import routed
from projects import v_valley

from basinwright.kernels import EXIT, SINK, VOID
from basinwright.terrain import condition_and_route
from basinwright.terrain.encoding import AZIMUTH_NODATA, AZIMUTH_SINK, from_azimuth, to_azimuth
from basinwright.terrain.given import given_terrain

CODES = {azimuth: azimuth for azimuth in range(0, 360, 45)} | {65534: "exit", 65533: "sink"}
SIZE = np.full(40, 10.0)


def own(z):
    size = np.full(len(z), 10.0)
    return condition_and_route(z, size, size, size * size)


def given(z, azimuths, codes=CODES):
    masked = np.ma.masked_equal(azimuths, AZIMUTH_NODATA)
    size = np.full(len(z), 10.0)
    return given_terrain(z, size, size, size * size, masked, codes)


def test_our_own_directions_given_back_route_the_same():
    z = v_valley(40, 31, 0.1, 0.02)
    z[10:13, 5:8] = np.nan
    terrain = own(z)
    same, faults = given(z, terrain.azimuths())
    assert not faults
    for name in ("directions", "area_m2", "order", "conditioned_m", "step_um"):
        np.testing.assert_array_equal(getattr(same, name), getattr(terrain, name))


def test_any_numbers_may_stand_for_the_directions():
    z = v_valley(40, 31, 0.1, 0.02)
    terrain = own(z)
    recoded = terrain.azimuths() // 45 + 1
    recoded[terrain.directions_grid == EXIT] = 0
    same, faults = given(z, recoded, {i + 1: 45 * i for i in range(8)} | {0: "exit"})
    assert not faults
    np.testing.assert_array_equal(same.directions, terrain.directions)


def test_elevations_stay_as_they_are():
    z = v_valley(40, 31, 0.1, 0.02)
    azimuths = own(z).azimuths()
    z[20, 15] = 900.0  # a pit that nobody fills
    terrain, _ = given(z, azimuths)
    assert terrain.conditioned_grid[20, 15] == 900.0
    assert terrain.filled_cells == 0


def test_water_leaves_where_a_direction_leads_off_the_raster_or_into_a_void():
    z = np.ones((5, 5))
    z[2, 4] = np.nan
    azimuths = np.full((5, 5), 90)
    terrain, faults = given(z, azimuths)
    assert not faults
    codes = terrain.directions_grid
    assert (codes[[0, 1, 3, 4], 4] == EXIT).all()
    assert codes[2, 3] == EXIT
    assert terrain.area_grid[2, 3] == 400.0


def test_sinks_of_the_publisher():
    z = np.ones((5, 5))
    azimuths = np.full((5, 5), 90)
    azimuths[2, 2] = AZIMUTH_SINK
    terrain, _ = given(z, azimuths)
    assert terrain.directions_grid[2, 2] == SINK
    assert terrain.area_grid[2, 2] == 300.0
    assert terrain.area_grid[2, 4] == 200.0


def test_codes_outside_the_table_are_named_with_the_first_cell():
    z = np.ones((5, 5))
    azimuths = np.full((5, 5), 90)
    azimuths[3, 1] = azimuths[4, 0] = 77
    terrain, faults = given(z, azimuths)
    assert terrain is None
    (fault,) = faults
    assert "does not list (77)" in fault.what
    assert (fault.cells, fault.row, fault.col) == (2, 3, 1)


def test_a_hole_without_directions_is_a_fault_and_a_border_without_them_a_void():
    z = np.ones((6, 6))
    azimuths = np.full((6, 6), 90)
    azimuths[:, 5] = azimuths[0] = AZIMUTH_NODATA
    terrain, faults = given(z, azimuths)
    assert not faults
    assert (terrain.directions_grid[:, 5] == VOID).all()
    assert (terrain.directions_grid[1:, 4] == EXIT).all()
    azimuths[3, 2] = AZIMUTH_NODATA
    (fault,) = given(z, azimuths)[1]
    assert "without a direction" in fault.what
    assert (fault.cells, fault.row, fault.col) == (1, 3, 2)


def test_loops_are_counted_and_placed():
    z = np.ones((6, 6))
    azimuths = np.full((6, 6), 90)
    azimuths[1, 3] = 270  # two cells that send water to each other
    azimuths[3, 1], azimuths[3, 2], azimuths[4, 2], azimuths[4, 1] = 90, 180, 270, 0
    (fault,) = given(z, azimuths)[1]
    assert "2 loops" in fault.what
    assert (fault.cells, fault.row, fault.col) == (2, 1, 2)


def test_sinks_are_written_as_they_are_read():
    _, terrain = routed(v_valley(20, 15, 0.1, 0.02), sinks=np.eye(20, 15) > 0)
    azimuths = to_azimuth(terrain.directions_grid)
    assert np.count_nonzero(azimuths == AZIMUTH_SINK) == 15
    np.testing.assert_array_equal(from_azimuth(azimuths), terrain.directions_grid)


@pytest.mark.parametrize("meaning", ["exit", 0])
def test_an_exit_inside_the_raster_is_the_publishers_word(meaning):
    z = np.ones((5, 5))
    azimuths = np.full((5, 5), 90)
    azimuths[2, 2] = 7
    terrain, faults = given(z, azimuths, CODES | {7: meaning})
    assert not faults
    assert terrain.directions_grid[2, 2] == (EXIT if meaning == "exit" else 0)
