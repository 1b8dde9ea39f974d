"""Balanced and nested storms, areal reduction, critical duration."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.errors import InputRejected, RangeError
from basinwright.storms import (
    areal_reduction_leclerc_schaake,
    balanced,
    critical_duration,
    interpolated_depth_mm,
    nested,
    read_depth_duration_frequency,
)

# Chow, Maidment and Mays (1988) example 14.4.1: i = 96.6 / (Td^0.97 + 13.90), in/h, min.
MINUTES = np.arange(10.0, 121.0, 10.0)
DENVER_IN = 96.6 / (MINUTES**0.97 + 13.90) * MINUTES / 60.0
ARRANGED_IN = [0.024, 0.033, 0.050, 0.084, 0.178, 0.693, 0.308, 0.117, 0.063, 0.040, 0.028, 0.021]


def test_denver_storm_is_arranged_as_printed() -> None:
    storm = balanced(2.0, 1 / 6, MINUTES / 60.0, DENVER_IN * 25.4)
    increments = np.diff(storm.fractions) * DENVER_IN[-1]
    assert increments.round(3).tolist() == pytest.approx(ARRANGED_IN, abs=0.00101)  # the print rounds twice


def power_table(exponent: float) -> tuple[np.ndarray, np.ndarray]:
    hours = np.array([1 / 12, 0.25, 0.5, 1.0, 2.0, 3.0, 6.0, 12.0, 24.0])
    return hours, 80.0 * (hours / 24.0) ** exponent


@settings(max_examples=25, deadline=None)
@given(
    exponent=st.floats(0.1, 0.9),
    duration_h=st.sampled_from([1.0, 3.0, 6.0, 24.0]),
    steps=st.integers(1, 60),
    build=st.sampled_from([balanced, nested]),
)
def test_every_duration_around_the_burst_has_its_depth(exponent, duration_h, steps, build) -> None:
    step_h = duration_h / steps
    hours, depths = power_table(exponent)
    if build is balanced and step_h < hours[0]:
        step_h = duration_h / max(1, int(duration_h / hours[0]))
    storm = build(duration_h, step_h, hours, depths)
    assert storm.fractions[-1] == 1.0
    whole = 80.0 * (duration_h / 24.0) ** exponent
    grid = np.linspace(0.0, duration_h, round(duration_h / step_h) + 1)
    fallen = storm.fraction_at(grid) * whole
    for blocks in range(1, grid.size):
        window_h = blocks * step_h
        if window_h < hours[0]:
            continue
        expected = 80.0 * (window_h / 24.0) ** exponent
        most = (fallen[blocks:] - fallen[:-blocks]).max()
        assert most <= expected * (1 + 1e-9)
        if build is balanced:  # the window lies on the blocks
            assert most == pytest.approx(expected, rel=1e-9)
    if build is nested:
        for window_h in hours[(hours <= duration_h)]:
            centred = storm.fraction_at((duration_h + window_h) / 2) - storm.fraction_at((duration_h - window_h) / 2)
            assert centred * whole == pytest.approx(80.0 * (window_h / 24.0) ** exponent, rel=1e-6)


def test_storm_outside_the_table_or_off_its_step_is_refused() -> None:
    hours, depths = power_table(0.4)
    with pytest.raises(RangeError, match=r"step_h is 0.7: it must divide"):
        balanced(6.0, 0.7, hours, depths)
    with pytest.raises(RangeError, match="step_h is 8: it must divide"):  # shorter than its step
        balanced(6.0, 8.0, hours, depths)
    with pytest.raises(RangeError, match=r"duration_h is 0.05: the table runs from 0.08"):
        balanced(6.0, 0.05, hours, depths)
    with pytest.raises(RangeError, match="duration_h is 48"):
        nested(48.0, 1.0, hours, depths)
    with pytest.raises(RangeError, match="row 1: depths_mm is nan"):
        interpolated_depth_mm(1.0, [0.5, 2.0], [10.0, np.nan])


def test_interpolation_follows_a_power_of_duration() -> None:
    hours, depths = power_table(0.37)
    assert interpolated_depth_mm([0.1, 1.7, 24.0], hours, depths) == pytest.approx(
        80.0 * (np.array([0.1, 1.7, 24.0]) / 24.0) ** 0.37, rel=1e-12
    )


def test_table_is_read_by_return_period() -> None:
    ddf = read_depth_duration_frequency([1.0, 4.0], ["2", "100"], [[20.0, 40.0], [40.0, 90.0]])
    assert float(ddf.depth_mm(2.0, "2")) == pytest.approx(800.0**0.5)
    assert ddf.column("100").tolist() == [40.0, 90.0]
    with pytest.raises(RangeError, match="no return period '50'"):
        ddf.column("50")


def test_every_fault_of_a_depth_table_is_listed() -> None:
    with pytest.raises(InputRejected) as refused:
        read_depth_duration_frequency(
            [1.0, 2.0, 2.0], ["10", "2"], [[30.0, 20.0], [25.0, -1.0], [70.0, 26.0]], file="ddf.csv"
        )
    fields = [problem.field for problem in refused.value.problems]
    assert fields == ["header", "row 4, duration", "row 2, 2", "row 3, 10", "row 3, 2", "row 4, 10", "row 4, 2"]


def test_rising_intensity_is_refused() -> None:
    with pytest.raises(InputRejected, match="higher intensity"):
        read_depth_duration_frequency([2.0, 4.0], ["2"], [[20.0], [41.0]])
    assert read_depth_duration_frequency([2.0, 4.0], ["2"], [[20.0], [40.1]]).depths_mm[1, 0] == 40.1  # a rounding
    assert read_depth_duration_frequency([0.2, 0.4], ["2"], [[20.0], [39.0]]).depths_mm[1, 0] == 39.0


@pytest.mark.parametrize(
    ("periods", "depths", "message"),
    [(["2"], [[1.0]], "two or more rows"), (["two"], [[1.0], [2.0]], "not all numbers"), ([], [[], []], "two or more")],
)
def test_no_table_at_all_is_refused(periods, depths, message) -> None:
    with pytest.raises(InputRejected, match=message):
        read_depth_duration_frequency(np.arange(1.0, len(depths) + 1), periods, depths)


def test_areal_reduction_falls_with_area_and_rises_with_duration() -> None:
    area, duration = np.meshgrid(np.linspace(0.0, 1000.0, 40), np.linspace(0.5, 24.0, 60))
    factor = areal_reduction_leclerc_schaake(area, duration)
    assert factor[:, 0].tolist() == [1.0] * 60
    assert (np.diff(factor, axis=1) < 0).all()
    assert (np.diff(factor[:, 1:], axis=0) > 0).all()
    assert ((factor > 0.5) & (factor <= 1.0)).all()
    with pytest.raises(RangeError, match="area_km2 is -1"):
        areal_reduction_leclerc_schaake(-1.0, 24.0)


def test_critical_duration_by_outlet_and_period() -> None:
    peaks = np.array([[[1.0, 9.0]], [[3.0, 8.0]], [[2.0, 7.0]]])
    hours, at_end = critical_duration([1.0, 6.0, 24.0], peaks)
    assert hours.tolist() == [[6.0, 1.0]]
    assert at_end.tolist() == [[False, True]]
    assert critical_duration([1.0, 2.0], [[4.0], [4.0]])[0].tolist() == [1.0]  # the shortest of equals
    with pytest.raises(RangeError, match="must rise"):
        critical_duration([6.0, 1.0], [[1.0], [2.0]])
