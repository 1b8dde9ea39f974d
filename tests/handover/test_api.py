"""The public names: few, quick to import, each with an example that runs; what they return keeps types and CRS."""

import doctest
import importlib.metadata
import inspect
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from projects import make_project, read_table, v_valley, walled
from pyproj import CRS

import basinwright as bw

pytestmark = pytest.mark.xdist_group("sample")


@pytest.fixture(scope="module")
def work(sample, tmp_path_factory):
    """Return a folder with ``basinwright-demo`` beside it, as after the command ``basinwright demo``."""
    folder = tmp_path_factory.mktemp("desk")
    (folder / "basinwright-demo").symlink_to(sample.parent)
    return folder


@pytest.fixture
def at_work(work, monkeypatch):
    monkeypatch.chdir(work)


@pytest.mark.parametrize("name", [name for name in bw.__all__ if name not in ("run", "retime")] + ["run", "retime"])
@pytest.mark.usefixtures("at_work")
def test_every_public_name_has_an_example_that_runs(name):
    thing = getattr(bw, name)
    module = sys.modules[thing.__module__]
    tests = [test for test in doctest.DocTestFinder(recurse=False).find(thing, name, module) if test.examples]
    assert tests, "an example"
    runner = doctest.DocTestRunner(optionflags=doctest.ELLIPSIS)
    if name == "retime" and not Path("screening").exists():  # the folder that the example of `run` leaves
        bw.run("basinwright-demo/project.toml", out="screening", summary_only=True)
    for test in tests:
        test.globs = {**vars(module), **{other: getattr(bw, other) for other in bw.__all__}}
        assert runner.run(test).failed == 0


def test_they_are_few_and_typed():
    assert 12 <= len(bw.__all__) <= 18
    assert bw.__all__ == sorted(bw.__all__, key=lambda name: (not name[0].isupper(), name))
    assert set(bw.__all__) <= set(dir(bw))
    for name in bw.__all__:
        thing = getattr(bw, name)
        if inspect.isfunction(thing):
            notes = thing.__annotations__
            assert {*inspect.signature(thing).parameters, "return"} <= set(notes), name
    assert importlib.resources.files("basinwright").joinpath("py.typed").is_file()
    with pytest.raises(AttributeError, match="no attribute 'storms_'"):
        bw.storms_  # noqa: B018


def test_importing_loads_nothing_heavy():
    script = (
        "import sys, basinwright; "
        "print([name for name in ('numpy', 'numba', 'pandas', 'rasterio', 'geopandas', 'xarray', 'pydantic', 'scipy') "
        "if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_tables_have_the_types_of_their_schema(sample):
    run = bw.Run(sample)
    assert {"outlets", "segments", "hydrographs", "basin_parameters", "flags"} <= set(run.tables)
    outlets, segments = run.table("outlets"), run.table("segments")
    written = read_table(sample, "outlets")
    assert outlets["outlet_id"].tolist() == [row["outlet_id"] for row in written]
    assert outlets["area_mi2"].tolist() == [float(row["area_mi2"]) for row in written], "to the last bit"
    assert str(segments["segment"].dtype) == "Int64"
    assert str(segments["edited"].dtype) == "boolean"
    assert set(run.table("flags")["severity"]) <= {"note", "warning", "serious"}
    with pytest.raises(bw.InputRejected, match="no such table: use one of outlets, segments"):
        run.table("outlet")


def test_ids_stay_text(tmp_path):
    file = make_project(tmp_path, walled(v_valley(30, 21, 0.05, 0.02)), {"007": (20, 13), "NA": (28, 13)})
    run = bw.Project(file).run()
    assert run.outlets.index.tolist() == ["007", "NA"]
    assert run.table("segments")["outlet_id"].unique().tolist() == ["007", "NA"]
    assert bw.Project(file).check()[0].endswith("ready to run")


def test_rasters_are_xarray_with_their_crs(sample):
    import rasterio

    run = bw.Run(sample)
    with rasterio.open(sample / "terrain" / "conditioned.tif") as source:
        band, transform, crs = source.read(1, masked=True), source.transform, source.crs
    raster = run.raster("conditioned")
    np.testing.assert_array_equal(raster.values, band.filled(np.nan))
    assert CRS.from_cf(raster["spatial_ref"].attrs) == CRS.from_wkt(crs.to_wkt())
    assert raster.encoding["grid_mapping"] == "spatial_ref"
    assert float(raster.x[0]) == transform.c + transform.a / 2
    assert float(raster.y[-1]) == transform.f + transform.e * (band.shape[0] - 0.5)
    assert (raster.attrs["units"], raster.x.attrs["standard_name"]) == ("m", "projection_x_coordinate")
    with pytest.raises(bw.InputRejected, match="does not exist"):
        run.raster("conditioning")
    assert run.layer("flow_paths").crs.to_epsg() == int(run.crs.removeprefix("EPSG:"))
    with run.hydrographs() as data:
        assert data.attrs["featureType"] == "timeSeries"


def test_the_terrain_half_of_a_project_is_that_of_its_run(sample):
    rasters = bw.Project(sample.parent / "project.toml").terrain()
    run = bw.Run(sample)
    for name in ("conditioned", "flow_direction", "contributing_area"):
        stored = run.raster(name).values.astype(np.float64)
        mine = rasters[name].values.astype(np.float64)
        known = np.isfinite(mine) if name != "contributing_area" else np.isfinite(mine) & (stored >= 0)
        np.testing.assert_array_equal(mine[known], stored[known])
        assert known.sum() > 600_000
    assert CRS.from_cf(rasters["spatial_ref"].attrs).to_epsg() == 32614


def test_a_flood_from_a_path_measured_by_hand():
    # Technical Release 55 (1986), examples 3-1 and 4-1: Tc 1.53 h by the handbook; 0.39 mi2, CN 75, 6.0 in of Type II
    # give 3.28 in of runoff and a peak of 345 cfs by the graphical method, of which the hydrograph's stays within 15 %.
    from basinwright.timing import bankfull_relation, sum_by_outlet

    ft = 0.3048
    times = bw.time_segments(
        {
            "outlet": [0, 0, 0],
            "regime": ["sheet", "shallow", "channel"],
            "from_m": [0.0, 100 * ft, 1500 * ft],
            "to_m": [100 * ft, 1500 * ft, 8800 * ft],
            "top_elevation_m": [51.5 * ft, 50.5 * ft, 36.5 * ft],
            "bottom_elevation_m": [50.5 * ft, 36.5 * ft, 0.0],
            "area_km2": [0.01, 0.1, 1.0],
            "roughness": [0.24, np.nan, 0.05],
            "hydraulic_radius_m": [np.nan, np.nan, 0.957 * ft],
            "shallow_category": ["", "grassed_waterway", ""],
        },
        two_year_depth_mm=91.44,
        relation=bankfull_relation("usa"),
    )
    tc_h = bw.time_of_concentration({"travel_time_h": sum_by_outlet([0, 0, 0], times.travel_time_h, 1)})[
        "velocity"
    ].tc_h
    assert tc_h[0] == pytest.approx(1.53, abs=0.01)
    area_km2 = [0.39 * 2.589988110336]
    floods = bw.design_floods(area_km2, tc_h, bw.Patches([0, 1], area_km2, [75.0]), bw.storm("type_ii"), [[6.0 * 25.4]])
    assert floods.runoff_mm[0, 0] / 25.4 == pytest.approx(3.28, abs=0.005)
    assert floods.peak_m3s[0, 0] / 0.3048**3 == pytest.approx(345, rel=0.15)
