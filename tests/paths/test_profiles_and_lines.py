"""Paths, their profiles, lines and stream reaches on terrain known on paper."""

from itertools import pairwise

import numpy as np
import pytest
import shapely
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from basinwright.basins import delineate, measure
from basinwright.kernels import EXIT
from basinwright.paths import CoverOnGrid, CutRules, cut_segments, profile_measures, trace
from basinwright.paths.lines import path_lines, segment_lines, stream_reaches

D = 10.0


def follow(ground, *cells):
    """Basins, paths and their measures; a cell of None is an outlet that failed."""
    at = np.array([-1 if cell is None else ground.cell(*cell) for cell in cells], np.int32)
    basins = delineate(ground.terrain, at)
    m = measure(ground.grid, ground.terrain, ground.elevation_m, basins)
    paths = trace(ground.terrain, basins)
    profile = profile_measures(ground.grid, ground.terrain, ground.elevation_m, paths, m["centroid_x"], m["centroid_y"])
    return basins, m, paths, profile


def plain_cut(ground, paths, stream_area_km2):
    classes = (np.indices(ground.terrain.directions_grid.shape).sum(axis=0) // 4 % 2).astype(np.int32)
    cover = CoverOnGrid(classes, ["21", "41"], np.array([0.011, 0.4]), np.zeros(2, bool))
    rules = CutRules(
        stream_area_km2, 30.48, 15.24, 0.0005, lambda n, s: 0.3048 * 100 * np.sqrt(s) / n, lambda area: area
    )
    return cut_segments(ground.grid, ground.terrain, paths, cover, rules).segments


@pytest.fixture(scope="module")
def valley(landscape):
    """Sides fall at 0.5 to an axis that falls at 0.1: row r of the axis drains 21 (r + 1) cells of 100 m2."""
    row, col = np.mgrid[:41, :21]
    return landscape(100 + 0.5 * D * abs(col - 10) - 0.1 * D * row)


def test_v_valley(valley):
    _, m, paths, profile = follow(valley, (30, 10))
    assert paths.length_m == pytest.approx([400.0])
    assert profile["path_length_m"].tolist() == m["path_length_m"].tolist()
    assert profile["path_slope_pct"] == pytest.approx([100 * (50 + 30) / 400])
    # From the outlet: 40 m up the axis (4 m), and 340 m: the axis (30 m) and 40 m up the side (20 m).
    assert profile["path_slope_1085_pct"] == pytest.approx([100 * (50 - 4) / 300])
    assert paths.area_km2[-1] == pytest.approx(21 * 31e-4)
    assert paths.area_km2[10] == pytest.approx(21e-4)
    # The centroid lies on the axis in row 15.
    assert profile["centroid_length_m"] == pytest.approx([150.0])
    assert profile["deepest_fill_m"].tolist() == [0.0]
    segments = plain_cut(valley, paths, stream_area_km2=21 * 6e-4 - 1e-9)
    channel = segments["regime"] == "channel"
    assert segments["from_m"][channel][0] == pytest.approx(100 + 5 * D)
    fall = segments["top_elevation_m"] - segments["bottom_elevation_m"]
    length = segments["to_m"] - segments["from_m"]
    assert fall[channel] / length[channel] == pytest.approx(0.1)


@pytest.mark.parametrize("azimuth", [180, 165, 150, 135])
def test_inclined_plane(landscape, azimuth):
    row, col = np.mgrid[:40, :60]
    east, south = np.sin(np.radians(azimuth)), -np.cos(np.radians(azimuth))
    ground = landscape(500 - 0.05 * D * (east * col + south * row))
    _, _, paths, profile = follow(ground, (30, 45))
    along = 0.05 * ((east + south) / np.sqrt(2) if azimuth < 157.5 else south)
    assert profile["path_slope_pct"] == pytest.approx([100 * along], rel=1e-5)  # elevations are float32
    assert profile["path_slope_1085_pct"] == pytest.approx([100 * along], rel=1e-5)
    assert profile["centroid_length_m"] == pytest.approx(paths.length_m / 2, abs=1e-5)
    segments = plain_cut(ground, paths, stream_area_km2=20.5e-4)
    assert segments["to_m"][-1] == paths.length_m[0]
    slope = (segments["top_elevation_m"] - segments["bottom_elevation_m"]) / (segments["to_m"] - segments["from_m"])
    assert slope == pytest.approx(along, rel=1e-3)
    channel = np.flatnonzero(segments["regime"] == "channel")[0]
    assert segments["from_m"][channel] == pytest.approx(20 * D * (np.sqrt(2) if azimuth < 157.5 else 1), abs=1e-5)


def test_the_point_opposite_the_centroid_lies_between_cell_centres(landscape):
    row, col = np.mgrid[:3, :10]
    ground = landscape(100.0 - col + 0.01 * (row != 1))
    _, _, paths, _ = follow(ground, (1, 8))
    x, y = ground.grid.xy([1], [3.3])
    profile = profile_measures(ground.grid, ground.terrain, ground.elevation_m, paths, x, y)
    assert profile["centroid_length_m"] == pytest.approx([47.0], abs=0.2)


def test_fill_under_the_path(landscape):
    row, col = np.mgrid[:20, :11]
    z = 100 - 1.0 * row
    z[10] = 96.0  # an embankment between two walls: the ground above it fills to its crown
    z[(col == 0) | (col == 10)] += 50
    ground = landscape(z)
    _, _, paths, profile = follow(ground, (18, 5), (4, 5))
    assert profile["deepest_fill_m"] == pytest.approx([96 - 91, 0.0])
    assert (np.diff(paths.elevation_m[: paths.bounds[1]]) <= 0).all()


def test_failed_outlets_have_empty_paths(valley):
    basins, _, paths, profile = follow(valley, (30, 10), None, (0, 0))
    assert np.diff(paths.bounds).tolist() == [41, 0, 1]
    for name in ("path_slope_pct", "path_slope_1085_pct"):
        assert np.isnan(profile[name]).tolist() == [False, True, True]
    assert np.isnan(profile["centroid_length_m"]).tolist() == [False, True, False]
    lines = path_lines(valley.grid, valley.terrain, paths)
    assert [line is None for line in lines] == [False, True, True]
    assert basins.outlet_label.tolist() == [1, -1, 0]


def test_path_and_segment_lines(valley):
    _, _, paths, _ = follow(valley, (30, 10), (12, 10))
    lines = path_lines(valley.grid, valley.terrain, paths)
    assert shapely.length(lines) == pytest.approx([400.0, 220.0])
    (x,), (y,) = valley.grid.xy([30], [10])
    assert shapely.get_coordinates(lines[0])[-1].tolist() == [x, y]
    segments = plain_cut(valley, paths, stream_area_km2=0.01)
    parts = segment_lines(valley.grid, valley.terrain, paths, segments)
    assert shapely.length(parts) == pytest.approx(segments["to_m"] - segments["from_m"])
    for i in (0, 1):
        own = np.flatnonzero(segments["outlet"] == i)
        vertices = [shapely.get_coordinates(part) for part in parts[own]]
        for above, below in pairwise(vertices):
            assert above[-1].tolist() == below[0].tolist()
        joined = np.vstack([vertices[0], *[v[1:] for v in vertices[1:]]])
        assert shapely.LineString(joined).hausdorff_distance(lines[i]) == pytest.approx(0, abs=1e-6)


def test_segment_lines_on_a_geographic_grid_are_cut_at_true_distances(landscape):
    """The cut lies where pyproj's geodesic along the meridian says."""
    from pyproj import Geod

    size = 1 / 1200
    row, _ = np.mgrid[:30, :5]
    ground = landscape(1000.0 - 3.0 * row, cell=(size, size), corner=(8.0, 47.0), crs="EPSG:4326")
    _, _, paths, _ = follow(ground, (25, 2))
    cut = {"outlet": np.array([0]), "from_m": np.array([150.0]), "to_m": np.array([1234.5])}
    (line,) = segment_lines(ground.grid, ground.terrain, paths, cut)
    (lon0, lat0), *_, (lon1, lat1) = shapely.get_coordinates(line)
    divide = ground.grid.xy(0, 2)
    geod = Geod(ellps="WGS84")
    assert geod.inv(*divide, lon0, lat0)[2] == pytest.approx(150.0, abs=0.01)
    assert geod.inv(*divide, lon1, lat1)[2] == pytest.approx(1234.5, abs=0.01)


def test_streams_of_a_fork(landscape):
    """Two ditches that join: three reaches, each with the area at its lower end."""
    z = np.full((12, 9), 200.0)
    ditch = [[(1, 1), (2, 2), (3, 3), (4, 4)], [(1, 7), (2, 6), (3, 5), (4, 4)]]
    for arm in ditch:
        for i, cell in enumerate(arm):
            z[cell] = 100 - i
    for i, row in enumerate(range(5, 12)):
        z[row, 4] = 96 - i
    ground = landscape(z)
    area = ground.terrain.area_grid * 1e-6
    least = min(area[1, 1], area[1, 7])
    streams = stream_reaches(ground.grid, ground.terrain, least)
    order = [(1, 1), (1, 7), (4, 4)]
    firsts = [tuple(shapely.get_coordinates(line)[0]) for line in streams["geometry"]]
    assert firsts == [tuple(float(v) for v in ground.grid.xy(*cell)) for cell in order]
    assert streams["length_m"] == pytest.approx([3 * D * np.sqrt(2)] * 2 + [7 * D], abs=1e-5)
    assert streams["area_km2"].tolist() == [area[3, 3], area[3, 5], area[11, 4]]


@settings(max_examples=20, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.integers(0, 2**32 - 1))
def test_random_terrain(landscape, seed):
    rng = np.random.default_rng(seed)
    z = np.round(rng.normal(size=(24, 31)).cumsum(0).cumsum(1))
    z[rng.random(z.shape) < 0.02] = np.nan
    ground = landscape(z, cell=(1 / 3600, 1 / 3600), corner=(10.0, 60.0), crs="EPSG:4326")
    terrain = ground.terrain
    rows, cols = np.nonzero(~np.isnan(z))
    picked = [(int(rows[i]), int(cols[i])) for i in rng.choice(rows.size, 7)]
    _, m, paths, profile = follow(ground, *picked)
    segments = plain_cut(ground, paths, stream_area_km2=0.02)
    assert paths.length_m.tolist() == m["path_length_m"].tolist()
    for i, cell in enumerate(picked):
        # The same path, measures and segments when the outlet is alone.
        _, _, own_path, own_profile = follow(ground, cell)
        part = slice(paths.bounds[i], paths.bounds[i + 1])
        assert paths.cells[part].tolist() == own_path.cells.tolist()
        for name, values in own_profile.items():
            assert values[0].tobytes() == profile[name][i].tobytes(), name
        own_segments = plain_cut(ground, own_path, stream_area_km2=0.02)
        here = segments["outlet"] == i
        for name in own_segments.keys() - {"outlet"}:
            np.testing.assert_array_equal(own_segments[name], segments[name][here])
        length = own_segments["to_m"] - own_segments["from_m"]
        if length.size:
            assert length.sum() == pytest.approx(m["path_length_m"][i], rel=1e-12)
            assert own_segments["to_m"][-1] == m["path_length_m"][i]

    # Every step between channel cells belongs to one reach.
    streams = stream_reaches(ground.grid, terrain, 0.02)
    channel = (terrain.area_m2 >= 0.02e6) & (terrain.directions < EXIT)
    row, _ = terrain.rows_cols(np.flatnonzero(channel))
    steps_um = terrain.step_um[row, terrain.directions[channel]].sum()
    assert streams["length_m"].sum() == pytest.approx(steps_um * 1e-6, rel=1e-12)


def test_a_channel_begins_where_the_area_is_exactly_the_stream_area(landscape):
    ground = landscape(1000.0 - np.mgrid[:720, :3][0])
    _, _, paths, _ = follow(ground, (715, 1))
    segments = plain_cut(ground, paths, stream_area_km2=0.07)
    assert segments["from_m"][segments["regime"] == "channel"][0] == 6990.0
    assert stream_reaches(ground.grid, ground.terrain, 0.07)["length_m"].tolist() == [200.0] * 3
