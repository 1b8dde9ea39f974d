"""The 24-hour distributions, a user's table, and what is refused."""

import subprocess
import sys

import numpy as np
import pytest

from basinwright.errors import InputRejected, RangeError
from basinwright.published import table
from basinwright.registry import find
from basinwright.storms import Storm, cumulative_fraction, table_storm

TYPES = ("type_i", "type_ia", "type_ii", "type_iii")


@pytest.mark.parametrize("key", TYPES)
def test_distribution_is_a_storm_of_24_hours_at_tenths(key: str) -> None:
    storm: Storm = find("storm", key).function()
    assert storm.hours.size == 241
    assert storm.duration_h == 24.0
    assert storm.burst_step_h == pytest.approx(0.1)
    assert np.diff(storm.fractions).min() > 0.0  # some rain in every tenth of an hour


@pytest.mark.parametrize(
    ("key", "burst_h"),
    [("type_i", 9.85), ("type_ia", 7.75), ("type_ii", 11.85), ("type_iii", 12.0)],  # peaks at about 10, 8, 12, 12 h
)
def test_burst_stands_where_the_handbook_draws_it(key: str, burst_h: float) -> None:
    storm: Storm = find("storm", key).function()
    steepest = int(np.argmax(np.diff(storm.fractions)))
    assert storm.hours[steepest : steepest + 2].mean() == pytest.approx(burst_h, abs=0.051)


def test_intensities_rank_as_the_handbook_says() -> None:
    burst = {key: np.diff(find("storm", key).function().fractions).max() for key in TYPES}
    assert burst["type_ia"] < burst["type_i"] < burst["type_iii"] < burst["type_ii"]


def test_type_iii_is_symmetric_where_it_is_published_so() -> None:
    hours = np.arange(4.0, 12.0, 0.1)
    before, after = (cumulative_fraction("type_iii", at) for at in (hours, 24.0 - hours))
    assert before == pytest.approx(1.0 - after, abs=1.1e-5)


@pytest.mark.parametrize("key", TYPES)
def test_distribution_is_smooth_away_from_its_burst(key: str) -> None:
    """A slip of the pen in one ordinate would show as a jump of the intensity between neighbours."""
    increments = np.diff(table(f"scs_{key}").floats("fraction"))
    calm = increments < 0.008
    jumps = np.abs(np.diff(increments))[calm[1:] & calm[:-1]] / increments[1:][calm[1:] & calm[:-1]]
    assert jumps.max() < 0.35
    # From 14 h on the curves are parabolas: second differences hardly change.
    tail = np.diff(increments[140:200], n=1)
    assert np.ptp(tail) < 1.2e-4


def test_popular_wrong_hourly_list_is_not_ours() -> None:
    """A widely copied hourly list has .601 at 12 h for Type II."""
    assert float(cumulative_fraction("type_ii", 12.0)) == pytest.approx(0.663, abs=5e-4)


@pytest.mark.parametrize("key", TYPES)
def test_other_durations_are_refused(key: str) -> None:
    with pytest.raises(RangeError, match=r"duration_h is 6: .* 24 hours"):
        find("storm", key).function(6.0)


def test_unknown_storm_names_the_nearest() -> None:
    with pytest.raises(KeyError, match="nearest: nested"):
        find("storm", "nestled")
    with pytest.raises(RangeError, match="type_iv"):
        cumulative_fraction("type_iv", 1.0)


def test_fraction_is_linear_between_and_flat_outside() -> None:
    storm = Storm("own", np.array([0.0, 1.0, 4.0]), np.array([0.0, 0.4, 1.0]))
    assert storm.fraction_at([-1.0, 0.5, 2.5, 9.0]).tolist() == pytest.approx([0.0, 0.2, 0.7, 1.0])
    with pytest.raises(RangeError, match="row 1: time_h is nan"):
        storm.fraction_at([0.0, np.nan])


def test_steepest_step_is_the_burst_not_the_shortest() -> None:
    storm = Storm("own", np.array([0.0, 0.1, 4.0, 6.0]), np.array([0.0, 0.001, 0.2, 1.0]))
    assert storm.burst_step_h == 2.0


def test_every_fault_of_a_table_is_listed_with_row_and_column() -> None:
    with pytest.raises(InputRejected) as refused:
        table_storm([0.5, 1.0, 1.0, np.nan, 4.0], [0.0, 0.5, 0.4, 0.9, 0.98], file="storm.csv")
    problems = [(problem.field, problem.what) for problem in refused.value.problems]
    assert problems == [
        ("row 2, hour", "is 0.5"),
        ("row 4, hour", "is 1, after 1"),
        ("row 4, fraction", "is 0.4, after 0.5"),
        ("row 5, hour", "is nan"),
        ("row 6, fraction", "is 0.98"),
    ]
    assert all(problem.file == "storm.csv" and problem.fix for problem in refused.value.problems)


def test_a_table_of_one_row_is_no_storm() -> None:
    with pytest.raises(InputRejected, match="at least two rows"):
        table_storm([0.0], [0.0])


def test_storm_cannot_be_changed() -> None:
    storm = table_storm([0.0, 1.0], [0.0, 1.0])
    with pytest.raises(ValueError, match="read-only"):
        storm.fractions[0] = 0.5


@pytest.mark.parametrize("room", ["storms", "runoff", "hydrograph"])
def test_rooms_import_numpy_only(room: str) -> None:
    heavy = "{'numba', 'scipy', 'pandas', 'rasterio', 'geopandas', 'fiona', 'pyogrio', 'shapely', 'pyproj'}"
    code = f"import sys, basinwright.{room}; print(sorted({heavy} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
