"""Unit hydrographs: volume, peaks, published ordinates, published examples, refusals."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.errors import RangeError
from basinwright.hydrograph import (
    TimeArea,
    UnitHydrographs,
    arriving_area_km2,
    clark,
    clark_terrain,
    curvilinear,
    curvilinear_ratio,
    default_time_area,
    delmarva,
    delmarva_ratio,
    gamma,
    gamma_exponent,
    gamma_ratio,
    peak_rate_factor,
    reservoir_coefficients,
    snyder,
    snyder_adjusted_lag_h,
    snyder_lag_h,
    snyder_peak_cfs_per_mi2_in,
    snyder_standard_duration_h,
    snyder_widths_h,
    storage_coefficient_h,
    time_to_peak_h,
    translation_peak_rate_factor,
    travel_time,
    triangular,
    triangular_ratio,
    unit_duration_s,
    unit_peak_m3s_per_mm,
)
from basinwright.published import table
from basinwright.registry import methods

VOLUME = 5280.0**2 / (12 * 3600)  # cfs h / (mi2 in), 645.33
MI_M, MI2_KM2 = 1609.344, 2.589988110336
PONCE_AREAS = [10.0, 30.0, 20.0, 40.0]  # km2 between one-hour isochrones, K 2 h


def ponce_curve() -> TimeArea:
    return TimeArea(np.array([0, 4]), np.arange(1.0, 5.0), np.cumsum(PONCE_AREAS))


def any_inputs(duration_h, tc_h) -> dict[str, object]:
    """Inputs for every registered shape, for n outlets."""
    n = np.size(tc_h)
    return {
        "unit_duration_h": duration_h,
        "tc_h": tc_h,
        "time_to_peak_h": time_to_peak_h(tc_h, duration_h),
        "peak_rate_factor": np.linspace(150.0, 550.0, n),
        "area_km2": np.full(n, 100.0),
        "path_length_m": np.full(n, 20_000.0) * np.asarray(tc_h),
        "centroid_length_m": np.full(n, 9_000.0),
        "ct": 2.0,
        "cp": 0.6,
        "storage_ratio": np.linspace(0.2, 0.7, n),
        "time_area": TimeArea(
            np.arange(0, 3 * n + 1, 3),
            (np.asarray(tc_h)[:, None] * [0.3, 0.7, 1.0]).ravel(),
            np.tile([2.0, 5.0, 9.0], n),
        ),
    }


def make(key: str, inputs: dict[str, object]) -> UnitHydrographs:
    entry = methods("unit_hydrograph")[key]
    return entry.function(**{name: inputs[name] for name in entry.inputs})


SHAPES = list(methods("unit_hydrograph"))


@pytest.mark.parametrize("key", SHAPES)
@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10_000), part=st.floats(0.02, 0.133))
def test_volume_is_one_and_ends_are_dry(key: str, seed: int, part: float) -> None:
    tc = np.random.default_rng(seed).uniform(0.1, 20.0, 4)
    unit = make(key, any_inputs(part * tc, tc))
    volume = np.bincount(unit.outlet, weights=unit.share)
    assert volume == pytest.approx(1.0, abs=1e-12)
    assert (unit.share[unit.offsets[:-1]] == 0.0).all()
    assert (unit.share[unit.offsets[1:] - 1] == 0.0).all()
    assert (unit.share >= 0.0).all()
    assert unit.adjustment == pytest.approx(1.0, abs=0.04)
    # Volume in the units of flow: 1 mm on the area.
    area = np.full(4, 7.0)
    flow = unit.flow_m3s_per_mm(area)
    assert np.bincount(unit.outlet, weights=flow) * unit.unit_duration_h * 3600 == pytest.approx(7000.0)


@pytest.mark.parametrize("key", SHAPES)
def test_an_outlet_does_not_depend_on_the_others(key: str) -> None:
    tc = np.array([0.3, 2.0, 7.7, 1.1])
    inputs = any_inputs(0.133 * tc, tc)
    together = make(key, inputs)
    for i in range(4):
        alone_inputs = {
            name: value if np.ndim(value) == 0 else np.asarray(value)[i : i + 1]
            for name, value in inputs.items()
            if name != "time_area"
        }
        curve = inputs["time_area"]
        rows = slice(curve.offsets[i], curve.offsets[i + 1])
        alone_inputs["time_area"] = TimeArea(np.array([0, 3]), curve.travel_time_h[rows], curve.area_km2[rows])
        alone = make(key, alone_inputs)
        rows = slice(together.offsets[i], together.offsets[i + 1])
        assert (alone.share == together.share[rows]).all()
        assert alone.peak_per_h[0] == together.peak_per_h[i]
        assert (alone.time_h() == together.time_h()[rows]).all()


@pytest.mark.parametrize("key", SHAPES)
def test_highest_ordinate_is_near_the_peak_by_formula(key: str) -> None:
    tc = np.array([0.5, 3.0, 12.0])
    unit = make(key, any_inputs(0.05 * tc, tc))
    highest = np.maximum.reduceat(unit.share, unit.offsets[:-1]) / unit.unit_duration_h
    assert highest == pytest.approx(unit.peak_per_h, rel=0.03)
    at = unit.time_h()[unit.share == np.maximum.reduceat(unit.share, unit.offsets[:-1])[unit.outlet]]
    first = at[np.searchsorted(np.cumsum(np.ones(at.size)), [1])]
    assert first[0] == pytest.approx(unit.time_to_peak_h[0], abs=unit.unit_duration_h[0])


# NRCS


def test_curvilinear_mass_curve_is_the_printed_one() -> None:
    """Volumes by trapezoids of q/qp against the printed Qa/Q of NEH 630 table 16-1; .012 and .700 are left out:
    their neighbours and the trapezoids (.017, .704) contradict them."""
    published = table("dimensionless_uh_neh_16_1")
    assert len(published.rows) == 33
    time, mass = np.array(published.floats("time_ratio")), np.array(published.floats("mass_ratio"))
    ratio = curvilinear_ratio(time)
    run_off = np.concatenate(([0.0], np.cumsum(np.diff(time) * (ratio[1:] + ratio[:-1]) / 2)))
    assert run_off[-1] == pytest.approx(1.33595, abs=1e-9)
    assert VOLUME / run_off[-1] == pytest.approx(484.0, abs=1.0)  # the printed peak rate factor
    sound = ~np.isin(time, [0.3, 1.5])
    assert (run_off / run_off[-1])[sound] == pytest.approx(mass[sound], abs=0.0025)


def test_a_triangle_of_base_267_has_the_factor_of_the_print() -> None:
    """By hand: the volume under the triangle is qp Tb / 2, so PRF = 645.33 * 2 / 2.67 = 483.4."""
    assert round(2 * VOLUME / 2.67, 1) == 483.4
    unit = triangular(1.0, 3.0)
    assert unit.adjustment[0] == pytest.approx(1.0, abs=1e-3)
    assert unit.share.max() * 3.0 * VOLUME == pytest.approx(484.0)
    assert triangular_ratio([0.0, 0.5, 1.0, 8 / 3, 9.0]) == pytest.approx([0.0, 0.5, 1.0, 0.0, 0.0], abs=1e-12)


def test_ordinates_of_the_curvilinear_shape_are_the_table() -> None:
    unit = curvilinear(0.1, 1.0)
    expected = curvilinear_ratio(np.arange(51) / 10)
    assert unit.share / unit.share.max() == pytest.approx(expected, abs=1e-12)
    assert unit.time_h()[-1] == pytest.approx(5.0)


def test_delmarva_implies_its_published_factor() -> None:
    """The sum of the ordinates, 11.441 at steps of 0.2, gives 282; published 284."""
    published = table("dimensionless_uh_delmarva")
    ratios = published.floats("flow_ratio")
    assert len(ratios) == 50
    assert sum(ratios) == pytest.approx(11.441)
    assert VOLUME / (0.2 * sum(ratios)) == pytest.approx(284.0, rel=0.008)
    assert delmarva_ratio([9.8, 20.0]).tolist() == [0.0, 0.0]
    assert delmarva(0.2, 1.0).adjustment[0] == pytest.approx(282.03 / 284.0, abs=1e-4)


@pytest.mark.parametrize(
    ("factor", "exponent"),
    [(100, 0.2572), (150, 0.4695), (284, 1.3715), (300, 1.5137), (400, 2.5746), (484, 3.6969), (600, 5.5955)],
)
def test_factor_and_exponent_are_inverse(factor: float, exponent: float) -> None:
    assert float(gamma_exponent(factor)) == pytest.approx(exponent, abs=5e-5)
    assert float(peak_rate_factor(gamma_exponent(factor))) == pytest.approx(factor, rel=1e-12)


@pytest.mark.parametrize("factor", [150.0, 284.0, 484.0, 600.0])
def test_gamma_volume_is_that_of_its_factor(factor: float) -> None:
    """Independent: integral of the ratio by scipy; its inverse is the peak rate factor."""
    from scipy.integrate import quad

    area = quad(lambda t: float(gamma_ratio(t, factor)), 0.0, np.inf, limit=200)[0]
    assert VOLUME / area == pytest.approx(factor, rel=1e-6)
    assert gamma(0.01, 1.0, factor).adjustment[0] == pytest.approx(1.0, abs=2e-3)


def test_gamma_of_484_is_close_to_the_curvilinear_one() -> None:
    time = np.linspace(0.0, 5.0, 101)
    assert gamma_ratio(time, 484.0) == pytest.approx(
        curvilinear_ratio(time), abs=0.08
    )  # the handbook calls it an approximation


def test_peak_rises_with_the_factor() -> None:
    unit = gamma(0.1, 1.0, [150.0, 284.0, 484.0, 600.0])
    highest = np.maximum.reduceat(unit.share, unit.offsets[:-1])
    assert (np.diff(highest) > 0).all()
    assert highest * 10 * VOLUME == pytest.approx([150.0, 284.0, 484.0, 600.0], rel=0.005)


# Duration


@pytest.mark.parametrize("duration_h", [24.0, 6.0, 1.0, 2.5])
def test_step_divides_the_storm_and_is_the_longest_allowed(duration_h: float) -> None:
    tc = np.geomspace(0.01, 50.0, 200)
    step = unit_duration_s(tc, duration_h)
    whole = round(duration_h * 3600)
    assert (whole % step == 0).all()
    assert (step <= 0.133 * tc * 3600 * (1 + 1e-9)).all()
    for at, limit in zip(step, 0.133 * tc * 3600, strict=True):
        longer = [s for s in range(int(at) + 1, int(min(limit, whole)) + 1) if whole % s == 0]
        assert not longer


def test_step_of_the_user_must_divide() -> None:
    assert unit_duration_s([1.0, 2.0], 24.0, 0.1).tolist() == [360, 360]
    with pytest.raises(RangeError, match=r"time_step_h is 0.7: it must divide"):
        unit_duration_s(1.0, 24.0, 0.7)
    with pytest.raises(RangeError, match=r"time_step_h is 0.0001: it must be a whole number of seconds"):
        unit_duration_s(1.0, 24.0, 0.0001)
    with pytest.raises(RangeError, match=r"row 1: tc_h is 0.001: 0.133 Tc is under one second"):
        unit_duration_s([1.0, 0.001], 24.0)
    with pytest.raises(RangeError, match="row 0: tc_h is nan"):
        unit_duration_s([math.nan], 24.0)


# Snyder


def test_snyder_example_of_100_square_miles() -> None:
    lag = snyder_lag_h(18 * MI_M, 10 * MI_M, 1.8)
    assert float(lag) == pytest.approx(8.548, abs=5e-4)  # 1.8 * 180^0.3
    assert float(snyder_standard_duration_h(lag)) == pytest.approx(1.554, abs=5e-4)
    assert 100 * float(snyder_peak_cfs_per_mi2_in(lag, 0.6)) == pytest.approx(4492, abs=0.6)


@pytest.mark.parametrize(("cp", "ct"), [(0.4, 0.5), (0.6, 2.0), (0.94, 4.0)])
def test_snyder_polygon_has_the_published_peak_and_widths(cp: float, ct: float) -> None:
    duration = 0.02
    unit = snyder(duration, 259.0, 30_000.0, 14_000.0, ct, cp)
    lag = snyder_adjusted_lag_h(snyder_lag_h(30_000.0, 14_000.0, ct), duration)
    peak = float(snyder_peak_cfs_per_mi2_in(lag, cp))
    assert unit.time_to_peak_h[0] == pytest.approx(float(lag) + duration / 2)
    flow = unit.share / duration * VOLUME  # cfs per mi2 and inch
    assert flow.max() == pytest.approx(peak, rel=0.005)
    for share, width in zip((0.5, 0.75), snyder_widths_h(peak), strict=True):
        assert np.count_nonzero(flow >= share * peak) * duration == pytest.approx(float(width), rel=0.02)
        first = unit.time_h()[np.argmax(flow >= share * peak)]
        assert unit.time_to_peak_h[0] - first == pytest.approx(float(width) / 3, rel=0.03)
    assert unit.adjustment[0] == pytest.approx(1.0, abs=1e-3)


def test_snyder_lag_of_another_duration() -> None:
    """By hand: tp 8.6, tr 8.6/5.5 = 1.5636; for 4 h tpR = 8.6 + (4 - 1.5636)/4 = 9.2091."""
    assert float(snyder_adjusted_lag_h(8.6, 4.0)) == pytest.approx(9.2091, abs=5e-5)


def test_snyder_without_room_for_a_base_is_refused() -> None:
    with pytest.raises(RangeError, match=r"row 1: ct and cp: .* no volume"):
        snyder(1.0, 259.0, 30_000.0, 14_000.0, 2.0, [0.6, 3.0])


# Clark and translation


def test_default_curve_by_the_published_increments() -> None:
    """1000 km2, Tc 6 h: 96.2, 175.9, 227.9, 227.9, 175.9, 96.2 km2 in each hour."""
    cumulative = 1000 * default_time_area(np.arange(7) / 6)
    assert np.diff(cumulative) == pytest.approx([96.2, 175.9, 227.9, 227.9, 175.9, 96.2], abs=0.06)
    ratio = np.linspace(0.0, 1.0, 501)
    assert (np.diff(default_time_area(ratio)) >= 0).all()
    assert default_time_area(ratio) == pytest.approx(1.0 - default_time_area(1.0 - ratio), abs=1e-12)


def test_clark_two_hour_unit_hydrograph_of_the_textbook() -> None:
    """Ponce (1989), ch. 5: 1 cm in 2 h; km2 cm/h and m3/s at hours 1 to 10."""
    one_hour = 100.0 * clark_terrain(1.0, 4.0, 1 / 3, ponce_curve()).share  # R = 2 h
    two_hours = np.convolve(one_hour[1:], [0.5, 0.5])[:10]
    printed = [2, 9.2, 15.52, 21.312, 20.787, 12.472, 7.483, 4.490, 2.694, 1.616]
    assert two_hours == pytest.approx(printed, abs=1.2e-3)  # the tail that is cut moves it by 1e-5
    flow = two_hours / 0.36  # 1 km2 cm/h in m3/s
    assert flow == pytest.approx(
        [5.556, 25.556, 43.111, 59.200, 57.742, 34.645, 20.787, 12.472, 7.483, 4.490], abs=2e-3
    )


def test_translation_and_reservoir_of_the_textbook() -> None:
    """Ponce (1989), ch. 5: effective rain translated, then routed with inflow at the ends of the steps."""
    rain = [0.5, 1.0, 2.0, 1.5, 1.0, 0.5]
    translated = np.convolve(100.0 * travel_time(1.0, ponce_curve()).share, rain)
    assert translated[:11] == pytest.approx([0, 5, 25, 60, 115, 135, 145, 95, 50, 20, 0], abs=1e-9)
    c0, c1, c2 = reservoir_coefficients(1.0, 2.0)
    routed = [0.0]
    for before, after in itertools.pairwise(translated):
        routed.append(float(c0 * after + c1 * before + c2 * routed[-1]))
    assert routed[:9] == pytest.approx([0, 1, 6.6, 20.96, 47.58, 78.55, 103.13, 109.88, 94.93], abs=0.0051)
    assert max(routed) / 0.36 == pytest.approx(305.22, abs=0.01)


def test_clark_recession_is_that_of_a_linear_reservoir() -> None:
    unit = clark(0.1, 1.0, 0.5)
    tail = unit.share[(unit.time_h() > 1.05) & (unit.share > 0.0)]
    assert tail[1:] / tail[:-1] == pytest.approx(math.exp(-0.1), rel=1e-4)  # R = 1 h


def test_more_storage_means_lower_and_later() -> None:
    unit = clark(0.1, 1.0, [0.1, 0.3, 0.5, 0.7])
    assert (np.diff(unit.peak_per_h) < 0).all()
    assert (np.diff(unit.time_to_peak_h) >= 0).all()


def test_little_storage_at_a_long_step_is_refused() -> None:
    assert storage_coefficient_h(6.0, [0.25, 0.5]).tolist() == [2.0, 6.0]
    with pytest.raises(RangeError, match=r"row 1: storage_ratio: R 0.05263 h is under half the time step"):
        clark(0.13, 1.0, [0.5, 0.05])


def test_travel_time_hydrograph_is_the_distribution_of_arrivals() -> None:
    unit = travel_time(0.5, ponce_curve())
    assert unit.share[1:9] * 100 == pytest.approx([5, 5, 15, 15, 10, 10, 20, 20])
    assert arriving_area_km2([0.0, 2.0], [3.0, 9.0], 1.0) == pytest.approx([6.0, 3.0])  # 3 km2 at the outlet itself


def test_factor_of_a_triangular_time_area_curve() -> None:
    """A curve whose derivative is the triangle of base 8/3 has the factor 484 by construction."""
    time = np.linspace(0.0, 8 / 3, 801)[1:]
    arrived = np.where(time <= 1, 0.375 * time**2, 1 - 0.225 * (8 / 3 - time) ** 2)
    curve = TimeArea(np.array([0, 800]), time, arrived)
    assert float(translation_peak_rate_factor(0.01, curve)[0]) == pytest.approx(484.0, rel=0.01)  # half a step


def test_factor_of_even_arrival_takes_the_middle_of_the_plateau() -> None:
    curve = TimeArea(np.array([0, 1]), np.array([2.0]), np.array([5.0]))
    # 645.33 * (1/2 per h) * the middle of 0.1 ... 2.0 h
    assert float(translation_peak_rate_factor(0.1, curve)[0]) == pytest.approx(VOLUME * 0.5 * 1.05)


# Refusals


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: curvilinear([0.1, np.nan], 1.0), "row 1: unit_duration_h is nan"),
        (lambda: triangular(0.1, [-1.0]), "row 0: time_to_peak_h is -1"),
        (lambda: gamma(0.1, 1.0, 0.0), "peak_rate_factor is 0"),
        (lambda: gamma_ratio(-0.1, 484.0), "time_ratio is -0.1"),
        (lambda: unit_peak_m3s_per_mm(0.0, 1.0), "area_km2 is 0"),
        (lambda: snyder(0.1, 100.0, 0.0, 1.0, 2.0, 0.6), "path_length_m is 0"),
        (lambda: clark(0.1, 1.0, 1.0), "storage_ratio is 1"),
        (lambda: default_time_area(1.2), "time_ratio is 1.2"),
        (lambda: travel_time([0.1, 0.2], ponce_curve()), "time_area has 1 curves for 2 outlets"),
        (lambda: TimeArea([0, 2], [1.0, 1.0], [1.0, 2.0]), "row 1: travel_time_h is 1, after 1"),
        (lambda: TimeArea([0, 2], [1.0, 2.0], [3.0, 2.0]), "row 1: area_km2 is 2, after 3"),
        (lambda: TimeArea([0, 1, 1], [1.0], [2.0]), "outlet 1 has no time-area curve"),
        (lambda: TimeArea([0, 1], [1.0], [0.0]), "last area_km2 of an outlet is 0"),
        (lambda: TimeArea([0, 1], [1.0, 2.0], [0.5]), "one value for each row"),
    ],
)
def test_impossible_numbers_are_refused(call, message: str) -> None:
    with pytest.raises(RangeError, match=message):
        call()


def test_metric_peak_of_si_textbooks() -> None:
    """0.2083 A Q / Tp in m3/s, km2, mm, h; 2.08 for cm (Ponce 1989)."""
    assert float(unit_peak_m3s_per_mm(1.0, 1.0)) == pytest.approx(0.2083, abs=5e-5)
    assert float(unit_peak_m3s_per_mm(MI2_KM2, 1.0)) * 25.4 / 0.3048**3 == pytest.approx(484.0)
