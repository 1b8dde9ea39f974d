"""What must hold of the outputs of any run, on those of the sample."""

import csv
import hashlib
import itertools
import json
import math
from collections import Counter
from fractions import Fraction

import frictionless
import geopandas as gpd
import numpy as np
import pyogrio
import pytest
import rasterio
import shapely
from projects import numbers, read_table
from rasterio.windows import Window

from basinwright.flags import FLAGS
from basinwright.tables import ALL, OUTLETS, STREAMS

pytestmark = pytest.mark.xdist_group("sample")

PERIODS = ("2", "10", "25", "100")
KM2_PER_MI2 = 2.589988110336
M3_PER_CFS_H = 0.3048**3 * 3600
ASKED_FOR = {"cell_sizes", "edits", "review"}
TABLES = [table.name for table in ALL if table.name not in ASKED_FOR]


@pytest.fixture(scope="module")
def tables(sample):
    return {name: read_table(sample, name) for name in TABLES}


@pytest.fixture(scope="module")
def about(sample):
    return json.loads((sample / "run.json").read_text(encoding="utf-8"))


def of(rows, outlet):
    return [row for row in rows if row["outlet_id"] == outlet["outlet_id"]]


def layer(sample, name):
    return gpd.read_file(sample / "basins.gpkg", layer=name)


def test_files_that_readme_lists(sample):
    expected = {f"{name}.csv" for name in TABLES} | {"run.json", "tables.json", "basins.gpkg", "terrain"}
    assert expected <= {path.name for path in sample.iterdir()}
    assert not list(sample.parent.glob(".out.*")), "nothing is left of the building of the run"


# Tables


def test_tables_are_csv_by_rfc_4180(sample):
    for name in TABLES:
        raw = (sample / f"{name}.csv").read_bytes()
        assert not raw.startswith(b"\xef\xbb\xbf")
        assert raw.count(b"\n") == raw.count(b"\r\n"), "RFC 4180: CRLF"
        rows = list(csv.reader(raw.decode("utf-8").splitlines(), strict=True))
        assert {len(row) for row in rows} == {len(rows[0])}
        cells = {cell for row in rows[1:] for cell in row}
        assert not cells & {"nan", "NaN", "None", "inf", "-inf", "True", "False"}


def test_tables_validate_as_a_data_package(sample):
    report = frictionless.validate(str(sample / "tables.json"), type="package")
    assert report.valid, report.flatten(["path", "rowNumber", "fieldName", "message"])[:5]
    assert len(report.tasks) == len(TABLES)


def test_a_spoilt_table_does_not_validate(sample, tmp_path):
    """The schema bites: the same validation refuses a text in a number's place and a repeated key."""
    for path in sample.glob("*.csv"):
        (tmp_path / path.name).write_bytes(path.read_bytes())
    (tmp_path / "tables.json").write_bytes((sample / "tables.json").read_bytes())
    text = (tmp_path / "outlets.csv").read_text(encoding="utf-8")
    (tmp_path / "outlets.csv").write_text(
        text.replace("\nTC-002,", "\nTC-001,").replace("38.70", "x"), encoding="utf-8"
    )
    report = frictionless.validate(str(tmp_path / "tables.json"), type="package")
    kinds = {kind for _, kind in report.flatten(["path", "type"])}
    assert {"type-error", "primary-key"} <= kinds


def test_every_column_has_a_unit_or_needs_none(sample):
    package = json.loads((sample / "tables.json").read_text(encoding="utf-8"))
    for resource in package["resources"]:
        for field in resource["schema"]["fields"]:
            assert field["description"]
            suffixes = ("_ft", "_mi2", "_in", "_cfs", "_fps", "_h", "_pct", "_yr", "_cfs_per_in")
            if field["type"] == "number" and field["name"].endswith(suffixes):
                assert field.get("unit"), field["name"]


def test_ids_are_text_and_in_the_order_of_the_layer(sample, tables):
    ids = [row["outlet_id"] for row in tables["outlets"]]
    assert ids == [f"TC-00{k}" for k in range(1, 9)]
    for name in [name for name in TABLES if name not in ("capacity", "scenarios")]:  # ranked, and one after another
        order = {outlet_id: i for i, outlet_id in enumerate(ids)}
        assert [order[row["outlet_id"]] for row in tables[name]] == sorted(
            order[row["outlet_id"]] for row in tables[name]
        )
    package = json.loads((sample / "tables.json").read_text(encoding="utf-8"))
    assert {r["schema"]["fields"][0]["type"] for r in package["resources"]} == {"string"}


COLUMNS = {
    "segments": """outlet_id segment regime cover from_ft to_ft top_elevation_ft bottom_elevation_ft slope roughness
        area_mi2 bankfull_width_ft bankfull_depth_ft hydraulic_radius_ft hydraulic_radius_half_ft velocity_fps
        velocity_half_fps travel_time_h travel_time_half_h basis edited note""",
    "cover_shares": "outlet_id cover soil_group area_mi2 curve_number impervious_pct source",
    "timing": "outlet_id method tc_h adopted applicable reason source",
    "unit_hydrographs": "outlet_id time_h flow_cfs_per_in",
    "hydrographs": "outlet_id return_period_yr time_h rain_in excess_in flow_cfs",
    "flags": "outlet_id flag severity message",
    "outlets": """outlet_id name status flags x y longitude latitude snap_ft downstream_outlet_id area_mi2
        centroid_length_ft path_length_ft path_length_raw_ft sheet_length_ft shallow_length_ft channel_length_ft
        relief_ft basin_slope_pct path_slope_pct path_slope_1085_pct curve_number curve_number_used impervious_pct
        open_water_pct tc_h tc_bankfull_h tc_half_bankfull_h lag_h unit_duration_h time_to_peak_h unit_peak_cfs_per_in
        depth_2yr_in runoff_2yr_in peak_2yr_cfs peak_time_2yr_h depth_10yr_in runoff_10yr_in peak_10yr_cfs
        peak_time_10yr_h depth_25yr_in runoff_25yr_in peak_25yr_cfs peak_time_25yr_h depth_100yr_in runoff_100yr_in
        peak_100yr_cfs peak_time_100yr_h capacity_cfs capacity_basis exceeded_at_yr""",
}


@pytest.mark.parametrize("name", COLUMNS)
def test_columns(tables, name):
    """Those that other programs rely on, in order; others may stand among them."""
    relied_on = COLUMNS[name].split()
    assert [column for column in tables[name][0] if column in relied_on] == relied_on


# Segments


def test_segments_are_contiguous_and_sum_to_the_path_exactly(tables):
    for outlet in tables["outlets"]:
        segments = of(tables["segments"], outlet)
        assert [row["segment"] for row in segments] == [str(k + 1) for k in range(len(segments))]
        assert float(segments[0]["from_ft"]) == 0.0
        assert segments[-1]["to_ft"] == outlet["path_length_ft"]
        assert all(a["to_ft"] == b["from_ft"] for a, b in itertools.pairwise(segments))
        lengths = [float(row["to_ft"]) - float(row["from_ft"]) for row in segments]
        assert min(lengths) > 0
        assert sum(lengths) == float(outlet["path_length_ft"]), "plain float sums"
        assert sum(map(Fraction, lengths)) == Fraction(float(outlet["path_length_ft"])), "and in exact arithmetic"
        assert sum(float(outlet[f"{part}_length_ft"]) for part in ("sheet", "shallow", "channel")) == sum(lengths)
        assert outlet["path_length_raw_ft"] == outlet["path_length_ft"]


def test_profiles_fall_and_areas_grow(tables):
    for outlet in tables["outlets"]:
        segments = of(tables["segments"], outlet)
        tops, bottoms = numbers(segments, "top_elevation_ft"), numbers(segments, "bottom_elevation_ft")
        np.testing.assert_array_equal(tops[1:], bottoms[:-1])
        assert (tops >= bottoms).all()
        areas = numbers(segments, "area_mi2")
        assert (np.diff(areas) >= 0).all()
        assert areas[-1] <= float(outlet["area_mi2"])
        fall = 100 * (tops[0] - bottoms[-1]) / float(outlet["path_length_ft"])
        assert fall == pytest.approx(float(outlet["path_slope_pct"]), rel=1e-9)
        assert tops[0] - bottoms[-1] <= float(outlet["relief_ft"]) + 1e-6


def test_regimes_follow_one_another(tables):
    for outlet in tables["outlets"]:
        regimes = [row["regime"] for row in of(tables["segments"], outlet)]
        assert regimes[0] == "sheet"
        assert regimes.count("sheet") == 1
        order = {"sheet": 0, "shallow": 1, "channel": 2, "open_water": 2}
        ranks = [order[regime] for regime in regimes]
        assert ranks == sorted(ranks)
        assert float(of(tables["segments"], outlet)[0]["to_ft"]) <= 100.0
    assert {row["outlet_id"] for row in tables["segments"] if row["regime"] == "open_water"} == {"TC-005"}


def test_travel_times_are_length_over_velocity_and_sum_to_tc(tables):
    rows = tables["segments"]
    length = numbers(rows, "to_ft") - numbers(rows, "from_ft")
    for suffix in ("", "_half"):
        by_hand = length / numbers(rows, f"velocity{suffix}_fps") / 3600
        np.testing.assert_allclose(numbers(rows, f"travel_time{suffix}_h"), by_hand, rtol=1e-9)
    for outlet in tables["outlets"]:
        segments = of(tables["segments"], outlet)
        for column, times in (("tc_bankfull_h", "travel_time_h"), ("tc_half_bankfull_h", "travel_time_half_h")):
            assert float(outlet[column]) == pytest.approx(numbers(segments, times).sum(), rel=1e-12)
        assert outlet["tc_h"] == outlet["tc_bankfull_h"]
        assert float(outlet["tc_half_bankfull_h"]) > float(outlet["tc_bankfull_h"])
        assert float(outlet["lag_h"]) == pytest.approx(0.6 * float(outlet["tc_h"]), rel=1e-12)


def test_one_method_is_adopted(tables):
    for outlet in tables["outlets"]:
        adopted = [row for row in of(tables["timing"], outlet) if row["adopted"] == "true"]
        assert [row["method"] for row in adopted] == ["velocity"]
        assert float(adopted[0]["tc_h"]) == pytest.approx(float(outlet["tc_h"]), rel=1e-12)
        for row in of(tables["timing"], outlet):
            assert (row["reason"] == "") == (row["applicable"] == "true"), row
            assert row["source"]


# Runoff and hydrographs


def test_worksheet_covers_the_basin_and_gives_its_curve_number(tables):
    for outlet in tables["outlets"]:
        shares = of(tables["cover_shares"], outlet)
        area, curve_number = numbers(shares, "area_mi2"), numbers(shares, "curve_number")
        assert area.sum() == pytest.approx(float(outlet["area_mi2"]), rel=1e-9)
        assert np.average(curve_number, weights=area) == pytest.approx(float(outlet["curve_number"]), rel=1e-9)
        water = np.array([row["cover"] == "11" for row in shares])
        assert 100 * area[water].sum() / area.sum() == pytest.approx(float(outlet["open_water_pct"]), abs=1e-9)
        assert all(row["source"] for row in shares)


def test_runoff_by_the_published_equation(tables):
    """TR-55 (1986) eq. 2-3 and 2-4 for every patch, and the curve number used by the same equation backwards."""
    for outlet in tables["outlets"]:
        shares = of(tables["cover_shares"], outlet)
        weight = numbers(shares, "area_mi2") / numbers(shares, "area_mi2").sum()
        s = 1000 / numbers(shares, "curve_number") - 10
        for t in PERIODS:
            p = float(outlet[f"depth_{t}yr_in"])
            q = np.where(p > 0.2 * s, (p - 0.2 * s) ** 2 / (p + 0.8 * s), 0.0)
            assert float(outlet[f"runoff_{t}yr_in"]) == pytest.approx((weight * q).sum(), rel=1e-9)
        used = 1000 / float(outlet["curve_number_used"]) - 10
        assert (p - 0.2 * used) ** 2 / (p + 0.8 * used) == pytest.approx(float(outlet["runoff_100yr_in"]), rel=1e-6)
        assert float(outlet["curve_number_used"]) >= float(outlet["curve_number"]) - 1e-9, "runoff is convex in CN"


def test_unit_hydrographs_have_volume_one(tables):
    for outlet in tables["outlets"]:
        ordinates = of(tables["unit_hydrographs"], outlet)
        time, flow = numbers(ordinates, "time_h"), numbers(ordinates, "flow_cfs_per_in")
        assert np.ptp(np.diff(time)) < 1e-9
        assert (time[0], flow[0], flow[-1]) == (0, 0, 0)
        volume_m3 = flow.sum() * (time[1] - time[0]) * M3_PER_CFS_H
        one_inch_m3 = float(outlet["area_mi2"]) * KM2_PER_MI2 * 1e6 * 0.0254
        assert volume_m3 == pytest.approx(one_inch_m3, rel=1e-6)
        # NEH 630 ch. 16: D at most 0.133 Tc, Tp = D/2 + 0.6 Tc, qp = 484 A / Tp. The ordinates may pass the summit by,
        # and they were adjusted to the volume 1.
        step, tc = float(outlet["unit_duration_h"]), float(outlet["tc_h"])
        assert step == pytest.approx(time[1])
        assert step <= 0.133 * tc
        assert 24 / step == pytest.approx(round(24 / step), abs=1e-9)
        assert float(outlet["time_to_peak_h"]) == pytest.approx(step / 2 + 0.6 * tc, rel=1e-9)
        peak = 484 * float(outlet["area_mi2"]) / float(outlet["time_to_peak_h"])
        assert float(outlet["unit_peak_cfs_per_in"]) == pytest.approx(peak, rel=1e-3)
        assert flow.max() == pytest.approx(float(outlet["unit_peak_cfs_per_in"]), rel=0.015)


def test_hydrographs_keep_their_volume(tables):
    for outlet in tables["outlets"]:
        for t in PERIODS:
            rows = [row for row in of(tables["hydrographs"], outlet) if float(row["return_period_yr"]) == float(t)]
            time, flow = numbers(rows, "time_h"), numbers(rows, "flow_cfs")
            rain, excess = numbers(rows, "rain_in"), numbers(rows, "excess_in")
            runoff_in = float(outlet[f"runoff_{t}yr_in"])
            assert rain.sum() == pytest.approx(float(outlet[f"depth_{t}yr_in"]), rel=1e-9)
            assert excess.sum() == pytest.approx(runoff_in, rel=1e-9)
            assert (excess <= rain + 1e-12).all()
            volume = flow.sum() * (time[1] - time[0]) * M3_PER_CFS_H
            runoff_m3 = runoff_in * 0.0254 * float(outlet["area_mi2"]) * KM2_PER_MI2 * 1e6
            assert volume == pytest.approx(runoff_m3, rel=1e-4)
            assert flow.max() == float(outlet[f"peak_{t}yr_cfs"])
            assert time[flow.argmax()] == pytest.approx(float(outlet[f"peak_time_{t}yr_h"]))
            # A Type II storm bursts at 12 h; the peak follows by about the lag.
            assert 12 < time[flow.argmax()] < 12.5 + 1.5 * float(outlet["lag_h"]) + float(outlet["unit_duration_h"])


def test_hydrographs_are_the_convolution(tables):
    for outlet in tables["outlets"]:
        unit = numbers(of(tables["unit_hydrographs"], outlet), "flow_cfs_per_in")
        rows = [row for row in of(tables["hydrographs"], outlet) if row["return_period_yr"] == "100.0"]
        excess, flow = numbers(rows, "excess_in")[1:], numbers(rows, "flow_cfs")
        by_numpy = np.convolve(excess, unit)[: flow.size]  # the step that ends at row k acts from row k - 1 on
        np.testing.assert_allclose(flow, by_numpy, rtol=1e-9, atol=1e-9 * flow.max())


def test_capacity_verdicts(tables):
    for outlet in tables["outlets"]:
        if not outlet["capacity_cfs"]:
            assert outlet["exceeded_at_yr"] == ""
            continue
        over = [t for t in PERIODS if float(outlet[f"peak_{t}yr_cfs"]) > float(outlet["capacity_cfs"])]
        expected = "unknown" if "EDGE_TOUCH" in outlet["flags"].split() else over[0] if over else ""
        assert outlet["exceeded_at_yr"] == expected
        assert outlet["capacity_basis"]
    assert {row["outlet_id"] for row in tables["outlets"] if row["exceeded_at_yr"] == "unknown"} == {"TC-006"}


def test_flags_in_both_tables(tables):
    for outlet in tables["outlets"]:
        rows = of(tables["flags"], outlet)
        assert outlet["flags"].split() == [row["flag"] for row in rows]
        assert outlet["status"] == ("flagged" if rows else "ok")
        assert all(row["severity"] == FLAGS[row["flag"]].severity and row["message"] for row in rows)


def test_the_sample_shows_what_it_was_made_to_show(tables):
    """Its read-me says what each crossing teaches."""
    flags = {row["outlet_id"]: set(row["flags"].split()) for row in tables["outlets"]}
    assert {"DEEP_FILL", "BREACH_INSIDE"} <= flags["TC-003"]
    assert "STORAGE_FILLED" not in flags["TC-003"]
    assert {"SNAP_FAR", "AREAL_UNREDUCED"} <= flags["TC-004"]
    assert "LAKE_STORAGE" in flags["TC-005"]
    assert "EDGE_TOUCH" in flags["TC-006"]
    assert "SNAP_FAR" in flags["TC-008"]
    below = {row["outlet_id"]: row["downstream_outlet_id"] for row in tables["outlets"]}
    assert below == {
        "TC-001": "TC-002", "TC-002": "TC-004", "TC-003": "TC-004", "TC-004": "", "TC-005": "", "TC-006": "",
        "TC-007": "TC-004", "TC-008": "TC-004",
    }  # fmt: skip


# Layers


def test_layers_that_readme_lists(sample):
    names = dict(pyogrio.list_layers(sample / "basins.gpkg").tolist())
    assert names == {
        "outlets": "Point", "basins": "MultiPolygon", "subbasins": "MultiPolygon", "flow_paths": "LineString",
        "segments": "LineString", "streams": "LineString",
    }  # fmt: skip


def test_basins_are_valid_and_have_the_area_of_the_table(sample, tables):
    basins, subbasins = (layer(sample, name).set_index("outlet_id") for name in ("basins", "subbasins"))
    assert basins.geometry.is_valid.all()
    assert subbasins.geometry.is_valid.all()
    for outlet in tables["outlets"]:
        km2 = float(outlet["area_mi2"]) * KM2_PER_MI2
        assert basins.geometry[outlet["outlet_id"]].area / 1e6 == pytest.approx(km2, rel=1e-6)


def test_a_basin_is_the_union_of_its_subbasins(sample, tables):
    basins, subbasins = (layer(sample, name).set_index("outlet_id").geometry for name in ("basins", "subbasins"))
    below = {row["outlet_id"]: row["downstream_outlet_id"] for row in tables["outlets"]}

    def drains_through(outlet_id, to):
        while outlet_id and outlet_id != to:
            outlet_id = below[outlet_id]
        return outlet_id == to

    for outlet_id, basin in basins.items():
        parts = [subbasins[i] for i in below if drains_through(i, outlet_id)]
        assert sum(part.area for part in parts) == pytest.approx(basin.area, rel=1e-9), "they do not overlap"
        assert shapely.union_all(parts).symmetric_difference(basin).area < 1e-6 * basin.area


def test_lines_are_as_long_as_the_tables_say(sample, tables):
    paths = layer(sample, "flow_paths").set_index("outlet_id").geometry
    points = layer(sample, "outlets").set_index("outlet_id").geometry
    segments = layer(sample, "segments")
    assert len(segments) == len(tables["segments"])
    for outlet in tables["outlets"]:
        line = paths[outlet["outlet_id"]]
        assert line.length / 0.3048 == pytest.approx(float(outlet["path_length_ft"]), rel=1e-7)
        assert shapely.Point(line.coords[-1]).equals(points[outlet["outlet_id"]])
        pieces = segments[segments["outlet_id"] == outlet["outlet_id"]]
        lengths = (pieces["to_ft"] - pieces["from_ft"]).to_numpy()
        np.testing.assert_allclose(pieces.geometry.length / 0.3048, lengths, rtol=1e-6, atol=1e-4)
        basin = layer(sample, "basins").set_index("outlet_id").geometry[outlet["outlet_id"]]
        assert basin.covers(line)


def test_layers_carry_the_tables(sample, tables):
    columns = layer(sample, "outlets")
    for outlet, (_, feature) in zip(tables["outlets"], columns.iterrows(), strict=True):
        for column in OUTLETS.fields("us", PERIODS, ["capacity", "capacity_basis", "exceeded_at_yr"]):
            text, cell = outlet[column.name], feature[column.name]
            if column.column.type == "number":
                assert (text == "" and math.isnan(cell)) or float(text) == cell
            else:
                assert (cell or "") == text


def test_streams_have_the_stream_area(sample):
    streams = layer(sample, "streams")
    assert len(streams) > 100
    assert streams["area_mi2"].min() >= 0.1 / KM2_PER_MI2 - 1e-9
    np.testing.assert_allclose(streams.geometry.length / 0.3048, streams["length_ft"], rtol=1e-6)
    assert list(streams.columns) == [*(entry.name for entry in STREAMS.fields("us")), "geometry"]
    assert streams["reach"].tolist() == list(range(1, len(streams) + 1))
    below = streams.set_index("reach").loc[streams["to_reach"][streams["to_reach"] > 0]]
    above = streams[streams["to_reach"] > 0]
    ends = shapely.get_point(above.geometry.to_numpy(), -1)
    assert (ends == shapely.get_point(below.geometry.to_numpy(), 0)).all()
    assert (below["strahler_order"].to_numpy() >= above["strahler_order"].to_numpy()).all()
    assert (below["area_mi2"].to_numpy() > above["area_mi2"].to_numpy()).all()


# Rasters

RASTERS = {
    "conditioned": ("float32", "m"),
    "conditioning_change": ("float32", "m"),
    "flow_direction": ("uint16", "degree"),
    "contributing_area": ("float64", "m2"),
}


@pytest.mark.parametrize("name", RASTERS)
def test_rasters_are_cloud_optimised_and_say_their_unit(sample, name):
    dtype, unit = RASTERS[name]
    with rasterio.open(sample / "terrain" / f"{name}.tif") as source:
        assert source.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
        assert source.overviews(1)
        assert source.dtypes == (dtype,)
        assert source.units == (unit,)
        assert source.tags()["unit"] == unit
        assert source.tags()["meaning"]
        assert source.nodata is not None


def test_rasters_agree_with_one_another_and_with_the_table(sample, tables):
    with rasterio.open(sample / "terrain" / "flow_direction.tif") as source:
        direction, transform = source.read(1).astype(int), source.transform
    with rasterio.open(sample / "terrain" / "contributing_area.tif") as source:
        area = source.read(1)
    with rasterio.open(sample / "terrain" / "conditioned.tif") as source:
        conditioned, void = source.read(1), source.nodata
    with rasterio.open(sample / "terrain" / "conditioning_change.tif") as source:
        change = source.read(1)
    with rasterio.open(sample.parent / "dem.tif") as source:
        raw = source.read(1, masked=True)

    assert set(np.unique(direction)) <= {*range(0, 360, 45), 65534, 65535}
    missing = np.ma.getmaskarray(raw)
    np.testing.assert_array_equal(direction == 65535, missing)
    np.testing.assert_array_equal(conditioned == void, missing)
    np.testing.assert_array_equal(change == void, missing)
    np.testing.assert_array_equal(area < 0, missing)
    np.testing.assert_array_equal(change[~missing], (conditioned - raw.data)[~missing])
    assert change[~missing].min() >= -5.0  # breach_depth
    about = json.loads((sample / "run.json").read_text(encoding="utf-8"))["terrain"]
    assert about["cut_cells"] == (change[~missing] < 0).sum() > 100
    assert about["filled_cells"] == (change[~missing] > 0).sum()
    assert about["deepest_cut_m"] == -change[~missing].min()

    # Water never flows up; what leaves over all exits is the whole area; each cell passes its area on.
    row, col = np.nonzero(direction < 360)
    eighth = direction[row, col] // 45
    to = row + np.array([-1, -1, 0, 1, 1, 1, 0, -1])[eighth], col + np.array([0, 1, 1, 1, 0, -1, -1, -1])[eighth]
    assert (conditioned[to] <= conditioned[row, col]).all()
    assert area[direction == 65534].sum() == pytest.approx(100.0 * (~missing).sum(), rel=1e-12)
    passed_on = np.full(direction.shape, 100.0)
    np.add.at(passed_on, to, area[row, col])
    np.testing.assert_allclose(area[~missing], passed_on[~missing], rtol=1e-12)

    for outlet in tables["outlets"]:
        r, c = rasterio.transform.rowcol(transform, float(outlet["x"]), float(outlet["y"]))
        assert area[r, c] / 1e6 == pytest.approx(float(outlet["area_mi2"]) * KM2_PER_MI2, rel=1e-12)


def test_the_band_can_be_read_by_window(sample):
    """A reader over the network takes one block, not the file."""
    with rasterio.open(sample / "terrain" / "contributing_area.tif") as source:
        assert source.block_shapes == [(512, 512)]
        assert source.read(1, window=Window(100, 100, 10, 10)).shape == (10, 10)


# Manifest


def test_manifest_lists_every_input(sample, about):
    project = sample.parent
    names = {"dem.tif", "outlets.gpkg", "landcover.tif", "soils.gpkg", "regional.csv", "landcover_proposed.tif"}
    assert {entry["path"].rsplit("/")[-1] for entry in about["inputs"]} == names
    for entry in [*about["inputs"], about["project_file"]]:
        content = (project / entry["path"].rsplit("/")[-1]).read_bytes()
        assert (entry["bytes"], entry["sha256"]) == (len(content), hashlib.sha256(content).hexdigest())
    assert {entry["path"] for entry in about["alignment"]} == names - {"regional.csv", "landcover_proposed.tif"}
    assert all(entry["crs"] and entry["method"] for entry in about["alignment"])


def test_manifest_says_what_ran(about):
    assert about["basinwright"]
    assert {"numpy", "numba", "rasterio", "pyproj", "shapely"} <= set(about["libraries"])
    assert about["grid"]["crs"] == "EPSG:32614"
    assert (about["grid"]["rows"], about["grid"]["columns"]) == (900, 740)
    for stage in about["stages"]:
        assert stage["key"], stage
        assert stage["seconds"] >= 0
        assert stage["peak_memory_mb"] > 0
        assert stage["runs"] == 1
    assert about["exit_status"] == 0


def test_manifest_counts(about, tables):
    counts = about["counts"]
    assert counts["outlets"] == 8 == counts["ok"] + counts["flagged"] + counts["failed"]
    assert counts["flags"] == Counter(row["flag"] for row in tables["flags"])


def test_manifest_holds_a_project_that_runs_again(about):
    """The resolved project is itself a project, with every default written out and units on every quantity."""
    from basinwright.project import parse_project

    assert about["project"]["flow_path"]["sheet_limit"] == "30.48 m"
    assert parse_project(about["project"]).resolved() == about["project"]


def test_outcome(sample_run):
    assert sample_run.failed == 0
    assert len(sample_run.flags) == len(read_table(sample_run.folder, "flags"))
