"""Whole basins: closed forms, a slow walk over the directions as reference, independence of the other outlets."""

from collections import deque

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from basinwright.basins import delineate, measure
from basinwright.kernels import EXIT

D = 10.0
STEPS = [(-1, 0), (-1, 1), (0, 1), (1, 1), (1, 0), (1, -1), (0, -1), (-1, -1)]


def whole(ground, *cells):
    at = np.array([ground.cell(row, col) for row, col in cells], np.int32)
    basins = delineate(ground.terrain, at)
    return basins, measure(ground.grid, ground.terrain, ground.elevation_m, basins)


@pytest.mark.parametrize("azimuth", [180, 170, 160, 150, 135, 120])
def test_inclined_plane(landscape, azimuth):
    """Within 22.5 degrees of south every column is a basin; beyond, every diagonal, until the plane faces east."""
    row, col = np.mgrid[:30, :40]
    east, south = np.sin(np.radians(azimuth)), -np.cos(np.radians(azimuth))
    grade = 0.08
    ground = landscape(100 - grade * D * (east * col + south * row))
    _, m = whole(ground, (20, 30))
    assert m["basin_slope_pct"] == pytest.approx([100 * grade], rel=1e-9)
    diagonal = azimuth < 157.5
    step_m = D * np.sqrt(2) if diagonal else D
    assert m["cells"] == [21]
    assert m["area_km2"] == pytest.approx([21e-4])
    assert m["path_length_m"] == pytest.approx([20 * step_m], abs=1e-5)  # steps are whole micrometres
    fall = grade * D * 20 * (east + south if diagonal else south)
    assert m["relief_m"] == pytest.approx([fall], rel=1e-9)
    assert m["mean_elevation_m"] == pytest.approx([ground.elevation_m[20, 30] + fall / 2])
    x, y = ground.grid.xy([10], [20 if diagonal else 30])
    assert (m["centroid_x"], m["centroid_y"]) == (pytest.approx(x), pytest.approx(y))


def test_inclined_plane_on_oblong_cells(landscape):
    row, col = np.mgrid[:20, :30]
    ground = landscape(100 - 0.1 * (20 * col + 15 * row), cell=(20, 15))  # falls along the cells' diagonal most
    _, m = whole(ground, (12, 20))
    assert m["path_length_m"] == pytest.approx([12 * 25.0])
    assert m["area_km2"] == pytest.approx([13 * 300e-6])


def test_geographic_plane_has_the_ellipsoid_s_lengths_and_areas(landscape):
    """Against pyproj's geodesics, an independent implementation."""
    from pyproj import Geod

    size = 1 / 1200
    row, _ = np.mgrid[:60, :9]
    ground = landscape(1000.0 - 2.0 * row, cell=(size, size), corner=(-105.0, 40.0), crs="EPSG:4326")
    _, m = whole(ground, (50, 4))
    geod = Geod(ellps="WGS84")
    lon, lat = ground.grid.xy([0, 50], [4, 4])
    _, _, length = geod.inv(lon[0], lat[0], lon[1], lat[1])
    assert m["path_length_m"] == pytest.approx([length], rel=1e-6)
    west, east, south = -105 + 4 * size, -105 + 5 * size, 40 - 51 * size
    edge = np.linspace(40, south, 200)
    area, _ = geod.polygon_area_perimeter([west] * 200 + [east] * 200, [*edge, *edge[::-1]])
    assert m["area_km2"] == pytest.approx([abs(area) * 1e-6], rel=1e-6)


def test_v_valley(landscape):
    """Sides fall straight to the axis (cross slope 0.5, long slope 0.1): row r of the axis drains 21 (r + 1) cells."""
    row, col = np.mgrid[:41, :21]
    ground = landscape(100 + 0.5 * D * abs(col - 10) - 0.1 * D * row)
    basins, m = whole(ground, (30, 10), (12, 10), (30, 15))
    assert m["cells"].tolist() == [21 * 31, 21 * 13, 6]
    assert m["path_length_m"] == pytest.approx([10 * D + 30 * D, 10 * D + 12 * D, 5 * D])
    assert m["relief_m"] == pytest.approx([50 + 30, 50 + 12, 25])
    assert m["downstream_outlet"].tolist() == [-1, 0, 0]
    assert m["contact_cells"].tolist() == [19 + 2 * 31, 19 + 2 * 13, 1]
    assert m["filled_volume_m3"].tolist() == [0, 0, 0]
    # Two paths are equally long: the one with the smaller index, from the left, is taken.
    assert basins.farthest_cell[basins.outlet_label[0]] == ground.cell(0, 0)


def test_cone(landscape):
    """Each of the eight main rays from the peak of a cone is a basin; the peak goes to one of them."""
    row, col = np.mgrid[:31, :31]
    ground = landscape(100 - 0.2 * D * np.hypot(row - 15, col - 15))
    rays = [(15 + 7 * r, 15 + 7 * c) for r, c in STEPS]
    _, m = whole(ground, *rays)
    peak = m["cells"] == 8
    assert peak.sum() == 1
    assert m["cells"].sum() == 7 * 8 + 1
    step = np.array([np.hypot(r, c) * D for r, c in STEPS])
    assert m["path_length_m"] == pytest.approx(step * np.where(peak, 7, 6), abs=1e-5)
    assert m["relief_m"] == pytest.approx(0.2 * step * np.where(peak, 7, 6))


def test_stair(landscape):
    """Treads of three rows, risers of 2 m, between walls: flats are crossed, and the whole flight drains downstairs."""
    row, col = np.mgrid[:13, :7]
    ground = landscape(50 - 2.0 * (row // 3) + 100.0 * ((col == 0) | (col == 6) | (row == 0)))
    _, m = whole(ground, *[(11, col) for col in range(1, 6)])
    assert m["cells"].sum() == 12 * 7
    assert m["filled_volume_m3"].sum() == 0
    assert m["relief_m"].max() == pytest.approx(100 + 6)
    assert m["path_length_m"].max() >= 11 * D


def test_filled_volume_and_void_contact(landscape):
    row, _ = np.mgrid[:20, :11]
    z = 100 - 1.0 * row
    z[10, 5] -= 3.5  # neighbours below are at 89 m: a pit of 86.5 m
    z[3, 4] = np.nan
    ground = landscape(z)
    _, m = whole(ground, (12, 5))
    assert m["filled_volume_m3"] == pytest.approx([2.5 * 100])
    assert m["contact_cells"][0] >= 1
    _, inner = whole(ground, (15, 7))
    assert inner["contact_cells"].tolist() == [1]  # its own divide at the raster's edge


def test_outlets_on_one_cell_share_it_and_failed_ones_stay_empty(landscape):
    row, col = np.mgrid[:41, :21]
    ground = landscape(100 + 0.5 * D * abs(col - 10) - 0.1 * D * row)
    at = np.array([ground.cell(20, 10), -1, ground.cell(20, 10), ground.cell(8, 10), ground.cell(35, 10)], np.int32)
    basins = delineate(ground.terrain, at)
    m = measure(ground.grid, ground.terrain, ground.elevation_m, basins)
    assert basins.n_labels == 3
    assert m["downstream_outlet"].tolist() == [4, -1, 4, 0, -1]
    assert m["cells"].tolist() == [441, 0, 441, 189, 756]
    assert np.isnan(m["area_km2"][1])
    assert basins.outlet_label[1] == -1


def test_no_outlet_at_all(landscape):
    ground = landscape(np.arange(12.0).reshape(3, 4))
    basins = delineate(ground.terrain, np.array([-1, -1], np.int32))
    m = measure(ground.grid, ground.terrain, ground.elevation_m, basins)
    assert m["cells"].tolist() == [0, 0]
    assert m["downstream_outlet"].tolist() == [-1, -1]


def upstream_of(terrain, row, col):
    """Cells that drain through one, with their distance to it in micrometres, by a walk over the directions."""
    directions = terrain.directions_grid
    found = {(row, col): 0}
    todo = deque([(row, col)])
    while todo:
        r, c = todo.popleft()
        for code, (dr, dc) in enumerate(STEPS):
            a, b = r - dr, c - dc
            if 0 <= a < terrain.nrows and 0 <= b < terrain.ncols and directions[a, b] == code:
                found[a, b] = found[r, c] + int(terrain.step_um[a, code])
                todo.append((a, b))
    return found


random_terrain = arrays(
    np.float64, st.tuples(st.integers(4, 14), st.integers(4, 14)), elements=st.integers(0, 30).map(float)
)


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(random_terrain, st.data())
def test_whole_basins_are_what_a_slow_walk_finds_and_do_not_depend_on_other_outlets(landscape, z, data):
    holes = data.draw(arrays(bool, z.shape, elements=st.sampled_from([False] * 9 + [True])))
    z = np.where(holes, np.nan, z)
    if np.isnan(z).all():
        return
    size = 1 / 1200
    ground = landscape(z, cell=(size, size), corner=(10.0, 47.0), crs="EPSG:4326")
    valid = np.argwhere(~np.isnan(z))
    picked = [tuple(valid[i]) for i in data.draw(st.lists(st.integers(0, len(valid) - 1), min_size=1, max_size=6))]
    basins, together = whole(ground, *picked)
    for i, (row, col) in enumerate(picked):
        own, alone = whole(ground, (row, col))
        for name in together.keys() - {"downstream_outlet"}:
            assert together[name][i].tobytes() == alone[name][0].tobytes(), name
        assert basins.farthest_cell[basins.outlet_label[i]] == own.farthest_cell[0]
        found = upstream_of(ground.terrain, row, col)
        cells = np.array(list(found))
        inside = z[cells[:, 0], cells[:, 1]]
        assert together["cells"][i] == len(found)
        assert together["relief_m"][i] == inside.max() - inside.min()
        area = ground.grid.cell_area_m2[cells[:, 0]]
        assert together["area_km2"][i] == pytest.approx(area.sum() * 1e-6, rel=1e-9)
        assert together["mean_elevation_m"][i] == pytest.approx((inside * area).sum() / area.sum(), rel=1e-9, abs=1e-9)
        assert together["path_length_m"][i] == pytest.approx(max(found.values()) * 1e-6, abs=1e-9)
        padded = np.pad(np.isnan(z), 1, constant_values=True)
        touching = sum(padded[r : r + 3, c : c + 3].any() for r, c in found)
        assert together["contact_cells"][i] == touching
        x, y = ground.grid.xy((cells[:, 0] * area).sum() / area.sum(), (cells[:, 1] * area).sum() / area.sum())
        assert together["centroid_x"][i] == pytest.approx(x, abs=1e-9)
        assert together["centroid_y"][i] == pytest.approx(y, abs=1e-9)


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(random_terrain, st.data())
def test_nested_basins_are_consistent(landscape, z, data):
    ground = landscape(z)
    n = data.draw(st.integers(1, 8))
    at = np.array([ground.cell(data.draw(st.integers(0, z.shape[0] - 1)), data.draw(st.integers(0, z.shape[1] - 1)))
                   for _ in range(n)], np.int32)  # fmt: skip
    basins = delineate(ground.terrain, at)
    m = measure(ground.grid, ground.terrain, ground.elevation_m, basins)
    assert m["area_km2"] == pytest.approx(ground.terrain.area_m2[at] * 1e-6, rel=1e-12)
    for i, downstream in enumerate(m["downstream_outlet"]):
        if downstream >= 0:
            assert m["cells"][i] < m["cells"][downstream]
            assert m["path_length_m"][i] < m["path_length_m"][downstream]
            assert m["relief_m"][i] <= m["relief_m"][downstream]
        else:
            c = at[i]
            while ground.terrain.directions[c] < EXIT:
                step = STEPS[ground.terrain.directions[c]]
                c += step[0] * (z.shape[1] + 2) + step[1]
                assert c not in at
