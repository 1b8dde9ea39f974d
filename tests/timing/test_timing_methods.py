"""Every registered timing method: source, range and case; rivals, monotony, and the evaluation over outlets."""

import inspect
import math
import subprocess
import sys

import numpy as np
import pytest

from basinwright.errors import RangeError
from basinwright.registry import Range, methods
from basinwright.timing import spread, time_of_concentration
from basinwright.timing.methods.kinematic_wave import kinematic_wave_at_intensity_h, kinematic_wave_tc_h

METHODS = methods("timing")

# What the engine can give a method: columns of the outlets, and what follows from segments, cover and storms.
KNOWN_INPUTS = {
    "area_km2", "path_length_m", "path_slope_pct", "basin_slope_pct", "curve_number", "travel_time_h",
    "overland_length_m", "overland_slope_pct", "retardance_n", "runoff_coefficient", "sheet_n",
    "mean_elevation_above_outlet_m", "intensity_mm_per_h",
}  # fmt: skip


def rain(duration_h: np.ndarray) -> np.ndarray:
    """Mean intensity [mm/h] of a plausible design rain."""
    return 40.0 * duration_h**-0.7


BASIN = {
    "area_km2": 10.0, "path_length_m": 5000.0, "path_slope_pct": 3.0, "basin_slope_pct": 8.0, "curve_number": 75.0,
    "travel_time_h": 1.5, "overland_length_m": 100.0, "overland_slope_pct": 2.0, "retardance_n": 0.4,
    "runoff_coefficient": 0.4, "sheet_n": 0.24, "mean_elevation_above_outlet_m": 70.0, "intensity_mm_per_h": rain,
}  # fmt: skip


def hack_length_m(area_km2: np.ndarray) -> np.ndarray:
    """Length of the main stream by Hack (1957), 1.4 A^0.6: mi, mi2."""
    return 1609.344 * 1.4 * (area_km2 / 2.589988110336) ** 0.6


# Sign of the change of time with each input, where physics says so.
LONGER_WITH = {"path_length_m", "retardance_n", "sheet_n", "overland_length_m", "travel_time_h"}
SHORTER_WITH = {"path_slope_pct", "basin_slope_pct", "overland_slope_pct", "curve_number", "runoff_coefficient",
                "mean_elevation_above_outlet_m"}  # fmt: skip


@pytest.mark.parametrize("key", METHODS)
class TestEveryMethod:
    def test_states_form_source_and_range(self, key: str) -> None:
        entry = METHODS[key]
        assert entry.name
        assert entry.form
        assert entry.limits
        assert all((entry.source.document, entry.source.edition, entry.source.place, entry.source.note))
        assert entry.valid_range or "no range is published" in entry.limits

    def test_inputs_are_the_arguments_and_known(self, key: str) -> None:
        entry = METHODS[key]
        assert tuple(inspect.signature(entry.function).parameters) == entry.inputs
        assert set(entry.inputs) | set(entry.valid_range) <= KNOWN_INPUTS

    def test_ranges_are_sound(self, key: str) -> None:
        for bounds in METHODS[key].valid_range.values():
            assert bounds.low < bounds.high
            assert bounds.printed

    def test_rows_agree_with_plain_numbers(self, key: str) -> None:
        entry = METHODS[key]
        scale = np.linspace(0.6, 1.2, 5)
        row = {name: BASIN[name] if callable(BASIN[name]) else BASIN[name] * scale for name in entry.inputs}
        together = entry.function(**row)
        for index in range(scale.size):
            one = {name: value if callable(value) else float(value[index]) for name, value in row.items()}
            assert float(entry.function(**one)) == pytest.approx(together[index], rel=1e-9)

    @pytest.mark.parametrize("bad", [-1.0, math.nan, math.inf])
    def test_impossible_numbers_are_refused(self, key: str, bad: float) -> None:
        entry = METHODS[key]
        arguments = {name: BASIN[name] for name in entry.inputs}
        for name in entry.inputs:
            if not callable(BASIN[name]):
                with pytest.raises(RangeError, match=name):
                    entry.function(**{**arguments, name: bad})

    def test_moves_with_each_input_as_physics_says(self, key: str) -> None:
        entry = METHODS[key]
        for name in entry.inputs:
            if callable(BASIN[name]):
                continue
            bounds = entry.valid_range.get(name, Range(BASIN[name] * 0.2, BASIN[name] * 1.3))
            high = min(bounds.high, BASIN[name] * 20.0)
            swept = np.geomspace(max(bounds.low, high / 50.0), high, 40)
            others = {other: BASIN[other] for other in entry.inputs}
            times = entry.function(**{**others, name: swept})
            assert (times > 0).all(), name
            if name in LONGER_WITH:
                assert (np.diff(times) > 0).all(), name
            elif name in SHORTER_WITH:
                assert (np.diff(times) < 0).all(), name


def test_upper_bounds_of_numbers() -> None:
    nrcs_lag, faa = METHODS["nrcs_lag"].function, METHODS["faa"].function
    assert nrcs_lag(1000.0, 100.0, 5.0) > 0
    assert faa(50.0, 2.0, 1.0) > 0
    with pytest.raises(RangeError, match=r"curve_number is 100\.5: it must be between 0 and 100"):
        nrcs_lag(1000.0, 100.5, 5.0)
    with pytest.raises(RangeError, match=r"runoff_coefficient is 1\.005: it must be between 0 and 1"):
        faa(50.0, 2.0, 1.005)


def test_what_is_shipped() -> None:
    assert set(METHODS) == {
        "velocity", "nrcs_lag", "kirpich", "kerby", "kerby_kirpich", "california_culverts", "faa", "kinematic_wave",
        "bransby_williams", "johnstone_cross", "giandotti", "temez",
    }  # fmt: skip


class TestRivals:
    """Sweeps over ranges that methods share: a slip of log, unit or exponent leaves the band at once."""

    def test_california_is_kirpich(self) -> None:
        length, slope = np.meshgrid(np.geomspace(50, 5000, 40), np.geomspace(0.5, 20, 60))
        kirpich = METHODS["kirpich"].function(length, slope)
        california = METHODS["california_culverts"].function(length, slope)
        assert california / kirpich == pytest.approx(np.ones_like(length), rel=0.003)

    def test_small_rural_basins_stay_within_a_band(self) -> None:
        """1 to 49 km2, lengths by Hack's law (1.4 A^0.6, mi), land four times as steep as the path: factor 3."""
        area = np.geomspace(1.0, 49.0, 30)
        length = hack_length_m(area)
        for slope in (0.3, 0.5, 1.0, 2.0, 5.0):
            times = np.array(
                [
                    METHODS["kirpich"].function(length, slope),
                    METHODS["kerby_kirpich"].function(100.0, 2.0 * slope, 0.4, length, slope),
                    METHODS["bransby_williams"].function(length, area, slope),
                    METHODS["temez"].function(length, slope),
                    METHODS["nrcs_lag"].function(length, 75.0, 4.0 * slope),
                ]
            )
            assert (times.max(axis=0) / times.min(axis=0) < 3.0).all(), slope
            assert times[2] == pytest.approx(times[3], rel=0.2)  # Bransby Williams and Temez

    def test_large_basins_stay_within_a_band(self) -> None:
        """170 to 3000 km2 on slopes of rivers, where Giandotti, Johnstone-Cross and Temez all hold: factor 5."""
        area = np.geomspace(170.0, 3000.0, 30)
        length = hack_length_m(area)
        for slope in (0.3, 0.5, 1.0):
            times = np.array(
                [
                    METHODS["temez"].function(length, slope),
                    METHODS["johnstone_cross"].function(length, slope),
                    METHODS["giandotti"].function(area, length, 0.4 * length * slope / 100.0),
                ]
            )
            assert (times.max(axis=0) / times.min(axis=0) < 5.0).all(), slope

    def test_overland_methods_stay_within_a_band(self) -> None:
        """Grass of 10 to 30 m at 0.2 to 1 %, 60 mm/h: Kerby, kinematic wave and FAA within a factor of 3.5."""
        length, slope = np.meshgrid(np.linspace(10.0, 30.0, 20), np.linspace(0.2, 1.0, 20))
        times = np.array(
            [
                METHODS["kerby"].function(length, slope, 0.40),
                kinematic_wave_at_intensity_h(length, slope, 0.24, 60.0),
                METHODS["faa"].function(length, slope, 0.35),
            ]
        )
        assert (times.max(axis=0) / times.min(axis=0) < 3.5).all()

    def test_kerby_kirpich_tends_to_kirpich(self) -> None:
        both = METHODS["kerby_kirpich"].function(1e-9, 2.0, 0.4, 5000.0, 1.0)
        assert both == pytest.approx(float(METHODS["kirpich"].function(5000.0, 1.0)), rel=1e-3)


class TestKinematicWave:
    def test_power_law_rain_has_a_closed_form(self) -> None:
        """With i = a t^-e, t = c i^-0.4 gives t = (c a^-0.4)^(1 / (1 - 0.4 e)), c the time at 1 mm/h."""
        for exponent in (0.0, 0.3, 0.7, 0.95):
            c = float(kinematic_wave_at_intensity_h(30.0, 1.0, 0.24, 1.0))
            exact = (c * 40.0**-0.4) ** (1.0 / (1.0 - 0.4 * exponent))
            found = kinematic_wave_tc_h(30.0, 1.0, 0.24, lambda hours, e=exponent: 40.0 * hours**-e)
            assert float(found) == pytest.approx(exact, rel=1e-9)

    def test_rain_that_grows_with_duration_is_refused(self) -> None:
        """1 mm/h takes longer than an hour, 1000 mm/h less: with these the search would jump to and fro."""
        with pytest.raises(RangeError, match="intensity must not rise"):
            kinematic_wave_tc_h(30.0, 1.0, 0.24, lambda hours: np.where(hours < 1.0, 1.0, 1000.0))


class TestOverOutlets:
    def test_missing_inputs_are_named(self) -> None:
        results = time_of_concentration({"path_length_m": [1000.0, math.nan], "path_slope_pct": [4.0, 4.0]})
        kirpich = results["kirpich"]
        assert kirpich.reason.tolist() == ["", "needs path_length_m"]
        assert np.isnan(kirpich.tc_h[1])
        assert not kirpich.applicable[1]
        assert results["nrcs_lag"].reason[0] == "needs curve_number, basin_slope_pct"
        assert results["kinematic_wave"].reason[0] == "needs sheet_n, intensity_mm_per_h"

    def test_flat_path_is_named(self) -> None:
        results = time_of_concentration({"path_length_m": [1000.0], "path_slope_pct": [0.0]})
        assert results["kirpich"].reason.tolist() == ["needs path_slope_pct above zero"]

    def test_range_counts_on_every_column_it_names(self) -> None:
        outlets = {
            "path_length_m": [500.0] * 4,
            "path_slope_pct": [4.0, 4.0, 11.0, 11.0],
            "area_km2": [0.1, 10.0, 0.1, 10.0],
        }
        kirpich = time_of_concentration(outlets)["kirpich"]
        assert kirpich.applicable.tolist() == [True, False, False, False]
        assert kirpich.reason.tolist() == [
            "",
            "area_km2 outside 1 to 112 ac",
            "path_slope_pct outside 3 to 10 %",
            "area_km2 outside 1 to 112 ac; path_slope_pct outside 3 to 10 %",
        ]
        assert np.isfinite(kirpich.tc_h).all()

    def test_bounds_are_part_of_the_range(self) -> None:
        inputs = {
            "path_length_m": 3000.0,
            "basin_slope_pct": 5.0,
            "area_km2": 5.0,
            "curve_number": [49.9, 50.0, 95.0, 95.1],
        }
        assert time_of_concentration(inputs)["nrcs_lag"].applicable.tolist() == [False, True, True, False]

    def test_overland_longer_than_the_path_gives_no_time(self) -> None:
        inputs = {**BASIN, "overland_length_m": 300.0, "path_length_m": [200.0, 2000.0]}
        kerby_kirpich = time_of_concentration(inputs)["kerby_kirpich"]
        assert np.isnan(kerby_kirpich.tc_h).tolist() == [True, False]
        assert "no time" in kerby_kirpich.reason[0]

    def test_everything_given_everything_computed(self) -> None:
        results = time_of_concentration(BASIN)
        assert list(results) == list(METHODS)
        for key, result in results.items():
            assert np.isfinite(result.tc_h).all(), key
            assert result.applicable.tolist() == [result.reason[0] == ""], key

    def test_one_outlet_in_many_as_alone(self) -> None:
        rng = np.random.default_rng(3)
        many = {name: value if callable(value) else value * rng.uniform(0.3, 1.2, 50) for name, value in BASIN.items()}
        together = time_of_concentration(many)
        alone = time_of_concentration({name: value if callable(value) else value[17] for name, value in many.items()})
        for key in METHODS:
            assert alone[key].tc_h[0] == pytest.approx(together[key].tc_h[17], rel=1e-9)
            assert alone[key].reason[0] == together[key].reason[17]

    def test_spread_uses_only_the_applicable(self) -> None:
        """2 km of 4 % on 0.2 km2 with a travel time of 1 h: only velocity and Kirpich apply."""
        inputs = {"path_length_m": 2000.0, "path_slope_pct": 4.0, "area_km2": 0.2, "travel_time_h": 1.0}
        results = time_of_concentration(inputs)
        assert {key for key, result in results.items() if result.applicable[0]} == {
            "velocity",
            "kirpich",
            "california_culverts",
            "bransby_williams",
        }
        times = [results[key].tc_h[0] for key in ("velocity", "kirpich", "california_culverts", "bransby_williams")]
        assert spread(results)[0] == pytest.approx(max(times) / min(times))

    def test_spread_of_nothing_is_missing(self) -> None:
        assert np.isnan(spread(time_of_concentration({"area_km2": [1.0]}))[0])

    def test_no_outlets(self) -> None:
        assert all(result.tc_h.size == 0 for result in time_of_concentration({}).values())


def test_room_needs_numpy_only() -> None:
    heavy = "{'numba', 'pandas', 'scipy', 'rasterio', 'geopandas', 'fiona', 'pyogrio', 'shapely', 'pyproj'}"
    code = f"import sys, basinwright.timing; print(sorted({heavy} & set(sys.modules)))"
    answer = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert answer.stdout.strip() == "[]"
