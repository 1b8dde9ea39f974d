"""Whatever stands in a project file: it is accepted, or rejected in words; never a traceback."""

import copy
import datetime
import tomllib

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from projects import make_project, v_valley

from basinwright.errors import InputRejected
from basinwright.pipeline.inputs import inspect
from basinwright.project import Project, parse_project, read_content
from basinwright.units import UNITS, QuantityError, parse_quantity

words = st.sampled_from(
    ["", " ", "auto", "none", "2", "-1", "nan", "1 m", "nan m", "1e999 m", "100 ft", "3 in", "2 %", "0 km2", "1 parsec",
     "https://example.org/x", "/vsizip/x.zip", "dem.tif", "../dem.tif", "*", "[", "\0", "EPSG:4326", "EPSG:1", "table",
     "gamma", "balanced", "own", "ü" * 300, "a\nb"]
)  # fmt: skip
plain = st.one_of(
    words,
    st.text(max_size=20),
    st.booleans(),
    st.integers(-10, 10),
    st.integers(-(10**30), 10**30),
    st.floats(),
    st.dates(),
    st.times(),
    st.just(datetime.datetime(2020, 1, 1, tzinfo=datetime.UTC)),
)
value = st.recursive(plain, lambda inner: st.lists(inner, max_size=3) | st.dictionaries(words, inner, max_size=3))


@pytest.fixture(scope="module")
def content(tmp_path_factory):
    """The content of a sound project with every option written out, in the folder of its inputs."""
    folder = tmp_path_factory.mktemp("any")
    file = make_project(folder, v_valley(12, 9, 0.05, 0.02), {"A": (11, 4)}, columns={"area_km2": {"A": "0.01"}})
    resolved = parse_project(tomllib.loads(file.read_text())).resolved()
    resolved["outlets"]["expected_area"] = "area_km2"
    return folder, resolved


def places(content):
    return [(name,) for name in content] + [(name, key) for name, table in content.items() if isinstance(table, dict)
                                            for key in table]  # fmt: skip


def looked_at(folder, data):
    """Look at a project as `check` does, from its content instead of its file."""
    import basinwright.pipeline.inputs as module

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "read_project", lambda file: read_content(data, file.name))
        try:
            inspect(folder / "project.toml")
            lines = []
        except InputRejected as rejected:
            lines = str(rejected).splitlines() or ["no problem named"]
    assert all(line.count(": ") >= 3 for line in lines), lines
    return not lines


def test_the_content_as_it_is_is_sound(content):
    assert looked_at(*content)


@settings(max_examples=100, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_one_value_of_any_kind(content, data):
    folder, sound = content
    changed = copy.deepcopy(sound)
    place = data.draw(st.sampled_from(places(sound)))
    table = changed if len(place) == 1 else changed[place[0]]
    table[place[-1]] = data.draw(value)
    looked_at(folder, changed)


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_many_values_of_any_kind(content, data):
    folder, sound = content
    changed = copy.deepcopy(sound)
    for name, key in data.draw(
        st.lists(st.sampled_from([place for place in places(sound) if len(place) == 2]), max_size=8)
    ):
        if data.draw(st.booleans()):
            changed[name].pop(key, None)
        else:
            changed[name][key] = data.draw(value)
    looked_at(folder, changed)


@settings(max_examples=60, deadline=None)
@given(st.dictionaries(st.sampled_from([*Project.model_fields, "other"]), value, max_size=8))
def test_any_content(tmp_path_factory, data):
    assert not looked_at(tmp_path_factory.getbasetemp(), data)


@given(
    st.text(max_size=12) | st.from_regex(r"[0-9.eE+-]{1,6} ?[a-z0-9/%]{0,4}", fullmatch=True),
    st.sampled_from(sorted(UNITS)),
)
def test_any_text_as_a_quantity(text, unit):
    for written in (text, f"{text} {unit}"):
        try:
            read = parse_quantity(written, UNITS[unit][0])
        except QuantityError as error:
            read = str(error)
        assert read is not None


@settings(max_examples=50, deadline=None)
@given(st.binary(max_size=60))
def test_any_bytes_as_a_project_file(tmp_path_factory, data):
    file = tmp_path_factory.mktemp("bytes") / "project.toml"
    file.write_bytes(data)
    with pytest.raises(InputRejected):
        inspect(file)


@given(st.floats(1e-6, 1e6), st.sampled_from(sorted(UNITS)))
def test_a_quantity_is_its_number_in_its_unit(number, unit):
    dimension, factor = UNITS[unit]
    assert parse_quantity(f"{number!r} {unit}", dimension) == number * factor
    assert parse_quantity(f" {number!r}{unit} ", dimension) == number * factor


def test_what_is_resolved_reads_back(content):
    _, sound = content
    assert parse_project(sound).resolved() == sound
