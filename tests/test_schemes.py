"""Cover schemes: the shipped ones copy the handbook rows they name; a user's own is checked cell by cell."""

import math

import pytest

from basinwright import published
from basinwright.errors import InputRejected
from basinwright.schemes import GROUPS, SHIPPED, Scheme, load_scheme, read_scheme, shallow_keys

HANDBOOK = {row["key"]: row for row in published.table("curve_numbers_tr55").rows}
ROUGHNESS = {row["key"]: float(row["n"]) for row in published.table("sheet_roughness_tr55").rows}


def printed(key, group):
    text = HANDBOOK[key][f"cn_{group.lower()}"]
    return float(text) if text else None


class TestHandbookTables:
    def test_districts_follow_from_open_space_and_pavement(self):
        # TR-55 (1986) table 2-2a, note 2: composite of open space in good condition and 98 by impervious share.
        # One printed value differs: 1/3-acre lots on group D, 80 + 0.30 x 18 = 85.4, are printed as 86.
        districts = [row for row in HANDBOOK.values() if row["impervious_pct"]]
        assert len(districts) == 8
        for row in districts:
            share = float(row["impervious_pct"]) / 100
            for group in GROUPS:
                good = printed("open_space_good", group)
                composite = math.floor(good + share * (98 - good) + 0.5)
                odd = (row["key"], group) == ("residential_third_acre", "D")
                assert printed(row["key"], group) == composite + odd, row["key"]

    def test_open_space_equals_pasture(self):
        # TR-55 (1986) table 2-2a, note 3: curve numbers of open space are equivalent to those of pasture.
        for condition in ("poor", "fair", "good"):
            assert [printed(f"open_space_{condition}", g) for g in GROUPS] == [
                printed(f"pasture_{condition}", g) for g in GROUPS
            ]

    def test_curve_numbers_rise_with_the_group_and_fall_with_the_condition(self):
        for key, row in HANDBOOK.items():
            values = [value for group in GROUPS if (value := printed(key, group)) is not None]
            assert len(values) >= 3
            assert values == sorted(values), key
            assert 30 <= values[0] <= values[-1] <= 98
            better = key.replace("_poor", "_good")
            if row["condition"] == "poor":
                assert all((printed(better, g) or 0) <= (printed(key, g) or 0) for g in GROUPS), key

    def test_spot_values(self):
        # TR-55 (1986), as printed: woods fair; 1/4-acre lots; meadow; row crops in straight rows, poor.
        expected = {
            "woods_fair": (36, 60, 73, 79), "residential_quarter_acre": (61, 75, 83, 87), "meadow": (30, 58, 71, 78),
            "row_crop_sr_poor": (72, 81, 88, 91), "row_crop_ct_good": (62, 71, 78, 81), "farmsteads": (59, 74, 82, 86),
        }  # fmt: skip
        for key, values in expected.items():
            assert tuple(printed(key, group) for group in GROUPS) == values
        assert (ROUGHNESS["range_natural"], ROUGHNESS["bermudagrass"], ROUGHNESS["woods_dense"]) == (0.13, 0.41, 0.80)

    def test_dyer_county_example(self):
        # TR-55 (1986) examples 2-1 and 2-2 take these curve numbers from table 2-2.
        assert (printed("pasture_good", "B"), printed("pasture_good", "C")) == (61, 74)
        assert (printed("residential_half_acre", "B"), printed("residential_half_acre", "C")) == (70, 80)
        assert printed("open_space_good", "C") == 74


class TestShipped:
    @pytest.mark.parametrize("name", SHIPPED)
    def test_every_value_copies_the_row_named(self, name):
        scheme = load_scheme(name)
        crosswalk = published.table(f"cover_{name}_crosswalk").rows
        assert [row["code"] for row in crosswalk] == list(scheme.classes)
        for row in crosswalk:
            entry = scheme.classes[row["code"]]
            for group in GROUPS:
                taken = "D" if row["groups"] == "D for all" else group
                for values, key in (
                    (entry.curve_number, row["curve_number_row"]),
                    (entry.pervious_curve_number, row["pervious_row"]),
                ):
                    value = printed(key, taken)
                    assert values[group] == (value if value is not None else printed(row["group_a_row"], taken))
            assert entry.sheet_n == ROUGHNESS[row["sheet_n_row"]]
            assert entry.shallow == row["shallow_row"]
            assert entry.impervious_pct == float(HANDBOOK[row["curve_number_row"]]["impervious_pct"] or 0)
            assert f"table {HANDBOOK[row['curve_number_row']]['table']}" in entry.source
            assert row["why"]

    @pytest.mark.parametrize("name", SHIPPED)
    def test_every_retardance_is_one_of_kerby(self, name):
        kerby = {row["retardance_n"] for row in published.table("kerby_retardance").rows}
        assert {row["retardance_n"] for row in published.table(f"cover_{name}").rows} <= kerby | {""}

    @pytest.mark.parametrize(
        ("name", "no_soil", "water"),
        [("nlcd", "11 90 95", "11"), ("nlcd_arid", "11 90 95", "11"), ("worldcover", "70 80 90 95", "80")],
    )
    def test_wetlands_and_water_do_not_ask_for_soil(self, name, no_soil, water):
        scheme = load_scheme(name)
        assert [entry.code for entry in scheme.classes.values() if not entry.needs_soil] == no_soil.split()
        assert [entry.code for entry in scheme.classes.values() if entry.open_water] == [water]
        assert set(scheme.classes[water].curve_number.values()) == {98.0}

    def test_worldcover_has_the_legend_of_the_product(self):
        # ESA WorldCover 10 m 2021 v200, Product User Manual V2.0 (2022): codes and names of the map layer.
        legend = {
            "10": "Tree cover", "20": "Shrubland", "30": "Grassland", "40": "Cropland", "50": "Built-up",
            "60": "Bare / sparse vegetation", "70": "Snow and ice", "80": "Permanent water bodies",
            "90": "Herbaceous wetland", "95": "Mangroves", "100": "Moss and lichen",
        }  # fmt: skip
        classes = load_scheme("worldcover").classes
        assert {code: entry.name for code, entry in classes.items()} == legend
        assert "our judgement" in published.table("cover_worldcover").source.document

    def test_look_up_by_code_or_name(self):
        scheme = load_scheme("nlcd")
        assert scheme.find("41") is scheme.find("Deciduous Forest") is not None
        assert scheme.find("12") is None

    def test_there_and_back(self):
        scheme = load_scheme("nlcd_arid")
        assert Scheme.from_rows("nlcd_arid", scheme.to_rows()) == scheme

    def test_unknown_name(self):
        with pytest.raises(KeyError, match="no scheme 'nlcd2' is shipped; shipped: nlcd, nlcd_arid, worldcover"):
            load_scheme("nlcd2")


HEADER = "code,cn_a,cn_b,cn_c,cn_d,sheet_n,shallow"


class TestOwn:
    @pytest.fixture
    def rejected(self, tmp_path):
        def read(text):
            path = tmp_path / "own.csv"
            path.write_text(text, encoding="utf-8")
            with pytest.raises(InputRejected) as caught:
                read_scheme(path)
            return [str(problem).replace(f"{tmp_path}/", "") for problem in caught.value.problems]

        return read

    def test_the_least_a_scheme_needs(self, tmp_path):
        path = tmp_path / "own.csv"
        path.write_text(f"\ufeff{HEADER}\n wood ,36,60,73,79,0.4,forest_litter_hay\n\n")
        scheme = read_scheme(path)
        entry = scheme.classes["wood"]
        assert (entry.name, entry.impervious_pct, entry.open_water, entry.source) == ("wood", 0.0, False, "own.csv")
        assert entry.pervious_curve_number == entry.curve_number == {"A": 36.0, "B": 60.0, "C": 73.0, "D": 79.0}
        assert Scheme.from_rows(scheme.name, scheme.to_rows()) == scheme

    def test_a_shipped_scheme_is_a_template(self, tmp_path):
        path = tmp_path / "own.csv"
        table = published.table("cover_nlcd")
        path.write_text(
            "\n".join(
                [",".join(table.columns), *(",".join(f'"{cell}"' for cell in row.values()) for row in table.rows)]
            )
        )
        assert read_scheme(path).classes == load_scheme("nlcd").classes

    def test_every_cell_problem_at_once(self, rejected):
        lines = rejected(
            f"{HEADER},name,open_water,impervious_pct,pervious_cn_a\n"
            "1,36,60,73,101,0.4,forrest_litter_hay,wood,maybe,120,\n"
            "1,60,36,nan,79,0,pavement,wood,,,30\n"
            ",,50,60,70,2,sand,,,,\n"
        )
        assert lines == [
            "own.csv: row 1, column shallow: 'forrest_litter_hay' is not a kind of shallow flow: "
            "did you mean 'forest_litter_hay'?",
            "own.csv: row 1, column open_water: 'maybe' is neither true nor false: write true or false",
            "own.csv: row 1, column cn_d: '101' is not a number over 0, up to 100: write one over 0, up to 100",
            "own.csv: row 1, column impervious_pct: '120' is not a number from 0 to 100: write one from 0 to 100",
            "own.csv: row 2, column cn_c: 'nan' is not a number over 0, up to 100: write one over 0, up to 100",
            "own.csv: row 2, column cn_b: 36 is less than cn_a (60): "
            "curve numbers do not fall from group A to D: check their order",
            "own.csv: row 2, column sheet_n: '0' is not a number over 0, up to 1: write one over 0, up to 1",
            "own.csv: row 2, column pervious_cn_b: is empty: write one over 0, up to 100",
            "own.csv: row 2, column pervious_cn_c: is empty: write one over 0, up to 100",
            "own.csv: row 2, column pervious_cn_d: is empty: write one over 0, up to 100",
            "own.csv: row 2, column code: '1' stands twice: keep one row for each class",
            "own.csv: row 2, column name: 'wood' stands twice: give each class its own name",
            "own.csv: row 3, column code: is empty: write the value that the land-cover layer has",
            "own.csv: row 3, column shallow: 'sand' is not a kind of shallow flow: "
            f"use one of {', '.join(shallow_keys())}",
            "own.csv: row 3, column cn_a: is empty: write one over 0, up to 100",
            "own.csv: row 3, column sheet_n: '2' is not a number over 0, up to 1: write one over 0, up to 1",
        ]

    def test_a_name_may_not_be_another_class_code(self, rejected):
        rows = "1,1,2,3,4,0.1,bare,2\n2,1,2,3,4,0.1,bare,two\n"
        assert rejected(f"{HEADER},name\n{rows}") == [
            "own.csv: row 2, column code: '2' stands twice: keep one row for each class"
        ]

    def test_columns(self, rejected):
        assert rejected("code,cn_a,cn_b,cn_c,CN_D,sheet_n,shalow,colour,code\n") == [
            "own.csv: column cn_d: is missing: add it; a scheme has: code, cn_a, cn_b, cn_c, cn_d, sheet_n, shallow",
            "own.csv: column shallow: is missing: rename 'shalow' to it",
            "own.csv: column CN_D: is not a column of a scheme: remove it; known: code, name, cn_a, cn_b, cn_c, cn_d, "
            "sheet_n, shallow, impervious_pct, pervious_cn_a, pervious_cn_b, pervious_cn_c, pervious_cn_d, open_water, "
            "retardance_n, runoff_coefficient, source",
            "own.csv: column shalow: is not a column of a scheme: did you mean 'shallow'?",
            "own.csv: column colour: is not a column of a scheme: remove it; known: code, name, cn_a, cn_b, cn_c, "
            "cn_d, sheet_n, shallow, impervious_pct, pervious_cn_a, pervious_cn_b, pervious_cn_c, pervious_cn_d, "
            "open_water, retardance_n, runoff_coefficient, source",
            "own.csv: column code: stands twice: keep one",
        ]

    def test_files(self, rejected, tmp_path):
        assert rejected(f"{HEADER}\n") == ["own.csv: rows: has no classes: write a row for each land-cover class"]
        assert rejected("")[0].startswith("own.csv: column code: is missing: add it")
        assert rejected(f"{HEADER}\n1,2\n")[0].startswith(
            "own.csv: rows: another number of cells than the header in row 1"
        )
        with pytest.raises(InputRejected, match=r"none\.csv: file: does not exist: check the path, or use a shipped"):
            read_scheme(tmp_path / "none.csv")
        (tmp_path / "bad.csv").write_bytes(b"\xff\xfe\x00")
        with pytest.raises(InputRejected, match=r"bad\.csv: file: is not a readable CSV"):
            read_scheme(tmp_path / "bad.csv")
