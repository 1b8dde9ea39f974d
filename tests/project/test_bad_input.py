"""Input that cannot be computed: a line for each problem, all of them at once, exit 2, and nothing written."""

import json
import shutil
import sys

import fiona
import numpy as np
import pytest
from projects import make_project, read_table, transform_of, v_valley, write_raster

from basinwright import cli, pipeline

SHAPE = (40, 31)


@pytest.fixture
def command(monkeypatch, capsys):
    """Give a function that runs a command line and returns its exit status and the lines of its standard error."""

    def run(*arguments):
        monkeypatch.setattr(sys, "argv", ["basinwright", *map(str, arguments)])
        with pytest.raises(SystemExit) as left:
            cli.main()
        return left.value.code, capsys.readouterr().err.splitlines()

    return run


@pytest.fixture
def rejected(command):
    """Give a function that runs and checks a project, sees both rejected and nothing written; returns the lines."""

    def lines_of(file, *arguments):
        before = {path: path.stat().st_mtime_ns for path in file.parent.rglob("*")}
        status, lines = command("check", file)
        assert status == 2
        code, said = command("run", file, *arguments)
        assert code == 2
        assert [line for line in said if not line.startswith("[")] == lines
        assert {path: path.stat().st_mtime_ns for path in file.parent.rglob("*")} == before
        for line in lines:
            parts = line.split(": ")
            assert len(parts) >= 4, line
            assert all(part.strip() for part in parts), line
            assert "Traceback" not in line
        return lines

    return lines_of


def project(folder, **overrides):
    return make_project(folder, v_valley(*SHAPE, 0.05, 0.02), {"A": (39, 15)}, overrides=overrides)


def one(lines, *words):
    """See that there is one line, with these words."""
    assert len(lines) == 1, lines
    assert all(word in lines[0] for word in words), lines
    return lines[0]


class TestFiles:
    def test_no_project_file(self, command, tmp_path):
        status, lines = command("run", tmp_path / "absent.toml")
        assert status == 2
        one([line for line in lines if line[0] != "["], "absent.toml: file: does not exist: ", "basinwright start")

    @pytest.mark.parametrize("content", [b"", b"\xff\xfe\x00", b"[terrain\ndem = 1", b"a = 1\na = 2", b"[[terrain]]"])
    def test_a_project_file_that_is_none(self, rejected, tmp_path, content):
        file = tmp_path / "project.toml"
        file.write_bytes(content)
        assert rejected(file)

    def test_a_folder_for_a_project_file(self, command, tmp_path):
        assert command("check", tmp_path)[0] == 2

    @pytest.mark.parametrize(
        ("section", "key"),
        [
            ("terrain", "dem"), ("outlets", "source"), ("cover", "raster"), ("cover", "scheme"), ("soils", "raster"),
            ("storm", "table"),
        ],
    )  # fmt: skip
    def test_a_file_that_is_not_there(self, rejected, tmp_path, section, key):
        more = {"storm": {"distribution": "table"}} if section == "storm" else {}
        if section == "soils":
            more = {"soils": {"group": None}}
        value = ["absent.x"] if key == "dem" else "absent.x"
        file = project(tmp_path, **{section: {**more.get(section, {}), key: value}})
        one(rejected(file), "absent.x", "does not exist")

    @pytest.mark.parametrize(
        ("section", "key", "name"),
        [
            ("terrain", "dem", "dem.tif"), ("outlets", "source", "points.gpkg"), ("cover", "raster", "cover.tif"),
            ("cover", "scheme", "scheme.csv"), ("storm", "table", "storm.csv"), ("soils", "vector", "soils.gpkg"),
        ],
    )  # fmt: skip
    @pytest.mark.parametrize("content", [b"", b"not what it seems\n\x00\x01\xff"])
    def test_a_file_that_is_not_readable(self, rejected, tmp_path, section, key, name, content):
        keys = {"outlets": {"crs": None}, "storm": {"distribution": "table"}, "soils": {"group": None, "field": "g"}}
        value = [name] if key == "dem" else name
        file = project(tmp_path, **{section: {**keys.get(section, {}), key: value}})
        (tmp_path / name).write_bytes(content)
        assert any(name in line for line in rejected(file))

    def test_a_folder_for_a_file(self, rejected, tmp_path):
        (tmp_path / "folder").mkdir()
        file = project(tmp_path, terrain={"dem": ["folder"]}, cover={"raster": "folder"}, outlets={"source": "folder"})
        assert len(rejected(file)) >= 3

    def test_a_pattern_that_matches_nothing(self, rejected, tmp_path):
        one(rejected(project(tmp_path, terrain={"dem": ["tiles/*.tif"]})), "tiles/*.tif", "matches no file")

    @pytest.mark.parametrize("name", ["", " ", "x" * 5000, "<dem.tif>"])
    def test_a_name_that_is_none(self, rejected, tmp_path, name):
        assert rejected(project(tmp_path, terrain={"dem": [name]}, outlets={"source": name}))

    REMOTE = (
        "https://example.org/dem.tif", "http://example.org/a.csv", "s3://bucket/dem.tif", "/vsicurl/https://x/dem.tif",
        "/vsizip/a.zip/dem.tif", "zip:a.zip!dem.tif", "NETCDF:a.nc:z", "WMS:https://x", "<VRTDataset></VRTDataset>",
        'GTIFF_DIR:1:dem.tif', "ftp://x/y",
    )  # fmt: skip

    @pytest.mark.parametrize("name", REMOTE)
    def test_urls_and_virtual_paths_in_every_key(self, rejected, tmp_path, name):
        file = project(
            tmp_path,
            terrain={"dem": ["dem.tif", name]},
            outlets={"source": name},
            cover={"raster": name, "scheme": name, "impervious": name},
            soils={"group": None, "raster": name},
            storm={"distribution": "table", "table": name},
        )
        lines = rejected(file)
        keys = ("terrain.dem", "outlets.source", "cover.raster", "cover.scheme", "cover.impervious", "soils.raster",
                "storm.table")  # fmt: skip
        for key in keys:
            assert any(f": {key}: " in line and "URL or a virtual path" in line for line in lines), (key, lines)
        assert len(lines) == len(keys)

    def test_a_virtual_raster_that_leads_away(self, rejected, tmp_path):
        (tmp_path / "dem.vrt").write_text(
            '<VRTDataset rasterXSize="2" rasterYSize="2"><VRTRasterBand dataType="Byte" band="1"><SimpleSource>'
            "<SourceFilename>/vsicurl/http://localhost:9/a.tif</SourceFilename></SimpleSource></VRTRasterBand></VRTDataset>"
        )
        file = project(tmp_path, terrain={"dem": ["dem.vrt"]}, cover={"raster": "dem.vrt"})
        assert sum("leads to a URL or a virtual path" in line for line in rejected(file)) == 2

    def test_tables_stay_local_even_with_leave(self, rejected, tmp_path):
        file = project(tmp_path, project={"allow_remote": True}, cover={"scheme": "https://example.org/scheme.csv"})
        one(rejected(file), "cover.scheme", "local files only")


class TestRasters:
    def write(self, folder, **about):
        options = {"crs": "EPSG:32614", "nodata": -9999.0, **about}
        data = options.pop("data", v_valley(*SHAPE, 0.05, 0.02))
        write_raster(folder / "dem.tif", data, transform_of(), options.pop("crs"), **options)

    def test_terrain_without_crs(self, rejected, tmp_path):
        file = project(tmp_path)
        self.write(tmp_path, crs=None)
        assert any("dem.tif" in line and "coordinate reference system" in line for line in rejected(file))

    def test_cover_without_crs(self, rejected, tmp_path):
        file = project(tmp_path)
        write_raster(tmp_path / "cover.tif", np.full(SHAPE, 71, np.uint8), transform_of(), None, nodata=0)
        one(rejected(file), "cover.tif", "coordinate reference system")

    def test_all_void(self, rejected, tmp_path):
        file = project(tmp_path)
        self.write(tmp_path, data=np.full(SHAPE, np.nan))
        one(rejected(file, "--out", tmp_path / "deep" / "out"), "dem.tif")

    def test_an_unknown_crs(self, rejected, tmp_path):
        one(rejected(project(tmp_path, terrain={"crs": "EPSG:nowhere"})), "EPSG:nowhere")

    def test_cover_beside_the_terrain(self, rejected, tmp_path):
        file = project(tmp_path)
        data = np.full(SHAPE, 71, np.uint8)
        write_raster(tmp_path / "cover.tif", data, transform_of(origin=(100_000.0, 100_000.0)), "EPSG:32614", nodata=0)
        one(rejected(file), "cover.tif")


class TestOutlets:
    def write(self, folder, text):
        (folder / "outlets.csv").write_text(text, encoding="utf-8")

    @pytest.mark.parametrize(
        ("text", "words"),
        [
            ("id,x,y\n", "has no points"),
            ("id,x,y\nA,0,0\nB,1,1\n", "every outlet lies outside the terrain"),
            ("id,x,y\nA,500155,4299605\nA,500155,4299705\n", "'A' stands in rows 1, 2"),
            ("id,x,y\n,500155,4299605\n", "is empty in row 1"),
            ("id,x,z\nA,500155,4299605\n", "column y: does not exist"),
            ("name,x,y\nA,500155,4299605\n", "column id: does not exist"),
            ("id,x,y\nA,east,4299605\n", "no number for x or y"),
            ("id,x,y\nA,nan,4299605\n", "not finite"),
            ("id,x,y\nA,inf,4299605\n", "not finite"),
            ("id,x,y\nA,500155,4299605,7\n", "another number of cells"),
            ("id,x,y,tc_h\nA,500155,4299605,-1\n", "out of range"),
            ("id,x,y,tc_h\nA,500155,4299605,nan\n", "not a finite number"),
            ("id,x,y,curve_number\nA,500155,4299605,120\n", "out of range"),
            ("id,x,y,depth_10yr_in\nA,500155,4299605,0\n", "out of range"),
            ("id,x,y,depth_10yr_in,depth_10yr_mm\nA,500155,4299605,4,\n", "both columns are there"),
            ("id;x;y\nA;500155;4299605\n", "does not exist"),
        ],
    )
    def test_a_csv_that_does_not_serve(self, rejected, tmp_path, text, words):
        file = project(tmp_path)
        self.write(tmp_path, text)
        lines = rejected(file)
        assert any("outlets.csv" in line and words in line for line in lines), lines

    def test_a_csv_without_crs(self, rejected, tmp_path):
        one(rejected(project(tmp_path, outlets={"crs": None})), "outlets.csv", "crs: is not declared", "EPSG:4326")

    def test_a_csv_in_another_crs_than_said(self, rejected, tmp_path):
        one(rejected(project(tmp_path, outlets={"crs": "EPSG:4326"})), "every outlet lies outside the terrain")

    def test_a_crs_that_leads_nowhere(self, rejected, tmp_path):
        engineering = 'LOCAL_CS["site grid",UNIT["metre",1]]'
        assert rejected(project(tmp_path, outlets={"crs": engineering}))

    def test_an_empty_layer(self, rejected, tmp_path):
        schema = {"geometry": "Point", "properties": {"id": "str"}}
        with fiona.open(tmp_path / "points.gpkg", "w", driver="GPKG", schema=schema, crs="EPSG:32614"):
            pass
        one(rejected(project(tmp_path, outlets={"source": "points.gpkg", "crs": None})), "points.gpkg", "has no points")

    def test_a_layer_that_is_not_there(self, rejected, tmp_path):
        schema = {"geometry": "Point", "properties": {"id": "str"}}
        with fiona.open(tmp_path / "points.gpkg", "w", driver="GPKG", layer="here", schema=schema, crs="EPSG:32614"):
            pass
        file = project(tmp_path, outlets={"source": "points.gpkg", "layer": "there", "crs": None})
        one(rejected(file), "points.gpkg: layer: has no layer 'there'")

    def test_columns_that_are_not_there(self, rejected, tmp_path):
        file = project(tmp_path, outlets={"name": "road", "expected_area": "area_mi2", "capacity": "q_cfs"})
        assert len(rejected(file)) == 3

    @pytest.mark.parametrize(("key", "name"), [("expected_area", "area"), ("capacity", "q_ft"), ("capacity", "q_mi2")])
    def test_columns_without_their_unit(self, rejected, tmp_path, key, name):
        file = project(tmp_path, outlets={key: name})
        assert any(
            f"outlets.{key}: the column name {name!r} does not end in its unit" in line for line in rejected(file)
        )


QUANTITIES = [
    ("terrain", "stream_area", 0.25, "has no unit"),
    ("terrain", "stream_area", "0.25", "has no unit"),
    ("terrain", "stream_area", "0.25 sqm", "unknown unit 'sqm'"),
    ("terrain", "stream_area", "100 ft", "is of the kind length, not area"),
    ("terrain", "stream_area", "nan km2", "not a finite number"),
    ("terrain", "stream_area", "inf km2", "not a finite number"),
    ("terrain", "stream_area", "1e400 km2", "not a finite number"),
    ("terrain", "stream_area", "-1 km2", "not over zero"),
    ("terrain", "stream_area", "0 km2", "not over zero"),
    ("terrain", "stream_area", "some", "not a finite number"),
    ("flow_path", "sheet_limit", "1e308 mi", "too large"),
    ("flow_path", "sheet_limit", "100 Ft", "nearest: ft"),
    ("flow_path", "min_segment", "-5 ft", "-5 ft"),
    ("flow_path", "slope_floor", 0.0, "slope_floor"),
    ("flow_path", "slope_floor", float("nan"), "slope_floor"),
    ("flow_path", "slope_floor", float("inf"), "slope_floor"),
    ("flow_path", "slope_floor", "5 %", "slope_floor"),
    ("channel", "roughness", -0.03, "roughness"),
    ("channel", "roughness", float("nan"), "roughness"),
    ("cover", "gap_limit", "120 %", "120 %"),
    ("cover", "gap_limit", 0.02, "has no unit"),
    ("cover", "connected_fraction", 2.0, "connected_fraction"),
    ("storm", "two_year_depth", "3.1 ft", "is of the kind length, not depth"),
    ("storm", "two_year_depth", "-3.1 in", "not over zero"),
    ("storm", "duration", "24 in", "is of the kind depth, not time"),
    ("storm", "duration", "0.4 s", "whole number of seconds"),
    ("storm", "depths", {"2": "3.1 in", "10": "-4 in"}, "not over zero"),
    ("storm", "depths", {"2": "3.1 in", "10": "nan in"}, "not a finite number"),
    ("storm", "depths", {"2": "3.1 in", "10": "2 in"}, "depths must rise"),
    ("storm", "depths", {"2": "3.1 in", "10": "3.1 in"}, "depths must rise"),
    ("storm", "depths", {"2": "3.1 in", "2.0": "4 in"}, "the same return period"),
    ("storm", "depths", {"2": "3.1 in", "ten": "4 in"}, "not a return period"),
    ("storm", "depths", {"2": "3.1 in", "nan": "4 in"}, "not a return period"),
    ("storm", "depths", {"2": "3.1 in", "-10": "4 in"}, "not a return period"),
    ("storm", "depths", {"2": "3.1 in", " 10": "4 in"}, "not a return period"),
    ("storm", "depths", {"2": "3.1 in", "1e1": "4 in"}, "not a return period"),
    ("storm", "depths", {"10": "4 in"}, "2-year 24-hour depth"),
    ("storm", "depths", {}, "missing or empty"),
    ("timing", "minimum", "6", "has no unit"),
    ("unit_hydrograph", "time_step", "7 min", "must divide"),
    ("unit_hydrograph", "time_step", "0.5 s", "whole number of seconds"),
    ("unit_hydrograph", "peak_rate_factor", 300, 'set shape = "gamma"'),
    ("unit_hydrograph", "peak_rate_factor", 5000, "peak_rate_factor"),
    ("compute", "jobs", 0, "jobs"),
    ("compute", "jobs", 1.5, "jobs"),
    ("compute", "jobs", True, "jobs"),
]  # fmt: skip


@pytest.mark.parametrize(("section", "key", "value", "words"), QUANTITIES, ids=lambda value: str(value)[:30])
def test_a_quantity_that_is_none(rejected, tmp_path, section, key, value, words):
    file = tmp_path / "project.toml"
    if isinstance(value, float) and not np.isfinite(value):
        project(tmp_path, **{section: {key: "?"}})
        file.write_text(file.read_text().replace('"?"', str(value)))
    else:
        project(tmp_path, **{section: {key: value}})
    lines = rejected(file)
    assert any(line.startswith(f"project.toml: {section}.") and words in line for line in lines), lines
    assert len(lines) == 1 or section == "storm"  # without it, the depth that it would have given may be missing


UNKNOWN = [
    ({"terain": {"dem": "x"}}, "terain: unknown key: did you mean 'terrain'?"),
    ({"terrain": {"steam_area": "1 km2"}}, "terrain.steam_area: unknown key: did you mean 'stream_area'?"),
    ({"channel": {"bankfull_width": {"coeficient": 1.0, "exponent": 1.0}}}, "did you mean 'coefficient'?"),
    ({"timing": {"adopt": "velocty"}}, "timing.adopt: 'velocty' is unknown: nearest: 'velocity'"),
    ({"timing": {"adopt": "bucket"}}, "use one of "),
    ({"storm": {"distribution": "type_iv"}}, "storm.distribution: 'type_iv' is unknown"),
    ({"unit_hydrograph": {"shape": "triangle"}}, "nearest: 'triangular'"),
    ({"channel": {"bankfull_region": "atlantis"}}, "channel.bankfull_region: 'atlantis' is unknown"),
    ({"channel": {"bankfull_region": "own"}}, "channel.bankfull_width: missing"),
    ({"channel": {"stage": "full"}}, "use 'bankfull' or 'half'"),
    ({"project": {"units": "metric"}}, "use 'us' or 'si'"),
    ({"soils": {"group": "E"}}, "use 'A', 'B', 'C' or 'D'"),
    ({"soils": {"groups": {"1": "E"}}}, "soils.groups.1"),
    ({"soils": {"group": None}}, "soils.raster: no source given: give one of raster, vector, group"),
    ({"soils": {"raster": "cover.tif"}}, "raster and group given"),
    ({"cover": {"raster": None, "vector": "c.gpkg"}}, "cover.field: missing"),
    ({"storm": {"distribution": "table"}}, "storm.table: missing"),
    ({"storm": {"distribution": "balanced"}}, "storm.ddf: missing"),
    ({"storm": {"distribution": None}}, "storm.distribution: missing"),
    ({"terrain": {"dem": None}}, "terrain.dem: missing"),
    ({"terrain": {"stream_lines": "a.gpkg"}}, "terrain.stream_lines: 'a.gpkg' does not exist"),
    ({"terrain": {"flow_direction": "d8.tif"}}, "terrain.flow_direction_codes: missing"),
    ({"terrain": {"flow_direction_codes": {"1": 0}}}, "terrain.flow_direction_codes: given without"),
    ({"terrain": {"flow_direction_codes": {"1": 30}}}, "30 is no direction"),
    ({"terrain": {"flow_direction_codes": {"north": 0}}}, "'north' is no code"),
    ({"channel": {"roughness": "n_column"}}, "channel.roughness: 'n_column' is taken for a column"),
    ({"terrain": {"dem": []}}, "terrain.dem"),
    ({"outlets": {"source": None}}, "outlets.source: missing"),
    ({"cover": {"scheme": None}}, "cover.scheme: missing"),
]


@pytest.mark.parametrize(("overrides", "words"), UNKNOWN, ids=lambda value: str(value)[:50])
def test_an_option_that_is_none(rejected, tmp_path, overrides, words):
    lines = rejected(project(tmp_path, **overrides))
    assert any(line.startswith("project.toml: ") and words in line for line in lines), lines


def test_options_at_their_default(tmp_path):
    file = project(
        tmp_path,
        terrain={"length_correction": "none"},
        cover={"connected_fraction": 1.0},
        flow_path={"farthest": "length"},
        unit_hydrograph={"ct": 2.0, "cp": 0.6, "storage_ratio": 0.5},
        compute={"scheduler": "", "memory": "auto"},
    )
    assert "ready to run" in pipeline.check(file)[0]


class TestTables:
    HYETOGRAPHS = (
        ("hour,fraction\n0,0\n12,0.5\n24,0.9\n", "1"),
        ("hour,fraction\n0,0.1\n12,0.5\n24,1\n", "0"),
        ("hour,fraction\n1,0\n24,1\n", "0"),
        ("hour,fraction\n0,0\n12,0.7\n18,0.6\n24,1\n", "fraction"),
        ("hour,fraction\n0,0\n12,0.7\n12,0.8\n24,1\n", "hour"),
        ("hour,fraction\n0,0\n12,nan\n24,1\n", "finite"),
        ("hour,fraction\n0,0\n12,\n24,1\n", "not a number"),
        ("hour,fraction\n0,0\n12\n24,1\n", "not a number"),
        ("hour,fraction\n0,0\n6,1\n", "runs for 6 h"),
        ("hour,fraction\n", ""),
        ("hour,share\n0,0\n24,1\n", "lacks fraction"),
        ("", "lacks"),
    )

    @pytest.mark.parametrize(("text", "words"), HYETOGRAPHS)
    def test_a_distribution_that_is_none(self, rejected, tmp_path, text, words):
        (tmp_path / "storm.csv").write_text(text)
        lines = rejected(project(tmp_path, storm={"distribution": "table", "table": "storm.csv"}))
        assert all("storm.csv" in line for line in lines)
        assert any(words in line for line in lines), lines

    def test_a_scheme_with_faults_in_three_rows(self, rejected, tmp_path):
        (tmp_path / "scheme.csv").write_text(
            "code,cn_a,cn_b,cn_c,cn_d,sheet_n,shallow,open_water\n"
            "71,30,58,71,780,0.15,short_grass,false\n72,30,58,71,78,nan,short_grass,false\n73,1,2,3,4,0.1,none,maybe\n"
        )
        lines = rejected(project(tmp_path, cover={"scheme": "scheme.csv"}))
        assert {line.split("row ")[1][0] for line in lines} == {"1", "2", "3"}

    @pytest.mark.parametrize(
        "text",
        [
            "", "duration_h\n24\n", "duration_h,depth_2yr_in\n", "duration_h,depth_2yr_in\n24,x\n",
            "duration_h,depth_xyr_in\n1,1\n24,3\n", "duration_h,depth_2yr_in\n1,nan\n24,3\n",
            "duration_h,depth_2yr_in\n-1,1\n24,3\n", "duration_h,depth_2yr_in\n24,3\n1,4\n",
        ],
    )  # fmt: skip
    def test_depths_by_duration_that_are_none(self, rejected, tmp_path, text):
        (tmp_path / "ddf.csv").write_text(text)
        file = project(tmp_path, storm={"distribution": "balanced", "ddf": "ddf.csv", "depths": None})
        assert any("ddf.csv" in line for line in rejected(file))


def test_all_problems_at_once(rejected, tmp_path):
    file = project(
        tmp_path,
        project={"unit": "us"},
        terrain={"dem": ["absent.tif"], "stream_area": "lots"},
        outlets={"crs": None},
        cover={"raster": "https://example.org/cover.tif", "scheme": "absent.csv"},
        soils={"group": "Z"},
        storm={"distribution": "type_ix", "depths": {"2": "3 in", "10": "x"}},
        timing={"adopt": "sundial"},
    )
    lines = rejected(file)
    places = ("project.unit", "absent.tif", "terrain.stream_area", "crs", "cover.raster", "absent.csv", "soils.group",
              "storm.distribution", "storm.depths.10", "timing.adopt")  # fmt: skip
    for place in places:
        assert any(place in line for line in lines), (place, lines)
    assert len(lines) == len(places), lines


class TestTheFolder:
    def test_a_folder_that_holds_a_run(self, command, tmp_path):
        file = project(tmp_path)
        pipeline.run(file, summary_only=True)
        before = {path: path.read_bytes() for path in (tmp_path / "out").iterdir() if path.is_file()}
        status, lines = command("run", file)
        assert status == 2
        assert "holds a run: add --resume" in one(lines)
        assert {path: path.read_bytes() for path in before} == before
        assert command("run", file, "--overwrite")[0] == 0

    @pytest.mark.parametrize("option", [(), ("--overwrite",), ("--resume",)])
    def test_a_folder_that_holds_something_else(self, command, tmp_path, option):
        file = project(tmp_path)
        (tmp_path / "out").mkdir()
        (tmp_path / "out" / "thesis.txt").write_text("mine")
        (tmp_path / "out" / "run.json").write_text(json.dumps({"files": ["thesis.txt"]}))
        status, lines = command("run", file, *option)
        assert status == 2
        assert "holds files that are no run" in one(lines)
        assert (tmp_path / "out" / "thesis.txt").read_text() == "mine"

    def test_a_file_in_its_place(self, command, tmp_path):
        file = project(tmp_path)
        (tmp_path / "out").write_text("mine")
        status, lines = command("run", file)
        assert status == 2
        assert "is a file" in one(lines)

    def test_a_place_that_cannot_be_written(self, command, tmp_path):
        file = project(tmp_path)
        (tmp_path / "plain").write_text("")
        status, lines = command("run", file, "--out", tmp_path / "plain" / "out")
        assert status == 2
        assert "cannot be written" in next(line for line in lines if line[0] != "[")

    @pytest.mark.parametrize("reason", [28, 13, 30])  # ENOSPC, EACCES, EROFS
    @pytest.mark.parametrize("step", ["array", "values", "record"])
    def test_no_space_or_permission_while_running(self, command, tmp_path, monkeypatch, step, reason):
        from basinwright.store import Draft

        def refuse(*_):
            raise OSError(reason, "refused by the test")

        file = project(tmp_path)
        monkeypatch.setattr(Draft, step, refuse)
        status, lines = command("run", file)
        assert status == 2
        assert "cannot be written (refused by the test" in lines[-1]
        assert not (tmp_path / "out").exists()
        monkeypatch.undo()

    def test_no_space_while_writing_tables(self, command, tmp_path, monkeypatch):
        from basinwright.outputs import writing

        file = project(tmp_path)
        pipeline.run(file, summary_only=True)
        before = {path: path.read_bytes() for path in (tmp_path / "out").iterdir() if path.is_file()}

        def refuse(*_):
            raise OSError(28, "No space left on device")

        monkeypatch.setattr(writing, "write_csv", refuse)
        for arguments in (("run", file, "--overwrite"), ("retime", tmp_path / "out")):
            status, lines = command(*arguments)
            assert status == 2
            assert "No space left on device" in lines[-1]
            assert {path: path.read_bytes() for path in before} == before


class TestOneOutletFails:
    """Exit 1: what only computing shows of one outlet; the others are complete."""

    def outcome(self, command, folder, outlets, elevation=None, **more):
        """Run; return the exit status, the rows of outlets.csv and the messages of OUTLET_FAILED."""
        z = v_valley(*SHAPE, 0.05, 0.02) if elevation is None else elevation
        file = make_project(folder, z, {"good": (39, 15), **outlets}, **more)
        status, _ = command("run", file, "--summary-only")
        rows = {row["outlet_id"]: row for row in read_table(folder / "out", "outlets")}
        flags = {row["outlet_id"]: row["message"] for row in read_table(folder / "out", "flags")
                 if row["flag"] == "OUTLET_FAILED"}  # fmt: skip
        assert set(flags) == {outlet_id for outlet_id, row in rows.items() if row["status"] == "failed"}
        for outlet_id, row in rows.items():
            assert bool(row["peak_10yr_m3s"]) == bool(row["tc_h"]) == (outlet_id not in flags)
        return status, rows, flags

    def test_none_fails(self, command, tmp_path):
        assert self.outcome(command, tmp_path, {})[::2] == (0, {})

    def test_outside(self, command, tmp_path):
        status, rows, flags = self.outcome(command, tmp_path, {"bad": (10, 500)})
        assert (status, list(flags)) == (1, ["bad"])
        assert float(rows["good"]["peak_100yr_m3s"]) > 0

    def test_in_a_void(self, command, tmp_path):
        elevation = v_valley(*SHAPE, 0.05, 0.02)
        elevation[5:8, 25:28] = np.nan
        status, _, flags = self.outcome(command, tmp_path, {"bad": (6, 26)}, elevation)
        assert (status, list(flags)) == (1, ["bad"])
        assert "void" in flags["bad"]

    def test_a_basin_of_one_cell(self, command, tmp_path):
        elevation = v_valley(*SHAPE, 0.05, 0.02)
        elevation[20, 5] += 50.0
        status, _, flags = self.outcome(command, tmp_path, {"bad": (20, 5)}, elevation)
        assert (status, list(flags)) == (1, ["bad"])
        assert "single cell" in flags["bad"]

    def test_a_class_that_the_scheme_does_not_list(self, command, tmp_path):
        cover = np.full(SHAPE, 71)
        cover[:5] = 99
        status, _, flags = self.outcome(command, tmp_path, {"other": (3, 15)}, cover=cover)
        assert (status, sorted(flags)) == (1, ["good", "other"])
        assert "'99', which the scheme does not list" in flags["other"]

    @pytest.mark.parametrize(("rows_void", "fails"), [(5, True), (0, False)])
    def test_gaps_beyond_the_limit(self, command, tmp_path, rows_void, fails):
        cover = np.full(SHAPE, 71)
        cover[30 : 30 + rows_void] = 0
        status, _, flags = self.outcome(command, tmp_path, {"above": (25, 15)}, cover=cover)
        assert (status, list(flags)) == ((1, ["good"]) if fails else (0, []))

    def test_a_gap_within_the_limit_on_the_path_itself(self, command, tmp_path):
        cover = np.full(SHAPE, 71)
        cover[20, 14:17] = 99
        cover[0, 0] = 0
        status, rows, flags = self.outcome(command, tmp_path, {}, cover=cover)
        assert (status, flags) == (0, {})
        assert "COVER_GAP" in rows["good"]["flags"]

    def test_every_outlet(self, command, tmp_path):
        elevation = v_valley(*SHAPE, 0.05, 0.02)
        elevation[5:8, 25:28] = np.nan
        file = make_project(tmp_path, elevation, {"bad": (6, 26), "far": (900, 900)})
        assert command("run", file, "--summary-only")[0] == 1
        assert [row["status"] for row in read_table(tmp_path / "out", "outlets")] == ["failed", "failed"]


def test_a_missing_file_leaves_an_earlier_run_alone(command, tmp_path):
    file = project(tmp_path)
    pipeline.run(file, summary_only=True)
    (tmp_path / "cover.tif").unlink()
    status, _ = command("run", file, "--overwrite")
    assert status == 2
    assert (tmp_path / "out" / "outlets.csv").is_file()
    shutil.rmtree(tmp_path / "out")
