"""The pictures of docs/conditioning.md show what their titles say, and the same each time."""

import numpy as np
import pytest
from conformance.kit import Routed

from docs import pictures
from docs.pictures import AXIS, HEAD


def paths(panels):
    return [Routed(panel.down, None).path(HEAD) for panel in panels]


def crossing(path, col):
    return path[path[:, 1] == col][:, 0].mean()


def test_embankment():
    filled, breached = paths(pictures.embankment())
    assert AXIS - 17 <= crossing(filled, 69) <= AXIS - 11
    assert abs(crossing(breached, 69) - AXIS) < 6
    assert len(breached) < len(filled)


def test_lake():
    before, after = pictures.lake()
    stuck, through = paths([before, after])
    level = before.elevation_m == before.elevation_m[tuple(stuck[-1])]
    assert level.sum() > 200
    assert through[-1, 1] == pictures.COLS - 1


def test_stream():
    before, after = pictures.stream()
    natural, mapped = paths([before, after])
    x, y, _ = after.marks[0]
    on_line = set(zip(y.astype(int).tolist(), x.astype(int).tolist(), strict=True))
    assert np.mean([tuple(cell) in on_line for cell in mapped.tolist()]) > 0.8
    assert np.mean([tuple(cell) in on_line for cell in natural.tolist()]) < 0.2


def test_sink():
    passed, kept = paths(pictures.sink())
    assert passed[-1, 1] == pictures.COLS - 1
    assert kept[-1, 1] < 70


def test_the_same_bytes_each_time(tmp_path, monkeypatch):
    pytest.importorskip("matplotlib")
    made = []
    for name in ("first", "second"):
        monkeypatch.setattr(pictures, "FOLDER", tmp_path / name)
        pictures.draw("lake", pictures.lake())
        made.append((tmp_path / name / "lake.png").read_bytes())
    assert made[0] == made[1]
    assert len(made[0]) < 100_000
