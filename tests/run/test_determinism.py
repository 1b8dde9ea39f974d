"""The same input gives the same bytes, whatever else is in the run and however it is run."""

import json

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from projects import make_project, read_table

from basinwright import pipeline


def rough_terrain(seed, shape=(90, 70)):
    """Fractal-like hills with flats and pits, falling to the south."""
    import numpy as np
    from scipy.ndimage import zoom

    rng = np.random.default_rng(seed)
    z = np.zeros(shape)
    for cells, height in ((4, 20.0), (9, 8.0), (20, 3.0)):
        z += zoom(rng.random((cells, cells)) * height, (shape[0] / cells, shape[1] / cells), order=1)[
            : shape[0], : shape[1]
        ]
    z += 0.4 * np.arange(shape[0])[::-1, None]
    return np.round(z, 1)


PLACES = {"a": (80, 10), "b": (80, 35), "c": (60, 50), "d": (40, 20), "e": (70, 60), "f": (50, 35), "g": (85, 35)}
TABLES = ("outlets", "segments", "cover_shares", "timing", "unit_hydrographs", "hydrographs", "flags")


def project(folder, places=PLACES, columns=None):
    cover = (rough_terrain(1) * 3).astype(int) % 2 * 11 + 71  # 71 and 82 in patches
    overrides = {"outlets": {"snap_within": "60 m"}, "terrain": {"stream_area": "0.01 km2"}}
    return make_project(folder, rough_terrain(7), places, cover=cover, columns=columns, overrides=overrides)


def content(folder):
    """Return every file of a run but its store, the manifest without times and host."""
    files = {
        str(path.relative_to(folder)): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and ".store" not in path.parts
    }
    about = json.loads(files.pop("run.json"))
    for timing in ("finished", "host"):
        del about[timing]
    for stage in about["stages"]:
        del stage["seconds"]
        stage.pop("peak_memory_mb", None)
    return files, about


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    return pipeline.run(project(tmp_path_factory.mktemp("whole"))).folder


def test_the_terrain_is_worth_it(whole):
    """Nested basins, several regimes, pits that were cut or filled: else the rest proves little."""
    rows = read_table(whole, "outlets")
    assert sum(bool(row["downstream_outlet_id"]) for row in rows) >= 2
    assert all(row["status"] == "flagged" for row in rows)
    assert {row["regime"] for row in read_table(whole, "segments")} == {"sheet", "shallow", "channel"}
    about = json.loads((whole / "run.json").read_text())
    assert about["terrain"]["cut_cells"] + about["terrain"]["filled_cells"] > 50


def test_twice_the_same_bytes(whole):
    """In the same folder, so that the paths in the manifest are the same too."""
    before = content(whole)
    after = content(pipeline.run(whole.parent / "project.toml", overwrite=True).folder)
    assert before[0].keys() == after[0].keys()
    assert [name for name in before[0] if before[0][name] != after[0][name]] == []
    assert before[1] == after[1]


def test_jobs_do_not_matter(tmp_path, whole):
    files, _ = content(pipeline.run(project(tmp_path), jobs=1).folder)
    assert files == content(whole)[0]


def test_resume_of_a_finished_run_computes_nothing_and_changes_nothing(whole):
    before, _ = content(whole)
    outcome = pipeline.run(whole.parent / "project.toml", resume=True)
    after, about = content(outcome.folder)
    assert after == before
    assert [stage["stage"] for stage in about["stages"] if stage["runs"]] == ["hydrology"]


def test_summary_only_gives_the_same_tables(tmp_path, whole):
    folder = pipeline.run(project(tmp_path), summary_only=True).folder
    files, reference = content(folder)[0], content(whole)[0]
    common = {f"{name}.csv" for name in ("outlets", "segments", "cover_shares", "timing", "flags")}
    assert common <= files.keys()
    for name in files.keys() - {"tables.json"}:
        assert files[name] == reference[name], name
    left_out = {name.split("/")[0] for name in reference.keys() - files.keys()}
    assert {"terrain", "report", "basins.gpkg", "unit_hydrographs.csv", "hydrographs.csv"} <= left_out
    listed = json.loads(files["tables.json"])["resources"]
    assert {resource["path"] for resource in listed} == {name for name in files if name.endswith(".csv")}


def test_retime_of_an_unedited_run_gives_the_same_bytes(tmp_path):
    folder = pipeline.run(project(tmp_path)).folder
    before, about_before = content(folder)
    pipeline.retime(folder)
    after, about_after = content(folder)
    assert [name for name in before if before[name] != after[name]] == []
    assert about_before == about_after


def test_retime_keeps_supplied_values(tmp_path):
    columns = {"curve_number": {"a": 80}, "tc_h": {"b": 1.5}, "depth_10yr_mm": {"c": 100}}
    folder = pipeline.run(project(tmp_path, columns=columns)).folder
    before, _ = content(folder)
    pipeline.retime(folder)
    after, _ = content(folder)
    assert [name for name in before if before[name] != after[name]] == []
    assert before["flags.csv"].decode().count("OVERRIDE") == 3


def rows_by_outlet(folder):
    """Return the rows of every table by outlet, without what lies between it and another outlet."""
    found = {}
    for name in TABLES:
        for row in read_table(folder, name):
            between = ("downstream_outlet_id", "reach_", "incremental_area")
            row = {column: cell for column, cell in row.items() if not column.startswith(between)}
            found.setdefault(row["outlet_id"], []).append((name, row))
    return found


@settings(max_examples=5, deadline=None)
@given(st.lists(st.sampled_from(sorted(PLACES)), min_size=1, max_size=5, unique=True))
def test_an_outlet_does_not_depend_on_the_others(tmp_path_factory, whole, chosen):
    folder = tmp_path_factory.mktemp("some")
    some = rows_by_outlet(pipeline.run(project(folder, {name: PLACES[name] for name in chosen})).folder)
    every = rows_by_outlet(whole)
    assert some == {name: every[name] for name in chosen}


def test_outlets_on_one_cell_share_a_basin_and_keep_their_rows(tmp_path, whole):
    folder = pipeline.run(project(tmp_path, {"a": PLACES["a"], "twin": PLACES["a"]})).folder
    rows = rows_by_outlet(folder)
    for (name, a), (_, twin) in zip(rows["a"], rows["twin"], strict=True):
        assert {**a, "outlet_id": ""} == {**twin, "outlet_id": ""}, name
    assert rows["a"] == rows_by_outlet(whole)["a"]
