"""Moving where sheet flow ends and where the channel begins, on rows written by hand."""

from __future__ import annotations

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from basinwright.review.joints import Names, joints, moved

NAMES = Names("si")


def path(*pieces: tuple[str, float]) -> list[dict[str, str]]:
    """Rows of a path that falls 1 in 10 from 100 m, piece by piece: regime and where it ends."""
    rows, start = [], 0.0
    for number, (regime, end) in enumerate(pieces, start=1):
        rows.append(
            {
                "segment": str(number), "regime": regime, "cover": "41", "slope": "", "roughness": "",
                NAMES.start: repr(start), NAMES.end: repr(end), NAMES.top: level(start), NAMES.bottom: level(end),
                NAMES.radius: "", NAMES.radius_half: "",
            }
        )  # fmt: skip
        start = end
    return rows


def level(distance: float) -> str:
    return repr(100.0 - 0.1 * distance)


def told(rows: list[dict[str, str]]) -> str:
    return ", ".join(f"{row['segment']} {row['regime']} {float(row[NAMES.end]):g}".strip() for row in rows)


def move(rows: list[dict[str, str]], which: str, at: float) -> list[dict[str, str]]:
    joint = next(joint for joint in joints(rows, NAMES) if joint.which == which)
    return moved(rows, NAMES, joint, at, level)


PLAIN = path(("sheet", 30.0), ("shallow", 80.0), ("shallow", 200.0), ("channel", 300.0), ("channel", 500.0))


def test_both_joints_are_found_with_their_limits() -> None:
    sheet, channel = joints(PLAIN, NAMES)
    assert (sheet.at, sheet.low, sheet.high) == (30.0, 0.0, 200.0)
    assert (channel.at, channel.low, channel.high) == (200.0, 30.0, 500.0)


@pytest.mark.parametrize(
    ("which", "at", "expected"),
    [
        ("channel_start", 150.0, "1 sheet 30, 2 shallow 80, 3 shallow 150, 4 channel 300, 5 channel 500"),
        ("channel_start", 60.0, "1 sheet 30, 2 shallow 60, 4 channel 300, 5 channel 500"),
        ("channel_start", 400.0, "1 sheet 30, 2 shallow 80, 3 shallow 400, 5 channel 500"),
        ("channel_start", 500.0, "1 sheet 30, 2 shallow 80, 3 shallow 500"),
        ("channel_start", 0.0, "1 sheet 30, 4 channel 300, 5 channel 500"),
        ("sheet_end", 100.0, "1 sheet 100, 3 shallow 200, 4 channel 300, 5 channel 500"),
        ("sheet_end", 0.0, "2 shallow 80, 3 shallow 200, 4 channel 300, 5 channel 500"),
    ],
)
def test_the_piece_that_is_moved_into_gives_way(which: str, at: float, expected: str) -> None:
    assert told(move(PLAIN, which, at)) == expected


def test_a_path_without_a_channel_can_get_one() -> None:
    rows = move(path(("sheet", 30.0), ("shallow", 200.0)), "channel_start", 120.0)
    assert told(rows) == "1 sheet 30, 2 shallow 120, channel 200"


def test_open_water_stays_where_it_is() -> None:
    rows = path(("sheet", 30.0), ("shallow", 80.0), ("open_water", 120.0), ("shallow", 200.0), ("channel", 300.0))
    sheet, channel = joints(rows, NAMES)
    assert (sheet.high, channel.low) == (80.0, 120.0)


@given(
    cuts=st.lists(st.floats(1.0, 999.0), min_size=2, max_size=8, unique=True),
    sheet=st.booleans(),
    which=st.sampled_from(["sheet_end", "channel_start"]),
    at=st.floats(-50.0, 1100.0),
    data=st.data(),
)
def test_the_path_stays_whole(cuts: list[float], sheet: bool, which: str, at: float, data: st.DataObject) -> None:
    ends = [*sorted(cuts), 1000.0]
    head = data.draw(st.integers(1, len(ends)))
    regimes = ["shallow"] * head + ["channel"] * (len(ends) - head)
    if sheet:
        regimes[0] = "sheet"
    rows = path(*zip(regimes, ends, strict=True))
    found = [joint for joint in joints(rows, NAMES) if joint.which == which]
    if not found:
        assert which == "sheet_end"
        assert not sheet
        return
    after = moved(rows, NAMES, found[0], at, level)
    assert float(after[0][NAMES.start]) == 0.0
    assert float(after[-1][NAMES.end]) == 1000.0
    assert all(above[NAMES.end] == below[NAMES.start] for above, below in pairwise(after))
    assert all(float(row[NAMES.start]) < float(row[NAMES.end]) for row in after)
    assert all(row[NAMES.top] == level(float(row[NAMES.start])) for row in after)
    again = [joint.at for joint in joints(after, NAMES) if joint.which == which]
    assert again in ([], [min(max(at, found[0].low), found[0].high)])
