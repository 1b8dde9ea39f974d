"""Points from layers and CSV files, polygons onto a grid, GeoPackages of equal bytes."""

from dataclasses import replace
from pathlib import Path

import fiona
import geopandas as gpd
import numpy as np
import pyogrio
import pytest
from pyproj import Transformer
from rasterio.crs import CRS
from shapely.geometry import LineString, MultiPoint, Point, Polygon, box

from basinwright.errors import InputRejected
from basinwright.grid import Grid
from basinwright.io.vectors import as_text, check_polygons, rasterize_polygons, read_points, write_layers


@pytest.fixture
def grid(lattice):
    return Grid(30, 40, lattice, CRS.from_epsg(32614).to_wkt())


@pytest.fixture
def write_frame(tmp_path):
    def write(name, columns, geometry, crs="EPSG:32614", layer="points", append=False):
        path = tmp_path / name
        frame = gpd.GeoDataFrame(columns, geometry=list(geometry), crs=crs)
        pyogrio.write_dataframe(frame, path, layer=layer, append=append)
        return path

    return write


def lines(call, *args, **options):
    with pytest.raises(InputRejected) as caught:
        call(*args, **options)
    return [str(replace(problem, file=Path(problem.file).name)) for problem in caught.value.problems]


class TestPoints:
    @pytest.mark.parametrize("name", ["p.gpkg", "p.shp", "p.geojson", "p.fgb"])
    def test_any_layer(self, write_frame, name):
        path = write_frame(
            name, {"code": ["007", "NA"], "road": ["Mill", None], "area_mi2": [1.5, None], "n": [3, 4]},
            [Point(-98.0, 40.0), Point(-97.5, 40.5)], crs="EPSG:4326", layer="p",
        )  # fmt: skip
        table = read_points(path, id_field="code", name_field="road", other_fields=["area_mi2"])
        # A spatial index reorders the rows of a FlatGeobuf file.
        rows = np.argsort(table.x)
        assert [table.ids[row] for row in rows] == ["007", "NA"]
        assert [table.names[row] for row in rows] == ["Mill", ""]
        assert [table.texts("n")[row] for row in rows] == ["3", "4"]
        values, problems = table.numbers("area_mi2")
        assert problems == []
        np.testing.assert_array_equal(values[rows], [1.5, np.nan])
        np.testing.assert_array_equal(table.x[rows], [-98.0, -97.5])
        np.testing.assert_array_equal(table.y[rows], [40.0, 40.5])

    def test_csv_keeps_every_text(self, tmp_path):
        path = tmp_path / "o.csv"
        path.write_text('id,x,y,road,depth_in\n007,-98,40,"Mill, south",\nNA,-97.5,40.5,,3.1\n1e3,-97,41,é,x\n')
        table = read_points(path, crs="EPSG:4326", id_field="id", name_field="road")
        assert table.ids == ("007", "NA", "1e3")
        assert table.names == ("Mill, south", "", "é")
        values, problems = table.numbers("depth_in")
        np.testing.assert_array_equal(values, [np.nan, 3.1, np.nan])
        assert str(problems[0]).endswith("o.csv: depth_in: not a finite number in row 3: write a number or nothing")

    def test_a_csv_may_carry_a_byte_order_mark_and_capitals(self, tmp_path):
        path = tmp_path / "o.csv"
        path.write_bytes(b"\xef\xbb\xbfX,Y\r\n1,2\r\n\r\n")
        table = read_points(path, crs="EPSG:32614")
        assert (table.ids, table.x[0], table.y[0]) == (("1",), 1.0, 2.0)

    def test_row_numbers_where_no_id_is_named(self, write_frame):
        table = read_points(write_frame("p.gpkg", {"a": [9, 8]}, [Point(0, 0), Point(1, 1)]))
        assert table.ids == ("1", "2")
        assert table.names == ("", "")
        assert len(table) == 2

    def test_reprojected_on_request(self, write_frame):
        table = read_points(write_frame("p.gpkg", {"a": [1]}, [Point(-99.0, 40.0)], crs="EPSG:4326"))
        moved = table.in_crs(CRS.from_epsg(32614).to_wkt())
        # Zone 14's central meridian is 99 W: easting 500 000 m exactly; the northing is 0.9996 of the meridian's arc.
        assert moved.x[0] == pytest.approx(500_000.0, abs=1e-6)
        assert moved.y[0] == pytest.approx(0.9996 * 4_429_529.03, abs=0.02)
        assert moved.ids == table.ids

    def test_a_multipoint_of_one_is_a_point(self, write_frame):
        table = read_points(write_frame("p.gpkg", {"a": [1]}, [MultiPoint([(3, 4)])]))
        assert (table.x[0], table.y[0]) == (3.0, 4.0)

    def test_a_layer_is_chosen_by_name(self, write_frame):
        write_frame("p.gpkg", {"a": [1]}, [Point(1, 1)], layer="one")
        path = write_frame("p.gpkg", {"a": [1]}, [Point(2, 2)], layer="two", append=True)
        assert read_points(path, layer="two").x[0] == 2.0
        assert lines(read_points, path) == ["p.gpkg: layer: has several: one, two: name one of them"]
        assert lines(read_points, path, layer="onne") == [
            "p.gpkg: layer: has no layer 'onne': did you mean 'one'?"
        ]  # fmt: skip

    def test_a_layer_without_crs_takes_the_given_one(self, write_frame):
        path = write_frame("p.shp", {"a": [1]}, [Point(1, 2)], crs=None, layer="p")
        assert lines(read_points, path) == ['p.shp: crs: is not declared: give it, such as crs = "EPSG:4326"']
        assert read_points(path, crs="EPSG:4326").x[0] == 1.0


class TestPointProblems:
    def test_all_of_a_csv_at_once(self, tmp_path):
        path = tmp_path / "o.csv"
        path.write_text("id,x,y\n1,2,3\n1,nan,3\n,4,inf\n2,,3\n2,a,3\n")
        assert lines(read_points, path, id_field="id", name_field="rode", other_fields=["idd"]) == [
            'o.csv: crs: is not declared: give it, such as crs = "EPSG:4326"',
            "o.csv: rows 2, 3: have coordinates that are not finite: give each row one point",
            "o.csv: rows 4, 5: have no number for x or y: give each row one point",
            "o.csv: column rode: does not exist: it has: id, x, y",
            "o.csv: column idd: does not exist: did you mean 'id'?",
            "o.csv: column id: is empty in row 3: give every row an id",
            "o.csv: column id: '1' stands in rows 1, 2: make ids unique",
            "o.csv: column id: '2' stands in rows 4, 5: make ids unique",
        ]

    def test_all_of_a_layer_at_once(self, write_frame):
        path = write_frame(
            "p.gpkg", {"id": ["a", "a", None]}, [Point(1, 1), None, LineString([(0, 0), (1, 1)])], layer="p"
        )
        assert lines(read_points, path, id_field="id", crs="EPSG:4326") == [
            "p.gpkg: crs: the layer declares EPSG:32614, the project says EPSG:4326: "
            "leave the project's out, or correct the layer",
            "p.gpkg: row 2: has no geometry: give each row one point",
            "p.gpkg: row 3: has a LineString, not a point: give each row one point",
            "p.gpkg: column id: is empty in row 3: give every row an id",
            "p.gpkg: column id: 'a' stands in rows 1, 2: make ids unique",
        ]

    @pytest.mark.parametrize(
        ("text", "expected"),
        [
            ("id,x,y\n", ["o.csv: layer: has no points: give at least one"]),
            ("", ["o.csv: column x: does not exist: name the coordinate columns x and y; it has: none",
                  "o.csv: column y: does not exist: name the coordinate columns x and y; it has: none"]),
            ("id,lon,y\n1,2,3\n",
             ["o.csv: column x: does not exist: name the coordinate columns x and y; it has: id, lon, y"]),
            ("x,y\n1,2\n1,2,3\n4\n",
             ["o.csv: rows: another number of cells than the header in rows 2, 3: quote cells that hold a comma"]),
            ("x,y,x\n1,2,3\n", ["o.csv: column x: appears 2 times: rename all but one"]),
        ],
    )  # fmt: skip
    def test_csv(self, tmp_path, text, expected):
        (tmp_path / "o.csv").write_text(text)
        assert lines(read_points, tmp_path / "o.csv", crs="EPSG:4326") == expected

    def test_files(self, tmp_path):
        (tmp_path / "bad.gpkg").write_text("no database")
        (tmp_path / "bad.csv").write_bytes(b"\xff\xfe\x00")
        assert lines(read_points, tmp_path / "none.gpkg") == ["none.gpkg: file: does not exist: check the path"]
        assert "bad.gpkg: file: is not a readable vector file" in lines(read_points, tmp_path / "bad.gpkg")[0]
        assert "bad.csv: file: is not a readable CSV" in lines(read_points, tmp_path / "bad.csv")[0]
        assert "is not a readable vector file" in lines(read_points, tmp_path)[0]

    def test_a_wrong_crs_text(self, tmp_path):
        (tmp_path / "o.csv").write_text("x,y\n1,2\n")
        (line,) = lines(read_points, tmp_path / "o.csv", crs="EPSG:pluto")
        assert line == "o.csv: crs: 'EPSG:pluto' is not a coordinate reference system: write a code: \"EPSG:4326\""

    def test_an_empty_layer(self, tmp_path):
        with fiona.open(tmp_path / "e.gpkg", "w", driver="GPKG", crs="EPSG:4326",
                        schema={"geometry": "Point", "properties": {"id": "str"}}):  # fmt: skip
            pass
        assert lines(read_points, tmp_path / "e.gpkg", id_field="id") == [
            "e.gpkg: layer: has no points: give at least one"
        ]

    def test_many_rows_are_counted_not_listed(self, tmp_path):
        (tmp_path / "o.csv").write_text("x,y\n" + ",1\n" * 14)
        (line,) = lines(read_points, tmp_path / "o.csv", crs="EPSG:4326")
        assert "rows 1, 2, 3, 4, 5, 6, 7, 8, 9, 10 and 4 more: have no number" in line


@pytest.mark.parametrize(
    ("value", "text"),
    [("007", "007"), (7, "7"), (7.0, "7"), (7.25, "7.25"), (None, ""), (float("nan"), ""), (np.float64(2), "2"),
     (np.int32(5), "5"), (1e20, "100000000000000000000")],
)  # fmt: skip
def test_cells_as_text(value, text):
    assert as_text(value) == text


class TestPolygons:
    def test_cell_centres_decide(self, write_frame, grid):
        x0, y0 = grid.transform.c, grid.transform.f
        # 10.4 cells wide: the eleventh column's centre (10.5) lies outside; 10.6 deep: the eleventh row's inside.
        path = write_frame("c.gpkg", {"class": ["wood"]}, [box(x0, y0 - 106, x0 + 104, y0)])
        classes, codes, record = rasterize_polygons(path, "class", grid)
        expected = np.zeros(grid.shape, np.uint8)
        expected[:11, :10] = 1
        np.testing.assert_array_equal(classes, expected)
        assert codes == ["wood"]
        assert record["method"] == "cell centre in polygon, in EPSG:32614"
        assert record["features"] == 1

    def test_later_features_lie_over_earlier_ones(self, write_frame, grid):
        x0, y0 = grid.transform.c, grid.transform.f
        whole, patch = box(x0, y0 - 300, x0 + 400, y0), box(x0 + 100, y0 - 200, x0 + 200, y0 - 100)
        path = write_frame("c.gpkg", {"class": [82, 11]}, [whole, patch])
        classes, codes, _ = rasterize_polygons(path, "class", grid)
        assert codes == ["11", "82"]
        assert (classes[10:20, 10:20] == 1).all()
        assert (classes == 2).sum() == 1200 - 100

    def test_holes_nulls_and_numbers_as_text(self, write_frame, grid):
        x0, y0 = grid.transform.c, grid.transform.f
        ring = Polygon(box(x0, y0 - 300, x0 + 200, y0).exterior.coords,
                       [box(x0 + 50, y0 - 100, x0 + 100, y0 - 50).exterior.coords])  # fmt: skip
        path = write_frame("c.gpkg", {"class": [9.0, 41.5, None]}, [ring, None, box(x0 + 200, y0 - 300, x0 + 400, y0)])
        classes, codes, _ = rasterize_polygons(path, "class", grid)
        assert codes == ["9", "41.5"]
        assert (classes[:, 20:] == 0).all()
        assert (classes[5:10, 5:10] == 0).all()
        assert (classes == 1).sum() == 600 - 25

    def test_another_crs(self, write_frame, grid):
        x0, y0 = grid.transform.c, grid.transform.f
        to_degrees = Transformer.from_crs(32614, 4326, always_xy=True)
        corners = [(x0 + 52, y0 - 52), (x0 + 52, y0 - 248), (x0 + 348, y0 - 248), (x0 + 348, y0 - 52)]
        path = write_frame("c.gpkg", {"hsg": ["B/D"]}, [Polygon([to_degrees.transform(*xy) for xy in corners])],
                           crs="EPSG:4326")  # fmt: skip
        classes, _, record = rasterize_polygons(path, "hsg", grid)
        expected = np.zeros(grid.shape, np.uint8)
        expected[5:25, 5:35] = 1
        np.testing.assert_array_equal(classes, expected)
        assert record["crs"] == "EPSG:4326"

    def test_more_classes_than_a_byte_holds(self, write_frame, grid):
        x0, y0 = grid.transform.c, grid.transform.f
        cells = [box(x0 + 10 * (k % 40), y0 - 10 * (k // 40) - 10, x0 + 10 * (k % 40) + 10, y0 - 10 * (k // 40))
                 for k in range(300)]  # fmt: skip
        path = write_frame("c.gpkg", {"class": np.arange(300)}, cells)
        classes, codes, _ = rasterize_polygons(path, "class", grid)
        assert classes.dtype == np.uint16
        np.testing.assert_array_equal(classes.ravel()[:300], np.arange(1, 301))
        assert codes[:12] == [str(k) for k in range(12)]

    def test_every_problem(self, write_frame, tmp_path, grid):
        points = write_frame("p.shp", {"klass": [1]}, [Point(1, 1)], crs=None, layer="p")
        assert lines(rasterize_polygons, points, "class", grid) == [
            "p.shp: crs: is not declared: assign the one it was made in",
            "p.shp: column class: does not exist: did you mean 'klass'?",
            "p.shp: geometry: is Point, not polygons: give a layer of polygons",
        ]
        assert "does not exist" in str(check_polygons(tmp_path / "none.gpkg", "class")[0])
        (tmp_path / "bad.gpkg").write_text("no database")
        assert "is not a readable vector file" in str(check_polygons(tmp_path / "bad.gpkg", "class")[0])
        write_frame("two.gpkg", {"class": [1]}, [box(0, 0, 1, 1)], layer="a")
        two = write_frame("two.gpkg", {"class": [1]}, [box(0, 0, 1, 1)], layer="b", append=True)
        assert "has several: a, b: name one of them" in str(check_polygons(two, "class")[0])
        assert "has no layer 'c'" in str(check_polygons(two, "class", "c")[0])
        assert check_polygons(two, "class", "b") == []


class TestWriteLayers:
    @pytest.fixture
    def layers(self):
        crs = "EPSG:32614"
        return {
            "outlets": gpd.GeoDataFrame({"outlet_id": ["007", "b"]}, geometry=[Point(0, 0), Point(1, 1)], crs=crs),
            "basins": gpd.GeoDataFrame({"outlet_id": ["007"], "area": [0.1]}, geometry=[box(0, 0, 1, 1)], crs=crs),
            "streams": gpd.GeoDataFrame({"area": np.zeros(0)}, geometry=[], crs=crs),
        }

    KINDS = {"basins": "MultiPolygon", "streams": "LineString"}  # noqa: RUF012

    def test_layers_come_back_in_order(self, tmp_path, layers):
        write_layers(tmp_path / "b.gpkg", layers, self.KINDS)
        listed = pyogrio.list_layers(tmp_path / "b.gpkg")
        assert listed.tolist() == [["outlets", "Point"], ["basins", "MultiPolygon"], ["streams", "LineString"]]
        back = gpd.read_file(tmp_path / "b.gpkg", layer="basins")
        assert back.crs.to_epsg() == 32614
        assert back.area.tolist() == [1.0]
        assert gpd.read_file(tmp_path / "b.gpkg", layer="outlets")["outlet_id"].tolist() == ["007", "b"]
        assert len(gpd.read_file(tmp_path / "b.gpkg", layer="streams")) == 0

    def test_the_same_bytes_twice_and_over_an_old_file(self, tmp_path, layers):
        write_layers(tmp_path / "a.gpkg", layers, self.KINDS)
        (tmp_path / "b.gpkg").write_text("something old")
        write_layers(tmp_path / "b.gpkg", layers, self.KINDS)
        assert (tmp_path / "a.gpkg").read_bytes() == (tmp_path / "b.gpkg").read_bytes()
        assert pyogrio.get_gdal_config_option("OGR_CURRENT_DATE") is None
