"""The bankfull relation: the table against itself, against a separately published curve, its ranges."""

import numpy as np
import pytest

from basinwright.errors import RangeError
from basinwright.published import table
from basinwright.timing import (
    BankfullRelation,
    bankfull_depth_m,
    bankfull_regions,
    bankfull_relation,
    bankfull_width_m,
)

ROWS = table("bankfull_bieger_2015").rows


def test_regions_as_published() -> None:
    levels = [row["level"] for row in ROWS]
    assert (levels.count("nation"), levels.count("division"), levels.count("province")) == (1, 8, 18)
    divisions = {row["key"] for row in ROWS if row["level"] == "division"}
    assert {row["division"] for row in ROWS if row["level"] == "province"} <= divisions
    assert sum(int(row["sites"]) for row in ROWS if row["level"] == "division") == 1279  # the paper's 1279 sites


@pytest.mark.parametrize("row", [row for row in ROWS if row["area_coefficient"]], ids=lambda row: row["key"])
def test_width_times_depth_is_the_section(row: dict[str, str]) -> None:
    """Three separate regressions of one data set: W D agrees with A in the middle of the data, within scatter."""
    relation = bankfull_relation(row["key"])
    middle_km2 = (relation.area_low_km2 * relation.area_high_km2) ** 0.5
    section = float(row["area_coefficient"]) * middle_km2 ** float(row["area_exponent"])
    ratio = bankfull_width_m(middle_km2, relation) * bankfull_depth_m(middle_km2, relation) / section
    assert 0.5 < ratio < 2.0


def test_piedmont_against_another_survey() -> None:
    """North Carolina rural Piedmont (Harman et al. 1999): 11.89 A^0.43 and 1.50 A^0.32, ft of mi2.

    A survey of one state against the whole province: within 30 %; a slip of unit or exponent is far outside.
    """
    for area_mi2 in (0.2, 1.0, 10.0, 100.0):
        area_km2 = area_mi2 * 2.589988110336
        assert bankfull_width_m(area_km2, "piedmont") / 0.3048 == pytest.approx(11.89 * area_mi2**0.43, rel=0.30)
        assert bankfull_depth_m(area_km2, "piedmont") / 0.3048 == pytest.approx(1.50 * area_mi2**0.32, rel=0.30)


@pytest.mark.parametrize("region", bankfull_regions())
def test_grows_with_area_and_states_a_range(region: str) -> None:
    relation = bankfull_relation(region)
    area = np.geomspace(0.1, 10_000.0, 30)
    width, depth = bankfull_width_m(area, relation), bankfull_depth_m(area, relation)
    assert (np.diff(width) > 0).all()
    assert (np.diff(depth) > 0).all()
    assert 0 < relation.area_low_km2 < relation.area_high_km2


def test_usa_as_published() -> None:
    relation = bankfull_relation("usa")
    assert (relation.width, relation.depth) == ((2.70, 0.352), (0.30, 0.213))
    assert relation.covers([0.07, 0.08, 59928.0, 59929.0]).tolist() == [False, True, True, False]


def test_province_takes_the_range_of_its_division() -> None:
    assert bankfull_relation("piedmont").area_high_km2 == bankfull_relation("appalachian_highlands").area_high_km2


def test_own_relation() -> None:
    own = BankfullRelation("own", (3.0, 0.4), (0.2, 0.3))
    assert bankfull_width_m(10.0, own) == pytest.approx(3.0 * 10**0.4)
    assert own.covers([1e-6, 1e6]).all()


def test_refusals() -> None:
    with pytest.raises(RangeError, match="nearest: piedmont"):
        bankfull_relation("piedmnt")
    with pytest.raises(RangeError, match="width coefficient"):
        BankfullRelation("own", (0.0, 0.4), (0.2, 0.3))
    with pytest.raises(RangeError, match="depth exponent"):
        BankfullRelation("own", (1.0, 0.4), (0.2, float("nan")))
    with pytest.raises(RangeError, match="row 1: area_km2"):
        bankfull_width_m([1.0, 0.0])
