"""basin_parameters.csv: on a straight valley, where the reach between two outlets is known on paper."""

import math

import numpy as np
import pytest
from projects import make_project, numbers, read_table, v_valley, walled

from basinwright import pipeline
from basinwright.tables import BASIN_PARAMETERS, OUTLETS

CELL_M = 10.0


@pytest.fixture(scope="module")
def valley(tmp_path_factory):
    """Run a valley with two outlets on its axis, a third on the cell of the first, and one in a void."""
    elevation = walled(v_valley(60, 21, 0.05, 0.02))
    elevation[2, 2] = np.nan
    outlets = {"up": (23, 13), "twin": (23, 13), "down": (53, 13), "void": (2, 2)}
    file = make_project(tmp_path_factory.mktemp("valley"), elevation, outlets)
    folder = pipeline.run(file).folder
    rows = {row["outlet_id"]: row for row in read_table(folder, "basin_parameters")}
    return folder, rows


def test_the_reach_between_two_outlets(valley):
    _, rows = valley
    up, down = rows["up"], rows["down"]
    assert float(up["reach_length_m"]) == 30 * CELL_M
    assert float(up["reach_slope"]) == pytest.approx(0.02, rel=1e-6)
    # Bieger et al. (2015), United States: W = 2.70 A^0.352, D = 0.30 A^0.213; A where half of the reach is passed.
    area = float(up["reach_area_km2"])
    assert float(up["reach_bankfull_width_m"]) == pytest.approx(2.70 * area**0.352, rel=1e-12)
    assert float(up["reach_bankfull_depth_m"]) == pytest.approx(0.30 * area**0.213, rel=1e-12)
    assert float(up["area_km2"]) < area < float(down["area_km2"])
    middle = (float(up["area_km2"]) + float(down["area_km2"])) / 2
    assert area == pytest.approx(middle, abs=27 * CELL_M**2 / 1e6), "the area grows evenly along a straight valley"
    assert all(down[name] == "" for name in rows["down"] if name.startswith("reach_"))


def test_areas_between_outlets_add_up(valley):
    _, rows = valley
    # Outlets on one cell are not upstream of each other, and count once for the one below.
    assert rows["up"]["incremental_area_km2"] == rows["twin"]["incremental_area_km2"] == rows["up"]["area_km2"]
    below = float(rows["down"]["area_km2"]) - float(rows["up"]["area_km2"])
    assert float(rows["down"]["incremental_area_km2"]) == pytest.approx(below, rel=1e-12)


def test_initial_abstraction_by_hand(valley):
    _, rows = valley
    # Grassland in fair condition on group B has CN 69: S = 25400 / 69 - 254 = 114.12 mm, Ia = 0.2 S = 22.82 mm.
    assert float(rows["up"]["curve_number"]) == pytest.approx(69.0, rel=1e-12)
    assert float(rows["up"]["initial_abstraction_mm"]) == pytest.approx(22.82, abs=0.005)


def test_the_rest_is_copied(valley):
    folder, rows = valley
    copied = {c.stem for c in BASIN_PARAMETERS.columns} & {c.stem for c in OUTLETS.columns}
    assert len(copied) == 20
    for outlet in read_table(folder, "outlets"):
        for stem in copied:
            name = OUTLETS.column(stem).name("si")
            assert rows[outlet["outlet_id"]][name] == outlet[name]
    segments = read_table(folder, "segments")
    last = [row for row in segments if row["outlet_id"] == "up"][-1]
    assert rows["up"]["outlet_elevation_m"] == last["bottom_elevation_m"]


def test_an_outlet_that_failed_has_its_identifiers_only(valley):
    _, rows = valley
    assert {name for name, cell in rows["void"].items() if cell} == {"outlet_id"}


def test_retime_writes_the_same(valley):
    folder, _ = valley
    before = (folder / "basin_parameters.csv").read_bytes()
    pipeline.retime(folder)
    assert (folder / "basin_parameters.csv").read_bytes() == before


@pytest.mark.xdist_group("sample")
def test_on_the_sample(sample):
    rows = read_table(sample, "basin_parameters")
    outlets = read_table(sample, "outlets")
    assert [row["outlet_id"] for row in rows] == [row["outlet_id"] for row in outlets]
    assert (numbers(rows, "incremental_area_mi2") > 0).all()
    by_id = {row["outlet_id"]: row for row in rows}
    above = [row for row in rows if row["downstream_outlet_id"] == "TC-004"]
    left = float(by_id["TC-004"]["area_mi2"]) - sum(float(row["area_mi2"]) for row in above)
    assert float(by_id["TC-004"]["incremental_area_mi2"]) == pytest.approx(left, rel=1e-12)
    for row in rows:
        assert (row["downstream_outlet_id"] == "") == (row["reach_length_ft"] == "")
        if row["reach_length_ft"]:
            length = float(row["reach_length_ft"])
            straight = math.dist(*((float(o["x"]), float(o["y"])) for o in outlets
                                   if o["outlet_id"] in (row["outlet_id"], row["downstream_outlet_id"])))  # fmt: skip
            assert straight / 0.3048 <= length
