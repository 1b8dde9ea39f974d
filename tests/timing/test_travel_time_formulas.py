"""Sheet, shallow, channel and open-water flow: closed forms, independent forms, monotony, refusals."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.errors import RangeError
from basinwright.published import table
from basinwright.timing import (
    composite_roughness_n,
    critical_velocity_mps,
    full_pipe_velocity_mps,
    hydraulic_radius_m,
    jarrett_roughness_n,
    manning_velocity_mps,
    shallow_coefficient_mps,
    shallow_coefficients_mps,
    shallow_velocity_mps,
    sheet_flow_time_h,
    sheet_limit_m,
    wave_velocity_mps,
)

FT = 0.3048

FORMULAS = [
    (sheet_flow_time_h, {"length_m": 20.0, "roughness_n": 0.2, "two_year_depth_mm": 80.0, "slope": 0.02}),
    (sheet_limit_m, {"roughness_n": 0.2, "slope": 0.02}),
    (shallow_velocity_mps, {"coefficient_mps": 2.0, "slope": 0.02}),
    (manning_velocity_mps, {"hydraulic_radius_m": 0.5, "slope": 0.02, "roughness_n": 0.045}),
    (full_pipe_velocity_mps, {"diameter_m": 0.6, "slope": 0.02, "roughness_n": 0.013}),
    (hydraulic_radius_m, {"width_m": 4.0, "depth_m": 0.5}),
    (jarrett_roughness_n, {"slope": 0.02, "hydraulic_radius_m": 0.5}),
    (critical_velocity_mps, {"hydraulic_depth_m": 0.5}),
    (wave_velocity_mps, {"mean_depth_m": 2.0}),
]
"""Every formula with arguments that it can take."""

# Exponent of each argument, as the published forms print them.
EXPONENTS = [
    (sheet_flow_time_h, "length_m", 0.8),
    (sheet_flow_time_h, "roughness_n", 0.8),
    (sheet_flow_time_h, "two_year_depth_mm", -0.5),
    (sheet_flow_time_h, "slope", -0.4),
    (sheet_limit_m, "roughness_n", -1.0),
    (sheet_limit_m, "slope", 0.5),
    (shallow_velocity_mps, "coefficient_mps", 1.0),
    (shallow_velocity_mps, "slope", 0.5),
    (manning_velocity_mps, "hydraulic_radius_m", 2.0 / 3.0),
    (manning_velocity_mps, "slope", 0.5),
    (manning_velocity_mps, "roughness_n", -1.0),
    (full_pipe_velocity_mps, "diameter_m", 2.0 / 3.0),
    (jarrett_roughness_n, "slope", 0.38),
    (jarrett_roughness_n, "hydraulic_radius_m", -0.16),
    (critical_velocity_mps, "hydraulic_depth_m", 0.5),
    (wave_velocity_mps, "mean_depth_m", 0.5),
]


@pytest.mark.parametrize(("formula", "name", "exponent"), EXPONENTS)
def test_power_of_each_argument(formula, name: str, exponent: float) -> None:
    arguments = dict(FORMULAS)[formula]
    doubled = formula(**{**arguments, name: 2.0 * arguments[name]})
    assert doubled / formula(**arguments) == pytest.approx(2.0**exponent, rel=1e-12)


@pytest.mark.parametrize(("formula", "arguments"), FORMULAS)
def test_arrays_agree_with_plain_numbers(formula, arguments: dict[str, float]) -> None:
    scale = np.linspace(0.5, 3.0, 7)
    rows = formula(**{name: value * scale for name, value in arguments.items()})
    one_by_one = [formula(**{name: value * factor for name, value in arguments.items()}) for factor in scale]
    assert rows.tolist() == pytest.approx([float(value) for value in one_by_one], rel=1e-14)


@pytest.mark.parametrize("bad", [0.0, -1.0, float("nan"), float("inf")])
@pytest.mark.parametrize(("formula", "arguments"), FORMULAS)
def test_impossible_numbers_name_argument_and_row(formula, arguments: dict[str, float], bad: float) -> None:
    for name, value in arguments.items():
        with pytest.raises(RangeError, match=rf"^{'diameter_m|' if name == 'diameter_m' else ''}{name} is"):
            formula(**{**arguments, name: bad})
        with pytest.raises(RangeError, match=rf"^row 1: {name} is"):
            formula(**{**arguments, name: [value, bad]})


class TestSheetFlow:
    def test_metric_form(self) -> None:
        """0.091 (n L)^0.8 / (P^0.5 S^0.4), h, m, mm: the metric form of FHWA manuals, two digits of 0.09126."""
        metric = 0.091 * (0.24 * 30.0) ** 0.8 / (90.0**0.5 * 0.03**0.4)
        assert sheet_flow_time_h(30.0, 0.24, 90.0, 0.03) == pytest.approx(metric, rel=0.005)

    def test_cutting_a_reach_shortens_its_time(self) -> None:
        whole = sheet_flow_time_h(30.0, 0.24, 90.0, 0.03)
        halves = 2 * sheet_flow_time_h(15.0, 0.24, 90.0, 0.03)
        assert halves / whole == pytest.approx(2 * 0.5**0.8)
        assert halves > whole


class TestShallowFlow:
    def test_unknown_category_lists_the_known(self) -> None:
        with pytest.raises(RangeError, match=r"'lawn'.*short_grass"):
            shallow_coefficient_mps("lawn")

    def test_table_follows_from_its_own_depth_and_n(self) -> None:
        """NEH 630 ch. 15: V / sqrt(s) = 1.486 d^(2/3) / n, to the third decimal."""
        for row in table("shallow_flow_neh").rows:
            manning = 1.486 * float(row["depth_ft"]) ** (2 / 3) / float(row["n"])
            assert float(row["velocity_per_root_slope_fps"]) == pytest.approx(manning, abs=6e-4), row["key"]

    def test_rougher_cover_is_slower(self) -> None:
        coefficients = list(shallow_coefficients_mps().values())
        assert coefficients == sorted(coefficients, reverse=True)


class TestChannel:
    def test_constant_is_the_metric_form_converted(self) -> None:
        """V = R^(2/3) S^(1/2) / n in metres; 1.486 for 0.3048^(-1/3) = 1.48592."""
        assert manning_velocity_mps(0.8, 0.004, 0.03) == pytest.approx(0.8 ** (2 / 3) * 0.004**0.5 / 0.03, rel=1e-4)

    def test_wide_channel_has_a_radius_of_its_depth(self) -> None:
        assert hydraulic_radius_m(1e9, 0.7) == pytest.approx(0.7, rel=1e-6)

    def test_half_hexagon(self) -> None:
        """The best trapezoid, half a hexagon of side 2: area 3 sqrt(3), perimeter 6, R half its depth sqrt(3)."""
        assert hydraulic_radius_m(2.0, 3**0.5, side_slope=3**-0.5) == pytest.approx(3**0.5 / 2)

    def test_composite_roughness_keeps_the_velocity(self) -> None:
        """The assumption behind the form: parts R_i ~ n_i^1.5 flow at one velocity, and so does the whole."""
        perimeter, n = np.array([2.0, 5.0, 1.0]), np.array([0.015, 0.045, 0.1])
        radius = 3.0 * n**1.5
        parts = manning_velocity_mps(radius, 0.01, n)
        whole = manning_velocity_mps(
            (perimeter * radius).sum() / perimeter.sum(), 0.01, composite_roughness_n(perimeter, n)
        )
        assert parts == pytest.approx([float(whole)] * 3)

    def test_jarrett_velocity(self) -> None:
        """V = 3.81 R^0.83 S^0.12 (ft/s, ft), the paper's companion equation, from memory; exponents rounded."""
        for slope in (0.002, 0.01, 0.04):
            for radius_ft in (0.5, 2.0, 7.0):
                n = jarrett_roughness_n(slope, radius_ft * FT)
                companion = 3.81 * radius_ft**0.83 * slope**0.12
                assert manning_velocity_mps(radius_ft * FT, slope, n) / FT == pytest.approx(companion, rel=0.008)

    def test_jarrett_keeps_steep_channels_subcritical(self) -> None:
        """What the equation is for: over its own range no wide channel runs faster than critical; n 0.045 does."""
        slope, radius = np.meshgrid(np.linspace(0.002, 0.04, 20), np.linspace(0.5, 7.0, 20) * FT)
        slow = manning_velocity_mps(radius, slope, jarrett_roughness_n(slope, radius))
        assert (slow < critical_velocity_mps(radius)).all()
        assert (manning_velocity_mps(radius, slope, 0.045) > critical_velocity_mps(radius)).any()

    @given(st.floats(0.1, 100.0), st.floats(0.01, 10.0), st.floats(0.0, 5.0))
    @settings(max_examples=50, deadline=None)
    def test_radius_is_below_depth_and_grows_with_it(self, width: float, depth: float, side: float) -> None:
        radius = hydraulic_radius_m(width, depth, side)
        assert 0 < radius < depth
        assert hydraulic_radius_m(width, 0.5 * depth, side) < radius


def test_chow_roughness_is_in_order() -> None:
    chow = table("manning_n_chow")
    low, usual, high = (np.array(chow.floats(f"n_{column}")) for column in ("minimum", "normal", "maximum"))
    assert (low < usual).all()
    assert (usual < high).all()
    assert len(usual) == 17


def test_kerby_retardance_as_printed() -> None:
    assert table("kerby_retardance").floats("retardance_n") == [0.02, 0.10, 0.20, 0.40, 0.60, 0.80]
