"""Reading rasters of any CRS and resolution onto a grid; cloud-optimised GeoTIFFs; what counts as remote."""

import numpy as np
import pytest
import rasterio
from affine import Affine
from pyproj import Transformer

from basinwright.errors import InputRejected
from basinwright.grid import Grid
from basinwright.io import rasters
from basinwright.io.rasters import (
    align_record,
    check_raster,
    expand_paths,
    is_remote,
    read_blocks_onto,
    read_onto,
    refers_to_remote,
    write_cog,
)

UTM14 = rasterio.crs.CRS.from_epsg(32614).to_wkt()


@pytest.fixture
def grid(lattice):
    return Grid(30, 40, lattice, UTM14)


class TestReadOnto:
    def test_the_same_cells_come_back(self, write_raster, lattice, grid):
        classes = np.arange(1200, dtype=np.uint16).reshape(30, 40)
        path = write_raster("c.tif", classes, lattice)
        np.testing.assert_array_equal(read_onto(path, grid, missing=0), classes)
        assert align_record(path, grid)["method"] == "native"

    def test_coarser_and_finer_cells(self, write_raster, lattice, grid):
        # Cells three times as large and cells half as large: the nearest centre is known on paper.
        coarse = np.arange(14 * 10, dtype=np.uint8).reshape(10, 14)
        path = write_raster("coarse.tif", coarse, lattice @ Affine.scale(3))
        np.testing.assert_array_equal(
            read_onto(path, grid, missing=0), np.repeat(np.repeat(coarse, 3, 0), 3, 1)[:, :40]
        )
        assert align_record(path, grid)["method"] == "nearest"
        fine = np.tile(np.array([[1, 2], [3, 4]], dtype=np.uint8), (30, 40))
        shifted = lattice @ Affine.translation(-0.1, -0.1) @ Affine.scale(0.5)  # centres fall in the lower right cell
        np.testing.assert_array_equal(read_onto(write_raster("fine.tif", fine, shifted), grid, missing=0), 4)

    def test_outside_the_raster_and_nodata_are_missing(self, write_raster, lattice, grid):
        values = np.full((30, 20), 7, dtype=np.uint8)
        values[0, 0] = 255
        expected = np.zeros((30, 40), dtype=np.uint8)
        expected[:, :20] = values
        expected[0, 0] = 0
        path = write_raster("half.tif", values, lattice, nodata=255)
        np.testing.assert_array_equal(read_onto(path, grid, missing=0), expected)

    def test_without_a_nodata_value_every_value_counts(self, write_raster, lattice, grid):
        # Zero and 255 are classes here; only what the raster does not cover is missing.
        values = np.tile(np.array([[0, 255]], dtype=np.uint8), (30, 10))
        path = write_raster("half.tif", values, lattice)
        ((_, block),) = read_blocks_onto(path, grid)
        assert not np.ma.getmaskarray(block)[:, :20].any()
        assert np.ma.getmaskarray(block)[:, 20:].all()
        np.testing.assert_array_equal(block.data[:, :20], values)

    def test_another_crs_takes_the_cell_under_the_centre(self, write_raster, grid):
        degrees = Affine(0.0005, 0, -99.003, 0, -0.0005, 39.755)
        values = np.arange(30 * 40, dtype=np.int32).reshape(30, 40)
        path = write_raster("geo.tif", values, degrees, crs="EPSG:4326")
        found = read_onto(path, grid, missing=-1)
        x, y = grid.xy(*np.indices(grid.shape))
        lon, lat = Transformer.from_crs(32614, 4326, always_xy=True).transform(x, y)
        col, row = (lon - degrees.c) / degrees.a, (lat - degrees.f) / degrees.e
        inside = (col >= 0) & (col < 40) & (row >= 0) & (row < 30)
        expected = np.where(inside, np.floor(row) * 40 + np.floor(col), -1)
        # Centres within the warp's tolerance of a cell's edge may fall on either side.
        clear = np.minimum(abs(col - np.round(col)), abs(row - np.round(row))) > rasters.WARP_TOLERANCE
        assert inside.all()
        np.testing.assert_array_equal(found[clear], expected[clear])
        assert clear.mean() > 0.9
        assert align_record(path, grid)["method"] == "nearest, to EPSG:32614"

    def test_blocks_do_not_show(self, write_raster, lattice, grid, monkeypatch):
        values = np.random.default_rng(1).integers(0, 9, (70, 90), dtype=np.uint8)
        path = write_raster("c.tif", values, lattice @ Affine.scale(0.47))
        whole = read_onto(path, grid, missing=99)
        monkeypatch.setattr(rasters, "BLOCK_CELLS", 40 * 7)
        assert len(list(read_blocks_onto(path, grid))) == 5
        np.testing.assert_array_equal(read_onto(path, grid, missing=99), whole)

    def test_bilinear_keeps_a_plane(self, write_raster, lattice, grid):
        # Cells twice as large over a plane; inside, interpolation is exact.
        cols, rows = np.meshgrid(np.arange(25), np.arange(20))
        wide = lattice @ Affine.translation(-4, -4) @ Affine.scale(2)
        path = write_raster("plane.tif", (2.0 * cols - rows).astype(np.float64), wide)
        row, col = np.indices(grid.shape)
        expected = 2.0 * ((col + 4.5) / 2 - 0.5) - ((row + 4.5) / 2 - 0.5)
        np.testing.assert_allclose(read_onto(path, grid, "bilinear"), expected, atol=1e-6)

    def test_nan_is_missing_in_float_rasters(self, write_raster, lattice, grid):
        values = np.ones((30, 40), np.float32)
        values[3, 4] = np.nan
        found = read_onto(write_raster("f.tif", values, lattice), grid)
        assert np.isnan(found[3, 4])
        assert np.isnan(found).sum() == 1

    def test_south_up_raster(self, write_raster, lattice, grid):
        values = np.arange(1200, dtype=np.int16).reshape(30, 40)
        flipped = lattice @ Affine.translation(0, 30) @ Affine.scale(1, -1)
        np.testing.assert_array_equal(read_onto(write_raster("s.tif", values[::-1], flipped), grid, missing=-1), values)

    def test_a_damaged_file(self, write_raster, lattice, grid):
        path = write_raster("c.tif", np.random.default_rng(6).random((300, 300)), lattice @ Affine.scale(0.1))
        path.write_bytes(path.read_bytes()[:300_000])
        with pytest.raises(InputRejected, match=r"c\.tif: cells: its cells cannot be read"):
            read_onto(path, grid)


class TestCheck:
    def test_elsewhere(self, write_raster, lattice, grid):
        path = write_raster("far.tif", np.ones((3, 3), np.uint8), lattice @ Affine.translation(500, 0))
        (problem,) = check_raster(path, grid)
        assert "extent: does not overlap the terrain" in str(problem)

    def test_overlap_across_systems(self, write_raster, grid):
        path = write_raster("geo.tif", np.ones((3, 3), np.uint8), Affine(0.01, 0, -99.01, 0, -0.01, 39.76), "EPSG:4326")
        assert check_raster(path, grid) == []

    def test_header_problems_are_passed_on(self, tmp_path, grid):
        (problem,) = check_raster(tmp_path / "none.tif", grid)
        assert "does not exist" in str(problem)


class TestCog:
    def test_values_grid_unit_and_meaning_come_back(self, tmp_path, grid):
        values = np.random.default_rng(2).random(grid.shape).astype(np.float32)
        values[0, 0] = np.nan
        path = tmp_path / "conditioned.tif"
        write_cog(path, values, grid, meaning="conditioned terrain", unit="m", nodata=np.nan, tags={"stage": "fill"})
        with rasterio.open(path) as source:
            np.testing.assert_array_equal(source.read(1), values)
            assert source.transform == grid.transform
            assert source.crs.to_epsg() == 32614
            assert np.isnan(source.nodata)
            assert source.units == ("m",)
            assert source.descriptions == ("conditioned terrain",)
            assert source.tags()["meaning"] == "conditioned terrain"
            assert source.tags()["unit"] == "m"
            assert source.tags()["stage"] == "fill"
            assert source.tags(ns="IMAGE_STRUCTURE")["LAYOUT"] == "COG"
        assert sorted(entry.name for entry in tmp_path.iterdir()) == ["conditioned.tif"]

    def test_large_enough_files_have_overviews_of_whole_codes(self, tmp_path, lattice):
        wide = Grid(700, 900, lattice, UTM14)
        codes = np.random.default_rng(3).choice(np.array([0, 45, 315, 65535], np.uint16), wide.shape)
        write_cog(tmp_path / "d8.tif", codes, wide, meaning="direction", unit="degree", nodata=65535)
        with rasterio.open(tmp_path / "d8.tif") as source:
            assert source.overviews(1) == [2]
        with rasterio.open(tmp_path / "d8.tif", overview_level=0) as source:
            assert set(np.unique(source.read(1))) <= {0, 45, 315, 65535}

    def test_the_same_bytes_whatever_the_blocks(self, tmp_path, lattice, monkeypatch):
        wide = Grid(600, 700, lattice, UTM14)
        values = np.random.default_rng(4).random(wide.shape)
        write_cog(tmp_path / "a.tif", values, wide, meaning="x", unit="m2")
        monkeypatch.setattr(rasters, "BLOCK_CELLS", 700 * 37)
        (tmp_path / "other").mkdir()
        write_cog(tmp_path / "other" / "a.tif", values, wide, meaning="x", unit="m2")
        assert (tmp_path / "a.tif").read_bytes() == (tmp_path / "other" / "a.tif").read_bytes()

    def test_another_shape_is_refused(self, tmp_path, grid):
        with pytest.raises(ValueError, match=r"the array has shape \(2, 2\), the grid \(30, 40\)"):
            write_cog(tmp_path / "a.tif", np.zeros((2, 2)), grid, meaning="x")


class TestRemote:
    @pytest.mark.parametrize(
        "text",
        ["https://host/dem.tif", "HTTP://host/dem.tif", "s3://bucket/key", "s3:bucket", "/vsicurl/https://host/a",
         "/vsizip/a.zip/b.tif", "/VSIS3/bucket", "\\vsimem\\a", "zip:a.zip", "zip+file://a.zip!b", "<VRTDataset/>",
         " <GDAL_WMS>", "GTIFF_DIR:1:a.tif", 'NETCDF:"a.nc":z', "PG:dbname=x", '{"type": "FeatureCollection"}'],
    )  # fmt: skip
    def test_is(self, text):
        assert is_remote(text)

    @pytest.mark.parametrize("text", ["dem.tif", "../tiles/*.tif", "C:/data/dem.tif", "C:\\data\\dem.tif", "/a/b.tif"])
    def test_is_not(self, text):
        assert not is_remote(text)

    def test_files_that_lead_elsewhere(self, tmp_path):
        (tmp_path / "local.vrt").write_text("<VRTDataset><SourceFilename>dem.tif</SourceFilename></VRTDataset>")
        (tmp_path / "web.vrt").write_text("<VRTDataset><SourceFilename>/vsicurl/x</SourceFilename></VRTDataset>")
        (tmp_path / "wms.xml").write_text("\n <GDAL_WMS><ServerUrl>http://x</ServerUrl></GDAL_WMS>")
        (tmp_path / "dem.tif").write_bytes(b"II*\0 http://x")
        found = {path.name for path in tmp_path.iterdir() if refers_to_remote(path)}
        assert found == {"web.vrt", "wms.xml"}


def test_globs_are_sorted_and_kept_once(tmp_path):
    for name in ("b.tif", "a.tif", "[1].tif"):
        (tmp_path / name).touch()
    url = "https://host/x?.tif"
    paths, problems = expand_paths(["b.tif", "?.tif", "[1].tif", url, "tiles/*.tif", "missing.tif"], tmp_path)
    assert paths == [tmp_path / "b.tif", tmp_path / "a.tif", tmp_path / "[1].tif", url, tmp_path / "missing.tif"]
    assert [str(problem) for problem in problems] == [
        f"tiles/*.tif: file: matches no file: check the pattern; it starts at {tmp_path}"
    ]
