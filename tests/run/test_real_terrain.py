"""A whole run on real terrain: SRTM of the Jacksboro fault, Tennessee, in degrees, as matplotlib ships it."""

import json

import geopandas as gpd
import numpy as np
import pytest
import shapely
from matplotlib.cbook import get_sample_data
from projects import make_project, read_table
from pyproj import Geod

from basinwright import pipeline

pytestmark = [pytest.mark.slow, pytest.mark.xdist_group("pysheds")]

OUTLETS = {
    "river": (147, 203), "valley": (90, 59), "lower": (213, 95), "upper": (209, 100), "east": (231, 203),
    "south": (284, 175), "rim": (324, 86),
}  # fmt: skip


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    data = get_sample_data("jacksboro_fault_dem.npz")
    elevation, cell = data["elevation"], float(data["dx"])
    file = make_project(
        tmp_path_factory.mktemp("jacksboro"), elevation, OUTLETS, cell=cell,
        origin=(float(data["xmin"]), float(data["ymin"])),  # its first row is the northern one, at "ymin"
        crs="EPSG:4326", cover=np.where(elevation < 330, 81, 41),
        overrides={"terrain": {"stream_area": "0.5 km2"}, "audit": {"second_opinion": "all"}},
    )  # fmt: skip
    return pipeline.run(file).folder


@pytest.fixture(scope="module")
def outlets(run):
    return {row["outlet_id"]: row for row in read_table(run, "outlets")}


def test_every_outlet_is_computed(outlets):
    assert {row["status"] for row in outlets.values()} == {"flagged"}
    touching = {name for name, row in outlets.items() if "EDGE_TOUCH" in row["flags"].split()}
    assert touching == {"rim"}
    assert outlets["upper"]["downstream_outlet_id"] == "lower"


def test_pysheds_finds_the_same_basins(run, outlets):
    """pysheds 0.5, asked by the run: the same areas on our directions, within 1 % by its own filling and flats."""
    path = next((run / ".store").glob("audit-*/opinions.json"))
    opinions = json.loads(path.read_text())
    assert len(opinions) == len(OUTLETS)
    for opinion, row in zip(opinions, outlets.values(), strict=True):
        area_km2 = float(row["area_km2"])
        assert opinion["same_directions_km2"] == pytest.approx(area_km2, rel=1e-9)
        assert opinion["own_conditioning_km2"] == pytest.approx(area_km2, rel=0.01)
        assert sum(opinion["causes_km2"].values()) == pytest.approx(opinion["differs_km2"])
        assert opinion["differs_km2"] >= abs(opinion["own_conditioning_km2"] - area_km2) - 1e-9
        assert opinion["causes_km2"].keys() <= {"edge", "cut", "flat", "tie"}, "whole metres: no rounding between them"
    assert not any("AUDIT_DIFFERS" in row["flags"] for row in outlets.values())


def test_areas_and_lengths_on_the_ellipsoid(run, outlets):
    """PROJ's geodesics measure the polygons and lines in degrees."""
    geod = Geod(ellps="WGS84")
    basins = gpd.read_file(run / "basins.gpkg", layer="basins").set_index("outlet_id").geometry
    paths = gpd.read_file(run / "basins.gpkg", layer="flow_paths").set_index("outlet_id").geometry
    assert basins.crs.to_epsg() == 4326
    for name, row in outlets.items():
        outline = shapely.segmentize(basins[name], 0.0005)  # a long edge on a parallel is no geodesic
        area_m2 = abs(geod.geometry_area_perimeter(outline)[0])
        assert area_m2 / 1e6 == pytest.approx(float(row["area_km2"]), rel=1e-6)
        assert geod.geometry_length(paths[name]) == pytest.approx(float(row["path_length_m"]), rel=1e-5)
        assert (row["longitude"], row["latitude"]) == (row["x"], row["y"])


def test_figures_are_those_of_mountain_basins(outlets):
    """Common experience, wide bands: a factor of two about Hack's L = 1.4 A^0.6 (mi, mi2; Hack 1957, from memory)."""
    for name, row in outlets.items():
        area_mi2, length_mi = float(row["area_km2"]) / 2.589988, float(row["path_length_m"]) / 1609.344
        assert 0.5 < length_mi / (1.4 * area_mi2**0.6) < 2.0, name
        assert 15 < float(row["basin_slope_pct"]) < 45
        assert 0.3 < float(row["path_length_m"]) / 3600 / float(row["tc_h"]) < 3.0, "mean velocity in m/s"
        assert 1 < float(row["peak_100yr_m3s"]) / float(row["area_km2"]) < 30
