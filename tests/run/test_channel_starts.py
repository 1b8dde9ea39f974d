"""A whole run that finds for itself where channels begin."""

import json

import geopandas as gpd
import pytest
from projects import make_project, paired_ditches, read_table

from basinwright import pipeline


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
