"""Every option of storm, runoff, timing and unit hydrograph through a whole run, against hand calculations.

The ground is a V-valley of grassland on soil group B: curve number 69 (Technical Release 55, 1986, table 2-2c, pasture
in fair condition), one patch, so that both weightings and every runoff can be worked out on paper.
"""

import numpy as np
import pandas as pd
import pytest
from projects import make_project, transform_of, write_raster

from basinwright import pipeline
from basinwright.errors import InputRejected
from basinwright.units import KM2_PER_AC

OUTLETS = {"low": (59, 20), "high": (30, 20)}
MM = 25.4

DDF = """duration_min,depth_2yr_in,depth_10yr_in,depth_100yr_in
6,0.40,0.60,0.90
15,0.75,1.10,1.60
30,1.05,1.55,2.30
60,1.35,2.00,3.00
120,1.60,2.40,3.60
360,2.10,3.20,4.90
720,2.60,3.90,6.00
1440,3.10,4.60,7.20
"""


def valley():
    row, col = np.mgrid[:60, :41]
    return 200.0 - 0.25 * row + 0.6 * np.abs(col - 20)


def run(folder, overrides=None, files=None, **more):
    file = make_project(folder, valley(), OUTLETS, overrides=overrides, **more)
    for name, text in (files or {}).items():
        (folder / name).write_text(text)
    return pipeline.run(file)


def table(outcome, name="outlets", index="outlet_id"):
    frame = pd.read_csv(outcome.folder / f"{name}.csv", dtype={"outlet_id": str})
    return frame.set_index(index) if index else frame


def runoff_mm(depth_mm, curve_number, ratio=0.2):
    """Technical Release 55 (1986), eq. 2-1 to 2-4, in inches."""
    retention = 1000.0 / curve_number - 10.0
    depth = depth_mm / MM
    return MM * max(depth - ratio * retention, 0.0) ** 2 / (depth + (1.0 - ratio) * retention)


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    return table(run(tmp_path_factory.mktemp("plain")))


def test_plain_runoff_is_that_of_the_handbook(plain):
    assert plain.curve_number.tolist() == [69.0, 69.0]
    assert plain.runoff_10yr_mm.to_numpy() == pytest.approx(runoff_mm(4.6 * MM, 69.0), rel=1e-12)


@pytest.mark.parametrize(
    ("options", "curve_number"),
    [({"moisture": "I"}, 50.0), ({"moisture": "III"}, 84.0)],  # NEH 630 ch. 10, table 10-1, row 69
)
def test_moisture_classes_take_the_handbook_row(tmp_path, options, curve_number):
    outlets = table(run(tmp_path, {"runoff": options}))
    assert outlets.runoff_10yr_mm.iloc[0] == pytest.approx(runoff_mm(4.6 * MM, curve_number), rel=1e-12)
    assert outlets.curve_number.iloc[0] == 69.0  # the lag equation keeps class II
    assert outlets.curve_number_used.iloc[0] == pytest.approx(curve_number, abs=1e-9)


def test_abstraction_ratio_of_a_twentieth(tmp_path):
    # S0.05 = 1.33 S0.20^1.15 in (Hawkins et al. 2002); Q = (P - 0.05 S)^2 / (P + 0.95 S)
    retention = 1.33 * (1000.0 / 69.0 - 10.0) ** 1.15
    expected = MM * (4.6 - 0.05 * retention) ** 2 / (4.6 + 0.95 * retention)
    outlets = table(run(tmp_path, {"runoff": {"initial_abstraction_ratio": 0.05}}))
    assert outlets.runoff_10yr_mm.iloc[0] == pytest.approx(expected, rel=1e-12)


def test_weightings_differ_where_patches_do_and_the_flag_says_so(tmp_path):
    cover = np.full((60, 41), 71)
    cover[:, :20] = 24  # commercial: curve number 92 on group B
    by_runoff = run(tmp_path / "a", cover=cover)
    by_number = run(tmp_path / "b", {"runoff": {"weighting": "curve_number"}}, cover=cover)
    for outcome in (by_runoff, by_number):
        assert "WEIGHTING_DIFFERS" in {flag.key for flag in outcome.flags}
    assert (table(by_runoff).runoff_2yr_mm > table(by_number).runoff_2yr_mm).all()


@pytest.mark.parametrize("shape", ["triangular", "delmarva", "snyder", "clark", "clark_terrain", "travel_time"])
def test_every_shape_keeps_the_volume(tmp_path, shape, plain):
    outcome = run(tmp_path, {"unit_hydrograph": {"shape": shape}})
    outlets, unit = table(outcome), table(outcome, "unit_hydrographs", None)
    floods = table(outcome, "hydrographs", None)
    assert outlets.runoff_10yr_mm.tolist() == plain.runoff_10yr_mm.tolist()
    assert outlets.peak_10yr_m3s.tolist() != plain.peak_10yr_m3s.tolist()
    for outlet_id, row in outlets.iterrows():
        step_s = row.unit_duration_h * 3600.0
        one = unit[unit.outlet_id == outlet_id].flow_m3s_per_mm.sum() * step_s
        assert one == pytest.approx(row.area_km2 * 1000.0, rel=1e-6)
        flood = floods[(floods.outlet_id == outlet_id) & (floods.return_period_yr == 10.0)]
        assert flood.flow_m3s.sum() * step_s == pytest.approx(row.runoff_10yr_mm * row.area_km2 * 1000.0, rel=1e-4)


def test_a_lower_peak_rate_factor_lowers_the_peak(tmp_path, plain):
    outlets = table(run(tmp_path, {"unit_hydrograph": {"shape": "gamma", "peak_rate_factor": 300}}))
    assert (outlets.unit_peak_m3s_per_mm / plain.unit_peak_m3s_per_mm).to_numpy() == pytest.approx(300 / 484, rel=1e-9)


def test_depths_by_duration_give_depths_storms_and_the_rational_method(tmp_path):
    scheme = "code,cn_a,cn_b,cn_c,cn_d,sheet_n,shallow,runoff_coefficient\n71,49,69,79,84,0.15,short_grass,0.3\n"
    overrides = {
        "storm": {"distribution": "balanced", "ddf": "ddf.csv", "depths": None},
        "cover": {"scheme": "own.csv"},
    }
    outcome = run(tmp_path, overrides, {"ddf.csv": DDF, "own.csv": scheme})
    outlets, checks = table(outcome), table(outcome, "cross_checks", None)
    assert outlets.depth_10yr_mm.tolist() == pytest.approx([4.6 * MM] * 2, rel=1e-12)
    floods = table(outcome, "hydrographs", None)
    burst = floods[(floods.outlet_id == "low") & (floods.return_period_yr == 10.0)]
    per_hour = int(1.0 / outlets.unit_duration_h["low"])
    assert burst.rain_mm.rolling(per_hour).sum().max() <= 2.00 * MM * (1 + 1e-9)  # no hour over the 1-hour depth
    assert burst.rain_mm.sum() == pytest.approx(4.6 * MM, rel=1e-9)
    rational = checks[(checks.method == "rational") & (checks.outlet_id == "high") & (checks.return_period_yr == 10.0)]
    row = rational.iloc[0]
    hours = outlets.tc_h["high"]
    # Q = C i A in cfs, in/h, acres, the depth between durations on logarithmic scales of both
    known = np.log([6 / 60, 15 / 60, 30 / 60, 1, 2])
    depth = np.exp(np.interp(np.log(hours), known, np.log([0.60, 1.10, 1.55, 2.00, 2.40])))
    cfs = 0.3 * depth / hours * outlets.area_km2["high"] / KM2_PER_AC
    assert bool(row.applicable)
    assert row.peak_m3s == pytest.approx(cfs * 0.3048**3, rel=1e-9)


def test_graphical_method_stands_beside_the_hydrograph(tmp_path):
    outcome = run(tmp_path, {"timing": {"minimum": "12 min"}})
    checks = table(outcome, "cross_checks", None)
    graphical = checks[checks.method == "graphical"]
    assert graphical.applicable.all()
    assert graphical.ratio.between(0.8, 1.25).all()  # the unit duration and Tp = D/2 + 0.6 Tc part the two


def test_nested_storm_and_a_storm_of_six_hours(tmp_path):
    storm = {"distribution": "nested", "ddf": "ddf.csv", "depths": None, "duration": "6 h"}
    outlets = table(run(tmp_path, {"storm": storm}, {"ddf.csv": DDF}))
    assert outlets.depth_100yr_mm.tolist() == pytest.approx([4.9 * MM] * 2, rel=1e-12)


def test_critical_duration_is_never_lower_than_a_fixed_one(tmp_path):
    base = {"distribution": "balanced", "ddf": "ddf.csv", "depths": None}
    short = table(run(tmp_path / "6h", {"storm": base | {"duration": "6 h"}}, {"ddf.csv": DDF}))
    found = run(tmp_path / "critical", {"storm": base | {"critical_duration": True}}, {"ddf.csv": DDF})
    outlets = table(found)
    assert (outlets.peak_100yr_m3s >= short.peak_100yr_m3s * (1 - 1e-9)).all()
    assert set(outlets.critical_duration_h) <= {0.25, 0.5, 1.0, 2.0, 6.0, 12.0, 24.0}


def test_areal_reduction_is_the_published_one(tmp_path, plain):
    outlets = table(run(tmp_path, {"storm": {"areal_reduction": "leclerc_schaake"}}))
    square_miles = outlets.area_km2 / 2.589988110336
    root = 1.1 * 24.0**0.25
    factor = 1.0 - np.exp(-root) + np.exp(-root - 0.01 * square_miles)  # Leclerc and Schaake 1972
    assert outlets.areal_factor.to_numpy() == pytest.approx(factor.to_numpy(), rel=1e-12)
    assert outlets.depth_10yr_mm.tolist() == plain.depth_10yr_mm.tolist()
    expected = [runoff_mm(4.6 * MM * each, 69.0) for each in factor]
    assert outlets.runoff_10yr_mm.tolist() == pytest.approx(expected, rel=1e-12)


def test_depth_rasters_are_averaged_over_each_basin(tmp_path):
    storm = {"depths": None, "depth_rasters": {"10": "d10.tif"}, "two_year_depth": "3.1 in"}
    file = make_project(tmp_path, valley(), OUTLETS, overrides={"storm": storm})
    rising = np.repeat(np.linspace(4.0, 5.0, 60)[:, None], 41, axis=1).astype(np.float64)  # towards the outlet
    write_raster(tmp_path / "d10.tif", rising, transform_of(), "EPSG:32614")
    outlets = table(pipeline.run(file))
    row, col = np.mgrid[:60, :41]
    basin = row + np.abs(col - 20) <= 30  # the sides fall diagonally: 0.85 m over root 2 cells beats 0.6 m over one
    assert outlets.depth_10yr_mm["high"] == pytest.approx(rising[basin].mean() * MM, rel=1e-6)
    assert outlets.depth_10yr_mm["high"] < outlets.depth_10yr_mm["low"]


def test_mapped_impervious_area_composites_developed_classes_from_their_pervious_row(tmp_path):
    percent = np.full((60, 41), 50.0)
    sections = {"cover": {"impervious": "imp.tif"}}
    file = make_project(tmp_path / "connected", valley(), OUTLETS, cover=23, overrides=sections)
    write_raster(tmp_path / "connected" / "imp.tif", percent, transform_of(), "EPSG:32614")
    outcome = pipeline.run(file)
    outlets, shares = table(outcome), table(outcome, "cover_shares", None)
    # open space in good condition on group B: 61; CNc = 61 + 0.50 (98 - 61), Technical Release 55 (1986), fig. 2-3
    assert outlets.curve_number.iloc[0] == pytest.approx(79.5, rel=1e-12)
    assert outlets.impervious_pct.iloc[0] == pytest.approx(50.0, rel=1e-12)
    before = {path.name: path.read_bytes() for path in outcome.folder.glob("*.csv")}
    pipeline.retime(outcome.folder)
    assert {path.name: path.read_bytes() for path in outcome.folder.glob("*.csv")} == before
    assert set(shares.curve_number) == {79.5}


def test_unconnected_impervious_area_up_to_thirty_percent(tmp_path):
    sections = {"cover": {"impervious": "imp.tif", "connected_fraction": 0.5}}
    file = make_project(tmp_path, valley(), OUTLETS, cover=22, overrides=sections)
    write_raster(tmp_path / "imp.tif", np.full((60, 41), 20.0), transform_of(), "EPSG:32614")
    # CNc = 61 + 0.20 (98 - 61)(1 - 0.5 x 0.5), Technical Release 55 (1986), fig. 2-4
    assert table(pipeline.run(file)).curve_number.iloc[0] == pytest.approx(61 + 0.20 * 37 * 0.75, rel=1e-12)


def test_jarrett_slows_a_steep_channel_and_flags_what_is_beyond_his_data(tmp_path, plain):
    outcome = run(tmp_path, {"channel": {"roughness": "jarrett"}})
    segments = table(outcome, "segments", None)
    channel = segments[segments.regime == "channel"].iloc[0]
    radius_ft, slope = channel.hydraulic_radius_m / 0.3048, channel.slope
    assert channel.roughness == pytest.approx(0.39 * slope**0.38 * radius_ft**-0.16, rel=1e-9)  # Jarrett 1984, eq. 2
    assert (table(outcome).tc_h > plain.tc_h).all()
    assert "JARRETT_RANGE" in {flag.key for flag in outcome.flags}  # R under 0.5 ft


def test_lag_and_other_methods_can_be_adopted(tmp_path, plain):
    outlets = table(run(tmp_path / "lag", {"timing": {"adopt": "nrcs_lag"}}))
    row = outlets.loc["low"]
    retention = 1000.0 / 69.0 - 10.0
    lag = (row.path_length_m / 0.3048) ** 0.8 * (retention + 1.0) ** 0.7 / (1900.0 * row.basin_slope_pct**0.5)
    assert row.tc_h == pytest.approx(lag / 0.6, rel=1e-12)  # NEH 630 ch. 15 eq. 15-4a, 15-3
    methods = table(run(tmp_path / "kerby", {"timing": {"adopt": "kerby_kirpich"}}), "timing", None)
    assert methods[methods.adopted].method.unique().tolist() == ["kerby_kirpich"]


def test_a_pipe_and_a_lined_ditch_are_timed_by_manning(tmp_path):
    outcome = run(tmp_path)
    path = outcome.folder / "segments.csv"
    rows = pd.read_csv(path, dtype=str, keep_default_na=False)
    last = rows[rows.outlet_id == "low"].index[-1]
    rows.loc[last, ["regime", "roughness", "hydraulic_radius_m", "hydraulic_radius_half_m"]] = [
        "pipe",
        "0.013",
        "0.15",
        "",
    ]
    rows.to_csv(path, index=False)
    pipeline.retime(outcome.folder)
    pipe = table(outcome, "segments", None).loc[last]
    velocity_fps = 1.486 / 0.013 * (0.15 / 0.3048) ** (2 / 3) * pipe.slope**0.5  # full: R = D / 4
    assert pipe.velocity_mps == pytest.approx(velocity_fps * 0.3048, rel=1e-9)
    assert pipe.velocity_half_mps == pipe.velocity_mps


@pytest.mark.parametrize(
    ("storm", "problem"),
    [
        ({"distribution": "balanced", "depths": None, "two_year_depth": "3 in"}, "storm.ddf: missing"),
        ({"critical_duration": True}, "storm.critical_duration: needs a storm that can be built"),
        ({"depth_rasters": {"10": "d.tif"}}, "storm.depth_rasters: given beside depths"),
    ],
)
def test_options_that_do_not_go_together(tmp_path, storm, problem):
    with pytest.raises(InputRejected, match=problem.replace(".", r"\.")):
        run(tmp_path, {"storm": storm})


@pytest.mark.parametrize(
    ("text", "problem"),
    [
        ("hours,depth_10yr_in\n1,2\n", "header: has unknown columns hours"),
        ("duration_h,depth_10yr_in\n1,2\n24,x\n", "row 3, depth_10yr_in: 'x' is not a number"),
        ("duration_h,depth_10yr_in\n1,2\n24,1\n", "less than for the shorter duration"),
        ("duration_h,depth_10yr_in\n5,2\n24,4\n", "divide"),
    ],
)
def test_faults_of_a_table_of_depths(tmp_path, text, problem):
    storm = {"distribution": "balanced", "ddf": "ddf.csv", "depths": None, "two_year_depth": "3 in"}
    with pytest.raises(InputRejected) as rejected:
        run(tmp_path, {"storm": storm}, {"ddf.csv": text})
    assert problem in str(rejected.value)
    assert not (tmp_path / "out").exists()
