"""Design floods: independent convolution, conservation, monotony, independence of the batch, cross-checks."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from basinwright.errors import RangeError
from basinwright.hydrograph import Floods, TimeArea, curvilinear, design_floods, floods, graphical_peak, time_to_peak_h
from basinwright.registry import find
from basinwright.runoff import Patches, effective_curve_number, runoff_mm, weighted_runoff_mm
from basinwright.storms import Storm, balanced, type_ii, type_iii

MI2_KM2, CFS_M3S = 2.589988110336, 0.028316846592


def one(area=10.0, tc=2.0, curve=75.0, depth=120.0, storm=None, **options) -> Floods:
    patches = Patches(np.array([0, 1]), np.array([area]), np.array([curve]))
    return design_floods([area], [tc], patches, storm or type_ii(), [[depth]], **options)


def county(n: int, seed: int = 0) -> tuple[np.ndarray, np.ndarray, Patches, np.ndarray]:
    rng = np.random.default_rng(seed)
    counts = rng.integers(1, 6, n)
    offsets = np.concatenate(([0], np.cumsum(counts)))
    patches = Patches(offsets, rng.uniform(0.01, 3.0, offsets[-1]), rng.uniform(35.0, 100.0, offsets[-1]))
    return rng.uniform(0.05, 80.0, n), rng.uniform(0.1, 10.0, n), patches, rng.uniform(0.0, 250.0, (n, 3))


def part(patches: Patches, first: int, last: int) -> Patches:
    bounds = patches.offsets[first : last + 1]
    rows = slice(bounds[0], bounds[-1])
    return Patches(bounds - bounds[0], patches.area_km2[rows], patches.curve_number[rows])


@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10_000), shape=st.sampled_from(["curvilinear", "triangular", "gamma", "clark"]))
def test_hydrograph_is_the_convolution_by_scipy(seed: int, shape: str) -> None:
    area, tc, patches, depth = county(3, seed)
    inputs = {"peak_rate_factor": 300.0, "storage_ratio": 0.4}
    flood = design_floods(area, tc, patches, type_iii(), depth, shape=shape, shape_inputs=inputs)
    series, units = flood.series, flood.unit_hydrographs
    for i in range(3):
        step_h = units.unit_duration_h[i]
        times = np.arange(round(24 / step_h) + 1) * step_h
        rain = depth[i] * type_iii().fraction_at(times)[:, None]
        excess = np.column_stack(
            [weighted_runoff_mm(part(patches, i, i + 1), rain[:, [storm]].T).ravel() for storm in range(3)]
        )
        ordinates = units.flow_m3s_per_mm(area)[units.offsets[i] : units.offsets[i + 1]]
        rows = slice(series.offsets[i], series.offsets[i + 1])
        for storm in range(3):
            expected = signal.convolve(np.diff(excess[:, storm]), ordinates, method="direct")
            assert series.flow_m3s[rows, storm] == pytest.approx(expected, abs=1e-9 * max(1.0, expected.max()))
            assert flood.peak_m3s[i, storm] == pytest.approx(expected.max(), rel=1e-9, abs=1e-12)
        assert series.rain_mm[rows].sum(axis=0) == pytest.approx(depth[i])
        steps = times.size - 1
        assert series.rain_mm[rows][1 : steps + 1] == pytest.approx(np.diff(rain, axis=0), abs=1e-9)
        assert series.excess_mm[rows][1 : steps + 1] == pytest.approx(np.diff(excess, axis=0), abs=1e-9)
        assert not series.rain_mm[rows][[0, *range(steps + 1, rows.stop - rows.start)]].any()


@pytest.mark.parametrize("shape", ["curvilinear", "triangular", "delmarva", "gamma", "clark"])
def test_volume_is_runoff_times_area(shape: str) -> None:
    area, tc, patches, depth = county(40, 3)
    flood = design_floods(
        area, tc, patches, type_ii(), depth, shape=shape, shape_inputs={"peak_rate_factor": 284.0, "storage_ratio": 0.5}
    )
    series = flood.series
    volume_m3 = np.add.reduceat(series.flow_m3s, series.offsets[:-1], axis=0) * series.step_s[:, None]
    assert volume_m3 == pytest.approx(flood.runoff_mm * area[:, None] * 1000.0, rel=1e-9)
    assert np.add.reduceat(series.excess_mm, series.offsets[:-1], axis=0) == pytest.approx(flood.runoff_mm, abs=1e-9)
    assert flood.runoff_mm == pytest.approx(weighted_runoff_mm(patches, depth), rel=1e-12, abs=1e-12)
    assert not series.flow_m3s[series.offsets[:-1]].any()
    assert not series.flow_m3s[series.offsets[1:] - 1].any()  # the series ends when the flow has ended
    assert (series.flow_m3s >= 0.0).all()


def test_series_ends_a_base_after_the_storm_and_counts_whole_seconds() -> None:
    flood = one(tc=1.53)
    step = flood.unit_hydrographs.unit_duration_h[0]
    assert step == pytest.approx(0.2)  # 0.133 * 1.53 h = 732.6 s; 720 s divides a day
    base = 5.0 * float(time_to_peak_h(1.53, step))
    time = flood.series.time_h()
    assert time[0] == 0.0
    assert 24.0 + base - step <= time[-1] < 24.0 + base + step
    assert np.diff(time) == pytest.approx(step)


def test_results_do_not_depend_on_the_other_outlets(monkeypatch) -> None:
    area, tc, patches, depth = county(30, 5)
    together = design_floods(area, tc, patches, type_ii(), depth)
    monkeypatch.setattr(floods, "_BLOCK_VALUES", 5_000)  # a few outlets at a time
    in_blocks = design_floods(area, tc, patches, type_ii(), depth)
    screened = design_floods(area, tc, patches, type_ii(), depth, series=False, jobs=2)
    assert screened.series is None
    for name in ("runoff_mm", "peak_m3s", "peak_time_h", "unit_peak_m3s_per_mm"):
        whole = getattr(together, name)
        assert np.array_equal(getattr(in_blocks, name), whole, equal_nan=True)
        assert np.array_equal(getattr(screened, name), whole, equal_nan=True)
    assert (in_blocks.series.flow_m3s == together.series.flow_m3s).all()
    for i in range(30):
        alone = design_floods(area[[i]], tc[[i]], part(patches, i, i + 1), type_ii(), depth[[i]])
        rows = slice(together.series.offsets[i], together.series.offsets[i + 1])
        assert (alone.series.flow_m3s == together.series.flow_m3s[rows]).all()
        assert (alone.series.excess_mm == together.series.excess_mm[rows]).all()
        assert (alone.peak_m3s[0] == together.peak_m3s[i]).all()


def test_a_storm_column_does_not_depend_on_the_others() -> None:
    area, tc, patches, depth = county(5, 8)
    together = design_floods(area, tc, patches, type_ii(), depth)
    for storm in range(3):
        alone = design_floods(area, tc, patches, type_ii(), depth[:, [storm]])
        assert alone.peak_m3s[:, 0] == pytest.approx(together.peak_m3s[:, storm], rel=1e-12)


def test_peak_rises_with_depth_and_curve_number_and_falls_with_tc() -> None:
    curves, tcs, depths = np.linspace(40, 98, 30), np.geomspace(0.1, 24.0, 30), np.linspace(20.0, 300.0, 30)
    n = 30
    ones = Patches(np.arange(n + 1), np.ones(n), curves)
    by_curve = design_floods(np.full(n, 5.0), np.full(n, 1.0), ones, type_ii(), np.full((n, 1), 150.0), series=False)
    assert (np.diff(by_curve.peak_m3s[:, 0]) > 0).all()
    alike = Patches(np.arange(n + 1), np.ones(n), np.full(n, 75.0))
    by_depth = design_floods(np.full(n, 5.0), np.full(n, 1.0), alike, type_ii(), depths[:, None], series=False)
    assert (np.diff(by_depth.peak_m3s[:, 0]) >= 0).all()
    by_tc = design_floods(np.full(n, 5.0), tcs, alike, type_ii(), np.full((n, 1), 150.0), series=False)
    assert (np.diff(by_tc.peak_m3s[:, 0]) < 0).all()
    assert by_tc.peak_m3s[0, 0] < 5.0 * 150.0 * 1000 / 360  # never over the rain of 0.1 h on the whole basin


def test_peak_is_proportional_to_area() -> None:
    assert one(area=20.0).peak_m3s[0, 0] == pytest.approx(2 * one(area=10.0).peak_m3s[0, 0], rel=1e-12)


def test_even_rain_on_impervious_ground_reaches_the_rate_of_the_rain() -> None:
    """100 mm in 10 h on CN 100 and 3.6 km2: 10 m3/s once the whole basin contributes."""
    even = Storm("even", np.array([0.0, 10.0]), np.array([0.0, 1.0]))
    flood = one(area=3.6, tc=1.0, curve=100.0, depth=100.0, storm=even)
    assert flood.peak_m3s[0, 0] == pytest.approx(10.0, rel=1e-9)
    assert flood.series.flow_m3s.sum() * flood.series.step_s[0] == pytest.approx(360_000.0)


def test_one_burst_gives_the_unit_hydrograph_back() -> None:
    storm = Storm("burst", np.array([0.0, 6.0, 6.5, 12.0]), np.array([0.0, 0.0, 1.0, 1.0]))
    flood = one(area=4.6, tc=4.0, curve=100.0, depth=1.0, storm=storm, time_step_h=0.5)
    unit = curvilinear(0.5, time_to_peak_h(4.0, 0.5)).flow_m3s_per_mm([4.6])
    assert flood.series.flow_m3s[12 : 12 + unit.size, 0] == pytest.approx(unit, abs=1e-12)
    assert flood.peak_time_h[0, 0] == pytest.approx(6.0 + 0.5 * np.argmax(unit))


def test_no_runoff_is_a_peak_of_zero_without_a_time() -> None:
    flood = one(curve=40.0, depth=10.0)
    assert flood.runoff_mm[0, 0] == 0.0
    assert flood.peak_m3s[0, 0] == 0.0
    assert np.isnan(flood.peak_time_h[0, 0])
    assert not flood.series.flow_m3s.any()


@pytest.mark.parametrize("key", ["type_i", "type_ia", "type_ii", "type_iii"])
def test_graphical_method_cross_checks_the_convolution(key: str) -> None:
    """The graphical method of Technical Release 55 was drawn from runs with short unit durations: at 0.01 Tc or so the
    two differ by a few percent over its range. At 0.133 Tc the time to peak is later and the peak lower."""
    storm = find("storm", key).function()
    for tc in (0.3, 0.5, 1.0, 1.53, 3.0, 6.0, 10.0):
        for curve in (75.0, 90.0):
            graphical = graphical_peak(1.0, tc, curve, 152.4, key).peak_m3s
            step = {0.3: 10, 0.5: 20, 1.0: 36, 1.53: 60}.get(tc, 100) / 3600
            assert one(1.0, tc, curve, 152.4, storm, time_step_h=step).peak_m3s[0, 0] == pytest.approx(
                graphical, rel=0.15
            )
            assert one(1.0, tc, curve, 152.4, storm).peak_m3s[0, 0] == pytest.approx(graphical, rel=0.16)


def test_example_4_1_by_convolution() -> None:
    """Technical Release 55 (1986) example 4-1: 0.39 mi2, Tc 1.53 h, CN 75, 6.0 in, Type II; printed 345 cfs."""
    flood = one(0.39 * MI2_KM2, 1.53, 75.0, 6.0 * 25.4, time_step_h=0.01)
    assert flood.peak_m3s[0, 0] / CFS_M3S == pytest.approx(345.0, rel=0.01)
    assert flood.runoff_mm[0, 0] / 25.4 == pytest.approx(3.28, abs=0.005)


def test_options_reach_the_runoff() -> None:
    area, tc, patches, depth = county(4, 2)
    for options in (
        {"weighting": "curve_number"},
        {"moisture": "III"},
        {"initial_abstraction_ratio": 0.05},
        {"moisture": "I", "initial_abstraction_ratio": 0.05, "weighting": "curve_number"},
    ):
        flood = design_floods(area, tc, patches, type_ii(), depth, series=False, **options)
        assert flood.runoff_mm == pytest.approx(weighted_runoff_mm(patches, depth, **options), rel=1e-12, abs=1e-12)


def test_curve_number_used_gives_the_runoff_used() -> None:
    area, tc, patches, depth = county(4, 2)
    flood = design_floods(area, tc, patches, type_ii(), depth + 50.0, series=False)
    used = effective_curve_number(flood.runoff_mm, depth + 50.0)
    assert runoff_mm(depth + 50.0, used) == pytest.approx(flood.runoff_mm, rel=1e-9)


def test_a_storm_for_each_column() -> None:
    hours, depths = np.array([0.1, 1.0, 24.0]), np.array([20.0, 45.0, 120.0])
    storms = [type_ii(), balanced(24.0, 0.1, hours, depths)]
    patches = Patches(np.array([0, 1]), np.ones(1), np.full(1, 80.0))
    both = design_floods([3.0], [1.0], patches, storms, [[120.0, 120.0]], series=False)
    for column, storm in enumerate(storms):
        alone = design_floods([3.0], [1.0], patches, storm, [[120.0]], series=False)
        assert both.peak_m3s[0, column] == pytest.approx(alone.peak_m3s[0, 0], rel=1e-12)


def test_a_long_step_of_the_user_is_marked() -> None:
    assert one(tc=1.0).step_coarse.tolist() == [False]
    assert one(tc=1.0, time_step_h=0.5).step_coarse.tolist() == [True]  # over Tp / 4, NEH 630 ch. 16


def test_registered_shape_says_what_it_needs() -> None:
    with pytest.raises(RangeError, match="snyder unit hydrograph needs path_length_m, centroid_length_m, ct, cp"):
        one(shape="snyder")
    with pytest.raises(RangeError, match="clark unit hydrograph needs storage_ratio"):
        one(shape="clark")
    with pytest.raises(KeyError, match="nearest: triangular"):
        one(shape="triangle")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"area": np.nan}, "row 0: area_km2 is nan"),
        ({"tc": 0.0}, "row 0: tc_h is 0"),
        ({"depth": -1.0}, "row 0: depth_mm is -1"),
        ({"depth": np.nan}, "row 0: depth_mm is nan"),
        ({"curve": 0.0}, "row 0: curve_number is 0"),
        ({"time_step_h": 7.0}, "time_step_h is 7: it must divide"),
        ({"storm": [type_ii(), type_ii()]}, "2 storms for 1 columns"),
        ({"tc": 1e-4}, r"tc_h is 0.0001: 0.133 Tc is under one second"),
    ],
)
def test_impossible_numbers_are_refused(change, message: str) -> None:
    with pytest.raises(RangeError, match=message):
        one(**change)


@pytest.mark.parametrize("shape", ["curvilinear", "gamma", "clark", "travel_time"])
def test_no_outlets_are_no_floods(shape: str) -> None:
    none = np.empty(0)
    inputs = {"peak_rate_factor": 300.0, "storage_ratio": 0.4, "time_area": TimeArea(np.zeros(1), none, none)}
    flood = design_floods(
        none, none, Patches(np.zeros(1), none, none), type_ii(), np.empty((0, 3)), shape=shape, shape_inputs=inputs
    )
    assert flood.peak_m3s.shape == (0, 3)
    assert flood.series.flow_m3s.shape == (0, 3)


def test_shapes_of_arrays_must_agree() -> None:
    patches = Patches(np.array([0, 1]), np.ones(1), np.full(1, 80.0))
    with pytest.raises(RangeError, match="one value for each outlet"):
        design_floods([1.0, 2.0], [1.0], patches, type_ii(), [[1.0]])
    with pytest.raises(RangeError, match="patches are of 1 outlets, area_km2 of 2"):
        design_floods([1.0, 2.0], [1.0, 1.0], patches, type_ii(), [[1.0], [2.0]])
    short = Storm("short", np.array([0.0, 6.0]), np.array([0.0, 1.0]))
    with pytest.raises(RangeError, match="storms last 6, 24 h"):
        design_floods([1.0], [1.0], patches, [type_ii(), short], [[1.0, 2.0]])
