"""The curve-number worksheet: areas, means, gaps and assumptions, known on paper."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.cover import CoverLayer, Patches, SoilLayer, combine, cover_shares
from basinwright.schemes import load_scheme

NLCD = load_scheme("nlcd")
LABELS = ("A", "B", "C", "D", "assumed", "9")


def shares_of(areas, gap_limit=0.02, missing="D"):
    """Return the shares of basins given as {(cover, soil): area} each."""
    pairs = list(dict.fromkeys(pair for basin in areas for pair in basin))
    patches = Patches(np.zeros((1, 1), np.int32), tuple(c for c, _ in pairs), tuple(s for _, s in pairs), missing)
    matrix = np.array([[basin.get(pair, 0.0) for pair in pairs] for basin in areas])
    return cover_shares(matrix, patches, NLCD, gap_limit)


def rows_of(shares, outlet):
    chosen = shares.rows["outlet"] == outlet
    names = ("cover", "soil_group", "area_km2", "curve_number", "impervious_pct")
    return list(zip(*(shares.rows[name][chosen].tolist() for name in names), strict=True))


class TestRows:
    def test_a_worksheet_by_hand(self):
        # TR-55 (1986) table 2-2: row crops, straight row, good: B 78, C 85; 1/3-acre lots, C 81, 30 % impervious.
        shares = shares_of([{("82", "B"): 2.0, ("22", "C"): 1.0, ("82", "C"): 1.0}])
        assert rows_of(shares, 0) == [
            ("82", "B", 2.0, 78.0, 0.0), ("82", "C", 1.0, 85.0, 0.0), ("22", "C", 1.0, 81.0, 30.0)
        ]  # fmt: skip
        assert shares.curve_number[0] == (2 * 78 + 81 + 85) / 4
        assert shares.impervious_pct[0] == 30 / 4
        assert (shares.open_water_pct[0], shares.gap_share[0]) == (0.0, 0.0)
        assert shares.rows["source"][0] == "TR-55 (1986) table 2-2b: row crops, straight row, good condition"
        assert (shares.failed, shares.flags) == ({}, [])

    def test_rows_are_by_outlet_and_none_is_empty(self):
        shares = shares_of([{("41", "A"): 1.0}, {("41", "B"): 3.0, ("41", "A"): 2.0}])
        assert shares.rows["outlet"].tolist() == [0, 1, 1]
        assert shares.rows["soil_group"].tolist() == ["A", "A", "B"]
        assert shares.rows["area_km2"].tolist() == [1.0, 2.0, 3.0]

    def test_water_and_wetlands_ask_for_no_soil(self):
        shares = shares_of([{("11", None): 1.0, ("11", "9"): 1.0, ("11", "assumed"): 1.0, ("95", None): 1.0}])
        assert rows_of(shares, 0) == [("11", "any", 3.0, 98.0, 0.0), ("95", "any", 1.0, 78.0, 0.0)]
        assert (shares.failed, shares.flags) == ({}, [])
        assert shares.open_water_pct[0] == 75.0

    def test_names_are_found(self):
        assert rows_of(shares_of([{("Mixed Forest", "B"): 1.0}]), 0) == [("43", "B", 1.0, 60.0, 0.0)]


class TestDoubts:
    def test_an_assumed_group_joins_its_row_and_is_flagged(self):
        shares = shares_of([{("41", "D"): 3.0, ("41", "assumed"): 1.0}, {("41", "D"): 1.0}])
        assert rows_of(shares, 0) == [("41", "D", 4.0, 79.0, 0.0)]
        assert shares.assumed_share.tolist() == [0.25, 0.0]
        assert shares.flags == [(0, "SOILS_ASSUMED", "group D is assumed on 25.00% of the basin")]

    def test_a_small_gap_is_flagged_and_the_rest_stands_for_it(self):
        shares = shares_of([{("41", "B"): 99.0, (None, "B"): 0.25, ("41", None): 0.75}])
        assert shares.flags == [
            (0, "COVER_GAP", "1.00% of the basin has no curve number: no soils (0.75%); no land cover (0.25%)")
        ]
        assert shares.failed == {}
        assert shares.curve_number[0] == 60.0
        assert shares.rows["area_km2"].sum() == 99.0

    def test_a_gap_over_the_limit_fails_the_outlet_alone(self):
        shares = shares_of([{("41", "B"): 97.0, ("12", "B"): 2.0, ("41", "9"): 1.0}, {("41", "B"): 1.0}])
        assert shares.failed == {
            0: "3.00% of the basin has no curve number: "
            "land-cover value '12', which the scheme does not list (2.00%); "
            "soils value '9', which soils.groups does not list (1.00%); cover.gap_limit is 2.00%"
        }
        assert shares.flags == []
        assert shares.gap_share.tolist() == [0.03, 0.0]

    def test_the_limit_itself_is_tolerated(self):
        basin = {("41", "B"): 3.0, (None, None): 1.0}
        assert shares_of([basin], gap_limit=0.25).failed == {}
        assert list(shares_of([basin], gap_limit=0.24).failed) == [0]

    def test_nothing_known_fails_whatever_the_limit(self):
        shares = shares_of([{(None, "B"): 1.0}], gap_limit=1.0)
        assert shares.failed == {
            0: "100.00% of the basin has no curve number: no land cover (100.00%); cover.gap_limit is 100.00%"
        }
        assert np.isnan(shares.curve_number[0])
        assert len(shares.rows["outlet"]) == 0

    def test_a_basin_without_area_is_left_to_the_caller(self):
        shares = shares_of([{("41", "B"): 0.0}])
        assert np.isnan(shares.curve_number[0])
        assert (shares.failed, shares.flags) == ({}, [])


def layers(classes, groups):
    return (
        CoverLayer(np.array(classes, np.int16), ("11", "12", "41", "82"), {}),
        SoilLayer(np.array(groups, np.int16), LABELS, "D", {}),
    )


class TestCombine:
    def test_pairs_that_occur(self):
        patches = combine(*layers([[0, 2, 2, -1]], [[-1, 1, 1, 3]]))
        assert patches.cells.tolist() == [[1, 2, 2, 0]]
        assert list(zip(patches.cover, patches.soil, strict=True)) == [(None, "D"), ("11", None), ("41", "B")]
        assert (len(patches), patches.missing) == (3, "D")

    @settings(max_examples=40, deadline=None)
    @given(st.integers(0, 2**32 - 1), st.integers(1, 12), st.integers(1, 12))
    def test_every_cell_keeps_its_pair_and_areas_add_up(self, seed, nrows, ncols):
        rng = np.random.default_rng(seed)
        classes, groups = rng.integers(-1, 4, (nrows, ncols)), rng.integers(-1, 6, (nrows, ncols))
        cover, soils = layers(classes, groups)
        patches = combine(cover, soils)
        codes, labels = np.array([*cover.codes, None], object), np.array([*LABELS, None], object)
        assert (np.array(patches.cover, object)[patches.cells] == codes[classes]).all()
        assert (np.array(patches.soil, object)[patches.cells] == labels[groups]).all()
        area = np.bincount(patches.cells.ravel(), minlength=len(patches)).astype(float)[None]
        shares = cover_shares(area, patches, NLCD, 1.0)
        assert shares.rows["area_km2"].sum() == pytest.approx((1 - shares.gap_share[0]) * nrows * ncols)
        if len(shares.rows["outlet"]):
            lowest, highest = shares.rows["curve_number"].min(), shares.rows["curve_number"].max()
            assert lowest - 1e-9 <= shares.curve_number[0] <= highest + 1e-9

    def test_blocks_do_not_show(self, monkeypatch):
        rng = np.random.default_rng(8)
        cover, soils = layers(rng.integers(-1, 4, (9, 7)), rng.integers(-1, 6, (9, 7)))
        whole = combine(cover, soils)
        monkeypatch.setattr("basinwright.cover.shares.BLOCK_CELLS", 14)
        np.testing.assert_array_equal(combine(cover, soils).cells, whole.cells)


def test_curve_number_on_any_group_needs_a_class_without_soil():
    assert NLCD.classes["11"].curve_number_on("any") == 98.0
    assert NLCD.classes["41"].curve_number_on("B") == 60.0
    with pytest.raises(KeyError):
        NLCD.classes["41"].curve_number_on("any")
