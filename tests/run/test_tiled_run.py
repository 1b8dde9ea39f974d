"""A run whose terrain is larger than the memory it is given: the tables and rasters of one that fits."""

import json
import os
import signal

import numpy as np
import pytest
from projects import make_project, transform_of
from scipy import ndimage

from basinwright import pipeline
from basinwright.errors import BasinwrightError, InputRejected
from basinwright.grid import Grid
from basinwright.pipeline.machine import ATTEMPTS, Machine, memory_bytes
from basinwright.project import Compute

NROWS, NCOLS = 180, 210
GRID_TRANSFORM = transform_of()
OUTLETS = {"A": (150, 100), "B": (90, 60), "C": (40, 150), "D": (120, 180)}


def rolling_ground():
    """Hills, lakes that cross rims of tiles, and voids."""
    rng = np.random.default_rng(11)
    z = ndimage.gaussian_filter(rng.normal(size=(NROWS, NCOLS)), 6) * 300 + np.linspace(60, 0, NROWS)[:, None]
    z += rng.normal(0, 0.2, z.shape)
    z[50:80, 40:110] = np.maximum(z[50:80, 40:110], np.median(z[50:80, 40:110]))
    z[100:106, 128:131] = np.nan
    return (z + 500).astype(np.float32)


def files_of(run):
    """Every published file but the manifest, by name."""
    return {
        path.relative_to(run).as_posix(): path.read_bytes()
        for path in sorted(run.rglob("*"))
        if path.is_file() and ".store" not in path.parts and path.name != "run.json"
    }


@pytest.fixture(scope="module")
def runs(tmp_path_factory):
    folder = tmp_path_factory.mktemp("tiled")
    cover = np.where(ndimage.gaussian_filter(np.random.default_rng(2).normal(size=(NROWS, NCOLS)), 9) > 0, 41, 82)
    found = {}
    for memory in ("auto", "1 MB"):
        project = make_project(
            folder / memory, rolling_ground(), OUTLETS, cover=cover,
            overrides={"compute": {"memory": memory}, "outlets": {"snap_within": "60 m"}},
        )  # fmt: skip
        said = []
        pipeline.run(project, say=said.append)
        found[memory] = folder / memory / "out", said
    return found


def test_run_by_tiles_publishes_the_same_bytes(runs):
    (whole, _), (tiled, said) = runs["auto"], runs["1 MB"]
    assert any(" in 12 tiles of " in line for line in said)
    expected, got = files_of(whole), files_of(tiled)
    assert got.keys() == expected.keys()
    assert [name for name in expected if got[name] != expected[name] and not name.startswith("report/")] == []
    stages = {stage["stage"]: stage for stage in json.loads((tiled / "run.json").read_text())["stages"]}
    assert {name: stage["key"] for name, stage in stages.items()} == {
        stage["stage"]: stage["key"] for stage in json.loads((whole / "run.json").read_text())["stages"]
    }
    assert not list(tiled.rglob("scratch"))


def test_run_by_tiles_goes_on_from_where_one_in_memory_was_left(runs, tmp_path):
    """Stages of either kind serve the other."""
    whole, _ = runs["auto"]
    project = whole.parent / "project.toml"
    text = project.read_text()
    try:
        project.write_text(text.replace('"auto"', '"1 MB"'))
        said = []
        pipeline.run(project, resume=True, say=said.append)
    finally:
        project.write_text(text)
    assert not any("routing" in line for line in said)


def double(value, folder, fatal):
    """Twice a value; the first `fatal` calls for a value kill their process."""
    deaths = len(list(folder.glob(f"{value}-*")))
    if deaths < fatal.get(value, 0):
        (folder / f"{value}-{deaths}").touch()
        os.kill(os.getpid(), signal.SIGKILL)
    return 2 * value


@pytest.fixture
def machine():
    with Machine(Compute(jobs=2, memory="1 MB"), Grid(NROWS, NCOLS, GRID_TRANSFORM, "EPSG:32614")) as machine:
        yield machine


def test_worker_killed_in_the_middle_is_replaced_and_its_work_done_again(machine, tmp_path):
    calls = [(value, tmp_path, {3: 1, 5: 1}) for value in range(8)]
    assert machine.map(double, calls) == [2 * value for value in range(8)]
    assert len(list(tmp_path.iterdir())) == 2


def test_step_that_kills_every_worker_ends_with_advice(machine, tmp_path):
    with pytest.raises(BasinwrightError, match=f"{ATTEMPTS} workers in a row died on one tile: give them more memory"):
        machine.map(double, [(1, tmp_path, {1: 99})])


@pytest.mark.parametrize(("memory", "expected"), [(2000.0, 2e9), (1.5, 1.5e6)])
def test_memory_is_in_millions_of_bytes(memory, expected):
    assert memory_bytes(memory) == expected


def test_what_fits_is_not_cut_and_tiles_are_as_large_as_memory_lets_them():
    grid = Grid(20_000, 30_000, GRID_TRANSFORM, "EPSG:32614")
    assert Machine(Compute(memory="100 GB"), grid).tiling is None
    sides = {}
    for memory in (400, 4_000, 30_000):
        machine = Machine(Compute(jobs=2, memory=f"{memory} MB"), grid)
        rows, cols = next(iter(machine.tiling)).shape
        sides[memory] = max(rows, cols)
        assert 3 * rows * cols * 48 <= memory * 1e6
    assert sides[400] < sides[4_000] <= sides[30_000] <= 4096


@pytest.mark.parametrize("memory", ["2 ft", "lots", 3, "-1 GB"])
def test_memory_that_is_none_is_refused(tmp_path, memory):
    project = make_project(tmp_path, np.ones((4, 4)), {"A": (1, 1)}, overrides={"compute": {"memory": memory}})
    with pytest.raises(InputRejected, match=r"compute\.memory"):
        pipeline.check(project)


def test_scheduler_that_does_not_answer_is_refused_before_computing(tmp_path, monkeypatch):
    monkeypatch.setattr("basinwright.pipeline.machine._PATIENCE", "0.5s")
    project = make_project(
        tmp_path, np.ones((4, 4)), {"A": (1, 1)}, overrides={"compute": {"scheduler": "tcp://127.0.0.1:9"}}
    )
    with pytest.raises(InputRejected, match=r"compute\.scheduler: no Dask scheduler answers at 'tcp://127\.0\.0\.1:9'"):
        pipeline.check(project)
