"""The line that says before a run what it will take."""

import json
import shutil

import pytest
from affine import Affine
from projects import make_project, v_valley
from pyproj import CRS

from basinwright import pipeline
from basinwright.grid import Grid
from basinwright.pipeline.machine import RASTER_BYTES_PER_CELL, STORE_BYTES_PER_CELL, Machine
from basinwright.project import Compute


def grid(side):
    return Grid(side, side, Affine(10.0, 0.0, 5e5, 0.0, -10.0, 4e6), CRS.from_epsg(32614).to_wkt())


def size_of(folder):
    return sum(path.stat().st_size for path in folder.rglob("*") if path.is_file())


def test_in_memory(tmp_path, monkeypatch):
    monkeypatch.setattr(shutil, "disk_usage", lambda place: shutil._ntuple_diskusage(10**12, 0, 4 * 10**11))
    told = Machine(Compute(memory="8 GB"), grid(4000)).plan(tmp_path, [], rasters=True)
    assert told == ("Plan: 16 million cells in memory; about 1.4 GB of memory and 0.62 GB of disk (400 GB free)")
    again = Machine(Compute(memory="8 GB"), grid(4000)).plan(tmp_path, [2, 4], rasters=False)
    assert "and 0.65 GB of disk" in again, "31 bytes x 16 million x (1 + 1/4 + 1/16)"


def test_in_tiles(tmp_path, monkeypatch):
    monkeypatch.setattr(shutil, "disk_usage", lambda place: shutil._ntuple_diskusage(10**12, 0, 10**9))
    told = Machine(Compute(memory="1 GB", jobs=2), grid(16_000)).plan(tmp_path, [], rasters=False)
    assert told.startswith(
        "Plan: 256 million cells in 64 tiles of 2000 x 2000 on 2 workers; about 1.6 GB of memory and "
    )
    assert told.endswith("13 GB of disk (1 GB free); that is more than is free: make room, or choose another --out")


@pytest.mark.xdist_group("sample")
def test_what_the_sample_took_is_what_was_planned(sample):
    about = json.loads((sample / "run.json").read_text(encoding="utf-8"))
    cells = about["grid"]["rows"] * about["grid"]["columns"]
    own = [path for path in (sample / ".store").iterdir()
           if path.name.rpartition("-")[2] in {stage["key"] for stage in about["stages"]}]  # fmt: skip
    assert sum(map(size_of, own)) == pytest.approx(STORE_BYTES_PER_CELL * cells, rel=0.3)
    assert size_of(sample / "terrain") == pytest.approx(RASTER_BYTES_PER_CELL * cells, rel=0.4)


def test_a_run_says_its_plan_and_what_it_took(tmp_path):
    said = []
    file = make_project(tmp_path, v_valley(40, 31, 0.05, 0.02), {"A": (39, 15)})
    pipeline.run(file, summary_only=True, say=said.append)
    assert said[1].startswith("Plan: 0.00124 million cells in memory; about 0.35 GB of memory")
    assert said[-1].startswith("Done; at most ")
    stages = json.loads((tmp_path / "out" / "run.json").read_text(encoding="utf-8"))["stages"]
    most = max(stages, key=lambda stage: stage["peak_memory_mb"])
    assert said[-1] == (
        f"Done; at most {most['peak_memory_mb']:,.0f} MB of memory, in stage {most['stage']} (run.json: all stages)"
    )
