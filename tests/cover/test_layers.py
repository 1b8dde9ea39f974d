"""Land cover and soils on the grid: codes, names, dual groups, what is missing and what is unlisted."""

import geopandas as gpd
import numpy as np
import pytest
import rasterio
from affine import Affine
from shapely.geometry import box

from basinwright.cover import align_cover, align_soils
from basinwright.cover import layers as layers_module
from basinwright.errors import InputRejected
from basinwright.grid import Grid
from basinwright.schemes import load_scheme


@pytest.fixture
def grid():
    """Return 4 x 6 cells of 10 m in UTM zone 14."""
    transform = Affine(10.0, 0.0, 500_000.0, 0.0, -10.0, 4_400_000.0)
    return Grid(4, 6, transform, rasterio.crs.CRS.from_epsg(32614).to_wkt())


@pytest.fixture
def on_grid(tmp_path, grid):
    """Write a raster on the grid's cells and return its path."""

    def write(name, rows, dtype="uint8", nodata=None):
        array = np.asarray(rows, dtype=dtype)
        path = tmp_path / name
        with rasterio.open(
            path, "w", driver="GTiff", count=1, height=array.shape[0], width=array.shape[1], dtype=dtype,
            crs=grid.crs_wkt, transform=grid.transform, nodata=nodata,
        ) as out:  # fmt: skip
            out.write(array, 1)
        return path

    return write


@pytest.fixture
def nlcd():
    return load_scheme("nlcd")


@pytest.fixture
def polygons(tmp_path, grid):
    """Write strips of whole columns, given as (first column, end column, value)."""

    def write(name, *strips, field="class"):
        x0, y0 = grid.transform.c, grid.transform.f
        shapes = [box(x0 + 10 * first, y0 - 40, x0 + 10 * end, y0) for first, end, _ in strips]
        frame = gpd.GeoDataFrame({field: [value for _, _, value in strips]}, geometry=shapes, crs=grid.crs_wkt)
        frame.to_file(tmp_path / name)
        return tmp_path / name

    return write


class TestCover:
    def test_raster_codes_are_sorted_by_number(self, grid, on_grid, nlcd):
        path = on_grid("c.tif", np.array([[82, 11, 9, 41, 250, 11]] * 4), nodata=250)
        cover = align_cover(grid, nlcd, raster=path)
        assert cover.codes == ("9", "11", "41", "82")
        assert cover.classes.tolist() == [[3, 1, 0, 2, -1, 1]] * 4
        assert cover.record["method"] == "native"

    def test_properties_by_class(self, grid, on_grid, nlcd):
        cover = align_cover(grid, nlcd, raster=on_grid("c.tif", np.array([[82, 11, 9, 41, 82, 11]] * 4)))
        np.testing.assert_array_equal(cover.sheet_n(nlcd), [np.nan, 0.011, 0.40, 0.06])
        np.testing.assert_array_equal(cover.open_water(nlcd), [False, True, False, False])

    @pytest.mark.parametrize("dtype", ["int16", "int32", "uint16", "float32", "float64"])
    def test_any_number_type(self, grid, on_grid, nlcd, dtype):
        cover = align_cover(grid, nlcd, raster=on_grid("c.tif", np.array([[41, 82, 41, 41, 41, 11]] * 4), dtype))
        assert cover.codes == ("11", "41", "82")
        assert cover.classes[0].tolist() == [1, 2, 1, 1, 1, 0]

    def test_far_apart_integers(self, grid, on_grid, nlcd):
        values = np.array([[-2_000_000_000, 2_000_000_000, 5, 5, 5, 5]] * 4)
        cover = align_cover(grid, nlcd, raster=on_grid("c.tif", values, "int32"))
        assert cover.codes == ("-2000000000", "5", "2000000000")
        assert cover.classes[0].tolist() == [0, 2, 1, 1, 1, 1]

    def test_names_and_codes_of_polygons_are_one_class(self, grid, polygons, nlcd):
        path = polygons("c.gpkg", (0, 2, "Open Water"), (2, 3, "41"), (3, 4, "Deciduous Forest"), (4, 5, "Quarry"))
        cover = align_cover(grid, nlcd, vector=path, field="class")
        assert cover.codes == ("11", "41", "Quarry")
        assert cover.classes.tolist() == [[0, 0, 1, 1, 2, -1]] * 4

    def test_blocks_do_not_show(self, grid, on_grid, nlcd, monkeypatch):
        values = np.random.default_rng(5).choice([11, 41, 82, 95, 71], (4, 6))
        path = on_grid("c.tif", values)
        whole = align_cover(grid, nlcd, raster=path)
        monkeypatch.setattr("basinwright.io.rasters.BLOCK_CELLS", 6)
        blocks = align_cover(grid, nlcd, raster=path)
        assert blocks.codes == whole.codes
        np.testing.assert_array_equal(blocks.classes, whole.classes)
        np.testing.assert_array_equal(np.array(whole.codes)[whole.classes], values.astype(str))

    def test_too_many_values_are_no_classes(self, grid, on_grid, nlcd, polygons, monkeypatch):
        monkeypatch.setattr(layers_module, "MAX_CLASSES", 5)
        path = on_grid("c.tif", np.arange(24).reshape(4, 6))
        with pytest.raises(InputRejected, match=r"c\.tif: cells: holds over 23 different values: these are no classes"):
            align_cover(grid, nlcd, raster=path)
        strips = polygons("c.gpkg", *[(k, k + 1, k) for k in range(6)])
        with pytest.raises(InputRejected, match="column class: holds over 5 different values"):
            align_cover(grid, nlcd, vector=strips, field="class")

    def test_a_raster_of_nothing(self, grid, on_grid, nlcd):
        cover = align_cover(grid, nlcd, raster=on_grid("c.tif", np.zeros((4, 6)), nodata=0))
        assert cover.codes == ()
        assert (cover.classes == -1).all()


class TestSoils:
    GROUPS = {"1": "A", "2": "B", "3": "C", "4": "D", "5": "A/D", "6": "B/D", "7": "C/D"}  # noqa: RUF012

    @pytest.mark.parametrize(("dual", "expected"), [("undrained", [0, 3, 3, 3]), ("drained", [0, 0, 1, 2])])
    def test_dual_groups(self, grid, on_grid, dual, expected):
        path = on_grid("s.tif", np.array([[1, 5, 6, 7, 7, 7]] * 4))
        soils = align_soils(grid, raster=path, groups=self.GROUPS, dual_groups=dual)
        assert soils.groups[0, :4].tolist() == expected
        assert soils.labels == ("A", "B", "C", "D", "assumed")
        assert soils.record["dual_groups"] == dual

    def test_unmapped_and_unlisted_are_two_things(self, grid, on_grid):
        path = on_grid("s.tif", np.array([[0, 9, 2, 12, 9, 3]] * 4), nodata=0)
        soils = align_soils(grid, raster=path, groups=self.GROUPS)
        assert soils.labels == ("A", "B", "C", "D", "assumed", "9", "12")
        assert soils.groups[0].tolist() == [-1, 5, 1, 6, 5, 2]

    def test_missing_stands_in_where_unmapped_only(self, grid, on_grid):
        path = on_grid("s.tif", np.array([[0, 9, 2, 0, 9, 3]] * 4), nodata=0)
        soils = align_soils(grid, raster=path, groups=self.GROUPS, missing="D")
        assert soils.groups[0].tolist() == [4, 5, 1, 4, 5, 2]
        assert soils.missing == "D"
        assert soils.record["assumed_cells"] == 8

    def test_polygons_may_hold_the_groups_themselves(self, grid, polygons):
        path = polygons("s.gpkg", (0, 1, "A"), (1, 2, "B/D"), (2, 3, "3"), (3, 4, "water"), field="hsg")
        soils = align_soils(grid, vector=path, field="hsg", groups=self.GROUPS)
        assert soils.groups[0].tolist() == [0, 3, 2, 5, -1, -1]
        assert soils.labels[5:] == ("water",)

    def test_one_group_everywhere(self, grid):
        soils = align_soils(grid, group="B")
        assert (soils.groups == 1).all()
        assert soils.record == {"group": "B", "method": "one group everywhere"}
