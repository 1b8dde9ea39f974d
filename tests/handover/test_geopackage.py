"""basins.gpkg by the standard (OGC 12-128r18) and by OGR: CRS, types, spatial indexes, valid polygons."""

import math
import sqlite3
from contextlib import closing

import pyogrio
import pytest
import rasterio

from basinwright.tables import OUTLETS, SEGMENTS

pytestmark = pytest.mark.xdist_group("sample")

KINDS = {
    "outlets": "Point", "basins": "MultiPolygon", "subbasins": "MultiPolygon", "flow_paths": "LineString",
    "segments": "LineString", "streams": "LineString",
}  # fmt: skip
OGR_TYPES = {"text": "object", "number": "float64", "integer": "int64", "boolean": "bool"}


@pytest.fixture(scope="module")
def database(sample):
    with closing(sqlite3.connect(f"file:{sample / 'basins.gpkg'}?mode=ro", uri=True)) as connection:
        yield connection


def rows(database, query):
    return database.execute(query).fetchall()


def test_the_container_is_a_geopackage(database):
    assert rows(database, "PRAGMA application_id") == [(0x47504B47,)]  # "GPKG", requirement 2
    assert 10200 <= rows(database, "PRAGMA user_version")[0][0] < 20000
    assert rows(database, "PRAGMA integrity_check") == [("ok",)]  # requirement 6
    assert rows(database, "PRAGMA foreign_key_check") == []  # requirement 7


@pytest.mark.parametrize("layer", KINDS)
def test_layers_declare_what_they_hold(database, sample, layer):
    with rasterio.open(sample / "terrain" / "conditioned.tif") as terrain:
        code = terrain.crs.to_epsg()
    declared = rows(
        database,
        "SELECT g.geometry_type_name, s.organization, s.organization_coordsys_id, c.data_type, g.z, g.m "
        "FROM gpkg_geometry_columns g JOIN gpkg_contents c USING (table_name) "
        f"JOIN gpkg_spatial_ref_sys s ON s.srs_id = g.srs_id WHERE g.table_name = '{layer}'",
    )
    assert declared == [(KINDS[layer].upper(), "EPSG", code, "features", 0, 0)]
    assert rows(
        database,
        f"SELECT extension_name FROM gpkg_extensions WHERE table_name = '{layer}' AND column_name = 'geom'",
    ) == [("gpkg_rtree_index",)]
    count = rows(database, f'SELECT count(*) FROM "{layer}"')[0][0]
    assert rows(database, f'SELECT count(*) FROM "rtree_{layer}_geom"') == [(count,)]
    info = pyogrio.read_info(sample / "basins.gpkg", layer=layer, force_feature_count=True, force_total_bounds=True)
    assert (info["geometry_type"], info["features"]) == (KINDS[layer], count)
    assert info["crs"] == f"EPSG:{code}"
    assert info["capabilities"]["fast_spatial_filter"], "OGR uses the index"


@pytest.mark.parametrize("layer", KINDS)
def test_geometries_are_valid_and_lie_in_the_extent(sample, database, layer):
    frame = pyogrio.read_dataframe(sample / "basins.gpkg", layer=layer)
    assert len(frame)
    assert (frame.geom_type == KINDS[layer]).all()
    assert frame.geometry.is_valid.all()
    assert not frame.geometry.is_empty.any()
    assert not frame.has_z.any()
    extent = rows(database, f"SELECT min_x, min_y, max_x, max_y FROM gpkg_contents WHERE table_name = '{layer}'")[0]
    for edge, box in zip(frame.total_bounds, extent, strict=True):
        assert math.isclose(edge, box, abs_tol=1e-6)


@pytest.mark.parametrize(("layer", "table"), [("outlets", OUTLETS), ("segments", SEGMENTS)])
def test_columns_have_the_types_of_the_schema(sample, layer, table):
    info = pyogrio.read_info(sample / "basins.gpkg", layer=layer)
    found = dict(zip(info["fields"].tolist(), (str(kind) for kind in info["dtypes"]), strict=True))
    optional = [column.stem for column in table.columns if column.optional]
    expected = {
        field.name: OGR_TYPES[field.column.type] for field in table.fields("us", ("2", "10", "25", "100"), optional)
    }
    assert found == {name: expected[name] for name in found}
    assert len(found) > 15
