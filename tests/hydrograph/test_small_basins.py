"""Rational and graphical peaks."""

import numpy as np
import pytest

from basinwright.errors import RangeError
from basinwright.hydrograph import RATIONAL_LIMIT_KM2, graphical_peak, rational_peak_m3s
from basinwright.published import table

CFS_M3S, MI2_KM2 = 0.028316846592, 2.589988110336


def unit_peak_cfs(tc: float, ia_over_p: float, distribution: str) -> float:
    """Unit peak for a given Ia/P: 0.2 S over P, 1 mi2."""
    depth_in = 5.0
    curve = 1000.0 / (ia_over_p * depth_in / 0.2 + 10.0)
    peak = graphical_peak(MI2_KM2, tc, curve, depth_in * 25.4, distribution)
    assert float(peak.ia_over_p) == pytest.approx(ia_over_p)
    return float(peak.unit_peak_m3s_per_km2_mm) * MI2_KM2 * 25.4 / CFS_M3S


def test_unit_peak_at_a_row_is_the_polynomial() -> None:
    """By hand, Type II, Ia/P 0.10, Tc 1.53 h: 10^(2.55323 - 0.61512 x - 0.16403 x^2), x = log10 1.53: 271.7."""
    x = np.log10(1.53)
    by_hand = 10 ** (2.55323 - 0.61512 * x - 0.16403 * x * x)
    assert by_hand == pytest.approx(271.7, abs=0.05)
    assert unit_peak_cfs(1.53, 0.10, "type_ii") == pytest.approx(by_hand, rel=1e-9)
    middle = 10 ** (2.46532 - 0.62257 * x - 0.11657 * x * x)
    assert unit_peak_cfs(1.53, 0.20, "type_ii") == pytest.approx((by_hand + middle) / 2, rel=1e-9)


@pytest.mark.parametrize("distribution", ["type_i", "type_ia", "type_ii", "type_iii"])
def test_unit_peak_falls_with_tc_and_abstraction(distribution: str) -> None:
    rows = [row for row in table("graphical_peak_tr55").rows if row["distribution"] == distribution]
    ratios = [float(row["ia_over_p"]) for row in rows]
    assert ratios[0] == 0.10
    assert ratios[-1] == 0.50
    values = np.array(
        [[unit_peak_cfs(tc, ratio, distribution) for ratio in ratios] for tc in (0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0)]
    )
    assert (np.diff(values, axis=0) < 0).all()
    assert (np.diff(values[1:], axis=1) < 0).all()


def test_outside_the_table_the_nearest_row_is_taken_and_marked() -> None:
    low = graphical_peak(1.0, 1.0, [98.0, 75.0, 45.0], 152.4, "type_ii")
    assert low.limited.tolist() == [True, False, False]
    high = graphical_peak(1.0, 1.0, 45.0, 60.0, "type_ii")
    assert bool(high.limited)
    assert float(high.unit_peak_m3s_per_km2_mm) == pytest.approx(10**2.20282 * CFS_M3S / MI2_KM2 / 25.4, rel=1e-12)


def test_ponds_lower_the_peak() -> None:
    peaks = [float(graphical_peak(1.0, 1.0, 80.0, 100.0, "type_iii", pond).peak_m3s) for pond in (0, 0.2, 0.6, 1, 3, 5)]
    assert np.array(peaks) / peaks[0] == pytest.approx([1.0, 0.97, 0.92, 0.87, 0.75, 0.72])


def test_arrays_give_what_numbers_give() -> None:
    tc, curve = np.array([0.2, 3.0]), np.array([70.0, 90.0])
    both = graphical_peak([1.0, 2.0], tc, curve, 120.0, "type_i")
    for i in range(2):
        alone = graphical_peak([1.0, 2.0][i], tc[i], curve[i], 120.0, "type_i")
        assert float(alone.peak_m3s) == both.peak_m3s[i]


def test_rational_limit_is_200_acres() -> None:
    assert round(RATIONAL_LIMIT_KM2, 3) == 0.809


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: rational_peak_m3s(1.0, 10.0, 1.2), "runoff_coefficient is 1.2"),
        (lambda: rational_peak_m3s([1.0, np.nan], 10.0, 0.5), "row 1: area_km2 is nan"),
        (lambda: rational_peak_m3s(1.0, -10.0, 0.5), "intensity_mm_per_h is -10"),
        (lambda: graphical_peak(1.0, 0.05, 80.0, 100.0, "type_ii"), r"tc_h is 0.05: it must be between 0.1 and 10"),
        (lambda: graphical_peak(1.0, 1.0, 80.0, 0.0, "type_ii"), "depth_mm is 0"),
        (lambda: graphical_peak(1.0, 1.0, 80.0, 100.0, "type_iv"), "coefficients for type_i, type_ia"),
        (lambda: graphical_peak(1.0, 1.0, 80.0, 100.0, "type_ii", 6.0), "pond_pct is 6"),
    ],
)
def test_impossible_numbers_are_refused(call, message: str) -> None:
    with pytest.raises(RangeError, match=message):
        call()
