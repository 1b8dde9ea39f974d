"""At which return period a capacity is exceeded, between the tested ones only."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from basinwright.confidence import crossing_years, first_exceeded
from basinwright.errors import RangeError

YEARS = np.array([2.0, 10.0, 25.0, 100.0])


@given(st.floats(0.05, 2.0), st.floats(0.1, 50.0), st.floats(2.0, 100.0))
def test_peaks_that_are_a_power_of_the_return_period(exponent, scale, at):
    """Q = a T^b is straight on these scales: its inverse is known."""
    peak = scale * YEARS**exponent
    capacity = min(max(scale * at**exponent, peak[0]), np.nextafter(peak[-1], 0))
    assert float(crossing_years(capacity, peak, YEARS)) == pytest.approx(at, rel=1e-6)


def test_never_beyond_the_tested_periods():
    peak = np.array([[10.0, 20.0, 30.0, 40.0]] * 4)
    years = crossing_years([9.0, 10.0, 40.0, 41.0], peak, YEARS)
    assert years.tolist() == [-np.inf, 2.0, np.inf, np.inf]
    assert first_exceeded([9.0, 10.0, 40.0, 41.0], peak).tolist() == [0, 1, 4, 4]


def test_a_lower_peak_of_nothing():
    assert float(crossing_years(5.0, [0.0, 10.0, 20.0, 30.0], YEARS)) == pytest.approx(np.sqrt(2.0 * 10.0))
    assert float(crossing_years(5.0, [0.0, 0.0, 10.0, 30.0], YEARS)) == pytest.approx(np.sqrt(10.0 * 25.0))


def test_a_single_period():
    assert crossing_years([1.0, 3.0], [[2.0], [2.0]], [10.0]).tolist() == [-np.inf, np.inf]


def test_more_capacity_is_never_exceeded_sooner():
    peak = [3.0, 5.0, 5.0, 9.0]
    years = crossing_years(np.linspace(1, 10, 200), np.tile(peak, (200, 1)), YEARS)
    assert (years[1:] >= years[:-1]).all()


def test_periods_that_do_not_rise():
    with pytest.raises(RangeError, match="rise"):
        crossing_years(1.0, [1.0, 2.0], [10.0, 2.0])
