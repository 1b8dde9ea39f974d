"""Every published case: the document's numbers, recomputed by the public functions."""

import math

import numpy as np
import pytest
from published.case_files import Case, evaluate, load, load_all, methods_checked, misses, parse_quantity

from basinwright.registry import Kind, methods

CASES = load_all()


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.key)
def test_reproduces_print(case: Case) -> None:
    computed, printed, tolerance = case.run()
    assert computed.shape == printed.shape
    wrong = misses(computed, printed, tolerance)
    assert not wrong.any(), f"{case.what}: computed {computed[wrong]}, printed {printed[wrong]} {case.printed.unit}"


@pytest.mark.parametrize("case", [case for case in CASES if case.arithmetic], ids=lambda case: case.key)
def test_hand_calculation_gives_the_printed_number(case: Case) -> None:
    assert abs(evaluate(case.arithmetic) - case.printed.values[0]) <= case.printed.half_last_digits[0] * (1 + 1e-9)


def test_keys_are_unique() -> None:
    keys = [case.key for case in CASES]
    assert len(keys) == len(set(keys))


def test_tolerance_is_half_of_the_last_printed_digit() -> None:
    quantity = parse_quantity("0.30 12. 1455 1.5e3 cfs")
    assert quantity is not None
    assert quantity.half_last_digits.tolist() == pytest.approx([0.005, 0.5, 0.5, 50.0])


def test_units_convert_to_the_unit_of_the_name() -> None:
    per_printed = {("1 ft", "length_m"): 0.3048, ("3 %", "slope_pct"): 1.0, ("52.8 ft/mi", "slope"): 0.01 / 52.8,
                   ("1 in", "depth_mm"): 25.4, ("1 mi2", "area_km2"): 2.589988110336, ("1 ft2", "area_m2"): 0.09290304,
                   ("1 cfs", "peak_m3s"): 0.028316846592}  # fmt: skip
    for (text, name), factor in per_printed.items():
        quantity = parse_quantity(text)
        assert quantity is not None
        assert quantity.per_printed(name) == pytest.approx(factor, rel=1e-12)


@pytest.mark.parametrize(("text", "name"), [("3 ft", "depth_mm"), ("3 ell", "length_m"), ("3", "length_m")])
def test_wrong_units_are_refused(text: str, name: str) -> None:
    quantity = parse_quantity(text)
    assert quantity is not None
    with pytest.raises(ValueError, match=name):
        quantity.per_printed(name)


def test_columns_objects_and_picks(tmp_path) -> None:
    """Columns are converted one by one, an input may be what another call returns, and picks go step by step."""
    path = tmp_path / "case.yml"
    path.write_text(
        "document: d\nedition: e\npage: p\ntranscribed: t\nkind: closed form\ncases:\n"
        "  - id: a\n    what: w\n    call: storms.critical_duration\n"
        "    inputs: {durations_h: 60 120 min, peak_m3s: [[1], [2]]}\n    pick: [0, 0]\n    result: duration_h\n"
        "    printed: 2 h\n"
        "  - id: b\n    what: w\n    call: registry.find\n    inputs: {kind: timing, key: temez}\n"
        "    pick: [valid_range, area_km2, high]\n    result: area_km2\n    printed: 3000 km2\n"
        "  - id: c\n    what: w\n    call: runoff.weighted_runoff_mm\n    result: depth_mm\n    first: 1\n"
        "    inputs:\n      patches: {call: runoff.Patches,\n"
        "                inputs: {offsets: [0, 1], area_km2: [1.0], curve_number: [100.0]}}\n"
        "      depth_mm: [[25.4, 50.8]]\n    printed: 1.00 in\n"
    )
    for case in load(path):
        assert not misses(*case.run()).any(), case.key


def test_too_few_numbers_are_a_miss() -> None:
    assert misses(np.array([1.0]), np.array([1.0, 2.0]), np.array([0.1, 0.1])).all()


def test_arithmetic_is_arithmetic_only() -> None:
    assert evaluate("2 * sqrt(9) ** 2 - ln(exp(1)) + log10(100)") == pytest.approx(2 * 9 - 1 + 2)
    assert math.isclose(evaluate("gamma(5)"), 24.0)
    with pytest.raises(ValueError, match="not arithmetic"):
        evaluate("__import__('os')")


@pytest.mark.parametrize(
    ("broken", "message"),
    [
        ("printed: 0.3", "quote"),
        ("printed: '0.3'\n    tolerance: 0.1", "belong together"),
        ("printed: '0.3'\n    kind: second form", "arithmetic"),
        ("printed: '0.3'\n    inpust: {}", "inpust"),
        ("printed: '0.3'\n    kind: guess", "guess"),
    ],
)
def test_incomplete_cases_are_refused(tmp_path, broken: str, message: str) -> None:
    path = tmp_path / "case.yml"
    path.write_text(
        "document: d\nedition: e\npage: p\ntranscribed: t\nkind: worked example\ncases:\n"
        f"  - id: a\n    what: w\n    call: units.nothing\n    {broken}\n"
    )
    with pytest.raises(ValueError, match=message):
        load(path)


def test_every_printed_number_can_fail() -> None:
    """No case compares NaN, and no tolerance exceeds a tenth of the largest number that it is for."""
    for case in CASES:
        largest = max(np.abs(case.printed.values).max(), 20 * case.printed.half_last_digits.max())
        assert np.isfinite(case.printed.values).all(), case.key
        assert case.tolerances().max() <= 0.1 * largest, case.key


@pytest.mark.parametrize("kind", ["timing"])
def test_every_registered_method_has_a_case(kind: Kind) -> None:
    assert [key for key in methods(kind) if f"{kind}/{key}" not in methods_checked()] == []
