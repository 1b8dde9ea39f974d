"""`run --also-at`: the same project on coarser cells, as if its terrain had come so."""

import json
import math

import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from projects import ORIGIN, make_project, numbers, read_table, transform_of, v_valley, walled, write_raster

from basinwright import pipeline
from basinwright.errors import InputRejected
from basinwright.terrain.coarsening import block_means

SIZES = ("20 m", "60 m", "100 ft")
ROWS, COLS = 96, 66  # whole blocks of 2, 3 and 6 cells


def ground():
    rough = np.random.default_rng(5).uniform(0.0, 0.8, (ROWS, COLS))
    land = walled(v_valley(ROWS - 24, COLS - 24, 0.05, 0.02), width=12) + rough
    return land.astype(np.float32)


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    folder = tmp_path_factory.mktemp("sizes")
    cover = np.full((ROWS, COLS), 71)
    cover[:30] = 41
    options = {"outlets": {"snap_within": "40 m"}, "uncertainty": {"curve_number": 5, "samples": 20}}
    file = make_project(folder, ground(), {"A": (82, 33), "B": (56, 33)}, cover=cover, overrides=options)
    pipeline.run(file, out=folder / "alone", summary_only=True)
    return pipeline.run(file, also_at=SIZES, summary_only=True).folder


@pytest.fixture(scope="module")
def rows(finished):
    return read_table(finished, "cell_sizes")


def of(rows, outlet_id):
    return [row for row in rows if row["outlet_id"] == outlet_id]


def of_size(rows, size):
    return [row for row in rows if math.isclose(float(row["cell_size_m"]), size, rel_tol=1e-9)]


@given(data=st.data())
def test_blocks_are_averaged_as_another_library_does(data):
    random = np.random.default_rng(data.draw(st.integers(0, 2**32 - 1)))
    shape, cells = random.integers(1, 40, 2), int(random.integers(2, 7))
    land = random.uniform(-50.0, 3000.0, shape).astype(np.float32)
    land[random.random(shape) < data.draw(st.floats(0.0, 0.9))] = np.nan
    blocks = xr.DataArray(land.astype(np.float64)).coarsen(dim_0=cells, dim_1=cells, boundary="pad")
    expected = blocks.mean().where(blocks.count() >= cells * cells / 2)
    got = block_means(land, cells)
    assert got.dtype == np.float32
    np.testing.assert_allclose(got, expected.to_numpy(), rtol=1e-6)


def test_the_base_is_as_without_it(finished):
    for path in (finished.parent / "alone").glob("*.csv"):
        if path.stem == "swings":  # it ranks the cell size too
            continue
        assert path.read_bytes() == (finished / path.name).read_bytes(), path.name


def test_a_size_gives_what_a_project_with_that_terrain_gives(finished, rows, tmp_path):
    cells = 3
    coarse = ground().reshape(ROWS // cells, cells, COLS // cells, cells).mean(axis=(1, 3), dtype=np.float64)
    file = finished.parent / "coarse.toml"
    write_raster(finished.parent / "coarse.tif", coarse.astype(np.float32), transform_of(30.0, ORIGIN), "EPSG:32614")
    text = (finished.parent / "project.toml").read_text(encoding="utf-8")
    file.write_text(text.replace('"dem.tif"', '"coarse.tif"'), encoding="utf-8")
    own = read_table(pipeline.run(file, out=tmp_path / "out", summary_only=True).folder, "outlets")
    compared = of_size(rows, 30.0)
    for column in ("status", "area_km2", "path_length_m", "path_slope_pct", "basin_slope_pct", "curve_number", "tc_h",
                   "peak_2yr_m3s", "peak_10yr_m3s", "peak_100yr_m3s"):  # fmt: skip
        assert [row[column] for row in compared] == [row[column] for row in own], column


def test_changes_and_verdicts_are_those_of_the_rows(rows):
    assert [row["outlet_id"] for row in rows] == ["A"] * 4 + ["B"] * 4
    assert [float(row["cell_size_m"]) for row in rows[:4]] == [10.0, 20.0, 30.0, 60.0]
    columns = {"area_km2": "area", "path_length_m": "path_length", "path_slope_pct": "path_slope", "tc_h": "tc"}
    columns |= {"basin_slope_pct": "basin_slope", **{f"peak_{t}yr_m3s": f"peak_{t}yr" for t in (2, 10, 100)}}
    for i, row in enumerate(rows):
        base = rows[i - i % 4]
        if row is base:
            assert row["verdict"] == "base"
            assert {row[f"{name}_change_pct"] for name in columns.values()} == {""}
            continue
        far = []
        for column, name in columns.items():
            change = 100.0 * (float(row[column]) / float(base[column]) - 1.0)
            assert float(row[f"{name}_change_pct"]) == pytest.approx(change, abs=1e-9)
            if name.startswith(("area", "peak")) and abs(change) > 10.0:
                far.append(name.replace("_", " "))
        assert row["verdict"] == ("not safe" if far else "safe")
        assert [reason.rpartition(" ")[0].rpartition(" ")[0] for reason in row["reason"].split(", ") if reason] == far
    assert {row["verdict"] for row in rows} == {"base", "safe", "not safe"}
    moved = numbers(rows, "curve_number") - np.repeat(numbers(rows, "curve_number")[::4], 4)
    assert numbers(rows, "curve_number_change")[1:4] == pytest.approx(moved[1:4])


def test_cell_size_is_ranked_among_the_swings(finished, rows):
    alone, swings = read_table(finished.parent / "alone", "swings"), read_table(finished, "swings")
    others = [{**row, "rank": "", "tc_rank": ""} for row in swings if row["input"] != "cell_size"]
    assert sorted(map(str, others)) == sorted(str({**row, "rank": "", "tc_rank": ""}) for row in alone)
    own = [row for row in swings if row["input"] == "cell_size"]
    assert len(own) == 2 * 3
    for row in own:
        base, coarsest = (of_size(of(rows, row["outlet_id"]), size)[0] for size in (10.0, 60.0))
        peak = f"peak_{float(row['return_period_yr']):g}yr_m3s"
        assert [row["tc_low_h"], row["tc_high_h"]] == [base["tc_h"], coarsest["tc_h"]]
        assert [row["peak_low_m3s"], row["peak_high_m3s"]] == [base[peak], coarsest[peak]]
        same = [other for other in of(swings, row["outlet_id"]) if other["return_period_yr"] == row["return_period_yr"]]
        effects = [abs(float(other["peak_high_m3s"]) - float(other["peak_low_m3s"])) for other in same]
        assert effects == sorted(effects, reverse=True)
        assert [other["rank"] for other in same] == [str(place) for place in range(1, len(same) + 1)]


def test_only_the_coarser_terrain_is_computed_anew(finished):
    about = json.loads((finished / "run.json").read_text(encoding="utf-8"))
    runs = about["cell_sizes"]["runs"]
    assert [(run["asked"], run["cells"], run["grid"]["cell_size_m"]) for run in runs] == [
        ("20 m", 2, 20.0), ("100 ft", 3, 30.0), ("60 m", 6, 60.0),
    ]  # fmt: skip
    assert {stage["runs"] for stage in about["stages"]} == {1}
    for run in runs:
        stages = {stage["stage"]: stage["runs"] for stage in run["stages"]}
        assert stages.pop("elevation") == 0
        assert set(stages.values()) == {1}


def test_retime_leaves_it_as_it_was(finished):
    before = {path.name: path.read_bytes() for path in finished.glob("*.csv")}
    package = json.loads((finished / "tables.json").read_text(encoding="utf-8"))
    assert "cell_sizes" in [resource["name"] for resource in package["resources"]]
    pipeline.retime(finished)
    assert {path.name: path.read_bytes() for path in finished.glob("*.csv")} == before
    assert json.loads((finished / "tables.json").read_text(encoding="utf-8")) == package


@pytest.mark.parametrize(
    ("sizes", "told"),
    [
        (["10 m"], "'10 m': is not coarser than the terrain's own cells of 10 m: give at least 20 m"),
        (["3 m"], "'3 m': is not coarser"),
        (["coarse"], "'coarse': "),
        (["30"], "'30': "),
        (["30 m", "32 m"], "'32 m': is 3 x 3 of the terrain's cells, as '30 m' is"),
        (["1 km"], "'1 km': leaves under 3 rows or columns"),
        (["1e300 m"], "'1e300 m': leaves under 3 rows or columns"),
    ],
)
def test_a_size_that_cannot_be_is_refused_before_computing(finished, tmp_path, sizes, told):
    with pytest.raises(InputRejected) as caught:
        pipeline.run(finished.parent / "project.toml", out=tmp_path / "out", also_at=sizes)
    assert str(caught.value).startswith(f"command line: --also-at {told}")
    assert not list(tmp_path.iterdir())


def test_every_size_that_cannot_be_is_told(finished, tmp_path):
    with pytest.raises(InputRejected) as caught:
        pipeline.run(finished.parent / "project.toml", out=tmp_path / "out", also_at=["5 m", "30 m", "x"])
    assert len(caught.value.problems) == 2
