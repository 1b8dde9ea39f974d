"""Basins, longest paths and time-area curves of terrain routed by tiles: the bits of the same terrain in one."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from tilings import by_tiles, cell_sizes, cut_terrains, workspace

from basinwright.basins import delineate
from basinwright.basins.time_area import farthest_in_time, time_area_curves, travel_times_us
from basinwright.terrain import condition_and_route


def uneven(rows, length_m, fall_m, area_km2, source):
    """Any time that differs from step to step."""
    return (length_m + 7.0 * fall_m + np.where(source, 11.0, 3.0)) / 3600.0 / (1.0 + area_km2)


@settings(max_examples=20, deadline=None)
@given(case=cut_terrains(), count=st.integers(0, 12), seed=st.integers(0, 99))
def test_labels_paths_and_curves_do_not_depend_on_the_tiling(tmp_path_factory, case, count, seed):
    z, tiling = case
    sizes = cell_sizes(len(z), geographic=True)
    folder = tmp_path_factory.mktemp("basins")
    whole, tiled = condition_and_route(z, *sizes), by_tiles(folder / "routing", z, tiling, sizes)
    data = np.flatnonzero(whole.area_m2 > 0)
    cells = np.random.default_rng(seed).choice(data, count).astype(np.int32)  # the same cell twice, now and then
    if count > 3:
        cells[0], cells[1] = -1, whole.area_m2.argmax()
    one, many = delineate(whole, cells), delineate(tiled, cells, workspace(folder / "basins"))
    for name, expected in vars(one).items():
        np.testing.assert_array_equal(getattr(many, name), expected, err_msg=name)
    if len(tiling) > 1 or count:
        whole_us = travel_times_us(whole, uneven)
        tiled_us = travel_times_us(tiled, uneven, workspace(folder / "curves"))
        np.testing.assert_array_equal(farthest_in_time(tiled, many, tiled_us), farthest_in_time(whole, one, whole_us))
        expected = time_area_curves(whole, one, whole_us)
        curves = time_area_curves(tiled, many, tiled_us)
        for name, values in expected.items():
            np.testing.assert_array_equal(curves[name], values, err_msg=name)
