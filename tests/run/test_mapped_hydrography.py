"""Projects with mapped hydrography, from the layers to the tables."""

import json

import geopandas as gpd
import numpy as np
import pytest
import shapely
from projects import cell_centre, make_project, numbers, read_table, transform_of, v_valley, walled, write_raster

from basinwright import pipeline
from basinwright.errors import InputRejected
from basinwright.terrain import condition_and_route

AXIS, MOUTH, OFF = 43, 101, 3
CRS = "EPSG:32614"


def layer(path, shapes, crs=CRS, **columns):
    gpd.GeoDataFrame(columns, geometry=list(shapes), crs=CRS).to_crs(crs).to_file(path)


def at(row, col):
    return cell_centre(transform_of(), row, col)


def line(*cells):
    return shapely.LineString([at(*cell) for cell in cells])


def ground():
    return walled(v_valley(100, 81, 0.1, 0.02))


@pytest.fixture(scope="module")
def mapped(tmp_path_factory):
    """A run with a stream three cells off its valley, a levee with a culvert, and a sink; layers in other CRS."""
    folder = tmp_path_factory.mktemp("mapped")
    course = [line((12, AXIS + OFF), (60, AXIS + OFF)), line((60, AXIS + OFF), (106, AXIS + OFF))]
    layer(folder / "streams.gpkg", course, crs="EPSG:4326", n=[0.06, 0.03])
    layer(folder / "levees.gpkg", [line((50.2, 3), (50.2, 83))])
    layer(folder / "sinks.gpkg", [shapely.Point(at(20, 60)).buffer(35.0)], crs="EPSG:32613")
    file = make_project(
        folder,
        ground(),
        {"A": (MOUTH, AXIS + OFF), "B": (40, AXIS + OFF)},
        overrides={
            "terrain": {"stream_lines": "streams.gpkg", "barriers": "levees.gpkg", "sinks": "sinks.gpkg"},
            "channel": {"roughness": "n"},
        },
    )
    pipeline.run(file, summary_only=True)
    return folder / "out"


def test_the_basin_is_the_valley_less_what_the_sink_keeps(mapped):
    outlets = read_table(mapped, "outlets")
    assert numbers(outlets, "area_km2")[0] + numbers(outlets, "sink_area_km2")[0] == pytest.approx(0.7938, abs=0.02)
    assert all("SINK_INSIDE" in row["flags"].split() for row in outlets)


def test_channels_have_the_roughness_of_the_lines_they_follow(mapped):
    channel = [row for row in read_table(mapped, "segments") if row["outlet_id"] == "A" and row["regime"] == "channel"]
    assert numbers(channel, "roughness").tolist() == [0.045, 0.06, 0.03]
    assert all("n of the stream lines" in row["basis"] for row in channel)
    flags = [row for row in read_table(mapped, "flags") if row["flag"] == "ROUGHNESS_UNMAPPED"]
    assert {row["outlet_id"] for row in flags} == {"A", "B"}
    unmapped = float(channel[0]["to_m"]) - float(channel[0]["from_m"])
    assert f"{unmapped:.4g} m" in flags[0]["message"]


def test_the_manifest_says_what_was_done(mapped):
    about = json.loads((mapped / "run.json").read_text())
    facts = about["terrain"]["hydrography"]
    assert facts["stream_cells"] == 94
    assert facts["led_cells"] > 100
    assert facts["sink_cells"] == pytest.approx(np.pi * 3.5**2, abs=4)
    assert {entry.get("path") for entry in about["alignment"]} >= {"streams.gpkg", "levees.gpkg", "sinks.gpkg"}
    assert {entry["path"].rsplit("/", 1)[-1] for entry in about["inputs"]} >= {"streams.gpkg", "sinks.gpkg"}


def test_retime_gives_the_same_bytes_and_keeps_mapped_roughness_through_edits(mapped):
    before = {name: (mapped / f"{name}.csv").read_bytes() for name in ("outlets", "segments", "timing")}
    pipeline.retime(mapped)
    assert before == {name: (mapped / f"{name}.csv").read_bytes() for name in before}
    text = (mapped / "segments.csv").read_text()
    rows = read_table(mapped, "segments")
    steep = next(row for row in rows if row["roughness"] == "0.06")
    (mapped / "segments.csv").write_text(text.replace(f",{steep['slope']},", ",0.05,", 1))
    pipeline.retime(mapped)
    edited = read_table(mapped, "segments")
    assert [row["slope"] for row in edited].count("0.05") == 1
    assert numbers(edited, "roughness").tolist() == numbers(rows, "roughness").tolist()
    (mapped / "segments.csv").write_text(text)
    pipeline.retime(mapped)
    assert before["outlets"] == (mapped / "outlets.csv").read_bytes()


def test_given_directions_that_are_our_own_give_the_same_tables(tmp_path):
    z, outlets = ground().astype(np.float32), {"A": (MOUTH, AXIS), "B": (40, AXIS)}
    size = np.full(len(z), 10.0)
    ours = condition_and_route(z, size, size, size * size)
    assert ours.filled_cells == 0
    codes = {str(i + 1): 45 * i for i in range(8)} | {"9": "exit"}
    directions = ours.azimuths() // 45 + 1
    directions[ours.azimuths() == 65534] = 9
    runs = []
    for name, terrain in (("own", {}), ("given", {"flow_direction": "d8.tif", "flow_direction_codes": codes})):
        file = make_project(tmp_path / name, z, outlets, overrides={"terrain": terrain})
        write_raster(tmp_path / name / "d8.tif", directions.astype(np.uint8), transform_of(), CRS, nodata=0)
        pipeline.run(file, summary_only=True)
        runs.append(tmp_path / name / "out")
    for table in ("outlets", "segments", "cover_shares", "timing"):
        assert (runs[0] / f"{table}.csv").read_bytes() == (runs[1] / f"{table}.csv").read_bytes()


def test_published_directions_have_no_coarser_cells(tmp_path):
    codes = {str(i + 1): 45 * i for i in range(8)}
    file = make_project(
        tmp_path,
        v_valley(40, 31, 0.1, 0.02),
        {"A": (39, 15)},
        overrides={"terrain": {"flow_direction": "d8.tif", "flow_direction_codes": codes}},
    )
    write_raster(tmp_path / "d8.tif", np.full((40, 31), 3, np.uint8), transform_of(), CRS, nodata=0)
    with pytest.raises(InputRejected, match="published directions are of one cell size"):
        pipeline.run(file, also_at=["30 m"])
    assert not (tmp_path / "out").exists()


def rejected(folder, terrain, **sections):
    """Return the problems of a project, which `check` and `run` name alike and before anything is written."""
    file = make_project(
        folder, v_valley(40, 31, 0.1, 0.02), {"A": (39, 15)}, overrides={"terrain": terrain, **sections}
    )
    said = []
    for look in (pipeline.check, lambda file: pipeline.run(file, summary_only=True)):
        with pytest.raises(InputRejected) as caught:
            look(file)
        said.append([str(problem) for problem in caught.value.problems])
    assert said[0] == said[1]
    assert not (folder / "out").exists()
    return said[0]


def test_layers_that_cannot_be_used_are_named(tmp_path):
    layer(tmp_path / "points.gpkg", [shapely.Point(at(5, 5))])
    layer(tmp_path / "far.gpkg", [shapely.affinity.translate(line((5, 5), (9, 9)), 1e5, 0.0)])
    layer(tmp_path / "lines.gpkg", [line((5, 5), (9, 9))], n=[7e3])
    gpd.GeoDataFrame(geometry=[line((5, 5), (9, 9))]).to_file(tmp_path / "nowhere.gpkg")
    for terrain, words in (
        ({"stream_lines": "points.gpkg"}, "is Point, not lines"),
        ({"sinks": "lines.gpkg"}, "is LineString, not polygons"),
        ({"barriers": "far.gpkg"}, "lies wholly off the terrain"),
        ({"barriers": "nowhere.gpkg"}, "crs: is not declared"),
        ({"sinks": "none.gpkg"}, "does not exist"),
    ):
        (problem,) = rejected(tmp_path, terrain)
        assert words in problem


def test_a_column_that_holds_no_roughness_is_named(tmp_path):
    layer(tmp_path / "lines.gpkg", [line((5, 5), (9, 9))], n=["rough"])
    (problem,) = rejected(tmp_path, {"stream_lines": "lines.gpkg"}, channel={"roughness": "manning"})
    assert "column manning: does not exist" in problem
    (problem,) = rejected(tmp_path, {"stream_lines": "lines.gpkg"}, channel={"roughness": "n"})
    assert "'rough' is not a number" in problem


def test_directions_that_cannot_be_used_are_named(tmp_path):
    codes = {"1": 90, "2": 270}
    east = np.full((40, 31), 1, np.uint8)
    looped = east.copy()
    looped[7, 4] = 2
    unknown = east.copy()
    unknown[3, 2] = 77
    for name, raster, corner, words in (
        ("small", east[1:], (0, 0), "it has 39 x 31 cells, not 40 x 31"),
        ("shifted", east, (10, 0), "it begins at another corner"),
        ("looped", looped, (0, 0), "1 loop"),
        ("unknown", unknown, (0, 0), "does not list (77): 1 in all, the first at x 500025, y 4299965"),
    ):
        x, y = transform_of().c + corner[0], transform_of().f + corner[1]
        write_raster(tmp_path / f"{name}.tif", raster, transform_of(10.0, (x, y)), CRS, nodata=0)
        (problem,) = rejected(tmp_path, {"flow_direction": f"{name}.tif", "flow_direction_codes": codes})
        assert words in problem


def test_interior_voids_up_to_the_size_asked_for_are_filled(tmp_path):
    z = ground()
    z[60:62, 60:62] = np.nan
    for name, size, filled in (("kept", "0 km2", 0), ("filled", "0.0004 km2", 1)):
        file = make_project(tmp_path / name, z, {"A": (MOUTH, AXIS)}, overrides={"terrain": {"fill_voids": size}})
        pipeline.run(file, summary_only=True)
        facts = json.loads((tmp_path / name / "out" / "run.json").read_text())["terrain"]
        assert (facts["voids_filled"], facts["voids_left"]) == (filled, 1 - filled)
        flags = {row["flag"]: row["message"] for row in read_table(tmp_path / name / "out", "flags")}
        assert ("EDGE_TOUCH" in flags) == (filled == 0)
        if not filled:
            assert flags["EDGE_TOUCH"].endswith("voids 80 m")
