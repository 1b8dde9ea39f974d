"""The flow path that is longest in time, where it is another than the one longest in length."""

import numpy as np
import pytest
from projects import make_project, read_table

from basinwright import pipeline

CELL, SLOPE = 20.0, 0.02
EAST, WEST, BOTTOM = 30, 38, (5, 40)
P2_IN = 3.1


def strips():
    """Two strips that meet above the outlet: a long one from the west, a short one from the east; voids around."""
    z = np.full((7, 80), np.nan)
    z[3:6, 40] = 100.0 - CELL * SLOPE * np.arange(3)
    z[3, 40 - WEST : 40] = 100.0 + CELL * SLOPE * np.arange(WEST, 0, -1)
    z[3, 41 : 41 + EAST] = 100.0 + CELL * SLOPE * np.arange(1, EAST + 1)
    return z


@pytest.fixture(scope="module")
def runs(tmp_path_factory):
    cover = np.where(np.arange(80) > 40, 42, 71) + np.zeros((7, 1))  # woods in the east, grass elsewhere
    found = {}
    for farthest in ("length", "time"):
        folder = tmp_path_factory.mktemp(farthest)
        options = {"terrain": {"stream_area": "1 km2"}, "flow_path": {"farthest": farthest}}
        file = make_project(folder, strips(), {"A": BOTTOM}, cell=CELL, cover=cover, overrides=options)
        outcome = pipeline.run(file, summary_only=True)
        found[farthest] = read_table(outcome.folder, "outlets")[0], read_table(outcome.folder, "segments"), outcome
    return found


def by_hand_h(segments):
    """Time of sheet and shallow flow by TR-55 (1986), eq. 3-3 and figure 3-1, from lengths, n and coefficients."""
    total = 0.0
    for row in segments:
        length_ft = (float(row["to_m"]) - float(row["from_m"])) / 0.3048
        slope = float(row["slope"])
        if row["regime"] == "sheet":
            total += 0.007 * (float(row["roughness"]) * length_ft) ** 0.8 / (P2_IN**0.5 * slope**0.4)
        else:
            total += length_ft / (3600.0 * float(row["roughness"]) / 0.3048 * slope**0.5)
    return total


def test_each_path_is_the_longest_in_its_sense(runs):
    assert float(runs["length"][0]["path_length_m"]) == pytest.approx(
        CELL * (WEST + 2**0.5)
    )  # a diagonal step at the corner
    assert float(runs["time"][0]["path_length_m"]) == pytest.approx(CELL * (EAST + 2**0.5))
    assert {row["cover"] for row in runs["length"][1]} == {"71"}
    assert "42" in {row["cover"] for row in runs["time"][1]}


def test_the_column_holds_the_time_along_the_path_longest_in_time(runs):
    of_length, of_time = (float(runs[key][0]["tc_bankfull_h"]) for key in ("length", "time"))
    assert of_time > 1.05 * of_length
    for key in ("length", "time"):
        assert float(runs[key][0]["tc_longest_in_time_h"]) == of_time
    for row, segments, _ in runs.values():
        assert float(row["tc_bankfull_h"]) == pytest.approx(by_hand_h(segments), rel=5e-3)


def test_both_runs_say_so_with_both_times(runs):
    words = {
        key: [flag for flag in outcome.flags if flag.key == "LONGEST_IN_TIME_DIFFERS"]
        for key, (_, _, outcome) in runs.items()
    }
    assert words["length"] == words["time"]
    (flag,) = words["length"]
    in_time, in_length = (float(text.rpartition(" h")[0].split()[-1]) for text in flag.message.split(" along ")[:2])
    assert in_time == pytest.approx(float(runs["time"][0]["tc_bankfull_h"]), rel=5e-3)
    assert in_length == pytest.approx(float(runs["length"][0]["tc_bankfull_h"]), rel=5e-3)


def test_retime_leaves_the_column_as_it_is(runs):
    row, _, outcome = runs["length"]
    pipeline.retime(outcome.folder)
    assert read_table(outcome.folder, "outlets")[0] == row
