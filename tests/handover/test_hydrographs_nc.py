"""hydrographs.nc: what CF-1.8 asks for, the numbers of hydrographs.csv, and alone above a number of outlets."""

import hashlib
import json

import numpy as np
import pytest
import xarray as xr
from projects import make_project, numbers, read_table, v_valley

from basinwright import pipeline
from basinwright.outputs import hydrographs_nc

pytestmark = pytest.mark.xdist_group("sample")


@pytest.fixture(scope="module")
def two_outlets(tmp_path_factory):
    """Return a project of two outlets, one with an id beyond ASCII."""
    elevation = v_valley(40, 21, 0.05, 0.02)
    return make_project(tmp_path_factory.mktemp("valley"), elevation, {"Brücke 1": (20, 10), "B": (35, 10)})


def test_a_checker_of_the_conventions_finds_no_error(sample):
    from compliance_checker.runner import CheckSuite

    suite = CheckSuite()
    suite.load_all_available_checkers()
    dataset = suite.load_dataset(str(sample / "hydrographs.nc"))
    scores, errors = suite.run_all(dataset, ["cf:1.8"], skip_checks=[])["cf:1.8"]
    assert not errors
    assert any("9.3" in score.name or "9.1" in score.name for score in scores), "it looked at the sampling geometry"
    wrong = [(score.name, score.msgs) for score in scores if score.value[0] < score.value[1]]
    assert wrong == []


def test_xarray_opens_it_as_a_ragged_array_with_the_numbers_of_the_table(sample):
    rows = read_table(sample, "hydrographs")
    with xr.open_dataset(sample / "hydrographs.nc", decode_times=False) as data:
        assert data.attrs["Conventions"] == "CF-1.8"
        assert data.attrs["featureType"] == "timeSeries"
        assert data["row_size"].attrs["sample_dimension"] == "obs"
        assert data["timeseries_id"].attrs["cf_role"] == "timeseries_id"
        assert len(set(data["timeseries_id"].values.tolist())) == data.sizes["timeseries"] == 8 * 4
        assert int(data["row_size"].sum()) == data.sizes["obs"] == len(rows)
        ids = np.repeat(data["outlet_id"].values, data["row_size"].values)
        assert ids.tolist() == [row["outlet_id"] for row in rows]
        periods = np.repeat(data["return_period"].values, data["row_size"].values)
        np.testing.assert_array_equal(periods, numbers(rows, "return_period_yr"))
        for name, column in (("time", "time_h"), ("rain", "rain_in"), ("excess", "excess_in"), ("flow", "flow_cfs")):
            np.testing.assert_array_equal(data[name].values, numbers(rows, column))
        place = {row["outlet_id"]: (float(row["latitude"]), float(row["longitude"])) for row in
                 read_table(sample, "outlets")}  # fmt: skip
        for outlet_id, lat, lon in zip(data["outlet_id"].values, data["lat"].values, data["lon"].values, strict=True):
            assert (lat, lon) == place[outlet_id]
        assert data["flow"].attrs["units"] == "ft3 s-1"
        assert data["rain"].attrs["units"] == "inch"
    with xr.open_dataset(sample / "hydrographs.nc") as data:
        assert str(data["time"].values[0]).startswith("2000-01-01T00:00:00"), "times are decoded without help"


def test_of_many_outlets_the_series_stand_there_only(two_outlets, tmp_path, monkeypatch):
    both = pipeline.run(two_outlets, out=tmp_path / "both").folder
    monkeypatch.setattr(hydrographs_nc, "MOST_OUTLETS_IN_CSV", 1)
    alone = pipeline.run(two_outlets, out=tmp_path / "alone").folder
    assert (both / "hydrographs.csv").is_file()
    assert not (alone / "hydrographs.csv").exists()

    def digest(folder):
        return hashlib.sha256((folder / "hydrographs.nc").read_bytes()).hexdigest()

    assert digest(both) == digest(alone), "the same hydrographs are the same bytes"
    lists = [json.loads((folder / "run.json").read_text(encoding="utf-8"))["hydrographs"] for folder in (both, alone)]
    assert lists == [["hydrographs.nc", "hydrographs.csv"], ["hydrographs.nc"]]
    resources = json.loads((alone / "tables.json").read_text(encoding="utf-8"))["resources"]
    assert "hydrographs" not in [resource["name"] for resource in resources]
    with xr.open_dataset(alone / "hydrographs.nc") as data:
        assert set(data["outlet_id"].values.tolist()) == {"Brücke 1", "B"}
        assert data["flow"].attrs["units"] == "m3 s-1"
    page = "report/index.html"
    assert (both / page).read_bytes() == (alone / page).read_bytes(), "the report reads them from there"
    pipeline.retime(alone)
    assert digest(both) == digest(alone)
    assert not (alone / "hydrographs.csv").exists()


def test_a_run_without_series_has_no_file(two_outlets, tmp_path):
    folder = pipeline.run(two_outlets, out=tmp_path / "out", summary_only=True).folder
    assert not (folder / "hydrographs.nc").exists()
    assert json.loads((folder / "run.json").read_text(encoding="utf-8"))["hydrographs"] == []
    assert (folder / "basin_parameters.csv").is_file()
