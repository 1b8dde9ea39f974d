"""Lengths without the staircase of the grid, and profiles that never rise."""

import itertools
import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from projects import inclined_plane, make_project, numbers, read_table
from scipy.optimize import isotonic_regression

from basinwright import pipeline
from basinwright.basins import delineate
from basinwright.kernels import straight
from basinwright.paths.tracing import along, trace

EAST, SOUTH = (0, 1, 1, 1, 0, -1, -1, -1), (-1, -1, 0, 1, 1, 1, 0, -1)


def could_be_straight(codes):
    """Whether some line y = s x + t has all points in t <= y - s x < t + 1: all slopes between two points are tried."""
    if len(set(codes)) > 2 or (len(set(codes)) == 2 and (max(codes) - min(codes)) not in (1, 7)):
        return False
    points = [(0, 0)]
    for code in codes:
        points.append((points[-1][0] + 1, points[-1][1] + code % 2))
    slopes = {Fraction(q[1] - p[1], q[0] - p[0]) for p, q in itertools.combinations(points, 2)}
    return any(max(y - slope * x for x, y in points) - min(y - slope * x for x, y in points) < 1 for slope in slopes)


@given(st.lists(st.integers(0, 1), min_size=1, max_size=16), st.integers(0, 7))
def test_a_piece_is_the_longest_that_could_be_straight(turns, eighth):
    codes = [(eighth + turn) % 8 for turn in turns]
    longest = max(n for n in range(1, len(codes) + 1) if could_be_straight(codes[:n]))
    assert straight.straight_piece(np.array(codes, np.uint8), 0) == longest


@given(st.lists(st.integers(0, 7), min_size=1, max_size=12))
def test_any_chain(codes):
    longest = max(n for n in range(1, len(codes) + 1) if could_be_straight(codes[:n]))
    assert straight.straight_piece(np.array(codes, np.uint8), 0) == longest
    assert straight.straight_piece.py_func(np.array(codes, np.uint8), 0) == longest


def steps_of_line(azimuth_deg, cells, offset=0.0):
    """Directions of the steps from cell to cell along a straight line."""
    eighth = math.floor(azimuth_deg / 45)
    within = math.radians(azimuth_deg - 45 * eighth)
    axis, other = (eighth, eighth + 1) if eighth % 2 == 0 else (eighth + 1, eighth)
    slope = math.tan(within if eighth % 2 == 0 else math.pi / 4 - within)
    aside = np.floor(slope * np.arange(cells + 1) + offset)
    return np.where(np.diff(aside) > 0, other % 8, axis % 8).astype(np.uint8)


def raw_and_straight(codes, dx_m=10.0, dy_m=10.0):
    """Both lengths of a chain of steps on a raster that just holds it."""
    col, row = (np.concatenate([[0], np.cumsum(np.take(by, codes))]) for by in (EAST, SOUTH))
    row, col = row - row.min(), col - col.min()
    ncols = int(col.max()) + 1
    cells = ((row + 1) * (ncols + 2) + col + 1).astype(np.int32)
    directions = np.full((int(row.max()) + 3) * (ncols + 2), 9, np.uint8)
    directions[cells[:-1]] = codes
    diagonal = math.hypot(dx_m, dy_m)
    one = np.rint(np.array([dy_m, diagonal, dx_m, diagonal] * 2) * 1e6).astype(np.int64)
    step_um = np.tile(one, (int(row.max()) + 1, 1))
    bounds = np.array([0, cells.size])
    distance = straight.straight_distances(bounds, cells, directions, ncols, step_um)
    assert (np.diff(distance) > 0).all()
    return one[codes].sum() / 1e6, distance[-1], np.diff(distance)


@pytest.mark.parametrize("azimuth", range(0, 360, 15))
def test_a_straight_line_has_its_length_at_any_angle(azimuth):
    codes = steps_of_line(azimuth, 300, 0.3)
    raw, corrected, steps = raw_and_straight(codes)
    ends = math.hypot(10.0 * np.take(EAST, codes).sum(), 10.0 * np.take(SOUTH, codes).sum())
    assert corrected == pytest.approx(ends, rel=1e-7)  # steps are whole micrometres
    off_axis = math.radians(azimuth % 45)
    staircase = math.cos(off_axis) + math.tan(math.pi / 8) * math.sin(off_axis)  # by geometry
    assert raw / ends == pytest.approx(staircase, abs=0.005)
    if azimuth % 45 == 0:
        assert corrected == raw
        assert len(set(steps.round(9))) == 1


def test_on_cells_that_are_not_square():
    codes = steps_of_line(60, 200)
    _, corrected, _ = raw_and_straight(codes, 24.0, 30.0)
    assert corrected == pytest.approx(math.hypot(24 * np.take(EAST, codes).sum(), 30 * np.take(SOUTH, codes).sum()))


def test_a_corner_and_a_wiggle_keep_their_length():
    raw, corrected, _ = raw_and_straight(np.array([2] * 20 + [4] * 20, np.uint8))
    assert corrected == pytest.approx(raw, rel=1e-15)
    raw, corrected, _ = raw_and_straight(np.array([1, 3] * 20, np.uint8))  # up and down: no straight line
    assert corrected == pytest.approx(raw, rel=1e-15)


@given(st.lists(st.integers(0, 2), min_size=1, max_size=60))  # such a chain does not cross itself
def test_never_longer_than_the_steps_nor_shorter_than_the_way_between_its_ends(codes):
    raw, corrected, steps = raw_and_straight(np.array(codes, np.uint8))
    between = 10 * math.hypot(np.take(EAST, codes).sum(), np.take(SOUTH, codes).sum())
    assert between - 1e-6 <= corrected <= raw + 1e-6
    assert (steps >= 10 * math.cos(math.pi / 8) - 1e-6).all()


def oblique_valley(azimuth_deg, n=161, cell=10.0, side=0.3, along_slope=0.02):
    """A V valley through the raster's centre that falls towards an azimuth."""
    east = (np.arange(n) - n // 2)[None, :] * cell
    north = (n // 2 - np.arange(n))[:, None] * cell
    a = math.radians(azimuth_deg)
    downstream, across = east * math.sin(a) + north * math.cos(a), east * math.cos(a) - north * math.sin(a)
    return 1000 + side * np.abs(across) - along_slope * downstream, downstream


@pytest.mark.parametrize("azimuth", [90, 97, 105, 112.5, 120, 128, 135])
def test_valleys_at_all_angles(landscape, azimuth):
    """The path along a straight valley: exact within half a percent; the raw one as much too long as geometry says."""
    z, downstream = oblique_valley(azimuth)
    ground = landscape(z)
    half = 60  # steps to either side of the centre, along the axis
    a = math.radians(azimuth)
    row, col = (80 + round(-half * math.cos(a)), 80 + round(half * math.sin(a)))
    basins = delineate(ground.terrain, np.array([ground.cell(row, col)], np.int32))
    for correction in ("none", "straight"):
        paths = trace(ground.terrain, basins, correction)
        rows, cols = ground.terrain.rows_cols(paths.cells)
        on_axis = np.flatnonzero(np.hypot(rows - (160 - row), cols - (160 - col)) < 1.5)[0]
        length = paths.distance_m[-1] - paths.distance_m[on_axis]
        true = downstream[row, col] - downstream[rows[on_axis], cols[on_axis]]
        if correction == "straight":
            assert length == pytest.approx(true, rel=0.005)
            assert paths.raw_m[-1] >= paths.distance_m[-1]
        else:
            off = math.radians(azimuth - 90) if azimuth <= 112.5 else math.radians(135 - azimuth)
            expected = math.cos(off) + math.tan(math.pi / 8) * math.sin(off)
            assert length / true == pytest.approx(expected, abs=0.008)


def test_planes_drift_and_no_correction_of_the_chain_mends_that(landscape):
    """On a plane every step goes the same way: nothing to straighten. What is left is 1 / cos of the angle between."""
    ground = landscape(inclined_plane(41, 41, 0.05, 112.5 - 0.5))
    basins = delineate(ground.terrain, np.array([ground.cell(20, 39)], np.int32))
    paths = trace(ground.terrain, basins, "straight")
    assert paths.distance_m.tolist() == paths.raw_m.tolist()


@given(st.lists(st.integers(0, 30), min_size=1, max_size=40), st.integers(0, 2**32 - 1))
def test_falling_is_isotonic_regression(elevations, seed):
    """scipy's isotonic regression with the same weights."""
    z = np.array(elevations, float)
    distance = np.concatenate([[0], np.cumsum(np.random.default_rng(seed).uniform(5, 15, z.size - 1))])
    ours = straight.falling(np.array([0, z.size]), distance, z)
    if z.size > 1:
        middle = np.concatenate([[0], 0.5 * (distance[1:] + distance[:-1]), [distance[-1]]])
        theirs = isotonic_regression(z, weights=np.diff(middle), increasing=False).x
        np.testing.assert_allclose(ours, theirs, atol=1e-9)
    ordered = np.sort(z)[::-1]
    assert straight.falling(np.array([0, z.size]), distance, ordered).tobytes() == ordered.tobytes()


def test_profile_of_conditioned_terrain_is_that_terrain(landscape):
    rng = np.random.default_rng(4)
    ground = landscape(rng.normal(size=(40, 40)).cumsum(0).cumsum(1))
    outlet = ground.terrain.order[-1:].astype(np.int32)
    paths = trace(ground.terrain, delineate(ground.terrain, outlet))
    assert paths.elevation_m.tolist() == ground.terrain.conditioned_m[paths.cells].tolist()
    distance, raw, _, _ = along(ground.terrain, paths.bounds, paths.cells)
    assert distance is raw


def test_a_run_with_corrected_lengths(tmp_path):
    """Length, segments and retime go by the corrected distance; the raw one stands beside it."""
    z, _ = oblique_valley(112.5)
    at = (80 + 23, 80 + 55)
    rows = {}
    for correction in ("none", "straight"):
        file = make_project(
            tmp_path / correction, z, {"A": at}, overrides={"terrain": {"length_correction": correction}}
        )
        run = pipeline.run(file, summary_only=True).folder
        rows[correction] = read_table(run, "outlets")[0]
        to_m = numbers(read_table(run, "segments"), "to_m")
        assert to_m[-1] == float(rows[correction]["path_length_m"])
        before = (run / "outlets.csv").read_bytes(), (run / "segments.csv").read_bytes()
        pipeline.retime(run)
        assert before == ((run / "outlets.csv").read_bytes(), (run / "segments.csv").read_bytes())
    raw, corrected = rows["none"], rows["straight"]
    assert raw["path_length_m"] == raw["path_length_raw_m"] == corrected["path_length_raw_m"]
    assert 0.92 < float(corrected["path_length_m"]) / float(raw["path_length_m"]) < 0.96
    assert float(corrected["tc_h"]) < float(raw["tc_h"])
    assert float(corrected["path_slope_pct"]) > float(raw["path_slope_pct"])
