"""Every number explains itself: each column has a record, and what its formula gives is what stands in the table."""

import json
import math
import shutil
import subprocess
import sys

import pytest
from projects import make_project, read_table, v_valley, walled

from basinwright import explaining, pipeline
from basinwright.errors import InputRejected
from basinwright.explaining import HOWS, RunView, as_text, as_values, explain
from basinwright.explaining.comparisons import COMPARISON_HOWS
from basinwright.explaining.records import evaluate
from basinwright.tables import ALL

pytestmark = pytest.mark.xdist_group("sample")

MEASURED = {
    "outlets": "snap centroid_length path_length_raw basin_slope_pct capacity reach_length reach_fall reach_area "
    "critical_duration_h tc_longest_in_time_h drainage_density sink_area",
    "segments": "segment from to",
    "cover_shares": "area",
    "time_area": "travel_time_h area",
    "cross_checks": "return_period_yr",
    "hydrographs": "return_period_yr",
}
"""Numbers that are read off the terrain or given, and not computed from others."""


def test_every_column_of_every_table_has_a_record():
    for table in ALL:
        assert set(HOWS[table.name]) == {column.stem for column in table.columns}, table.name


def cells(run, table, rows_of_each):
    """Yield the cells of numbers of a table: some rows of each outlet, the first and the last among them."""
    for outlet_id in run.position:
        rows = run.rows(table.name, outlet_id)
        chosen = sorted({round(k * (len(rows) - 1) / max(rows_of_each - 1, 1)) for k in range(rows_of_each)})
        for row in [rows[i] for i in chosen if rows]:
            for column in table.columns:
                for period in run.periods if column.per_return_period else [""]:
                    name = column.name(run.system, period)
                    if name in row and column.type in ("number", "integer"):
                        yield outlet_id, row, column, name


def explained(run, table, rows_of_each):
    for outlet_id, row, column, name in cells(run, table, rows_of_each):
        where = {key: row[key] for stem in table.key if (key := table.column(stem).name(run.system)) != "outlet_id"}
        yield column, explain(run, outlet_id, f"{table.name}.{name}", depth=0, where=where)


@pytest.fixture(scope="module")
def view(sample):
    return RunView(sample)


@pytest.mark.parametrize("table", [table for table in ALL if table.name != "flags"], ids=lambda table: table.name)
def test_the_figure_computed_again_is_the_table_s(view, table):
    measured = MEASURED.get(table.name, "").split()
    compares = table.name in COMPARISON_HOWS  # most of its numbers are those of other runs or draws
    agreed = set()
    for column, found in explained(view, table, rows_of_each=4):
        where = (found.outlet_id, found.column, found.row)
        assert found.words, where
        if found.value and found.formula:
            assert found.agrees is True, (where, found.value, found.recomputed, found.filled)
            agreed.add(column.stem)
        elif found.value:
            assert column.stem in measured or found.table == "segments" or compares, where
    numbers = {column.stem for column in table.columns if column.type in ("number", "integer") and not column.optional}
    never = set() if compares else numbers - agreed - set(measured)
    assert never == set(), "each is computed again somewhere in the sample"


@pytest.mark.parametrize(
    ("options", "columns"),
    [
        ({"unit_hydrograph": {"shape": "snyder"}, "channel": {"roughness": "jarrett", "stage": "half"}}, {}),
        ({"unit_hydrograph": {"shape": "clark_terrain"}, "storm": {"areal_reduction": "leclerc_schaake"}}, {}),
        (
            {
                "runoff": {"weighting": "curve_number", "moisture": "III", "initial_abstraction_ratio": 0.05},
                "timing": {"adopt": "kirpich", "minimum": "2 h"},
                "unit_hydrograph": {"shape": "gamma", "peak_rate_factor": 300},
            },
            {"depth_10yr_mm": {"a": 99}, "curve_number": {"b": 77}, "tc_h": {"b": 1.25}},
        ),
    ],
    ids=["snyder jarrett", "clark areal", "gamma supplied"],
)
def test_with_other_options(tmp_path, options, columns):
    elevation = walled(v_valley(60, 41, 0.05, 0.01))
    file = make_project(tmp_path, elevation, {"a": (30, 23), "b": (60, 23)}, overrides=options, columns=columns)
    run = RunView(pipeline.run(file).folder)
    counted = 0
    for table in ALL:
        for _, found in explained(run, table, rows_of_each=3):
            assert found.agrees is not False, (found.table, found.column, found.row, found.value, found.recomputed)
            counted += bool(found.agrees)
    assert counted > 200
    if columns:
        for column, outlet in (("curve_number", "b"), ("tc_h", "b"), ("depth_10yr_mm", "a")):
            assert explain(run, outlet, column).words.startswith("supplied with the outlet")


def test_one_peak_down_to_the_published_rows_and_pixels(view):
    text = as_text(explain(view, "TC-003", "peak_10yr_cfs", depth=9))
    for words in (
        "scs_type_ii: hour", "dimensionless_uh_neh_16_1: time_ratio", "curve_numbers_tr55: key", "cover_nlcd_crosswalk",
        "dem.tif: pixel at row", "landcover.tif: pixel at row", "option storm.depths",
    ):  # fmt: skip
        assert words in text, words
    assert "NOT the table's" not in text


def test_each_regime_down_to_its_source(view):
    sources = {
        "sheet": ("eq. 15-8", "sheet_roughness_tr55: key"),
        "shallow": ("table 15-3", "shallow_flow_neh: key"),
        "channel": ("eq. 15-10", "bankfull_bieger_2015", "option channel.roughness", "1.486"),
        "open_water": ("travel time through lakes", "option channel.open_water_depth"),
    }
    for row in view.rows("segments", "TC-005"):
        if row["regime"] not in sources:
            continue
        found = explain(view, "TC-005", "segments.travel_time_h", depth=9, where={"segment": row["segment"]})
        text = as_text(found)
        for words in sources.pop(row["regime"]):
            assert words in text, (row["regime"], words)
    assert not sources


def test_by_hand(view, sample):
    # NEH 630 ch. 15 eq. 15-8 with the figures of the explanation, computed here.
    found = explain(view, "TC-001", "segments.velocity_fps", where={"segment": "1"})
    symbol = {entry.symbol: float(entry.figure) for entry in found.inputs}
    hours = 0.007 * (symbol["n"] * symbol["L"]) ** 0.8 / (symbol["P2"] ** 0.5 * symbol["S"] ** 0.4)
    assert float(found.value) == pytest.approx(symbol["L"] / 3600 / hours, rel=1e-5)
    assert symbol["P2"] == pytest.approx(3.1, rel=1e-6)
    row = read_table(sample, "segments")[0]
    assert float(row["velocity_fps"]) == float(found.value)


def test_pixels_hold_what_is_said_of_them(view, sample):
    import rasterio

    found = explain(view, "TC-005", "relief_ft")
    pixels = [place for place in found.places if "pixel" in place]
    with rasterio.open(sample.parent / "dem.tif") as dem:
        band = dem.read(1)
    values = []
    for place in pixels:
        row, column, value = (part.split()[-1] for part in place.replace(":", ",").split(",")[-3:])
        assert float(band[int(row), int(column)]) == float(value)
        values.append(float(value))
    assert (values[0] - values[1]) / 0.3048 == pytest.approx(float(found.value), rel=1e-9)


def test_edits_and_flags_are_named(sample, tmp_path):
    folder = shutil.copytree(sample, tmp_path / "out")
    path = folder / "segments.csv"
    lines = path.read_text(encoding="utf-8").splitlines(keepends=True)
    header = lines[0].strip().split(",")
    k, channel = header.index("roughness"), next(i for i, line in enumerate(lines) if ",channel," in line)
    cells = lines[channel].split(",")
    was, cells[k] = cells[k], "0.08"
    lines[channel] = ",".join(cells)
    path.write_text("".join(lines), encoding="utf-8", newline="")
    pipeline.retime(folder)
    run = RunView(folder)
    where = {"segment": cells[1]}
    found = explain(run, cells[0], "segments.roughness", where=where)
    assert "a person filled it" in found.words
    assert found.edited == f"a person changed it from {was}"
    assert explain(run, cells[0], "segments.velocity_fps", where=where).agrees is True
    assert explain(run, cells[0], "tc_h").agrees is True
    assert {flag["flag"] for flag in explain(run, "TC-006", "area_mi2").flags} >= {"EDGE_TOUCH"}


def test_without_the_store_it_says_so(sample, tmp_path):
    folder = tmp_path / "out"
    shutil.copytree(sample, folder, ignore=shutil.ignore_patterns(".store", "terrain", "report"))
    found = explain(folder, "TC-001", "relief_ft")
    assert found.recomputed is None
    assert found.places == ("the run's store is not there: the cells can no longer be named",)
    assert explain(folder, "TC-001", "lag_h").agrees is True


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("TC-01", "tc_h"), "has no 'TC-01': did you mean 'TC-001'?"),
        (("TC-001", "tc"), "no table of the run has a column 'tc'"),
        (("TC-001", "segments.slope"), "rows of outlet 'TC-001' fit"),
        (("TC-001", "segments.slope", {"segment": "999"}), "no such row"),
    ],
)
def test_what_cannot_be_found_is_named(view, arguments, words):
    with pytest.raises(InputRejected, match=words.replace("?", r"\?")):
        explain(view, *arguments[:2], where=arguments[2] if len(arguments) > 2 else None)


def test_formulas_are_arithmetic_alone():
    assert evaluate("0.6 * Tc", {"Tc": 2.0}) == 1.2
    with pytest.raises(NameError):
        evaluate("open('x')", {})


def test_command(sample):
    def run(*arguments):
        command = [sys.executable, "-m", "basinwright", "explain", str(sample), *arguments]
        return subprocess.run(command, capture_output=True, text=True, check=False)

    text = run("TC-001", "timing.tc_h", "--where", "method=kirpich", "--depth", "0")
    assert text.returncode == 0, text.stderr
    assert "0.0078 × L^0.77 × S^-0.385" in text.stdout
    plain = json.loads(run("TC-001", "lag_h", "--json").stdout)
    assert plain == json.loads(json.dumps(as_values(explaining.explain(sample, "TC-001", "lag_h"))))
    assert math.isclose(plain["recomputed"], float(plain["value"]))
    wrong = run("TC-001", "lag")
    assert (wrong.returncode, "Traceback" in wrong.stderr) == (2, False)
