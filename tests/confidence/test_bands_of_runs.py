"""Bands, swings, regional comparison and capacities of whole runs: small ground, answers known otherwise."""

import json
import math

import numpy as np
import pytest
from projects import make_project, numbers, read_table, v_valley, walled

from basinwright import pipeline

RIM, CELL = 3, 20.0
AXIS, BOTTOM = RIM + 20, RIM + 58
PERIODS = ("2", "10", "100")


def valley():
    return walled(v_valley(60, 41, 0.08, 0.02, CELL), RIM)


def make(folder, at=None, *, columns=None, **sections):
    sections["terrain"] = {"stream_area": "0.05 km2", **sections.get("terrain", {})}
    at = at or {"A": (BOTTOM, AXIS)}
    return make_project(folder, valley(), at, cell=CELL, columns=columns, overrides=sections)


def run(folder, at=None, **more):
    return pipeline.run(make(folder, at, **more), summary_only=True).folder


def peaks(row):
    return [float(row[f"peak_{period}yr_m3s"]) for period in PERIODS]


def of(rows, **wanted):
    return [row for row in rows if all(row[key] == value for key, value in wanted.items())]


@pytest.fixture(scope="module")
def base(tmp_path_factory):
    """The outlet's row as the project has it."""
    return read_table(run(tmp_path_factory.mktemp("base")), "outlets")[0]


EVERY = {
    "samples": 40, "curve_number": 5, "roughness": "30 %", "peak_rate_factor": [300, 600], "stream_area_factor": 2,
    "depths": "10 %", "stage": "sample",
}  # fmt: skip


@pytest.fixture(scope="module")
def uncertain(tmp_path_factory):
    """A run with every input uncertain, two outlets, one with a capacity."""
    at = {"A": (BOTTOM, AXIS), "B": (BOTTOM - 30, AXIS)}
    columns = {"capacity_m3s": {"A": 5.0}, "basis": {"A": "top of road"}}
    options = {"capacity": "capacity_m3s", "capacity_basis": "basis"}
    return run(tmp_path_factory.mktemp("uncertain"), at, columns=columns, outlets=options, uncertainty=EVERY)


@pytest.fixture(scope="module")
def swings(tmp_path_factory):
    """The swings of a run with several inputs uncertain."""
    section = {"curve_number": 5, "roughness": ["-20 %", "50 %"], "depths": "10 %", "stream_area_factor": 2}
    return read_table(run(tmp_path_factory.mktemp("swings"), uncertainty={"samples": 20, **section}), "swings")


class TestSwings:
    """One input at the ends of its range is the project with that input: the whole engine is the check."""

    def ends(self, swings, name):
        rows = of(swings, input=name)
        assert [row["return_period_yr"] for row in rows] == ["2.0", "10.0", "100.0"]
        low = float(rows[0]["tc_low_h"]), [float(row["peak_low_m3s"]) for row in rows]
        high = float(rows[0]["tc_high_h"]), [float(row["peak_high_m3s"]) for row in rows]
        return low, high

    def same(self, folder, end, **sections):
        row = read_table(run(folder, **sections), "outlets")[0]
        assert end[0] == pytest.approx(float(row["tc_h"]), rel=1e-9)
        assert end[1] == pytest.approx(peaks(row), rel=1e-9)

    def test_curve_number(self, swings, tmp_path, base):
        """Grassland on B is 69: with 64 and 74 supplied. The time stays: the velocity method knows no curve number."""
        low, high = self.ends(swings, "curve_number")
        assert low[0] == high[0] == pytest.approx(float(base["tc_h"]), rel=1e-12)
        for end, number in ((low, 64.0), (high, 74.0)):
            columns = {"curve_number": {"A": number}}
            row = read_table(run(tmp_path / str(number), columns=columns), "outlets")[0]
            assert end[1] == pytest.approx(peaks(row), rel=1e-9)

    def test_depths(self, swings, tmp_path):
        low, high = self.ends(swings, "depths")
        for end, factor in ((low, 0.9), (high, 1.1)):
            depths = {period: f"{depth * factor} in" for period, depth in (("2", 3.1), ("10", 4.6), ("100", 7.2))}
            storm = {"depths": depths, "two_year_depth": "3.1 in"}
            self.same(tmp_path / str(factor), end, storm=storm)

    def test_stage(self, swings, tmp_path, base):
        half, full = self.ends(swings, "stage")
        assert full[0] == pytest.approx(float(base["tc_bankfull_h"]), rel=1e-12)
        assert half[0] == pytest.approx(float(base["tc_half_bankfull_h"]), rel=1e-12)
        self.same(tmp_path, half, channel={"stage": "half"})

    def test_channel_start(self, swings, tmp_path):
        """The path cut at half and at twice the stream area."""
        low, high = self.ends(swings, "stream_area_factor")
        assert low[0] < high[0]
        for end, area in ((low, "0.025 km2"), (high, "0.1 km2")):
            self.same(tmp_path / area[:5], end, terrain={"stream_area": area})

    def test_roughness(self, swings, tmp_path, base):
        """Channels as n; the overland part by hand from the segments: sheet as n^0.8, shallow as n."""
        folder = run(tmp_path)
        rows = read_table(folder, "segments")
        hours = {
            regime: numbers(of(rows, regime=regime), "travel_time_h").sum()
            for regime in ("sheet", "shallow", "channel")
        }
        low, high = self.ends(swings, "roughness")
        for end, factor in ((low, 0.8), (high, 1.5)):
            expected = hours["sheet"] * factor**0.8 + (hours["shallow"] + hours["channel"]) * factor
            assert end[0] == pytest.approx(expected, rel=1e-9)

    def test_peak_rate_factor(self, tmp_path):
        section = {"samples": 20, "peak_rate_factor": [300, 600]}
        rows = of(read_table(run(tmp_path / "a", uncertainty=section), "swings"), input="peak_rate_factor")
        for side, factor in (("low", 300), ("high", 600)):
            unit = {"shape": "gamma", "peak_rate_factor": factor}
            row = read_table(run(tmp_path / str(factor), unit_hydrograph=unit), "outlets")[0]
            assert [float(entry[f"peak_{side}_m3s"]) for entry in rows] == pytest.approx(peaks(row), rel=1e-9)

    def test_ranked_by_effect(self, swings):
        for period in ("2.0", "10.0", "100.0"):
            rows = of(swings, return_period_yr=period)
            effect = np.abs(numbers(rows, "peak_high_m3s") - numbers(rows, "peak_low_m3s"))
            assert [row["rank"] for row in rows] == [str(k) for k in range(1, len(rows) + 1)]
            assert (np.diff(effect) <= 0).all()
            assert {row["input"] for row in rows if row["sampled"] == "false"} == {"stage"}


class TestBands:
    def test_one_input_gives_the_band_of_its_quantiles(self, tmp_path):
        """Depths alone, 10 % either way: the 5 % end is the run at the depth's 5 % quantile, 0.91 of it."""
        folder = run(tmp_path / "a", uncertainty={"samples": 400, "depths": "10 %"})
        rows = of(read_table(folder, "uncertainty"), quantity="peak_m3s")
        for name, share in (("p05", 0.05), ("p50", 0.5), ("p95", 0.95)):
            factor = 0.9 + 0.2 * share
            depths = {period: f"{depth * factor} in" for period, depth in (("2", 3.1), ("10", 4.6), ("100", 7.2))}
            storm = {"depths": depths, "two_year_depth": "3.1 in"}
            row = read_table(run(tmp_path / name, storm=storm), "outlets")[0]
            # Half a slice of 400 is 0.025 % of the depth, which a flood may take threefold.
            assert numbers(rows, name) == pytest.approx(peaks(row), rel=1.5e-3)

    def test_time_needs_no_return_period(self, uncertain, base):
        rows = of(read_table(uncertain, "uncertainty"), outlet_id="A")
        assert [row["quantity"] for row in rows] == ["tc_h", *["peak_m3s"] * 3]
        assert [row["return_period_yr"] for row in rows] == ["", "2.0", "10.0", "100.0"]
        for name in ("p05", "p50"):
            assert (numbers(rows, name) < numbers(rows, "p95")).all()
        assert float(rows[0]["p05"]) < float(base["tc_h"]) < float(rows[0]["p95"])

    def test_an_outlet_alone_has_the_same_band(self, uncertain, tmp_path):
        """Whatever else is in the run, and however many threads there are."""
        alone = make(tmp_path, {"B": (BOTTOM - 30, AXIS)}, uncertainty=EVERY)
        folder = pipeline.run(alone, summary_only=True, jobs=1).folder
        for name in ("uncertainty", "swings"):
            assert read_table(folder, name) == of(read_table(uncertain, name), outlet_id="B")

    def test_another_seed_another_sample(self, uncertain, tmp_path):
        folder = run(tmp_path, {"B": (BOTTOM - 30, AXIS)}, uncertainty={**EVERY, "seed": 2})
        assert read_table(folder, "uncertainty") != of(read_table(uncertain, "uncertainty"), outlet_id="B")
        assert read_table(folder, "swings") == of(read_table(uncertain, "swings"), outlet_id="B")

    def test_retime_gives_the_same_bytes(self, uncertain):
        names = ("uncertainty", "swings", "capacity")
        before = {name: (uncertain / f"{name}.csv").read_bytes() for name in names}
        pipeline.retime(uncertain)
        assert before == {name: (uncertain / f"{name}.csv").read_bytes() for name in names}

    def test_inputs_that_go_together_widen_the_band(self, tmp_path):
        section = {"samples": 400, "curve_number": 5, "depths": "10 %"}
        widths = []
        for rank in (-0.9, 0.0, 0.9):
            pair = [{"inputs": ["curve_number", "depths"], "rank": rank}]
            folder = run(tmp_path / str(rank), uncertainty={**section, "correlated": pair})
            row = read_table(folder, "uncertainty")[-1]
            widths.append(float(row["p95"]) - float(row["p05"]))
        assert widths[0] < 0.8 * widths[1]
        assert widths[2] > 1.2 * widths[1]

    def test_a_path_that_a_person_cut_is_not_cut_again(self, tmp_path):
        folder = run(tmp_path, uncertainty={"samples": 20, "stream_area_factor": 2, "curve_number": 5})
        assert of(read_table(folder, "swings"), input="stream_area_factor")
        table = folder / "segments.csv"
        edited = table.read_text(encoding="utf-8").replace(",sheet,71,", ",sheet,41,", 1)
        table.write_text(edited, encoding="utf-8", newline="")
        pipeline.retime(folder)
        assert not of(read_table(folder, "swings"), input="stream_area_factor")

    def test_a_supplied_time_stands(self, tmp_path):
        section = {"samples": 20, "roughness": "30 %"}
        folder = run(tmp_path, columns={"tc_h": {"A": 1.25}}, uncertainty=section)
        assert {row[name] for row in read_table(folder, "uncertainty")[:1] for name in ("p05", "p95")} == {"1.25"}

    def test_terrain_is_run_once(self, uncertain):
        stages = json.loads((uncertain / "run.json").read_text(encoding="utf-8"))["stages"]
        assert {stage["stage"]: stage["runs"] for stage in stages}["channel_starts"] == 1
        assert {stage["stage"]: stage["runs"] for stage in stages}["routing"] == 1

    @pytest.mark.parametrize("shape", ["clark_terrain", "snyder", "travel_time"])
    def test_other_shapes(self, tmp_path, shape):
        section = {"samples": 20, "roughness": "30 %"}
        folder = run(tmp_path, unit_hydrograph={"shape": shape}, uncertainty=section)
        row = read_table(folder, "outlets")[0]
        for entry in of(read_table(folder, "swings"), input="roughness"):
            period = entry["return_period_yr"].removesuffix(".0")
            peak = float(row[f"peak_{period}yr_m3s"])
            assert float(entry["peak_high_m3s"]) < peak < float(entry["peak_low_m3s"])

    def test_other_timing(self, tmp_path):
        """The lag equation takes the curve number, and no roughness."""
        section = {"samples": 20, "roughness": "30 %", "curve_number": 5}
        folder = run(tmp_path, timing={"adopt": "nrcs_lag"}, uncertainty=section)
        swings = read_table(folder, "swings")
        (rough, *_), (curve, *_) = of(swings, input="roughness"), of(swings, input="curve_number")
        assert rough["tc_low_h"] == rough["tc_high_h"]
        low, high = (1000 / number - 9.0 for number in (64.0, 74.0))  # S + 1 [in]
        ratio = float(curve["tc_low_h"]) / float(curve["tc_high_h"])
        assert ratio == pytest.approx((low / high) ** 0.7, rel=1e-9)


class TestRegional:
    TABLE = "return_period_yr,constant_cfs,area_mi2,basin_slope_pct,area_mi2_high,standard_error_log10,source\n"

    def compare(self, folder, rows, **more):
        file = make(folder, check={"regression": "regional.csv"}, **more)
        (folder / "regional.csv").write_text(self.TABLE + rows, encoding="utf-8")
        return pipeline.run(file, summary_only=True).folder

    def test_by_hand(self, tmp_path, base):
        """SI project, US equation: 500 A^0.7 S^0.3 cfs."""
        folder = self.compare(tmp_path, "10,500,0.7,0.3,,0.2,A report\n")
        (row,) = read_table(folder, "regional")
        area_mi2, slope = float(base["area_km2"]) / 2.589988110336, float(base["basin_slope_pct"])
        expected = 500 * area_mi2**0.7 * slope**0.3 * 0.3048**3
        assert float(row["regional_m3s"]) == pytest.approx(expected, rel=1e-9)
        assert float(row["regional_p95_m3s"]) == pytest.approx(expected * 10 ** (1.645 * 0.2), rel=1e-9)
        assert row["peak_m3s"] == base["peak_10yr_m3s"]
        assert (row["applicable"], row["reason"], row["source"]) == ("true", "", "A report")

    def test_outside_its_range_nothing_is_flagged(self, tmp_path):
        folder = self.compare(tmp_path, "10,1,0.7,,0.1,0.1,\n")
        (row,) = read_table(folder, "regional")
        assert row["applicable"] == "false"
        assert row["reason"].startswith("area_mi2 0.3")
        assert row["reason"].endswith("outside up to 0.1")
        assert float(row["ratio"]) > 10
        assert not read_table(folder, "flags")


class TestCapacity:
    OPTIONS = {"capacity": "capacity_m3s"}  # noqa: RUF012 - a constant

    def test_ranked_the_first_to_fail_on_top(self, tmp_path, base):
        """Five crossings on one cell: the same peaks, other capacities."""
        two, ten, hundred = peaks(base)
        limits = {"low": 0.9 * two, "lower": 0.5 * two, "mid": math.sqrt(two * ten), "high": 1.2 * hundred, "none": ""}
        folder = run(
            tmp_path,
            dict.fromkeys(limits, (BOTTOM, AXIS)),
            columns={"capacity_m3s": limits},
            outlets=self.OPTIONS,
        )
        rows = read_table(folder, "capacity")
        assert [row["outlet_id"] for row in rows] == ["lower", "low", "mid", "high"]
        assert [row["rank"] for row in rows] == ["1", "2", "3", "4"]
        assert [row["exceeded_at_yr"] for row in rows] == ["2", "2", "10", ""]
        years = [row["exceeded_at_interp_yr"] for row in rows]
        assert years[:2] == ["", ""]
        assert years[3] == ""
        assert float(years[2]) == pytest.approx(math.sqrt(2 * 10), rel=1e-9)  # the middle on both logarithms
        assert [row["verdict"] for row in rows] == [
            "exceeded at 2 years already",
            "exceeded at 2 years already",
            "exceeded between 2 and 10 years",
            "not exceeded at 100 years",
        ]
        assert {row["scenario"] for row in rows} == {"base"}

    def test_with_its_band(self, uncertain):
        (row,) = read_table(uncertain, "capacity")
        low, at = (float(row[f"exceeded_at_{name}_yr"]) for name in ("p05", "interp"))
        assert low < at
        assert row["capacity_basis"] == "top of road"
        assert 0 <= float(row["exceeded_2yr_pct"]) <= float(row["exceeded_10yr_pct"]) <= 100
        assert row["band"].endswith("years")

    def test_no_verdict_at_the_edge(self, tmp_path):
        file = make_project(
            tmp_path, v_valley(60, 41, 0.08, 0.02, CELL), {"A": (58, 20)}, cell=CELL,
            columns={"capacity_m3s": {"A": 0.1}},
            overrides={"outlets": self.OPTIONS, "uncertainty": {"samples": 20, "curve_number": 5}},
        )  # fmt: skip
        (row,) = read_table(pipeline.run(file, summary_only=True).folder, "capacity")
        assert (row["rank"], row["exceeded_at_yr"], row["exceeded_at_interp_yr"], row["band"]) == (
            "",
            "unknown",
            "",
            "",
        )
        assert row["verdict"].startswith("unknown: the basin reaches the terrain's edge")

    def test_an_outlet_that_failed_is_listed_without_a_verdict(self, tmp_path):
        limits = {"capacity_m3s": {"A": 5.0, "off": 5.0}}
        folder = run(tmp_path, {"off": (-50, 0), "A": (BOTTOM, AXIS)}, columns=limits, outlets=self.OPTIONS)
        rows = read_table(folder, "capacity")
        assert [(row["outlet_id"], row["rank"]) for row in rows] == [("A", "1"), ("off", "")]
        assert rows[1]["verdict"] == "unknown: not computed"


def test_an_open_basin_is_not_set_against_the_region(sample):
    rows = [row for row in read_table(sample, "regional") if row["outlet_id"] == "TC-006"]  # EDGE_TOUCH
    assert rows
    assert {row["applicable"] for row in rows} == {"false"}
    assert all("beyond the terrain" in row["reason"] for row in rows)
