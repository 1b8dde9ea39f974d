"""Every cutting rule on a profile made by hand: cells of 10 m in a row, elevations, areas and cover as written."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from basinwright.paths import CoverOnGrid, CutRules, Paths, cut_segments

FT = 0.3048
CODES = ["11", "21", "41", "71"]
WATER, STREET, WOODS, GRASS = range(4)
SHEET_N = np.array([np.nan, 0.011, 0.40, 0.15])


def mccuen_spiess_m(n, slope):
    """McCuen and Spiess (1995), J. Hydraulic Engineering 121(3): 100 sqrt(S) / n, in feet."""
    return 100.0 * np.sqrt(slope) / n * FT


def rules(**changed):
    given_rules = {
        "stream_area_km2": 1.0,
        "sheet_limit_m": 100 * FT,
        "min_segment_m": 15.0,
        "slope_floor": 0.0005,
        "mccuen_spiess_m": mccuen_spiess_m,
        "bankfull_width_m": lambda area: np.full_like(area, 10.0),
    }
    return CutRules(**(given_rules | changed))


@pytest.fixture(scope="module")
def cut(landscape):
    """Cut one profile; the cover of a cell also covers `width` cells across, the rest of the raster is grass."""
    rows = 31
    grounds = {}

    def run(cover, z=None, area=None, width=rows, step_m=10.0, **changed):
        n = len(cover)
        if n not in grounds:
            grounds[n] = landscape(np.add.outer(np.zeros(rows), -np.arange(float(n))))
        ground = grounds[n]
        classes = np.full((rows, n), GRASS, np.int32)
        classes[rows // 2 - width // 2 : rows // 2 - width // 2 + width] = cover
        z = 200 - 0.5 * np.arange(n) if z is None else np.asarray(z, float)
        area = np.full(n, 0.01) if area is None else np.asarray(area, float)
        cells = ground.terrain.cells_at(np.full(n, rows // 2), np.arange(n))
        paths = Paths(np.array([0, n]), cells, np.arange(n) * step_m, np.arange(n) * step_m, z, area)
        return cut_segments(
            ground.grid, ground.terrain, paths, CoverOnGrid(classes, CODES, SHEET_N, np.arange(4) == 0),
            rules(**changed),
        )  # fmt: skip

    return run


def rows_of(cut_paths):
    s = cut_paths.segments
    return list(zip(s["regime"].tolist(), s["cover"].tolist(), s["to_m"].tolist(), strict=True))


def approx_rows(rows):
    return [(regime, cover, pytest.approx(to, abs=1e-9)) for regime, cover, to in rows]


def test_sheet_flow_is_100_ft_on_a_10_m_grid(cut):
    result = cut([STREET] * 11)
    assert rows_of(result) == [("sheet", "21", 30.48), ("shallow", "21", 100.0)]
    s = result.segments
    assert s["top_elevation_m"].tolist() == pytest.approx([200.0, 200 - 0.05 * 30.48])
    assert s["bottom_elevation_m"].tolist() == pytest.approx([200 - 0.05 * 30.48, 195.0])
    assert s["segment"].tolist() == [1, 2]
    assert s["roughness"].tolist() == pytest.approx([0.011, np.nan], nan_ok=True)
    assert not result.sheet_limited.any()
    assert result.no_channel.all()


# NRCS, National Engineering Handbook part 630, chapter 15 (2010), table 15-2: the limit for range, grass and woods.
@pytest.mark.parametrize(
    ("n", "slope", "printed_ft", "half_digit"),
    [
        (0.13, 0.01, 77, 0.5),
        (0.41, 0.01, 24, 0.5),
        (0.41, 0.05, 55, 0.5),
        (0.80, 0.01, 12.5, 0.05),
        (0.80, 0.05, 28, 0.5),
    ],
)
def test_published_sheet_limits_on_a_plane(cut, monkeypatch, n, slope, printed_ft, half_digit):
    monkeypatch.setitem(globals(), "SHEET_N", np.full(4, n))
    result = cut([GRASS] * 11, z=100 - slope * 10 * np.arange(11))
    assert result.segments["to_m"][0] / FT == pytest.approx(printed_ft, abs=half_digit)
    assert result.sheet_limited.all()


def test_sheet_limit_agrees_with_the_slope_and_roughness_of_its_own_reach(cut):
    # Woods for 5 m, then street; 2 % for 10 m, then 6 %: the limit is worked out from the reach that it ends.
    result = cut([WOODS] + [STREET] + [WOODS] * 9, z=[100, 99.8, *(99.8 - 0.6 * np.arange(1, 10))])
    s = result.segments
    length, n = s["to_m"][0], s["roughness"][0]
    assert 15 < length < 30.48
    assert n == pytest.approx((0.40 * 5 + 0.011 * 10 + 0.40 * (length - 15)) / length)
    slope = (100 - (99.8 - 0.06 * (length - 10))) / length
    assert length == pytest.approx(100 * np.sqrt(slope) / n * FT, rel=1e-12)
    assert (length > 20) == (s["cover"][0] == "41")


def test_flat_ground_takes_the_slope_floor_for_the_sheet_limit(cut):
    result = cut([GRASS] * 11, z=[100.0] * 11)
    assert result.segments["to_m"][0] == pytest.approx(100 * np.sqrt(0.0005) / 0.15 * FT)
    assert result.sheet_limited.all()


def test_sheet_flow_is_one_reach_whatever_cover_it_crosses(cut):
    result = cut([STREET, STREET, GRASS, STREET, STREET, STREET], z=200 - 5.0 * np.arange(6))
    assert rows_of(result) == [("sheet", "21", 30.48), ("shallow", "21", 50.0)]
    assert result.segments["roughness"][0] == pytest.approx((0.011 * 20.48 + 0.15 * 10) / 30.48)


def test_channel_begins_at_the_first_cell_with_the_stream_area(cut):
    result = cut([STREET] * 11, area=[0.1] * 6 + [1.0] * 5)
    assert rows_of(result) == [("sheet", "21", 30.48), ("shallow", "21", 60.0), ("channel", "21", 100.0)]
    assert not result.no_channel.any()
    assert result.segments["area_km2"].tolist() == [0.1, 0.1, 1.0]


def test_channel_ends_sheet_flow_and_may_begin_at_the_divide(cut):
    result = cut([STREET] * 6, area=[0.1, 0.1] + [1.0] * 4)
    assert rows_of(result) == [("sheet", "21", 20.0), ("channel", "21", 50.0)]
    assert not result.sheet_limited.any()
    assert rows_of(cut([STREET] * 6, area=[1.0] * 6)) == [("channel", "21", 50.0)]


def test_a_channel_that_begins_in_the_outlet_s_cell_has_no_length(cut):
    result = cut([STREET] * 6, area=[0.1] * 5 + [1.0])
    assert [row[0] for row in rows_of(result)] == ["sheet", "shallow"]
    assert result.no_channel.all()


def test_cover_changes_midway_between_cells(cut):
    result = cut([STREET] * 6 + [GRASS] * 6)
    assert rows_of(result)[1:] == [("shallow", "21", 55.0), ("shallow", "71", 110.0)]


def test_a_short_piece_joins_its_longer_neighbour(cut):
    # Shallow pieces of 24.52, 10 and 35 m.
    result = cut([STREET] * 6 + [WOODS] + [GRASS] * 4)
    assert rows_of(result)[1:] == [("shallow", "21", 55.0), ("shallow", "71", 100.0)]
    result = cut([STREET] * 8 + [WOODS] + [GRASS] * 3)
    assert rows_of(result)[1:] == [("shallow", "21", 85.0), ("shallow", "71", 110.0)]


def test_of_equal_neighbours_the_upstream_one_takes_it(cut):
    channel = [1.0] * 10
    result = cut([STREET] * 4 + [WOODS] + [GRASS] * 5, area=channel, step_m=8.0)
    # Lengths 28, 8 and 36: downstream. With 28, 8 and 28 (one grass cell less) upstream.
    assert rows_of(result) == approx_rows([("channel", "21", 28.0), ("channel", "71", 72.0)])
    result = cut([STREET] * 4 + [WOODS] + [GRASS] * 4, area=channel[:9], step_m=8.0)
    assert rows_of(result) == approx_rows([("channel", "21", 36.0), ("channel", "71", 64.0)])


def test_a_short_piece_between_equal_covers_leaves_no_cut(cut):
    result = cut([STREET] * 8 + [WOODS] + [STREET] * 4)
    assert rows_of(result)[1:] == [("shallow", "21", 120.0)]


def test_a_short_piece_without_a_neighbour_of_its_regime_stays(cut):
    result = cut([STREET] * 11, area=[0.1] * 4 + [1.0] * 7)
    assert rows_of(result) == [("sheet", "21", 30.48), ("shallow", "21", 40.0), ("channel", "21", 100.0)]


def test_a_joined_piece_has_the_cover_of_most_length(cut):
    # Three short pieces in a row, 10 m each, snowball into one; grass has 20 m of its 30.
    result = cut([GRASS, WOODS, GRASS, STREET, STREET, STREET, STREET], area=[1.0] * 7, min_segment_m=24.0)
    assert rows_of(result) == [("channel", "71", 25.0), ("channel", "21", 60.0)]


def test_a_tributary_cuts_where_it_raises_the_area_by_half(cut):
    area = np.array([2.0] * 5 + [3.0] * 5 + [4.49] * 5)
    result = cut([STREET] * 15, area=area)
    assert rows_of(result) == [("channel", "21", 50.0), ("channel", "21", 140.0)]
    assert result.segments["area_km2"].tolist() == [2.0, 3.0]  # of the cell at or next above the middle


def test_in_shallow_flow_a_tributary_must_be_a_flow_line_itself(cut):
    hillside = [0.0001, 0.0004, 0.001, 0.003, 0.01, 0.03, 0.1]
    # 0.099 raises the area by half but brings no tenth of the stream area of 1 km2; 0.2 does.
    area = [*hillside, *[0.11] * 3, *[0.209] * 3, *[0.409] * 3]
    result = cut([STREET] * 16, area=area)
    assert rows_of(result)[1:] == [("shallow", "21", 130.0), ("shallow", "21", 150.0)]


def test_a_lake_on_the_path(cut):
    cover = [STREET] * 6 + [WATER] * 8 + [GRASS] * 6
    z = [*(200 - 0.5 * np.arange(6)), *[197.0] * 8, *(196.5 - 0.5 * np.arange(6))]
    area = [0.1] * 4 + [1.0] * 16
    result = cut(cover, z, area)
    assert rows_of(result) == [
        ("sheet", "21", 30.48), ("shallow", "21", 40.0), ("channel", "21", 55.0), ("open_water", "11", 135.0),
        ("channel", "71", 190.0),
    ]  # fmt: skip
    assert result.segments["top_elevation_m"][3] == pytest.approx(197.25)


def test_water_above_the_channel_head_gives_way_to_shallow_flow_again(cut):
    cover = [STREET] * 6 + [WATER] * 8 + [GRASS] * 6
    z = [*(200 - 0.5 * np.arange(6)), *[197.0] * 8, *(196.5 - 0.5 * np.arange(6))]
    regimes = [row[0] for row in rows_of(cut(cover, z))]
    assert regimes == ["sheet", "shallow", "open_water", "shallow"]


def test_water_at_the_divide_and_at_the_outlet(cut):
    z = [197.0] * 5 + [196.0, 195.0, 194.0] + [193.0] * 4
    result = cut([WATER] * 5 + [STREET] * 3 + [WATER] * 4, z)
    assert rows_of(result) == [("open_water", "11", 45.0), ("shallow", "21", 75.0), ("open_water", "11", 110.0)]


@pytest.mark.parametrize(
    ("case", "changed"),
    [
        ("it falls", {"z": 200 - 0.006 * np.arange(20)}),  # 0.0006 on the whole way, floor 0.0005
        ("it is narrow", {"width": 3}),  # 30 m: not over three times 10 m
        ("its channel is wide", {"bankfull_width_m": lambda area: 110.0 * area**0}),  # 310 m across
        ("it is short", {"min_segment_m": 81.0}),
    ],
)
def test_no_open_water_where(cut, case, changed):
    cover = [STREET] * 6 + [WATER] * 8 + [STREET] * 6
    z = [*(200 - 0.5 * np.arange(6)), *[197.0] * 8, *(196.5 - 0.5 * np.arange(6))]
    arguments = {"cover": cover, "z": z, "area": [1.0] * 20} | changed
    assert "open_water" not in cut(**arguments).segments["regime"], case


@pytest.mark.parametrize("changed", [{}, {"z": 200 - 0.004 * np.arange(20)}, {"width": 5}, {"min_segment_m": 80.0}])
def test_open_water_just_inside_each_limit(cut, changed):
    cover = [STREET] * 6 + [WATER] * 8 + [STREET] * 6
    z = [*(200 - 0.5 * np.arange(6)), *[197.0] * 8, *(196.5 - 0.5 * np.arange(6))]
    arguments = {"cover": cover, "z": z, "area": [1.0] * 20} | changed
    assert rows_of(cut(**arguments))[1] == ("open_water", "11", 135.0)


def test_only_the_flat_part_of_a_water_class_is_open_water(cut):
    # A river of the water class runs down into a lake, leaves it over a fall and enters a second one.
    z = [*(200 - 1.0 * np.arange(6)), *[194.0] * 8, 190, 189, 188, *[187.0] * 6]
    result = cut([WATER] * 23, z, area=[1.0] * 23)
    assert rows_of(result) == [
        ("channel", "11", 55.0), ("open_water", "11", 135.0), ("channel", "11", 165.0), ("open_water", "11", 220.0),
    ]  # fmt: skip


def test_a_rough_lake_surface_is_flat_over_the_whole_run(cut):
    z = [*(200 - 1.0 * np.arange(6)), *[194.02] * 10, *[194.0] * 10]  # a step of 2 cm in 10 m: 0.002 there
    result = cut([STREET] * 6 + [WATER] * 20, z, area=[1.0] * 26)
    assert rows_of(result) == [("channel", "21", 55.0), ("open_water", "11", 250.0)]


def test_a_gap_in_the_cover_takes_the_nearest_class_of_the_path(cut):
    result = cut([STREET] * 6 + [-1] * 5 + [GRASS] * 5)
    # Cells 6, 7 and (of two equally near) 8 follow the street, 9 and 10 the grass.
    assert rows_of(result)[1:] == [("shallow", "21", 85.0), ("shallow", "71", 150.0)]


def test_a_class_without_sheet_roughness_takes_the_nearest(cut):
    result = cut([WATER] + [STREET] * 9)  # a pond too small to be open water
    assert result.segments["roughness"][0] == pytest.approx(0.011)
    assert result.segments["to_m"][0] == 30.48


def test_without_any_cover_there_is_no_sheet_flow(cut):
    assert rows_of(cut([-1] * 6)) == [("shallow", "", 50.0)]


def test_empty_and_single_cell_paths_have_no_segments(landscape):
    ground = landscape(np.add.outer(np.zeros(3), -np.arange(6.0)))
    cells = ground.terrain.cells_at([1] * 5, [2, 0, 1, 2, 3])
    paths = Paths(np.array([0, 0, 1, 5, 5]), cells, *[np.array([0.0, 0, 10, 20, 30])] * 2, -np.arange(5.0), np.ones(5))
    cover = CoverOnGrid(np.full((3, 6), STREET, np.int32), CODES, SHEET_N, np.arange(4) == 0)
    result = cut_segments(ground.grid, ground.terrain, paths, cover, rules())
    assert result.segments["outlet"].tolist() == [2]
    assert result.no_channel.tolist() == [False, True, False, False]
    nothing = cut_segments(
        ground.grid, ground.terrain, Paths(np.zeros(1, np.int64), cells[:0], *[np.empty(0)] * 4), cover, rules()
    )
    assert nothing.segments["outlet"].size == 0


ORDER = {"sheet": 0, "shallow": 1, "channel": 2}


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.data())
def test_any_profile(cut, data):
    n = data.draw(st.integers(2, 40))
    cover = data.draw(st.lists(st.integers(-1, 3), min_size=n, max_size=n))
    drops = data.draw(st.lists(st.sampled_from([0.0, 0.0, 0.001, 0.3, 4.0]), min_size=n, max_size=n))
    gains = data.draw(st.lists(st.sampled_from([0.001, 0.01, 0.2, 1.5]), min_size=n, max_size=n))
    z, area = 500 - np.cumsum(drops), np.cumsum(gains)
    least = data.draw(st.sampled_from([0.0, 12.0, 15.24, 33.0]))
    result = cut(cover, z, area, width=data.draw(st.sampled_from([1, 7])), min_segment_m=least)
    s = result.segments
    distance = np.arange(n) * 10.0

    assert s["from_m"][0] == 0.0
    assert s["to_m"][-1] == distance[-1]
    assert (s["from_m"][1:] == s["to_m"][:-1]).all()
    length = s["to_m"] - s["from_m"]
    assert (length > 0).all()
    assert (s["top_elevation_m"][1:] == s["bottom_elevation_m"][:-1]).all()
    assert s["top_elevation_m"] == pytest.approx(np.interp(s["from_m"], distance, z), rel=1e-12)
    assert s["bottom_elevation_m"] == pytest.approx(np.interp(s["to_m"], distance, z), rel=1e-12)
    assert (s["top_elevation_m"] >= s["bottom_elevation_m"]).all()

    regimes = [ORDER[regime] for regime in s["regime"] if regime != "open_water"]
    assert regimes == sorted(regimes)
    assert (s["regime"] == "sheet").sum() <= 1
    if "sheet" in s["regime"]:
        assert s["regime"][0] == "sheet"
        reach = length[0]
        slope = max((z[0] - np.interp(reach, distance, z)) / reach, 0.0005)
        limit = mccuen_spiess_m(s["roughness"][0], slope)
        assert reach == pytest.approx(limit, rel=1e-9) if result.sheet_limited[0] else reach <= limit * (1 + 1e-12)
    assert (np.isnan(s["roughness"]) == (s["regime"] != "sheet")).all()

    for i in np.flatnonzero(length < least):
        beside = [j for j in (i - 1, i + 1) if 0 <= j < length.size]
        assert s["regime"][i] == "sheet" or all(s["regime"][j] != s["regime"][i] for j in beside)
    if all(code >= 0 for code in cover):
        edges = np.concatenate([[0], 0.5 * (distance[1:] + distance[:-1]), distance[-1:]])
        for i in range(length.size):
            inside = np.minimum(edges[1:], s["to_m"][i]) - np.maximum(edges[:-1], s["from_m"][i])
            share = np.bincount(cover, np.maximum(inside, 0), minlength=4)
            assert share[CODES.index(s["cover"][i])] == pytest.approx(share.max())
    upper = np.searchsorted(distance, 0.5 * (s["from_m"] + s["to_m"]), side="right") - 1
    assert s["area_km2"].tolist() == area[upper].tolist()
