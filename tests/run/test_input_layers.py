"""The same ground given in other ways: other CRS, raster or polygons, tiles. The tables are the same."""

import hashlib
import json
import shutil
from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
from projects import make_project, numbers, read_table, transform_of, v_valley, write_raster
from pyproj import Transformer
from shapely.geometry import box

from basinwright import pipeline

ROWS, COLS = 60, 40
ORIGIN = (500_000.0 - COLS / 2 * 10.0, 4_300_000.0)
"""The valley's middle lies on the central meridian of zone 14, 99 degrees west."""
WEST, EAST = 41, 82  # NLCD: deciduous forest, cultivated crops
TABLES = ("outlets", "segments", "cover_shares", "timing", "unit_hydrographs", "hydrographs", "flags")


def valley():
    row, col = np.mgrid[:ROWS, :COLS]
    return 100.0 + 3.0 * np.abs(col - 19.6) + 0.2 * (ROWS - 1 - row)  # never level across


def halves():
    return np.repeat(np.uint8([[WEST, EAST]]), COLS // 2, axis=1).repeat(ROWS, axis=0)


def project(folder, **overrides):
    """Forest in the west, crops in the east; soils B in the north, C in the south."""
    overrides.setdefault("soils", {"group": None, "raster": "soils.tif", "groups": {"2": "B", "3": "C"}})
    file = make_project(folder, valley(), {"A": (58, 20)}, origin=ORIGIN, cover=halves(), overrides=overrides)
    soils = np.repeat(np.uint8([[2], [3]]), ROWS // 2, axis=0).repeat(COLS, axis=1)
    write_raster(folder / "soils.tif", soils, transform_of(10.0, ORIGIN), "EPSG:32614", nodata=0)
    return file


def tables(file):
    folder = pipeline.run(file).folder
    return {name: (folder / f"{name}.csv").read_bytes() for name in TABLES}


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    file = project(tmp_path_factory.mktemp("plain"))
    return file.parent / "out", tables(file)


def test_worksheet_by_hand(plain):
    """TR-55 (1986) tables 2-2b and 2-2c: woods (fair) B 60, C 73; row crops (straight row, good) B 78, C 85."""
    folder, _ = plain
    shares = {(row["cover"], row["soil_group"]): row for row in read_table(folder, "cover_shares")}
    assert {key: float(row["curve_number"]) for key, row in shares.items()} == {
        ("41", "B"): 60, ("41", "C"): 73, ("82", "B"): 78, ("82", "C"): 85,
    }  # fmt: skip
    areas = {key: float(row["area_km2"]) for key, row in shares.items()}
    assert areas == pytest.approx({("41", "B"): 0.06, ("41", "C"): 0.058, ("82", "B"): 0.06, ("82", "C"): 0.058})
    outlet = read_table(folder, "outlets")[0]
    by_hand = (60 * 0.06 + 73 * 0.058 + 78 * 0.06 + 85 * 0.058) / 0.236
    assert float(outlet["curve_number"]) == pytest.approx(by_hand, rel=1e-9)


def test_runoff_is_the_mean_of_the_patches(plain):
    """TR-55 (1986) eq. 2-3 and 2-4, in inches, patch by patch."""
    folder, _ = plain
    shares, outlet = read_table(folder, "cover_shares"), read_table(folder, "outlets")[0]
    weight = numbers(shares, "area_km2") / numbers(shares, "area_km2").sum()
    for period, depth in (("2", 3.1), ("10", 4.6), ("100", 7.2)):
        s = 1000 / numbers(shares, "curve_number") - 10
        q = np.where(depth > 0.2 * s, (depth - 0.2 * s) ** 2 / (depth + 0.8 * s), 0.0)
        assert float(outlet[f"runoff_{period}yr_mm"]) == pytest.approx(25.4 * (weight * q).sum(), rel=1e-9)


def test_tiles_of_a_mosaic_are_one_raster(tmp_path, plain):
    file = project(tmp_path, terrain={"dem": ["tiles/*.tif"]})
    z = valley()
    (tmp_path / "tiles").mkdir()
    for top, bottom in ((0, 25), (20, ROWS)):  # they overlap
        for left, right in ((0, 18), (18, COLS)):
            corner = (ORIGIN[0] + 10.0 * left, ORIGIN[1] - 10.0 * top)
            write_raster(
                tmp_path / "tiles" / f"{top}_{left}.tif", z[top:bottom, left:right], transform_of(10.0, corner),
                "EPSG:32614",
            )  # fmt: skip
    assert tables(file) == plain[1]


def test_cover_raster_of_another_crs_and_resolution(tmp_path, plain):
    file = project(tmp_path)
    cell = 0.004  # degrees: some 350 m, its edge on the meridian
    classes = np.uint8([[WEST, EAST]]).repeat(2, axis=0)
    write_raster(tmp_path / "cover.tif", classes, transform_of(cell, (-99.0 - cell, 38.85)), "EPSG:4326", nodata=0)
    assert tables(file) == plain[1]


def test_cover_and_soils_as_polygons_of_another_crs(tmp_path, plain):
    file = project(
        tmp_path,
        cover={"raster": None, "vector": "cover.gpkg", "field": "class"},
        soils={"group": None, "vector": "soils.gpkg", "field": "hsg"},
    )
    cover = gpd.GeoDataFrame(
        {"class": [WEST, EAST]}, geometry=[box(-99.1, 38.7, -99.0, 39.0), box(-99.0, 38.7, -98.9, 39.0)],
        crs="EPSG:4326",
    )  # fmt: skip
    cover.to_file(tmp_path / "cover.gpkg")
    # The parallel through the middle of the valley departs from the row's edge by 3 mm at its ends.
    _, middle = Transformer.from_crs("EPSG:32614", "EPSG:4326", always_xy=True).transform(
        500_000.0, ORIGIN[1] - 10.0 * ROWS / 2
    )
    soils = gpd.GeoDataFrame(
        {"hsg": ["B", "C"]}, geometry=[box(-99.1, middle, -98.9, 39.0), box(-99.1, 38.7, -98.9, middle)],
        crs="EPSG:4326",
    )  # fmt: skip
    soils.to_file(tmp_path / "soils.gpkg")
    assert tables(file) == plain[1]


def test_dual_groups(tmp_path):
    """NEH 630 ch. 7: of B/D, D counts where it is undrained, B where it is drained."""
    groups = {}
    for dual in ("undrained", "drained"):
        soils = {"group": None, "raster": "soils.tif", "groups": {"2": "B/D", "3": "C"}, "dual_groups": dual}
        folder = pipeline.run(project(tmp_path / dual, soils=soils), summary_only=True).folder
        groups[dual] = {row["soil_group"] for row in read_table(folder, "cover_shares")}
    assert groups == {"undrained": {"D", "C"}, "drained": {"B", "C"}}


def test_outlets_of_another_crs(tmp_path, plain):
    """A layer in degrees gives the same cells, hence the same tables."""
    folder, _ = plain
    row = read_table(folder, "outlets")[0]
    file = project(tmp_path, outlets={"source": "points.gpkg", "crs": None})
    points = gpd.GeoDataFrame(
        {"id": ["A"]}, geometry=gpd.points_from_xy([float(row["longitude"])], [float(row["latitude"])]),
        crs="EPSG:4326",
    )  # fmt: skip
    points.to_file(tmp_path / "points.gpkg")
    assert tables(file) == plain[1]


def test_a_plane_in_web_mercator_is_brought_to_true_sizes(tmp_path):
    """EPSG:3857 stretches lengths by 1 / cos(latitude): at 45 degrees areas are twice too large."""
    cell = 20.0
    z = v_valley(60, 41, 0.1, 0.02, cell) - 900.0
    origin = (-11_000_000.0, 5_621_521.0)  # 45 degrees north
    file = make_project(tmp_path, z, {"A": (58, 20)}, cell=cell, origin=origin, crs="EPSG:3857")
    file.write_text(file.read_text().replace('snap_within = "0.01 m"', 'snap_within = "40 m"'))
    folder = pipeline.run(file, summary_only=True).folder
    outlet = read_table(folder, "outlets")[0]
    true_km2 = 59 * 41 * cell**2 / 2 / 1e6
    assert float(outlet["area_km2"]) == pytest.approx(true_km2, rel=0.03)


def soils_layer(path, groups=("B", "C")):
    west, east = ORIGIN[0] - 100.0, ORIGIN[0] + COLS * 10.0 + 100.0
    middle, south, north = ORIGIN[1] - 10.0 * ROWS / 2, ORIGIN[1] - 10.0 * ROWS - 100.0, ORIGIN[1] + 100.0
    shapes = [box(west, middle, east, north), box(west, south, east, middle)]
    gpd.GeoDataFrame({"hsg": list(groups)}, geometry=shapes, crs="EPSG:32614").to_file(path)


@pytest.mark.parametrize("name", ["soils.shp", "soils.gdb"])
def test_layers_of_several_files(tmp_path, plain, name):
    """All files of a layer are hashed: with --resume a change of the attributes alone is seen."""
    file = project(tmp_path, soils={"group": None, "vector": name, "field": "hsg"})
    soils_layer(tmp_path / name)
    assert tables(file) == plain[1]
    about = json.loads((tmp_path / "out" / "run.json").read_text())
    listed = next(entry for entry in about["inputs"] if entry["path"].endswith(name))
    parts = {Path(part["path"]) for part in listed["parts"]} | {Path(listed["path"])}
    on_disk = (
        set((tmp_path / name).iterdir())
        if name.endswith("gdb")
        else set(tmp_path.glob("soils.*")) - {tmp_path / "soils.tif"}
    )
    assert parts - {tmp_path / name} == on_disk - {tmp_path / name}
    for part in listed["parts"]:
        assert part["sha256"] == hashlib.sha256(Path(part["path"]).read_bytes()).hexdigest()

    if name.endswith("gdb"):
        shutil.rmtree(tmp_path / name)
    soils_layer(tmp_path / name, ("B", "D"))
    folder = pipeline.run(file, resume=True).folder
    assert {row["soil_group"] for row in read_table(folder, "cover_shares")} == {"B", "D"}


def test_resume_sees_a_new_capacity_basis(tmp_path):
    file = make_project(
        tmp_path, valley(), {"A": (58, 20)}, columns={"cap_m3s": {"A": 2.0}, "basis": {"A": "top of road"}},
        overrides={"outlets": {"capacity": "cap_m3s", "capacity_basis": "basis"}},
    )  # fmt: skip
    pipeline.run(file, summary_only=True)
    points = tmp_path / "outlets.csv"
    points.write_text(points.read_text().replace("top of road", "HW/D = 1.2"))
    folder = pipeline.run(file, resume=True, summary_only=True).folder
    assert read_table(folder, "outlets")[0]["capacity_basis"] == "HW/D = 1.2"


def test_manifest_says_how_every_input_was_aligned(tmp_path, plain):
    folder, _ = plain
    about = json.loads((folder / "run.json").read_text())
    methods = {entry["path"]: entry["method"] for entry in about["alignment"]}
    assert methods == {
        "dem.tif": "native", "cover.tif": "native", "soils.tif": "native", "outlets.csv": "points, to EPSG:32614",
    }  # fmt: skip
