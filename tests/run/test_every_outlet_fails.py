"""A run in which no outlet can be computed is a run all the same."""

from __future__ import annotations

import json

import pytest
from projects import make_project, read_table, v_valley

from basinwright import pipeline


@pytest.mark.parametrize("summary_only", [False, True])
def test_it_is_written_whole_with_every_reason(tmp_path, summary_only):
    z = v_valley(60, 41, 0.08, 0.02)
    z[30, 30] += 50.0  # a summit of one cell: nothing drains to it
    outcome = pipeline.run(make_project(tmp_path, z, {"summit": (30, 30)}), summary_only=summary_only)
    assert outcome.failed == 1
    assert [row["status"] for row in read_table(outcome.folder, "outlets")] == ["failed"]
    assert not (outcome.folder / "hydrographs.nc").exists()
    about = json.loads((outcome.folder / "run.json").read_text(encoding="utf-8"))
    assert about["hydrographs"] == ([] if summary_only else ["hydrographs.csv"])
    if not summary_only:
        assert read_table(outcome.folder, "hydrographs") == []
    assert pipeline.retime(outcome.folder).failed == 1
