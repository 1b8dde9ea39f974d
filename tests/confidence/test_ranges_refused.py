"""[uncertainty] and [check]: what is refused before anything is computed, by key, with the way to mend it."""

import pytest

from basinwright.project import parse_project, read_content

CONTENT = {
    "terrain": {"dem": ["dem.tif"]},
    "outlets": {"source": "outlets.gpkg"},
    "cover": {"raster": "cover.tif", "scheme": "nlcd"},
    "soils": {"group": "B"},
    "storm": {"distribution": "type_ii", "depths": {"2": "3.1 in", "10": "4.6 in"}},
}


def read(uncertainty, **more):
    return read_content({**CONTENT, **more, "uncertainty": uncertainty}, "project.toml")


def pair(*inputs, rank=0.5):
    return {"inputs": list(inputs), "rank": rank}


REFUSED = {
    "nothing": ({}, "uncertainty", "no input has a range"),
    "only a seed": ({"seed": 3}, "uncertainty", "no input has a range"),
    "unknown": ({"curv_number": 5}, "uncertainty.curv_number", "did you mean 'curve_number'?"),
    "reversed": ({"curve_number": [5, -5]}, "uncertainty.curve_number", "reversed range: give the lower end first"),
    "empty": ({"curve_number": [0, 0]}, "uncertainty.curve_number", "empty or reversed"),
    "zero": ({"curve_number": 0}, "uncertainty.curve_number", "empty or reversed"),
    "three ends": ({"curve_number": [1, 2, 3]}, "uncertainty.curve_number", "its two ends"),
    "a unit too many": ({"curve_number": "5 %"}, "uncertainty.curve_number", "plain number"),
    "a unit too few": ({"roughness": 30}, "uncertainty.roughness", "has no unit"),
    "beside the value in use": ({"roughness": ["10 %", "30 %"]}, "uncertainty.roughness", "does not hold the value"),
    "less than nothing": ({"roughness": "120 %"}, "uncertainty.roughness", "above -100 %"),
    "factors reversed": ({"peak_rate_factor": [600, 300]}, "uncertainty.peak_rate_factor", "empty or reversed"),
    "factors beside 484": ({"peak_rate_factor": [200, 300]}, "uncertainty.peak_rate_factor", "does not hold 484"),
    "factors too large": ({"peak_rate_factor": [300, 700]}, "uncertainty.peak_rate_factor", "leaves 100 to 600"),
    "half-range too large": ({"peak_rate_factor": 200}, "uncertainty.peak_rate_factor", "284 to 684"),
    "half-range negative": ({"peak_rate_factor": -50}, "uncertainty.peak_rate_factor", "empty or reversed"),
    "start not varied": ({"stream_area_factor": 1}, "uncertainty.stream_area_factor", "over 1"),
    "start on one side": ({"stream_area_factor": [2, 3]}, "uncertainty.stream_area_factor", "both sides of 1"),
    "depths of one period": ({"depths": {"2": ["3 in", "4 in"]}}, "uncertainty.depths", "lacks 10 years"),
    "depths of another": (
        {"depths": {"2": ["3 in", "4 in"], "10": ["4 in", "5 in"], "50": ["5 in", "6 in"]}},
        "uncertainty.depths.50", "no return period",
    ),
    "limits beside the depth": (
        {"depths": {"2": ["3.2 in", "4 in"], "10": ["4 in", "5 in"]}}, "uncertainty.depths.2", "do not hold the depth",
    ),
    "limits that fall": (
        {"depths": {"2": ["3 in", "6 in"], "10": ["4 in", "5 in"]}}, "uncertainty.depths.10", "of a shorter return",
    ),
    "limits reversed": (
        {"depths": {"2": ["4 in", "3 in"], "10": ["4 in", "5 in"]}}, "uncertainty.depths", "empty or reversed",
    ),
    "no pair": ({"depths": {"2": "3 in", "10": "4 in"}}, "uncertainty.depths", "no pair of depths"),
    "few samples": ({"samples": 5, "curve_number": 5}, "uncertainty.samples", "greater than or equal to 20"),
    "stage": ({"curve_number": 5, "stage": "quarter"}, "uncertainty.stage", "'swing' or 'sample'"),
    "not declared": (
        {"curve_number": 5, "correlated": [pair("curve_number", "roughness")]},
        "uncertainty.correlated.0.inputs", "'roughness' is not declared",
    ),
    "stage not sampled": (
        {"curve_number": 5, "correlated": [pair("curve_number", "stage")]},
        "uncertainty.correlated.0.inputs", "'stage' is not declared",
    ),
    "with itself": (
        {"curve_number": 5, "correlated": [pair("curve_number", "curve_number")]},
        "uncertainty.correlated.0.inputs", "with itself",
    ),
    "twice": (
        {
            "curve_number": 5, "depths": "5 %",
            "correlated": [pair("curve_number", "depths"), pair("depths", "curve_number")],
        },
        "uncertainty.correlated.1.inputs", "more than once",
    ),
    "wholly": (
        {"curve_number": 5, "depths": "5 %", "correlated": [pair("curve_number", "depths", rank=1.0)]},
        "uncertainty.correlated.0.rank", "less than 1",
    ),
    "contradicting": (
        {
            "curve_number": 5, "depths": "5 %", "roughness": "5 %",
            "correlated": [
                pair("curve_number", "depths", rank=0.9), pair("depths", "roughness", rank=0.9),
                pair("roughness", "curve_number", rank=-0.9),
            ],
        },
        "uncertainty.correlated", "contradict each other",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", REFUSED)
def test_refused(case):
    given, field, words = REFUSED[case]
    (problem,) = read(given).problems
    assert problem.field == field
    assert words in str(problem)
    assert all((problem.file, problem.what, problem.fix))


def test_a_shape_without_a_peak_rate_factor():
    (problem,) = read({"peak_rate_factor": [300, 600]}, unit_hydrograph={"shape": "clark"}).problems
    assert (problem.field, "clark" in problem.what) == ("uncertainty.peak_rate_factor", True)


def test_limits_where_a_scenario_has_depths_of_its_own():
    scenario = [{"name": "wetter", "storm": {"depths": {"2": "4 in", "10": "6 in"}}}]
    limits = {"depths": {"2": ["3 in", "4 in"], "10": ["4 in", "5 in"]}}
    (problem,) = read(limits, scenario=scenario).problems
    assert problem.field == "scenario[1].storm.depths"
    assert not read({"depths": "10 %"}, scenario=scenario).problems


def test_a_check_of_nothing():
    (problem,) = read_content({**CONTENT, "check": {}}, "project.toml").problems
    assert (problem.field, problem.what) == ("check.regression", "missing")


@pytest.mark.parametrize(
    "given",
    [
        {"curve_number": 5, "roughness": "7 %", "peak_rate_factor": 100, "stream_area_factor": 3, "depths": "11 %"},
        {"curve_number": [-3, 8], "roughness": ["-12.3 %", "33.3 %"], "stage": "sample"},
        {"depths": {"2": ["2.9 in", "3.3 in"], "10": ["4.1 in", "5.3 in"]}, "stream_area_factor": [0.3, 1.7]},
        {"curve_number": 1, "depths": "1 %", "correlated": [pair("curve_number", "depths", rank=-0.4)]},
    ],
)
def test_what_run_json_keeps_reads_back_to_the_last_bit(given):
    reading = read(given)
    assert not reading.problems
    assert parse_project(reading.project.resolved()) == reading.project
