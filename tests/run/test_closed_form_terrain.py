"""Whole runs on terrains whose basin, path, segments and times are known on paper."""

import math

import numpy as np
import pytest
from projects import inclined_plane, make_project, numbers, read_table, v_valley, write_raster
from pyproj import Geod

from basinwright import pipeline

# The published forms again, written out for this file alone.
FT = 0.3048
GRASS_N = 0.15  # TR-55 (1986) table 3-1: short-grass prairie
SHORT_GRASS_FPS = 6.962  # NEH 630 ch. 15 (2010) table 15-3: short-grass pasture, V / S^0.5
P2_IN = 3.1


def sheet_h(length_ft, slope):
    """NEH 630 ch. 15 eq. 15-8."""
    return 0.007 * (GRASS_N * length_ft) ** 0.8 / (P2_IN**0.5 * slope**0.4)


def shallow_h(length_ft, slope):
    """NEH 630 ch. 15 table 15-3."""
    return length_ft / (SHORT_GRASS_FPS * slope**0.5) / 3600


def channel_h(length_ft, slope, area_km2, stage=1.0):
    """Manning (NEH 630 ch. 15 eq. 15-10) with the bankfull relation of the USA (Bieger et al. 2015)."""
    width, depth = 2.70 * area_km2**0.352, stage * 0.30 * area_km2**0.213
    radius_ft = width * depth / (width + 2 * depth) / FT
    return length_ft / (1.486 / 0.045 * radius_ft ** (2 / 3) * slope**0.5) / 3600


def run(folder, elevation, outlets, **options):
    """Run a project; return its first outlet's row and its segments."""
    folder = pipeline.run(make_project(folder, elevation, outlets, **options), summary_only=True).folder
    outlet = read_table(folder, "outlets")[0]
    return outlet, [row for row in read_table(folder, "segments") if row["outlet_id"] == outlet["outlet_id"]]


def value(row, column):
    return float(row[column])


# A plane: every cell drains along its own straight line, towards the multiple of 45 degrees nearest to the fall, until
# it meets the rim and follows that: the outlets lie just inside it, 58 steps from the rim that their line comes from.
OUTLETS = {
    0: (1, 2), 20: (1, 2), 45: (1, 58), 90: (2, 58), 112: (2, 58), 135: (58, 58), 150: (58, 58), 160: (58, 2),
    180: (58, 2), 225: (58, 1), 270: (2, 1), 300: (1, 1), 315: (1, 1),
}  # fmt: skip


@pytest.mark.parametrize("azimuth", OUTLETS)
def test_plane(tmp_path, azimuth):
    slope, cells, cell = 0.08, 59, 10.0
    eighth = round(azimuth / 45)
    step = cell * (math.sqrt(2) if eighth % 2 else 1.0)
    along = slope * math.cos(math.radians(azimuth - 45 * eighth))
    z = inclined_plane(60, 60, slope, azimuth, cell) - 900.0  # low: float32 then holds it to 1e-5 m
    outlet, segments = run(tmp_path, z, {"A": OUTLETS[azimuth]}, overrides={"terrain": {"stream_area": "0.002 km2"}})

    length = (cells - 1) * step
    assert value(outlet, "area_km2") == pytest.approx(cells * cell**2 / 1e6, rel=1e-12)
    assert value(outlet, "path_length_m") == pytest.approx(length, rel=1e-7)  # steps in whole micrometres
    assert value(outlet, "path_slope_pct") == pytest.approx(100 * along, rel=1e-5)
    assert value(outlet, "path_slope_1085_pct") == pytest.approx(100 * along, rel=1e-5)
    assert value(outlet, "basin_slope_pct") == pytest.approx(100 * slope, rel=1e-4)
    assert value(outlet, "relief_m") == pytest.approx(length * along, abs=1e-4)
    assert value(outlet, "centroid_length_m") == pytest.approx(length / 2, rel=1e-7)

    # Sheet to 100 ft (100 S^0.5 / n is 180 ft and more), shallow to the 20th cell, channel from there.
    starts = 19 * step
    assert [row["regime"] for row in segments] == ["sheet", "shallow", "channel"]
    np.testing.assert_allclose(numbers(segments, "to_m"), [30.48, starts, length], rtol=1e-7)
    np.testing.assert_allclose(numbers(segments, "slope"), along, rtol=1e-4)
    middle = math.floor((starts + length) / 2 / step) + 1  # cells above the middle of the channel
    for stage, suffix in ((1.0, ""), (0.5, "_half")):
        times = [
            sheet_h(100, along),
            shallow_h((starts - 30.48) / FT, along),
            channel_h((length - starts) / FT, along, middle * cell**2 / 1e6, stage),
        ]
        np.testing.assert_allclose(numbers(segments, f"travel_time{suffix}_h"), times, rtol=1e-4)
        assert value(outlet, f"tc{suffix}_bankfull_h") == pytest.approx(sum(times), rel=1e-4)
    assert outlet["tc_h"] == outlet["tc_bankfull_h"]


def test_v_valley(tmp_path):
    side, fall, rows, cols = 0.1, 0.02, 60, 41
    z = v_valley(rows, cols, side, fall) - 900.0
    overrides = {"terrain": {"stream_area": "0.01 km2"}}
    outlet, segments = run(tmp_path, z, {"A": (58, 20)}, overrides=overrides)
    assert value(outlet, "area_km2") == pytest.approx(59 * 41 * 1e-4, rel=1e-12)
    assert value(outlet, "path_length_m") == 200 + 580
    assert value(outlet, "relief_m") == pytest.approx(20 + 11.6, abs=1e-4)
    assert value(outlet, "path_slope_pct") == pytest.approx(100 * 31.6 / 780, rel=1e-5)
    # 10 and 85 % of 780 m from the outlet: 702 m and 117 m from the divide, on axis and hillside.
    upper, lower = 0.1 * (200 - 117) + 11.6, 0.02 * 78
    assert value(outlet, "path_slope_1085_pct") == pytest.approx(100 * (upper - lower) / 585, rel=1e-5)
    # The axis itself, between equal sides, has the slope of the valley; all else that of a plane. (Less exact for the
    # one cell of the axis at the rim, whose neighbours beyond it are extrapolated.)
    assert value(outlet, "basin_slope_pct") == pytest.approx(100 * (40 * math.hypot(side, fall) + fall) / 41, rel=1e-4)
    # The centroid lies on the axis in the middle of 59 rows.
    assert value(outlet, "centroid_length_m") == pytest.approx(290, rel=1e-9)

    # Area on the axis: 4,100 m2 a row. Tributaries that raise it by half end 0 and 10 m down the axis; their two pieces
    # of 10 m join the hillside. The third row, 20 m down, is the first channel cell.
    assert [row["regime"] for row in segments] == ["sheet", "shallow", "channel"]
    np.testing.assert_allclose(numbers(segments, "to_m"), [30.48, 220, 780], atol=2e-6)
    slopes = [0.1, (0.1 * (200 - 30.48) + 0.02 * 20) / (220 - 30.48), 0.02]
    np.testing.assert_allclose(numbers(segments, "slope"), slopes, rtol=2e-5)
    # The middle of the channel, 500 m, is the 31st row of the axis.
    times = [
        sheet_h(100, 0.1),
        shallow_h((220 - 30.48) / FT, slopes[1]),
        channel_h(560 / FT, 0.02, 31 * 4100e-6),
    ]
    np.testing.assert_allclose(numbers(segments, "travel_time_h"), times, rtol=1e-4)
    assert value(outlet, "tc_h") == pytest.approx(sum(times), rel=1e-4)
    np.testing.assert_allclose(numbers(segments[-1:], "area_km2"), 31 * 4100e-6)


def test_half_cone(tmp_path):
    """A funnel cut in half: all drains to one point, the corners by the diagonal, whose slope is the cone's."""
    half, cell, slope = 40, 10.0, 0.06
    row, col = np.mgrid[: half + 1, : 2 * half + 1]
    z = 50 + slope * cell * np.hypot(col - half, half - row)
    outlet, segments = run(tmp_path, z, {"A": (half, half)})
    length = half * cell * math.sqrt(2)
    assert value(outlet, "area_km2") == pytest.approx((half + 1) * (2 * half + 1) * 1e-4, rel=1e-12)
    assert value(outlet, "path_length_m") == pytest.approx(length, rel=1e-7)
    assert value(outlet, "path_slope_pct") == pytest.approx(100 * slope, rel=1e-5)
    assert value(outlet, "path_slope_1085_pct") == pytest.approx(100 * slope, rel=1e-5)
    # The centroid lies half way up the middle; the foot of the perpendicular on the diagonal is a quarter along it.
    assert value(outlet, "centroid_length_m") == pytest.approx(length / 4, rel=1e-7)
    np.testing.assert_allclose(numbers(segments, "slope"), slope, rtol=1e-4)


def test_stair(tmp_path):
    """Flat treads drain to their lower edge: the path goes straight down, and its profile is that of the stair."""
    tread, riser, rows, cols = 4, 2.0, 48, 41
    z = np.repeat(riser * np.arange(rows // tread)[::-1], tread)[:, None] + np.zeros(cols)
    outlet, segments = run(tmp_path, z, {"A": (47, 20)})
    # Of the top tread, water leaves over the rim from the first row, and from the second, which is nearer to the rim
    # than to the edge of the tread.
    fall = riser * (rows // tread - 1)
    assert value(outlet, "area_km2") == pytest.approx(46 * 1e-4, rel=1e-12)
    assert value(outlet, "path_length_m") == 450
    assert value(outlet, "relief_m") == fall
    assert value(outlet, "path_slope_pct") == pytest.approx(100 * fall / 450, rel=1e-9)
    # The path begins level for 10 m, falls one riser over the next 10 m and is level again beyond 30.48 m.
    assert [row["regime"] for row in segments] == ["sheet", "shallow"]
    np.testing.assert_allclose(numbers(segments, "slope"), [riser / 30.48, (fall - riser) / 419.52], rtol=1e-7)
    times = [sheet_h(100, riser / 30.48), shallow_h(419.52 / FT, (fall - riser) / 419.52)]
    np.testing.assert_allclose(numbers(segments, "travel_time_h"), times, rtol=1e-6)


def test_stair_of_whole_metres_is_the_same_as_integers(tmp_path):
    z = np.repeat(2.0 * np.arange(12)[::-1], 4)[:, None] + np.abs(np.arange(9) - 4)
    runs = [
        pipeline.run(make_project(tmp_path / name, z.astype(kind), {"A": (46, 4)}), summary_only=True).folder
        for name, kind in (("float", np.float32), ("double", np.float64), ("integer", np.int16))
    ]
    for name in ("outlets", "segments", "cover_shares", "timing"):
        assert len({(folder / f"{name}.csv").read_bytes() for folder in runs}) == 1


@pytest.mark.parametrize(
    ("crs", "origin", "metres"),
    [("EPSG:32614", (500_000.0, 4_300_000.0), 1.0), ("EPSG:2277", (3_000_000.0, 10_000_000.0), 1200 / 3937)],
    ids=["metres", "US survey feet"],
)
def test_valley_on_cells_of_another_unit(tmp_path, crs, origin, metres):
    """A State Plane grid in US survey feet: 30-ft cells are 9.144018 m."""
    cell = 30.0
    z = v_valley(60, 41, 0.1, 0.02, cell * metres) - 900.0
    outlet, segments = run(tmp_path, z, {"A": (58, 20)}, cell=cell, origin=origin, crs=crs)
    assert value(outlet, "area_km2") == pytest.approx(59 * 41 * (cell * metres) ** 2 / 1e6, rel=1e-9)
    assert value(outlet, "path_length_m") == pytest.approx(78 * cell * metres, rel=1e-7)
    assert value(outlet, "path_slope_pct") == pytest.approx(100 * (20 * 0.1 + 58 * 0.02) / 78, rel=1e-5)
    assert value(segments[0], "to_m") == pytest.approx(30.48, abs=2e-6)


@pytest.mark.parametrize("towards", ["south", "east"])
def test_plane_on_geographic_cells(tmp_path, towards):
    """A geodesic program gives the length and the area: true sizes row by row, no projection."""
    count, cell, north, west = 120, 0.0005, 46.0, 7.0
    geod = Geod(ellps="WGS84")
    rows, cols = (count, 5) if towards == "south" else (5, count)
    down = np.arange(count)[::-1] * 3.0
    z = np.broadcast_to(down[:, None] if towards == "south" else down, (rows, cols)).astype(float)
    at = (count - 1, 2) if towards == "south" else (2, count - 1)
    outlet, _ = run(tmp_path, z, {"A": at}, cell=cell, origin=(west, north), crs="EPSG:4326")
    if towards == "south":
        lon = west + 2.5 * cell
        length = geod.inv(lon, north - 0.5 * cell, lon, north - (count - 0.5) * cell)[2]
        box = (west + 2 * cell, west + 3 * cell, north, north - count * cell)
    else:
        lat = north - 2.5 * cell
        length = (count - 1) * geod.inv(west, lat, west + cell, lat)[2]
        box = (west, west + count * cell, lat + cell / 2, lat - cell / 2)
    left, right, top, bottom = box
    lons, lats = np.linspace(left, right, 500), np.linspace(top, bottom, 500)
    ring = (
        np.concatenate([lons, np.full(500, right), lons[::-1], np.full(500, left)]),
        np.concatenate([np.full(500, top), lats, np.full(500, bottom), lats[::-1]]),
    )
    assert value(outlet, "path_length_m") == pytest.approx(length, rel=1e-7)
    assert value(outlet, "area_km2") == pytest.approx(abs(geod.polygon_area_perimeter(*ring)[0]) / 1e6, rel=1e-6)
    assert value(outlet, "path_slope_pct") == pytest.approx(100 * 3.0 * (count - 1) / length, rel=1e-6)


def test_hundred_feet_of_sheet_flow_on_a_30_m_grid(tmp_path):
    z = v_valley(40, 21, 0.1, 0.02, 30.0) - 900.0
    overrides = {"project": {"units": "us"}}
    outlet, segments = run(tmp_path, z, {"A": (38, 10)}, cell=30.0, overrides=overrides)
    assert (segments[0]["from_ft"], segments[0]["to_ft"]) == ("0.0", "100.0")
    assert outlet["sheet_length_ft"] == "100.0"
    assert value(segments[0], "travel_time_h") == pytest.approx(sheet_h(100, 0.1), rel=1e-4)


def test_us_and_si_are_the_same_physics(tmp_path):
    from basinwright.tables import OUTLETS, SEGMENTS

    z = v_valley(60, 41, 0.1, 0.02) - 900.0
    tables = {}
    for system in ("us", "si"):
        overrides = {"project": {"units": system}}
        tables[system] = run(tmp_path / system, z, {"A": (58, 20)}, overrides=overrides)
    periods = ["2", "10", "100"]
    for table, us_row, si_row in (
        (OUTLETS, tables["us"][0], tables["si"][0]),
        *((SEGMENTS, us, si) for us, si in zip(tables["us"][1], tables["si"][1], strict=True)),
    ):
        for us, si in zip(table.fields("us", periods), table.fields("si", periods), strict=True):
            a, b = us_row[us.name], si_row[si.name]
            if us.column.type != "number" or a == b:
                assert a == b
            elif us.stem == "roughness" and us_row["regime"] == "shallow":
                assert float(a) * FT == pytest.approx(float(b), rel=1e-9)
            else:
                assert float(a) * us.factor == pytest.approx(float(b) * si.factor, rel=1e-6), us.name


@pytest.mark.parametrize("declared", ["by the project", "by the raster"])
def test_terrain_in_feet_is_the_terrain_in_metres(tmp_path, declared):
    z = v_valley(60, 41, 0.1, 0.02) - 900.0
    metres, _ = run(tmp_path / "m", z, {"A": (58, 20)})
    unit = "ft" if declared == "by the project" else None
    file = make_project(tmp_path / "ft", z / FT, {"A": (58, 20)}, overrides={"terrain": {"vertical_unit": unit}})
    if unit is None:
        from projects import transform_of

        write_raster(file.parent / "dem.tif", z / FT, transform_of(), "EPSG:32614", unit="foot")
    outcome = pipeline.run(file, summary_only=True)
    feet = read_table(outcome.folder, "outlets")[0]
    assert feet["flags"] == metres["flags"]
    for column in ("relief_m", "path_slope_pct", "basin_slope_pct", "tc_h", "peak_100yr_m3s"):
        assert value(feet, column) == pytest.approx(value(metres, column), rel=1e-5)
    assert feet["path_length_m"] == metres["path_length_m"]


def test_a_void_takes_its_own_cells(tmp_path):
    z = v_valley(60, 41, 0.1, 0.02) - 900.0
    whole, _ = run(tmp_path / "whole", z, {"A": (58, 20)})
    z[10:13, 5:8] = np.nan  # on the hillside: what comes from above it goes round it
    holed, _ = run(tmp_path / "holed", z, {"A": (58, 20)})
    assert value(whole, "area_km2") - value(holed, "area_km2") == pytest.approx(9e-4, rel=1e-9)
    assert holed["path_length_m"] == whole["path_length_m"]
