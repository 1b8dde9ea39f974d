"""Every registered storm and unit hydrograph: source, form, range, inputs, a published case, no orphan table."""

import inspect

import pytest
from published.case_files import methods_checked

from basinwright.published import names, table
from basinwright.registry import methods

ENTRIES = [entry for kind in ("storm", "unit_hydrograph") for entry in methods(kind).values()]
UNITS = ("_h", "_mm", "_km2", "_m", "_pct", "hour", "fraction", "factor", "ratio", "ct", "cp", "time_area")


@pytest.mark.parametrize("entry", ENTRIES, ids=lambda entry: f"{entry.kind}/{entry.key}")
def test_entry_says_what_it_is(entry) -> None:
    assert entry.name
    assert entry.form
    assert entry.limits
    assert all((entry.source.document, entry.source.edition, entry.source.place))
    arguments = inspect.signature(entry.function).parameters
    assert set(entry.inputs) <= set(arguments)
    required = {name for name, argument in arguments.items() if argument.default is inspect.Parameter.empty}
    assert required <= set(entry.inputs)
    assert all(name.endswith(UNITS) for name in entry.inputs)
    assert set(entry.valid_range) <= set(entry.inputs)
    assert all(bounds.low <= bounds.high and bounds.printed for bounds in entry.valid_range.values())
    assert entry.function.__doc__


@pytest.mark.parametrize("entry", ENTRIES, ids=lambda entry: f"{entry.kind}/{entry.key}")
def test_entry_has_a_case_from_outside(entry) -> None:
    assert f"{entry.kind}/{entry.key}" in methods_checked()


def test_the_catalogue_is_that_of_the_project_file() -> None:
    assert {"curvilinear", "triangular", "gamma", "delmarva", "snyder", "clark", "clark_terrain", "travel_time"} == set(
        methods("unit_hydrograph")
    )
    assert {"type_i", "type_ia", "type_ii", "type_iii", "table", "balanced", "nested"} == set(methods("storm"))


def test_range_of_the_peak_rate_factor_is_data() -> None:
    entry = methods("unit_hydrograph")["gamma"]
    assert entry.out_of_range({"peak_rate_factor": 484.0}) == []
    assert entry.out_of_range({"peak_rate_factor": 700.0}) == ["peak_rate_factor 700 is outside 100 to 600"]


@pytest.mark.parametrize(
    "name", [name for name in names() if name.startswith(("scs_type", "dimensionless", "arc_", "graphical", "pond_"))]
)
def test_table_has_a_meaning_for_every_column(name: str) -> None:
    published = table(name)
    assert set(published.columns) == set(published.rows[0])
    assert published.checked
    assert published.source.note
