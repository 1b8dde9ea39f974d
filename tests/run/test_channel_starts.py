"""Whole runs that find where channels begin: by the drop test, or on a map."""

import json

import geopandas as gpd
import numpy as np
import pytest
import shapely
from projects import cell_centre, make_project, numbers, paired_ditches, read_table, transform_of, v_valley, walled

from basinwright import pipeline
from basinwright.errors import InputRejected
from basinwright.kernels import network


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    z = paired_ditches(2.0)
    file = make_project(
        tmp_path_factory.mktemp("ditches"), z, {"bottom": (z.shape[0] - 4, 128)},
        overrides={"terrain": {"stream_area": "auto"}},
    )  # fmt: skip
    return pipeline.run(file).folder


def test_the_stream_area_and_the_tests_behind_it_are_in_the_manifest(run):
    about = json.loads((run / "run.json").read_text())
    assert about["project"]["terrain"]["stream_area"] == "auto"
    facts = about["terrain"]
    assert facts["stream_area_km2"] == 0.02
    by_area = {row["stream_area_km2"]: row for row in facts["drop_test"]}
    assert not by_area[0.016]["passes"]
    assert by_area[0.02]["passes"]
    assert by_area[0.02]["first_streams"] == 128
    assert "by the drop test" in (run / "report" / "index.html").read_text(encoding="utf-8")


def test_channels_begin_there_in_every_output(run):
    """128 heads under strips of 200 cells; the longest path runs down one strip, then over seven links of a channel."""
    streams = gpd.read_file(run / "basins.gpkg", layer="streams")
    assert streams["strahler_order"].value_counts().to_dict() == {n + 1: 2 ** (7 - n) for n in range(8)}
    assert streams.loc[streams["strahler_order"] == 1, "top_area_km2"].to_numpy() == pytest.approx(0.02)
    row = read_table(run, "outlets")[0]
    first = next(entry for entry in read_table(run, "segments") if entry["regime"] == "channel")
    assert float(first["from_m"]) == pytest.approx(199 * 10.0, abs=1e-5)
    inside = streams["to_reach"] > 0  # the last reach lies below the outlet
    assert float(row["drainage_density_per_km"]) == pytest.approx(
        streams.loc[inside, "length_m"].sum() / 1e3 / float(row["area_km2"]), rel=1e-9
    )


def test_retime_repeats_it(run):
    before = {path.name: path.read_bytes() for path in run.glob("*.csv")}
    pipeline.retime(run)
    assert {path.name: path.read_bytes() for path in run.glob("*.csv")} == before


AXIS, HEAD, MOUTH = 33, 42, 98


@pytest.fixture(scope="module")
def mapped(tmp_path_factory):
    """A valley whose mapped stream begins in row 42 and ends a while above the outlet; snapping goes to it."""
    folder = tmp_path_factory.mktemp("mapped")
    points = [cell_centre(transform_of(), row, AXIS) for row in (HEAD, 90)]
    gpd.GeoDataFrame(geometry=[shapely.LineString(points)], crs="EPSG:32614").to_file(folder / "streams.gpkg")
    file = make_project(
        folder, walled(v_valley(97, 61, 0.1, 0.02)), {"A": (MOUTH, AXIS), "B": (60, AXIS + 2)},
        overrides={
            "terrain": {"stream_area": "mapped", "stream_lines": "streams.gpkg"},
            "outlets": {"snap_within": "40 m"},
        },
    )  # fmt: skip
    return pipeline.run(file).folder


def test_channels_begin_where_mapped_lines_begin(mapped):
    streams = gpd.read_file(mapped / "basins.gpkg", layer="streams")
    assert len(streams) == 1, "one line, carried on below its mapped end"
    top = shapely.get_coordinates(streams.geometry.iloc[0])[0]
    assert top.tolist() == list(cell_centre(transform_of(), HEAD, AXIS))
    rows = {row["outlet_id"]: row for row in read_table(mapped, "outlets")}
    assert float(rows["B"]["snap_m"]) == 20.0
    for name, bottom in (("A", MOUTH), ("B", 60)):
        segments = [row for row in read_table(mapped, "segments") if row["outlet_id"] == name]
        channel = [row for row in segments if row["regime"] == "channel"]
        assert numbers(channel, "to_m")[-1] - numbers(channel, "from_m")[0] == pytest.approx(10.0 * (bottom - HEAD))
        density = 0.01 * (bottom - HEAD) / float(rows[name]["area_km2"])
        assert float(rows[name]["drainage_density_per_km"]) == pytest.approx(density, rel=1e-9)
    assert json.loads((mapped / "run.json").read_text())["project"]["terrain"]["stream_area"] == "mapped"
    assert "heads of mapped streams" in (mapped / "report" / "index.html").read_text(encoding="utf-8")


def test_mapped_needs_a_map_and_has_no_area_to_vary(tmp_path):
    file = make_project(
        tmp_path, v_valley(20, 21, 0.1, 0.02), {"A": (18, 10)},
        overrides={"terrain": {"stream_area": "mapped"}, "uncertainty": {"stream_area_factor": [0.5, 2.0]}},
    )  # fmt: skip
    with pytest.raises(InputRejected) as caught:
        pipeline.check(file)
    assert {problem.field for problem in caught.value.problems} == {
        "terrain.stream_area", "uncertainty.stream_area_factor"
    }  # fmt: skip


def test_marks_run_down_to_the_end():
    """A row of cells that drains to the east, a mark in the middle, one below it, and a cell that is none of theirs."""
    directions = np.full(3 * 9, 9, np.uint8)
    directions[10:16], directions[16] = 2, 8
    mark = np.zeros(directions.size, np.uint8)
    mark[[12, 14]] = 1
    for kernel in (network.mark_below, network.mark_below.py_func):
        marked = mark.copy()
        kernel(directions, 7, marked)
        assert np.flatnonzero(marked == 2).tolist() == [12, 13, 14, 15, 16]
