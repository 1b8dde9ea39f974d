"""The bounds of every calibrated range are the numbers of its printed text, in the unit of the input."""

import math
import re

import pytest
from published.case_files import parse_quantity

from basinwright.registry import Kind, Range, methods

KINDS: tuple[Kind, ...] = ("timing", "unit_hydrograph", "storm")
RANGES = [
    (f"{kind}/{entry.key} {name}", name, bounds)
    for kind in KINDS
    for entry in methods(kind).values()
    for name, bounds in entry.valid_range.items()
]

_PRINTED = re.compile(
    r"(?:CN )?(?:up to (?:about )?|(?P<low>[\d.]+)(?: (?P<low_unit>\S+))? to )?"
    r"(?P<high>\d[\d. ]*)(?P<high_unit> ?[a-z%][\w/%]*)?(?:[ ,].*)?"
)


def as_printed(text: str, name: str) -> tuple[float, float]:
    """Read both bounds of a printed range in the unit of an input; a single number is both, "up to" starts at 0."""
    found = _PRINTED.fullmatch(text)
    assert found, text
    unit = (found["high_unit"] or "").strip()

    def value(number: str, its_unit: str) -> float:
        quantity = parse_quantity(f"{number.replace(' ', '')} {its_unit}".strip())
        assert quantity is not None
        return float(quantity.values[0] * quantity.per_printed(name))

    high = value(found["high"], unit)
    low = value(found["low"], found["low_unit"] or unit) if found["low"] else 0.0 if "up to" in text else high
    return low, high


@pytest.mark.parametrize(("where", "name", "bounds"), RANGES, ids=[where for where, _, _ in RANGES])
def test_bounds_are_those_printed(where: str, name: str, bounds: Range) -> None:
    assert (bounds.low, bounds.high) == pytest.approx(as_printed(bounds.printed, name), rel=1e-12)
    assert math.isfinite(bounds.high)


def test_printed_text_is_read() -> None:
    assert as_printed("1.3 ac to 19 mi2", "area_km2") == pytest.approx((1.3 * 0.0040468564224, 19 * 2.589988110336))
    assert as_printed("170 to 70 000 km2", "area_km2") == (170.0, 70000.0)
    assert as_printed("up to 1 %", "path_slope_pct") == (0.0, 1.0)
    assert as_printed("24 h", "duration_h") == (24.0, 24.0)
