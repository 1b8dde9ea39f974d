"""Terrain input: units, voids, mosaics, and the coordinate systems it may come in."""

import numpy as np
import pytest
import rasterio
from affine import Affine
from pyproj import Transformer

from basinwright.errors import InputRejected
from basinwright.io.elevation import METRES, area_error, open_terrain, plan_terrain

RNG = np.random.default_rng(7)


def texts(problems):
    return [str(problem) for problem in problems]


def rejected(paths, **options):
    with pytest.raises(InputRejected) as caught:
        open_terrain(paths, **options)
    return texts(caught.value.problems)


@pytest.fixture
def hills():
    return (RNG.random((40, 50)) * 500).astype(np.float32)


class TestUnits:
    def test_factors_are_those_of_the_definitions(self):
        assert METRES["ft"] == 0.3048
        assert METRES["us-ft"] * 3937 == pytest.approx(1200, rel=1e-15)

    @pytest.mark.parametrize(
        ("declared", "unit"),
        [("m", "m"), ("metre", "m"), ("ft", "ft"), ("foot", "ft"), ("US survey foot", "us-ft"), ("ftUS", "us-ft")],
    )
    def test_declared_by_the_band(self, write_raster, lattice, hills, declared, unit):
        terrain = open_terrain([write_raster("dem.tif", hills, lattice, unit=declared)])
        assert (terrain.plan.vertical_unit, terrain.plan.unit_assumed) == (unit, False)
        expected = (hills.astype(np.float64) * METRES[unit]).astype(np.float32)
        np.testing.assert_array_equal(terrain.elevation_m, expected)

    def test_declared_by_the_vertical_axis(self, write_raster, hills):
        # NAD83 / Tennessee (ftUS) with NAVD88 height (ftUS); the grid keeps its cells in feet.
        feet = Affine(100.0, 0.0, 1_700_000.0, 0.0, -100.0, 600_000.0)
        path = write_raster("dem.tif", hills, feet, crs="EPSG:2274+6360", GEOTIFF_VERSION="1.1")
        terrain = open_terrain([path])
        assert (terrain.plan.vertical_unit, terrain.plan.unit_assumed) == ("us-ft", False)
        assert terrain.plan.alignment[0]["method"] == "native"
        assert terrain.grid.crs.to_epsg() == 2274
        np.testing.assert_allclose(terrain.grid.dx_m, 100 * 1200 / 3937, rtol=1e-9)
        np.testing.assert_allclose(terrain.elevation_m, hills * (1200 / 3937), rtol=1e-6)

    def test_feet_given_and_metres_are_the_same_terrain(self, write_raster, lattice, hills):
        metres = open_terrain([write_raster("m.tif", hills.astype(np.float64), lattice)], vertical_unit="m")
        feet = open_terrain([write_raster("ft.tif", hills / np.float64(0.3048), lattice)], vertical_unit="ft")
        np.testing.assert_allclose(feet.elevation_m, metres.elevation_m, rtol=1e-15)

    def test_the_option_overrides_the_file(self, write_raster, lattice, hills):
        terrain = open_terrain([write_raster("dem.tif", hills, lattice, unit="ft")], vertical_unit="m")
        np.testing.assert_array_equal(terrain.elevation_m, hills)

    def test_nothing_declared_is_metres_assumed(self, write_raster, lattice, hills):
        terrain = open_terrain([write_raster("dem.tif", hills, lattice)])
        assert (terrain.plan.vertical_unit, terrain.plan.unit_assumed) == ("m", True)
        assert terrain.plan.alignment[0]["vertical_unit"] == "m (assumed)"

    def test_unknown_unit_is_a_problem(self, write_raster, lattice, hills):
        (line,) = rejected([write_raster("dem.tif", hills, lattice, unit="fathom")])
        assert "declares the vertical unit 'fathom', which is not known here" in line
        assert "set terrain.vertical_unit" in line

    def test_tiles_of_different_units_are_a_problem(self, write_raster, lattice, hills):
        paths = [write_raster("a.tif", hills, lattice, unit="m"), write_raster("b.tif", hills, lattice, unit="ft")]
        (line,) = rejected(paths)
        assert "different vertical units (a.tif: m, b.tif: ft)" in line


class TestCells:
    @pytest.mark.parametrize(
        ("dtype", "kept"),
        [("int16", "float32"), ("uint8", "float32"), ("float32", "float32"), ("int32", "float64"),
         ("float64", "float64")],
    )  # fmt: skip
    def test_type_holds_every_value(self, write_raster, lattice, dtype, kept):
        values = np.arange(12, dtype=dtype).reshape(3, 4)
        terrain = open_terrain([write_raster("dem.tif", values, lattice)])
        assert terrain.elevation_m.dtype == kept
        np.testing.assert_array_equal(terrain.elevation_m, values)

    def test_nodata_nan_and_infinity_are_voids(self, write_raster, lattice):
        values = np.array([[1.0, -9999.0, np.nan], [np.inf, -np.inf, 2.0]], dtype=np.float32)
        terrain = open_terrain([write_raster("dem.tif", values, lattice, nodata=-9999.0)])
        np.testing.assert_array_equal(np.isnan(terrain.elevation_m), [[False, True, True], [True, True, False]])

    def test_a_mask_band_makes_voids(self, write_raster, lattice):
        path = write_raster("dem.tif", np.ones((2, 3), np.float32), lattice)
        with rasterio.open(path, "r+") as out:
            out.write_mask(np.array([[255, 0, 255], [255, 255, 0]], dtype=np.uint8))
        np.testing.assert_array_equal(
            np.isnan(open_terrain([path]).elevation_m), [[False, True, False], [False, False, True]]
        )

    def test_declared_scale_and_offset_are_applied(self, write_raster, lattice):
        path = write_raster("dem.tif", np.array([[0, 10, 25]], dtype=np.int16), lattice)
        with rasterio.open(path, "r+") as out:
            out.scales, out.offsets = (0.5,), (100.0,)
        np.testing.assert_array_equal(open_terrain([path]).elevation_m, [[100.0, 105.0, 112.5]])

    def test_south_up_raster_is_turned(self, write_raster, lattice, hills):
        north_up = open_terrain([write_raster("n.tif", hills, lattice)])
        flipped = lattice @ Affine.translation(0, 40) @ Affine.scale(1, -1)
        south_up = open_terrain([write_raster("s.tif", hills[::-1], flipped)])
        assert south_up.grid == north_up.grid
        np.testing.assert_array_equal(south_up.elevation_m, north_up.elevation_m)

    def test_blocks_do_not_show(self, write_raster, lattice, hills, monkeypatch):
        flipped = lattice @ Affine.translation(0, 40) @ Affine.scale(1, -1)
        path = write_raster("s.tif", hills[::-1], flipped)
        whole = open_terrain([path]).elevation_m
        monkeypatch.setattr("basinwright.io.elevation.BLOCK_CELLS", 7 * 50)
        np.testing.assert_array_equal(open_terrain([path]).elevation_m, whole)

    def test_only_the_first_band_counts_and_is_said(self, write_raster, lattice, hills):
        terrain = open_terrain([write_raster("dem.tif", np.stack([hills, hills + 1]), lattice)])
        np.testing.assert_array_equal(terrain.elevation_m, hills)
        assert terrain.plan.alignment[0]["band"] == "1 of 2"

    def test_all_void(self, write_raster, lattice):
        (line,) = rejected([write_raster("dem.tif", np.full((3, 3), -1, np.int16), lattice, nodata=-1)])
        assert "dem.tif: cells: every cell is void: check the file and its nodata value" in line

    @pytest.mark.parametrize("value", [-9999.0, -32768.0, -3.4e38, 65535.0])
    def test_an_undeclared_void_value_is_not_terrain(self, write_raster, lattice, value):
        (line,) = rejected([write_raster("dem.tif", np.array([[5.0, value]], np.float32), lattice)])
        assert "which no land does" in line
        assert "declare its nodata value" in line

    def test_a_damaged_file(self, write_raster, lattice):
        path = write_raster("dem.tif", RNG.random((300, 300)), lattice)
        path.write_bytes(path.read_bytes()[:300_000])
        (line,) = rejected([path])
        assert "dem.tif: cells: its cells cannot be read (" in line
        assert line.endswith("): the file is damaged: get it again")


class TestMosaic:
    def test_split_tiles_equal_the_whole(self, write_raster, lattice, hills):
        whole = open_terrain([write_raster("whole.tif", hills, lattice)])
        tiles = [
            write_raster(f"{row}-{col}.tif", hills[row : row + 25, col : col + 20],
                         lattice @ Affine.translation(col, row))
            for row in (0, 20) for col in (0, 15, 30)
        ]  # fmt: skip
        for order in (tiles, tiles[::-1]):
            mosaic = open_terrain(order)
            assert mosaic.grid == whole.grid
            np.testing.assert_array_equal(mosaic.elevation_m, whole.elevation_m)

    def test_the_first_listed_wins_where_it_has_data(self, write_raster, lattice):
        first = write_raster("a.tif", np.array([[1.0, np.nan, 1.0]], np.float32), lattice)
        second = write_raster("b.tif", np.array([[2.0, 2.0, 2.0]], np.float32), lattice)
        np.testing.assert_array_equal(open_terrain([first, second]).elevation_m, [[1.0, 2.0, 1.0]])
        np.testing.assert_array_equal(open_terrain([second, first]).elevation_m, [[2.0, 2.0, 2.0]])

    def test_what_no_tile_covers_is_void(self, write_raster, lattice):
        ones = np.ones((1, 1), np.float32)
        paths = [write_raster("a.tif", ones, lattice), write_raster("b.tif", ones, lattice @ Affine.translation(1, 1))]
        np.testing.assert_array_equal(open_terrain(paths).elevation_m, [[1.0, np.nan], [np.nan, 1.0]])

    def test_rounded_origins_still_fit(self, write_raster, lattice):
        ones = np.ones((2, 2), np.float32)
        nudged = lattice @ Affine.translation(2.0005, 0)
        assert open_terrain([write_raster("a.tif", ones, lattice), write_raster("b.tif", ones, nudged)]).grid.ncols == 4

    @pytest.mark.parametrize(
        ("change", "message"),
        [
            ({"crs": "EPSG:32615"}, "crs: its CRS (EPSG:32615) is not that of a.tif (EPSG:32614)"),
            ({"move": Affine.translation(0.5, 0)}, "georeference: its cells are not those of a.tif"),
            ({"move": Affine.scale(2)}, "georeference: its cells are not those of a.tif"),
        ],
    )
    def test_tiles_that_do_not_fit(self, write_raster, lattice, hills, change, message):
        paths = [
            write_raster("a.tif", hills, lattice),
            write_raster("b.tif", hills, lattice @ change.get("move", Affine.identity()),
                         crs=change.get("crs", "EPSG:32614")),
        ]  # fmt: skip
        assert message in rejected(paths)[0]


class TestHeaders:
    def test_every_problem_at_once(self, tmp_path, write_raster, lattice, hills):
        (tmp_path / "text.tif").write_text("not a raster")
        paths = [
            tmp_path / "missing.tif",
            tmp_path,
            tmp_path / "text.tif",
            write_raster("nocrs.tif", hills, lattice, crs=None),
            write_raster("rotated.tif", hills, lattice @ Affine.rotation(10)),
            write_raster("nowhere.tif", hills, Affine.identity()),
        ]
        found = texts(plan_terrain(paths, crs="EPSG:nonsense")[1])
        expected = [
            "missing.tif: file: does not exist",
            "file: is a folder",
            "text.tif: file: is not a readable raster",
            "nocrs.tif: crs: has no coordinate reference system",
            "rotated.tif: georeference: is rotated or mirrored",
            "nowhere.tif: georeference: has none",
            "terrain.crs: 'EPSG:nonsense' is not a coordinate reference system",
        ]
        assert len(found) == len(expected)
        for text, line in zip(expected, found, strict=True):
            assert text in line

    def test_a_plan_reads_no_cell(self, write_raster, lattice, hills, monkeypatch):
        path = write_raster("dem.tif", hills, lattice)
        monkeypatch.setattr(rasterio.io.DatasetReader, "read", None)
        plan, problems = plan_terrain([path])
        assert problems == []
        assert plan.grid.shape == (40, 50)
        assert plan.alignment[0]["resolution"] == [10.0, 10.0]

    def test_rounding_in_the_georeference_is_no_rotation(self, write_raster, lattice, hills):
        noisy = Affine(lattice.a, 1e-14, lattice.c, -1e-14, lattice.e, lattice.f)
        assert plan_terrain([write_raster("dem.tif", hills, noisy)])[0].grid.transform == lattice


class TestCoordinateSystems:
    def test_geographic_terrain_stays_on_its_cells(self, write_raster, hills):
        degrees = Affine(1 / 3600, 0, -98.0, 0, -1 / 3600, 40.0)
        terrain = open_terrain([write_raster("dem.tif", hills, degrees, crs="EPSG:4269")])
        assert terrain.plan.alignment[0]["method"] == "native"
        assert terrain.grid.is_geographic
        np.testing.assert_array_equal(terrain.elevation_m, hills)

    def test_web_mercator_is_resampled_to_utm(self, write_raster):
        # An inclined plane in the source's coordinates: bilinear resampling must reproduce it exactly.
        web = Affine(13.0, 0, -10_909_310.0, 0, -13.0, 4_865_942.0)  # 40 N, 98 W
        cols, rows = np.meshgrid(np.arange(120), np.arange(100))
        plane = (300.0 + 0.5 * cols - 0.25 * rows).astype(np.float64)
        terrain = open_terrain([write_raster("dem.tif", plane, web, crs="EPSG:3857")])
        assert terrain.grid.crs.to_epsg() == 32614
        method = terrain.plan.alignment[0]["method"]
        assert method == "bilinear, to EPSG:32614: areas in EPSG:3857 are off by 70.4%"
        # The scale at 40 N is 1/cos(40), on the ellipsoid within 0.4 %: cells of 13 m are 9.96 m on the ground.
        assert terrain.grid.transform.a == pytest.approx(13.0 * np.cos(np.radians(40.0)), rel=0.004)
        rows, cols = np.nonzero(np.isfinite(terrain.elevation_m))
        assert len(rows) * terrain.grid.cell_area_m2[0] == pytest.approx(120 * 100 * 13.0**2 / 1.704, rel=0.02)
        to_web = Transformer.from_crs(32614, 3857, always_xy=True)
        x, y = to_web.transform(*terrain.grid.xy(rows, cols))
        col, row = (x - web.c) / 13.0 - 0.5, (web.f - y) / 13.0 - 0.5
        inside = (col > 0) & (col < 119) & (row > 0) & (row < 99)
        expected = 300.0 + 0.5 * col - 0.25 * row
        np.testing.assert_allclose(terrain.elevation_m[rows, cols][inside], expected[inside], atol=0.02)

    def test_a_given_crs_is_resampled_to_and_said(self, write_raster, lattice, hills):
        path = write_raster("dem.tif", hills, lattice)
        terrain = open_terrain([path], crs="EPSG:5070")
        assert terrain.grid.crs.to_epsg() == 5070
        assert terrain.plan.alignment[0]["method"] == "bilinear, to EPSG:5070: terrain.crs"
        assert open_terrain([path], crs="EPSG:32614").plan.alignment[0]["method"] == "native"

    def test_a_given_crs_that_lies_about_area_is_refused(self, write_raster, lattice, hills):
        (line,) = rejected([write_raster("dem.tif", hills, lattice)], crs="EPSG:3857")
        assert "areas in EPSG:3857 would be off by 69." in line
        assert 'choose another terrain.crs, or "auto"' in line

    def test_too_wide_for_one_zone(self, write_raster):
        web = Affine(20_000.0, 0, -13_000_000.0, 0, -20_000.0, 6_000_000.0)
        (line,) = rejected([write_raster("dem.tif", np.ones((100, 200), np.float32), web, crs="EPSG:3857")])
        assert "set terrain.crs to an equal-area CRS" in line

    def test_area_error_of_known_projections(self, write_raster, lattice):
        # Mercator on the sphere has areal scale 1/cos2(latitude); UTM's central scale is 0.9996, squared.
        plan, _ = plan_terrain([write_raster("dem.tif", np.ones((2, 2), np.float32), lattice)])
        assert area_error(plan.native) == pytest.approx(1 - 0.9996**2, rel=1e-3)
