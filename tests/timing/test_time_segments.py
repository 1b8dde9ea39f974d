"""Timing of segments: the handbook's example, what stands and what is computed, marks, refusals."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.errors import RangeError
from basinwright.timing import (
    BankfullRelation,
    SegmentTimes,
    bankfull_relation,
    hydraulic_radius_m,
    jarrett_roughness_n,
    manning_velocity_mps,
    shallow_coefficients_mps,
    sheet_flow_time_h,
    sum_by_outlet,
    time_segments,
)

FT = 0.3048
NAN = float("nan")
USA = bankfull_relation("usa")
DEFAULTS = {"two_year_depth_mm": 91.44, "relation": USA}


def rows(**columns: Any) -> dict[str, Any]:
    """Segments of outlet 0, each 100 m long and falling 2 m unless said otherwise."""
    count = len(columns["regime"])
    to_m = np.cumsum(np.full(count, 100.0))
    return {
        "outlet": np.zeros(count, dtype=int),
        "from_m": to_m - 100.0,
        "to_m": to_m,
        "top_elevation_m": 500.0 - 2.0 * np.arange(count),
        "bottom_elevation_m": 498.0 - 2.0 * np.arange(count),
        "area_km2": np.full(count, 5.0),
        **columns,
    }


def time(segments: dict[str, Any], **options: Any) -> SegmentTimes:
    return time_segments(segments, **{**DEFAULTS, **options})


def test_handbook_example_from_elevations() -> None:
    """Technical Release 55 (1986), example 3-1: 0.30, 0.24 and 0.99 h, 1.53 h in all."""
    times = time(
        rows(
            regime=["sheet", "shallow", "channel"],
            from_m=np.array([0.0, 100.0, 1500.0]) * FT,
            to_m=np.array([100.0, 1500.0, 8800.0]) * FT,
            top_elevation_m=np.array([51.5, 50.5, 36.5]) * FT,
            bottom_elevation_m=np.array([50.5, 36.5, 0.0]) * FT,
            roughness=[0.24, NAN, 0.05],
            hydraulic_radius_m=[NAN, NAN, 0.957 * FT],
            shallow_category=["", "grassed_waterway", ""],
        )
    )
    assert times.travel_time_h == pytest.approx([0.30, 0.24, 0.99], abs=0.005)
    assert sum_by_outlet([0, 0, 0], times.travel_time_h, 1)[0] == pytest.approx(1.53, abs=0.005)
    assert times.slope == pytest.approx([0.01, 0.01, 0.005])


class TestSheetReach:
    def test_rows_are_timed_as_one_reach(self) -> None:
        """n 0.1 and 0.4 over 10 and 30 m, falling 1 m in all: one reach of 40 m, n 0.325, slope 0.025."""
        times = time(
            rows(
                regime=["sheet", "sheet"],
                from_m=[0.0, 10.0],
                to_m=[10.0, 40.0],
                top_elevation_m=[10.0, 9.9],
                bottom_elevation_m=[9.9, 9.0],
                roughness=[0.1, 0.4],
            )
        )
        whole = float(sheet_flow_time_h(40.0, 0.325, 91.44, 0.025))
        assert times.travel_time_h == pytest.approx([0.25 * whole, 0.75 * whole])
        assert times.velocity_mps == pytest.approx([40.0 / 3600.0 / whole] * 2)
        assert times.slope == pytest.approx([0.025, 0.025])
        assert times.roughness.tolist() == [0.1, 0.4]
        assert all("one reach" in text for text in times.basis)

    @given(st.lists(st.floats(1.0, 30.0), min_size=1, max_size=6), st.floats(0.01, 5.0))
    @settings(max_examples=40, deadline=None)
    def test_cutting_the_reach_changes_nothing(self, lengths: list[float], fall: float) -> None:
        to_m = np.cumsum(lengths)
        from_m = np.concatenate([[0.0], to_m[:-1]])
        times = time(
            rows(
                regime=["sheet"] * len(lengths),
                from_m=from_m,
                to_m=to_m,
                top_elevation_m=100.0 - fall * from_m / to_m[-1],
                bottom_elevation_m=100.0 - fall * to_m / to_m[-1],
                roughness=[0.24] * len(lengths),
            ),
            slope_floor=1e-9,
        )
        whole = sheet_flow_time_h(to_m[-1], 0.24, 91.44, fall / to_m[-1])
        assert times.travel_time_h.sum() == pytest.approx(float(whole), rel=1e-9)

    def test_a_given_slope_counts_with_its_length(self) -> None:
        times = time(rows(regime=["sheet", "sheet"], roughness=[0.2, 0.2], slope=[0.06, NAN]))
        assert times.slope == pytest.approx([0.06, 0.04])
        assert times.travel_time_h.sum() == pytest.approx(float(sheet_flow_time_h(200.0, 0.2, 91.44, 0.04)))

    def test_floor_holds_for_the_reach_not_for_its_rows(self) -> None:
        segments = rows(
            regime=["sheet", "sheet"], roughness=[0.2, 0.2], top_elevation_m=[1.0, 1.0], bottom_elevation_m=[1.0, 0.0]
        )
        assert not time(segments).floored.any()
        assert time(segments, slope_floor=0.01).floored.tolist() == [True, True]
        assert time(segments, slope_floor=0.01).slope.tolist() == [0.01, 0.01]

    def test_roughness_of_the_cover_fills_in(self) -> None:
        times = time(rows(regime=["sheet", "sheet"], roughness=[0.1, NAN], sheet_n=[0.8, 0.3]))
        assert times.roughness.tolist() == [0.1, 0.3]

    def test_two_year_depth_by_outlet(self) -> None:
        times = time(
            rows(regime=["sheet", "sheet"], roughness=[0.2, 0.2], outlet=[0, 2]), two_year_depth_mm=[50.0, NAN, 200.0]
        )
        assert times.travel_time_h[0] / times.travel_time_h[1] == pytest.approx(2.0)  # root of 4


class TestChannel:
    def test_section_from_the_relation_at_both_stages(self) -> None:
        times = time(rows(regime=["channel"], area_km2=[5.0]), channel_roughness=0.04)
        width, depth = 2.70 * 5.0**0.352, 0.30 * 5.0**0.213
        assert (times.bankfull_width_m[0], times.bankfull_depth_m[0]) == pytest.approx((width, depth))
        assert times.hydraulic_radius_m[0] == pytest.approx(width * depth / (width + 2 * depth))
        assert times.hydraulic_radius_half_m[0] == pytest.approx(width * depth / 2 / (width + depth))
        assert times.velocity_half_mps[0] == pytest.approx(
            float(manning_velocity_mps(times.hydraulic_radius_half_m[0], 0.02, 0.04))
        )
        assert times.travel_time_h[0] == pytest.approx(100.0 / times.velocity_mps[0] / 3600.0)
        assert times.travel_time_half_h[0] == pytest.approx(100.0 / times.velocity_half_mps[0] / 3600.0)
        assert times.travel_time_half_h[0] > times.travel_time_h[0]

    def test_given_values_stand(self) -> None:
        times = time(
            rows(
                regime=["channel"] * 4,
                slope=[0.003, NAN, NAN, NAN],
                roughness=[NAN, 0.1, NAN, NAN],
                hydraulic_radius_m=[NAN, NAN, 0.9, NAN],
                hydraulic_radius_half_m=[NAN, NAN, NAN, 0.2],
            )
        )
        assert times.slope == pytest.approx([0.003, 0.02, 0.02, 0.02])
        assert times.roughness.tolist() == [0.045, 0.1, 0.045, 0.045]
        assert times.hydraulic_radius_m[2] == 0.9
        assert times.hydraulic_radius_half_m[3] == 0.2
        assert times.basis[0] == "Manning, Bieger et al. (2015), USA, n of the project; slope given"
        assert times.basis[1].endswith("n given")
        assert "radius given" in times.basis[2]

    def test_half_stage_of_a_given_radius_keeps_the_proportion(self) -> None:
        plain = time(rows(regime=["channel"]))
        times = time(rows(regime=["channel"], hydraulic_radius_m=[0.9]))
        ratio = plain.hydraulic_radius_half_m[0] / plain.hydraulic_radius_m[0]
        assert times.hydraulic_radius_half_m[0] == pytest.approx(0.9 * ratio)

    def test_roughness_by_row(self) -> None:
        """A roughness is needed of channels only; a cover's sheet and shallow values touch no channel."""
        columns = {"shallow_category": ["pavement"] * 3, "sheet_n": [0.3] * 3, "roughness": [NAN, NAN, 0.2]}
        times = time(rows(regime=["shallow", "channel", "sheet"], **columns), channel_roughness=[NAN, 0.06, NAN])
        assert times.roughness == pytest.approx([20.328 * FT, 0.06, 0.2])
        assert [text.split(",")[0] for text in times.basis] == [
            "NEH 630 ch. 15 (2010) table 15-3", "Manning", "sheet flow",
        ]  # fmt: skip

    def test_jarrett_by_stage_and_outside_his_slopes(self) -> None:
        times = time(
            rows(regime=["channel"] * 4, slope=[0.02, 0.001, 0.08, 0.02], roughness=[NAN, NAN, NAN, 0.05]),
            channel_roughness="jarrett",
        )
        radius = times.hydraulic_radius_m[0]
        assert times.roughness[0] == pytest.approx(float(jarrett_roughness_n(0.02, radius)))
        n_half = jarrett_roughness_n(0.02, times.hydraulic_radius_half_m[0])
        assert times.velocity_half_mps[0] == pytest.approx(
            float(manning_velocity_mps(times.hydraulic_radius_half_m[0], 0.02, n_half))
        )
        assert times.roughness[1] == 0.045
        assert times.roughness[3] == 0.05
        assert times.out_of_jarrett_range.tolist() == [False, True, True, False]
        assert "below Jarrett" in times.basis[1]

    def test_supercritical_where_steep_and_smooth(self) -> None:
        """W 50 m, D 1 m, n 0.03: Froude 1 lies near slope 0.0094, from V = R^(2/3) S^0.5 / n = sqrt(g)."""
        wide = BankfullRelation("own", (50.0, 0.0), (1.0, 0.0))
        critical = (9.80665**0.5 * 0.03 / (50 / 52) ** (2 / 3)) ** 2
        times = time(
            rows(regime=["channel", "channel"], slope=[0.99 * critical, 1.01 * critical]),
            relation=wide,
            channel_roughness=0.03,
        )
        assert times.supercritical.tolist() == [False, True]

    def test_supercritical_at_half_depth_only(self) -> None:
        """W 1 m, D 5 m: R hardly falls with the depth, so half full is the faster in terms of critical."""
        narrow = BankfullRelation("own", (1.0, 0.0), (5.0, 0.0))
        critical_half = (np.sqrt(9.80665 * 2.5) * 0.03 / (2.5 / 6.0) ** (2 / 3)) ** 2
        critical_full = (np.sqrt(9.80665 * 5.0) * 0.03 / (5.0 / 11.0) ** (2 / 3)) ** 2
        assert critical_half < critical_full
        slope = [0.995 * critical_half, 1.005 * critical_half]
        times = time(rows(regime=["channel"] * 2, slope=slope), relation=narrow, channel_roughness=0.03)
        assert times.supercritical.tolist() == [False, True]

    def test_supercritical_at_half_depth_with_a_given_radius(self) -> None:
        """The given half-depth radius stands for the depth: V = R^(2/3) S^0.5 / n against sqrt(g R)."""
        critical = (np.sqrt(9.80665 * 0.3) * 0.03 / 0.3 ** (2 / 3)) ** 2
        narrow = BankfullRelation("own", (1.0, 0.0), (5.0, 0.0))
        slope = [0.99 * critical, 1.01 * critical]
        segments = rows(regime=["channel"] * 2, slope=slope, hydraulic_radius_half_m=[0.3] * 2)
        times = time(segments, relation=narrow, channel_roughness=0.03)
        assert times.supercritical.tolist() == [False, True]

    def test_supercritical_with_a_given_radius(self) -> None:
        times = time(rows(regime=["channel"], slope=[0.05], hydraulic_radius_m=[1.0]), channel_roughness=0.03)
        assert times.supercritical.tolist() == [True]

    def test_bankfull_range_mark(self) -> None:
        times = time(
            rows(regime=["channel", "channel", "shallow"], area_km2=[0.05, 5.0, 0.01], roughness=[NAN, NAN, 2.0])
        )
        assert times.out_of_bankfull_range.tolist() == [True, False, False]


class TestOtherRegimes:
    def test_shallow_by_category(self) -> None:
        keys = list(shallow_coefficients_mps())
        times = time(rows(regime=["shallow"] * 7, shallow_category=keys))
        assert times.roughness.tolist() == list(shallow_coefficients_mps().values())
        assert times.velocity_mps == pytest.approx(times.roughness * 0.02**0.5)
        assert [text.endswith(key) for text, key in zip(times.basis, keys, strict=True)] == [True] * 7

    def test_open_water_takes_the_wave_and_no_slope(self) -> None:
        times = time(
            rows(regime=["open_water"], top_elevation_m=[10.0], bottom_elevation_m=[10.0]), open_water_depth_m=2.0
        )
        assert times.velocity_mps[0] == pytest.approx((9.80665 * 2.0) ** 0.5)
        assert times.slope.tolist() == [0.0]
        assert not times.floored.any()
        assert np.isnan([times.roughness[0], times.bankfull_width_m[0], times.hydraulic_radius_m[0]]).all()

    def test_pipe_is_as_fast_half_full(self) -> None:
        times = time(rows(regime=["pipe"], hydraulic_radius_m=[0.15], roughness=[0.013]))
        assert times.velocity_mps[0] == pytest.approx(float(manning_velocity_mps(0.15, 0.02, 0.013)))
        assert times.velocity_half_mps[0] == times.velocity_mps[0]

    def test_lined_channel(self) -> None:
        times = time(
            rows(
                regime=["lined_channel"] * 2,
                hydraulic_radius_m=[0.4] * 2,
                hydraulic_radius_half_m=[NAN, 0.3],
                roughness=[0.015] * 2,
            )
        )
        assert times.hydraulic_radius_half_m.tolist() == [0.2, 0.3]

    def test_slope_floor(self) -> None:
        segments = rows(
            regime=["shallow"] * 3,
            roughness=[2.0] * 3,
            top_elevation_m=[10.0, 10.0, 9.0],
            bottom_elevation_m=[10.0, 9.0, 9.5],
        )
        assert set(time(segments).basis) == {"shallow flow, coefficient given"}
        times = time(segments, slope_floor=0.001)
        assert times.floored.tolist() == [True, False, True]
        assert times.slope == pytest.approx([0.001, 0.01, 0.001])
        assert time({**segments, "slope": [1e-5, NAN, NAN]}, slope_floor=0.001).slope[0] == 1e-5


@pytest.mark.parametrize(
    ("columns", "message"),
    [
        ({"regime": ["channel", "gutter"]}, "row 1: regime is 'gutter'"),
        ({"regime": ["channel", "channel"], "to_m": [100.0, 100.0]}, "row 1: to_m - from_m is 0"),
        ({"regime": ["channel", "sheet"]}, r"row 1 \(sheet\): roughness is empty"),
        ({"regime": ["channel", "shallow"]}, r"row 1 \(shallow\): roughness is empty"),
        ({"regime": ["channel", "shallow"], "shallow_category": ["", "lawn"]}, r"row 1 \(shallow\): roughness"),
        ({"regime": ["channel", "channel"], "area_km2": [1.0, 0.0]}, r"row 1 \(channel\): area_km2 is 0"),
        ({"regime": ["channel", "channel"], "roughness": [NAN, -1.0]}, r"row 1 \(channel\): roughness is -1"),
        ({"regime": ["channel", "channel"], "slope": [NAN, 0.0]}, r"row 1 \(channel\): slope is 0"),
        ({"regime": ["channel", "channel"], "hydraulic_radius_m": [NAN, 0.0]}, r"row 1 .*hydraulic_radius_m is 0"),
        ({"regime": ["channel", "channel"], "top_elevation_m": [9.0, NAN]}, "row 1: top_elevation_m or bottom"),
        ({"regime": ["channel", "pipe"], "hydraulic_radius_m": [NAN, 0.1]}, r"row 1 \(pipe\): roughness is empty"),
        ({"regime": ["channel", "pipe"], "roughness": [NAN, 0.013]}, r"row 1 \(pipe\): hydraulic_radius_m is empty"),
    ],
)
def test_impossible_rows_are_refused(columns: dict[str, Any], message: str) -> None:
    with pytest.raises(RangeError, match=message):
        time(rows(**columns))


def test_impossible_options_are_refused() -> None:
    segments = rows(regime=["sheet"], roughness=[0.2])
    with pytest.raises(RangeError, match="outlet 0: two_year_depth_mm is nan"):
        time(segments, two_year_depth_mm=[NAN])
    with pytest.raises(RangeError, match="slope_floor"):
        time(segments, slope_floor=0.0)
    with pytest.raises(RangeError, match="jarret"):
        time(rows(regime=["channel"]), channel_roughness="jarret")
    with pytest.raises(RangeError, match=r"row 0 \(channel\): channel_roughness is 0"):
        time(rows(regime=["channel"]), channel_roughness=0.0)
    with pytest.raises(RangeError, match="mean_depth_m"):
        time(rows(regime=["open_water"]), open_water_depth_m=-1.0)


def test_outlets_do_not_touch_each_other() -> None:
    """Three outlets in one call give the same bits as one by one."""
    rng = np.random.default_rng(7)
    regimes = np.array(["sheet", "sheet", "shallow", "channel", "open_water", "channel"] * 3)
    segments = rows(
        regime=regimes,
        outlet=np.repeat([0, 1, 2], 6),
        roughness=np.where(regimes == "sheet", 0.24, np.where(regimes == "shallow", 2.0, NAN)),
        top_elevation_m=100.0 + rng.uniform(0.0, 5.0, 18),
        bottom_elevation_m=100.0 - rng.uniform(0.0, 5.0, 18),
        area_km2=rng.uniform(0.1, 50.0, 18),
    )
    together = time(segments).columns()
    for outlet in range(3):
        mine = np.asarray(segments["outlet"]) == outlet
        alone = time({name: np.asarray(values)[mine] for name, values in segments.items()}).columns()
        for name, values in together.items():
            assert values[mine].astype(str).tolist() == alone[name].astype(str).tolist(), name


def test_no_rows() -> None:
    times = time(rows(regime=np.array([], dtype=str)))
    assert times.travel_time_h.shape == times.basis.shape == (0,)


def test_sum_by_outlet_without_rows_is_missing() -> None:
    assert sum_by_outlet([0, 0, 2], [1.0, 2.0, 4.0], 4).tolist() == pytest.approx([3.0, NAN, 4.0, NAN], nan_ok=True)


def test_steeper_is_faster_and_rougher_is_slower() -> None:
    slope = np.geomspace(0.001, 0.3, 20)
    for regime, roughness in (("sheet", 0.24), ("shallow", 2.0), ("channel", 0.045), ("pipe", 0.013)):
        columns = {"regime": [regime] * 20, "outlet": np.arange(20), "slope": slope, "hydraulic_radius_m": [0.3] * 20}
        base = time(rows(**columns, roughness=[roughness] * 20))
        assert (np.diff(base.travel_time_h) < 0).all(), regime
        rougher = time(rows(**columns, roughness=[roughness * (0.5 if regime == "shallow" else 2.0)] * 20))
        assert (rougher.travel_time_h > base.travel_time_h).all(), regime


def test_full_and_half_agree_with_the_rectangle() -> None:
    for area in np.geomspace(0.1, 1000.0, 8):
        times = time(rows(regime=["channel"], area_km2=[area]))
        w, d = times.bankfull_width_m[0], times.bankfull_depth_m[0]
        assert times.hydraulic_radius_half_m[0] == pytest.approx(float(hydraulic_radius_m(w, d / 2)))
