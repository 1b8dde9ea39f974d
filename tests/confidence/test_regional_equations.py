"""Regional regression equations: the arithmetic, the bands, and tables that cannot be read."""

import math

import numpy as np
import pytest
from scipy.stats import lognorm, norm

from basinwright.confidence import (
    read_equations,
    regional_band,
    regional_estimate,
    standard_error_log10,
    standard_error_pct,
)
from basinwright.errors import InputRejected, RangeError
from basinwright.units import KM2_PER_MI2, M3S_PER_CFS

PERIODS = ["2", "10", "100"]


class TestFormulas:
    def test_colorado_northwest(self):
        """J. F. McCain and R. D. Jarrett, Manual for Estimating Flood Characteristics of Natural-Flow Streams in
        Colorado, 1976: Q100 = 104.7 A^0.624 (cfs, mi2), from a copy of the equation; by logarithms on paper for
        25 mi2: log10 104.7 = 2.01995, 0.624 x 1.39794 = 0.87231, antilog of 2.89226 = 780.3.
        """
        assert float(regional_estimate(104.7, {"area_mi2": 0.624}, {"area_mi2": 25.0})) == pytest.approx(
            780.3, rel=1e-4
        )

    def test_colorado_plains(self):
        """The same manual, plains region: Q100 = 1640 A^0.388; 100 mi2: A^0.388 = 10^0.776 = 5.9704."""
        estimate = regional_estimate(1640.0, {"area_mi2": 0.388}, {"area_mi2": 100.0})
        assert float(estimate) == pytest.approx(1640 * 5.9704, rel=1e-4)

    def test_percent_is_the_coefficient_of_variation_of_a_lognormal(self):
        for error in (0.05, 0.2, 0.4):
            variable = lognorm(error * math.log(10.0))
            assert float(standard_error_pct(error)) == pytest.approx(100 * variable.std() / variable.mean(), rel=1e-12)

    def test_the_rounded_constant_of_the_reports(self):
        """SE% = 100 sqrt(exp(5.302 SE^2) - 1) as printed: the same to the four digits of its constant."""
        for error in (0.1, 0.2, 0.3):
            assert float(standard_error_pct(error)) == pytest.approx(
                100 * math.sqrt(math.exp(5.302 * error**2) - 1), rel=2e-4
            )

    def test_there_and_back(self):
        errors = np.array([0.0, 0.01, 0.2, 0.7])
        assert standard_error_log10(standard_error_pct(errors)) == pytest.approx(errors, rel=1e-12)

    def test_the_band_holds_nine_tenths(self):
        low, high = regional_band(100.0, 0.2)
        inside = norm.cdf(np.log10(high), 2.0, 0.2) - norm.cdf(np.log10(low), 2.0, 0.2)
        assert inside == pytest.approx(0.90, abs=1e-4)
        assert float(low * high) == pytest.approx(100.0**2, rel=1e-12)

    def test_a_parameter_without_a_power(self):
        with pytest.raises(RangeError, match="open_water_pct"):
            regional_estimate(1.0, {"open_water_pct": -0.3}, {"open_water_pct": 0.0})


def read(text, periods=PERIODS):
    lines = [line.split(",") for line in text.strip().splitlines()]
    names = lines[0]
    return read_equations(names, [dict(zip(names, line, strict=True)) for line in lines[1:]], periods, "regional.csv")


def test_a_table():
    equations = read(
        """return_period_yr,constant_cfs,area_mi2,area_mi2_low,area_mi2_high,depth_2yr_in,standard_error_pct,source
100,620,0.66,0.1,40,0.5,50,A report
2,120,0.70,,40,,55,A report
500,900,0.6,,,,50,A report"""
    )
    assert [equation.period for equation in equations] == ["2", "100"]  # 500 is none of the project's
    two, hundred = equations
    assert (two.constant, two.unit_m3s, two.source) == (120.0, M3S_PER_CFS, "A report")
    assert {parameter.name: value for parameter, value in two.exponents.items()} == {"area_mi2": 0.70}
    parameters = {parameter.name: parameter for parameter in hundred.exponents}
    assert parameters["area_mi2"].factor == KM2_PER_MI2
    assert (parameters["depth_2yr_in"].stem, parameters["depth_2yr_in"].factor) == ("depth_2yr", 25.4)
    assert hundred.bounds[parameters["area_mi2"]] == (0.1, 40.0)
    assert two.bounds[next(iter(two.bounds))] == (-math.inf, 40.0)
    assert hundred.standard_error_log10 == pytest.approx(float(standard_error_log10(50.0)))


def test_a_parameter_in_another_unit_of_its_kind():
    """A column in acres is one of outlets.csv all the same."""
    (equation,) = read("return_period_yr,constant_m3s,area_ac,standard_error_log10\n10,1,0.5,0.2")
    (parameter,) = equation.exponents
    assert (parameter.stem, equation.unit_m3s, equation.standard_error_log10) == ("area", 1.0, 0.2)


HEAD = "return_period_yr,constant_cfs,area_mi2,standard_error_pct\n"
START = "return_period_yr,constant_cfs,"
FAULTS = {
    "no_such_column": (START + "aera_mi2,standard_error_pct\n10,1,0.5,40", "aera_mi2", "'area_mi2'"),
    "bound_alone": (START + "area_mi2_low,standard_error_pct\n10,1,0.5,40", "area_mi2_low", "area"),
    "no_period": ("constant_cfs,area_mi2,standard_error_pct\n1,0.5,40", "header", "return_period_yr"),
    "no_error": (START + "area_mi2\n10,1,0.5", "header", "standard_error_log10"),
    "two_constants": (
        "return_period_yr,constant_cfs,constant_m3s,standard_error_pct\n10,1,1,40", "header", "constant_cfs and"
    ),
    "twice": (START + "area_mi2,area_mi2,standard_error_pct\n10,1,1,1,40", "area_mi2", "more than"),
    "no_number": (HEAD + "10,one,0.5,40", "row 2, constant_cfs", "'one' is not a number over 0"),
    "negative": (HEAD + "10,-5,0.5,40", "row 2, constant_cfs", "over 0"),
    "no_error_value": (HEAD + "10,5,0.5,0", "row 2, standard_error_pct", "over 0"),
    "bad_exponent": (HEAD + "10,5,nan,40", "row 2, area_mi2", "not a number"),
    "same_period": (HEAD + "10,5,0.5,40\n10,5,0.5,40", "row 3, return_period_yr", "more than once"),
    "other_periods": (HEAD + "500,5,0.5,40", "return_period_yr", "2, 10, 100"),
    "reversed_range": (
        "return_period_yr,constant_cfs,area_mi2,area_mi2_low,area_mi2_high,standard_error_pct\n10,1,0.5,9,2,40",
        "row 2, area_mi2_low", "9 is over area_mi2_high 2",
    ),
}  # fmt: skip


@pytest.mark.parametrize("fault", FAULTS)
def test_a_table_that_cannot_be_read(fault):
    text, field, words = FAULTS[fault]
    with pytest.raises(InputRejected) as rejected:
        read(text)
    (problem,) = rejected.value.problems
    assert (problem.file, problem.field) == ("regional.csv", field)
    assert words in str(problem)


def test_every_fault_at_once():
    with pytest.raises(InputRejected) as rejected:
        read(HEAD + "ten,5,0.5,40\n2,-1,x,40")
    assert len(rejected.value.problems) == 3
