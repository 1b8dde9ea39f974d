"""Curve-number runoff: published identities, inverses, order of steps, refusals."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.errors import RangeError
from basinwright.published import table
from basinwright.runoff import (
    Patches,
    composite_curve_number,
    effective_curve_number,
    moisture_curve_number,
    retention_in,
    retention_mm,
    retentions,
    runoff_in,
    runoff_mm,
    weighted_runoff_mm,
)

OPEN_SPACE_GOOD = [39, 61, 74, 80]
# Technical Release 55 (1986) table 2-2a: percent impervious and curve numbers of groups A to D.
DISTRICTS = {
    "commercial": (85, [89, 92, 94, 95]),
    "industrial": (72, [81, 88, 91, 93]),
    "1/8 acre": (65, [77, 85, 90, 92]),
    "1/4 acre": (38, [61, 75, 83, 87]),
    "1/3 acre": (30, [57, 72, 81, 86]),
    "1/2 acre": (25, [54, 70, 80, 85]),
    "1 acre": (20, [51, 68, 79, 84]),
    "2 acres": (12, [46, 65, 77, 82]),
}
curve_numbers = st.floats(1.0, 100.0)
depths = st.floats(0.0, 1000.0)
ratios = st.sampled_from([0.2, 0.05])


@pytest.mark.parametrize("district", DISTRICTS)
def test_districts_are_composites_of_open_space_in_good_condition(district: str) -> None:
    impervious, printed = DISTRICTS[district]
    # The handbook rounds some of them up: 46.08 of group A, 2 acres, is printed 46; 81.48 industrial 81.
    assert composite_curve_number(OPEN_SPACE_GOOD, impervious) == pytest.approx(printed, abs=0.73)


def test_composite_with_unconnected_area() -> None:
    """By hand: 61 + 0.25 * 37 * (1 - 0.5 * 0.6) = 67.475; over 30 % all of it counts as connected."""
    assert float(composite_curve_number(61, 25, 0.4)) == pytest.approx(67.475)
    assert float(composite_curve_number(61, 30, 0.0)) == pytest.approx(61 + 0.3 * 37 * 0.5)
    assert float(composite_curve_number(61, 30.1, 0.0)) == pytest.approx(61 + 0.301 * 37)
    assert composite_curve_number([30, 98], 0).tolist() == [30, 98]
    assert float(composite_curve_number(30, 100)) == 98.0


def test_metric_and_us_forms_agree() -> None:
    curve = np.linspace(5.0, 100.0, 96)
    assert retention_mm(curve) == pytest.approx(retention_in(curve) * 25.4, abs=1e-9)
    for ratio in (0.2, 0.05):
        assert runoff_mm(152.4, curve, ratio) == pytest.approx(runoff_in(6.0, curve, ratio) * 25.4, abs=1e-9)


def test_ratio_005_by_the_published_curve_number_conversion() -> None:
    """Hawkins et al. (2009): CN0.05 = 100 / {1.879 [(100/CN0.20) - 1]^1.15 + 1}; 1.879 is rounded."""
    curve = np.linspace(30.0, 99.0, 70)
    converted = 100.0 / (1.879 * (100.0 / curve - 1.0) ** 1.15 + 1.0)
    assert 1000.0 / (10.0 + retention_mm(curve, 0.05) / 25.4) == pytest.approx(converted, abs=0.01)


@settings(max_examples=80, deadline=None)
@given(curve=curve_numbers, depth=depths, ratio=ratios)
def test_runoff_is_physical_and_invertible(curve: float, depth: float, ratio: float) -> None:
    runoff = float(runoff_mm(depth, curve, ratio))
    assert 0.0 <= runoff <= depth
    assert runoff <= float(runoff_mm(depth + 1.0, curve, ratio))
    assert runoff <= float(runoff_mm(depth, min(curve + 1.0, 100.0), ratio)) + 1e-12
    if runoff > 1e-3:
        found = float(effective_curve_number(runoff, depth, ratio))
        on_ratio = 25400.0 / (254.0 + float(retention_mm(curve, ratio)))
        assert found == pytest.approx(on_ratio, abs=2e-4)


def test_all_rain_runs_off_impervious_ground() -> None:
    assert runoff_mm([0.0, 10.0], 100.0).tolist() == [0.0, 10.0]
    assert runoff_mm([0.0, 10.0], 100.0, 0.05).tolist() == [0.0, 10.0]
    assert float(effective_curve_number(10.0, 10.0)) == 100.0


def test_no_runoff_up_to_the_initial_abstraction() -> None:
    initial = 0.2 * 25.4 * 10.0  # CN 50: S 10 in
    assert runoff_mm([initial, initial + 1e-6], 50.0)[0] == 0.0
    assert runoff_mm(initial + 1e-3, 50.0) > 0.0
    assert np.isnan(effective_curve_number(0.0, 20.0))


def test_hawkins_inverse_for_ratio_02() -> None:
    """S = 5 [P + 2 Q - sqrt(4 Q^2 + 5 P Q)] (Hawkins 1973)."""
    runoff, depth = 30.0, 100.0
    retention = 5.0 * (depth + 2 * runoff - (4 * runoff**2 + 5 * depth * runoff) ** 0.5)
    assert float(effective_curve_number(runoff, depth)) == pytest.approx(25400.0 / (254.0 + retention), abs=1e-9)


def test_moisture_table_is_whole_and_ordered() -> None:
    published = table("arc_conversion_neh_10_1")
    assert len(published.rows) == 61
    for column in ("class_ii", "class_i", "class_iii"):
        values = published.floats(column)
        assert (np.diff(values) <= 0).all()
        assert (values[0], values[-1]) == (100.0, 0.0)
    second, dry, wet = (np.array(published.floats(name)) for name in ("class_ii", "class_i", "class_iii"))
    assert ((dry <= second) & (second <= wet)).all()


def test_moisture_follows_both_published_formula_sets() -> None:
    """Chow et al. (1988) and Hawkins et al. (1985) fitted the same curves: within 2.5 of the table."""
    curve = np.arange(30.0, 99.0)
    for dry in (4.2 * curve / (10 - 0.058 * curve), curve / (2.281 - 0.01281 * curve)):
        assert moisture_curve_number(curve, "I") == pytest.approx(dry, abs=2.5)
    for wet in (23 * curve / (10 + 0.13 * curve), curve / (0.427 + 0.00573 * curve)):
        assert moisture_curve_number(curve, "III") == pytest.approx(wet, abs=2.5)


def test_moisture_is_linear_between_rows() -> None:
    assert float(moisture_curve_number(79.5, "I")) == pytest.approx(62.5)
    assert float(moisture_curve_number(42.0, "III")) == pytest.approx(62.0)
    assert float(moisture_curve_number(66.6, "II")) == 66.6


def basin() -> Patches:
    return Patches(np.array([0, 2, 3]), np.array([3.0, 1.0, 2.0]), np.array([60.0, 98.0, 75.0]))


def test_both_weightings_by_hand() -> None:
    depth = np.array([[100.0], [100.0]])
    by_runoff = weighted_runoff_mm(basin(), depth)
    assert by_runoff[0, 0] == pytest.approx(0.75 * runoff_mm(100.0, 60.0) + 0.25 * runoff_mm(100.0, 98.0))
    by_curve = weighted_runoff_mm(basin(), depth, weighting="curve_number")
    assert by_curve[0, 0] == pytest.approx(float(runoff_mm(100.0, 69.5)))
    assert by_curve[0, 0] < by_runoff[0, 0]  # the runoff equation is convex in the curve number
    assert by_curve[1, 0] == pytest.approx(by_runoff[1, 0])
    assert basin().mean_curve_number() == pytest.approx([69.5, 75.0])


def test_class_comes_before_weighting_and_ratio() -> None:
    """By hand, table 10-1: 60 is 40 and 98 is 94 when dry; the mean, 53.5, then takes the ratio."""
    rows = retentions(basin(), weighting="curve_number", moisture="I", initial_abstraction_ratio=0.05)
    assert rows.retention_mm[0] == pytest.approx(1.33 * (1000.0 / 53.5 - 10.0) ** 1.15 * 25.4)
    rows = retentions(basin(), moisture="III", initial_abstraction_ratio=0.05)
    assert rows.retention_mm[0] == pytest.approx(1.33 * (1000.0 / 78.0 - 10.0) ** 1.15 * 25.4)


@settings(max_examples=20, deadline=None)
@given(seed=st.integers(0, 10_000), weighting=st.sampled_from(["runoff", "curve_number"]))
def test_an_outlet_does_not_depend_on_the_others(seed: int, weighting) -> None:
    rng = np.random.default_rng(seed)
    counts = rng.integers(1, 6, 7)
    offsets = np.concatenate(([0], np.cumsum(counts)))
    area, curve, depth = rng.random(offsets[-1]) + 0.01, rng.uniform(30, 100, offsets[-1]), rng.uniform(0, 300, (7, 2))
    together = weighted_runoff_mm(Patches(offsets, area, curve), depth, weighting=weighting)
    for i in range(7):
        rows = slice(offsets[i], offsets[i + 1])
        alone = Patches(np.array([0, counts[i]]), area[rows], curve[rows])
        assert (weighted_runoff_mm(alone, depth[i : i + 1], weighting=weighting)[0] == together[i]).all()


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: runoff_mm(50.0, [80.0, 0.0]), "row 1: curve_number is 0"),
        (lambda: runoff_mm(50.0, 100.5), "curve_number is 100.5"),
        (lambda: runoff_mm([1.0, -2.0], 80.0), "row 1: depth_mm is -2"),
        (lambda: runoff_mm(np.nan, 80.0), "depth_mm is nan"),
        (lambda: runoff_mm(np.inf, 80.0), "depth_mm is inf"),
        (lambda: runoff_in(5.0, 80.0, 0.1), "0.2 or 0.05"),
        (lambda: retention_mm([np.nan]), "row 0: curve_number is nan"),
        (lambda: composite_curve_number(60.0, 101.0), "impervious_pct is 101"),
        (lambda: composite_curve_number(60.0, 10.0, 1.005), r"connected_fraction is 1.005"),
        (lambda: moisture_curve_number(60.0, "IV"), "moisture is 'IV'"),
        (lambda: effective_curve_number(11.0, 10.0), "no curve number gives more runoff than rain"),
        (lambda: Patches([0, 1], [1.0], [101.0]), "row 0: curve_number is 101"),
        (lambda: Patches([0, 1], [-1.0], [80.0]), "row 0: area_km2 is -1"),
        (lambda: Patches([0, 1, 1], [1.0], [80.0]), "row 1: area_km2 of the patches of an outlet is 0"),
        (lambda: Patches([0, 2], [1.0], [80.0]), "offsets must run from 0"),
        (lambda: Patches([0, 1], [1.0, 2.0], [80.0]), "one value for each patch"),
        (lambda: weighted_runoff_mm(basin(), [[1.0]]), "each of the 2 outlets"),
        (lambda: weighted_runoff_mm(basin(), [[1.0], [np.nan]]), "row 1: depth_mm is nan"),
        (lambda: weighted_runoff_mm(basin(), [[1.0], [2.0]], weighting="mean"), "weighting is 'mean'"),
    ],
)
def test_impossible_numbers_are_refused(call, message: str) -> None:
    with pytest.raises(RangeError, match=message):
        call()
