"""A review in hand: what follows from a step, undo, saving, and what a crash leaves."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import Any

import pytest

from basinwright import pipeline
from basinwright.errors import InputRejected
from basinwright.review.session import Session

pytestmark = pytest.mark.xdist_group("report")

TABLES = ("outlets", "segments", "cover_shares", "timing", "flags", "hydrographs", "unit_hydrographs", "cross_checks")


def rows(folder: Path, name: str) -> list[dict[str, str]]:
    with (folder / f"{name}.csv").open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def outlet(folder: Path, outlet_id: str) -> dict[str, str]:
    return next(row for row in rows(folder, "outlets") if row["outlet_id"] == outlet_id)


def shown(session: Session, outlet_id: str) -> dict[str, float]:
    table = session.compute(outlet_id, session.state(outlet_id)).tables["outlets"]
    return {name: table[name][0] for name in ("tc_h", "peak_2yr_cfs", "peak_100yr_cfs", "channel_length_ft")}


def channel_start(session: Session, outlet_id: str) -> float:
    return next(joint.at for joint in session.joints(outlet_id) if joint.which == "channel_start")


def drag(session: Session, outlet_id: str, factor: float) -> None:
    at = factor * channel_start(session, outlet_id)
    session.do(outlet_id, {"kind": "joint", "which": "channel_start", "at": at, "reason": "gully on the photo"})


def test_what_the_page_shows_is_what_retime_gives(run: Path) -> None:
    session = Session(run)
    before = shown(session, "TC-003")
    drag(session, "TC-003", 2.0)
    channel = next(i for i, row in enumerate(session.state("TC-003").rows["segments"]) if row["regime"] == "channel")
    session.do("TC-003", {"kind": "cell", "table": "segments", "row": channel, "column": "roughness", "value": "0.06"})
    session.do("TC-005", {"kind": "cell", "table": "outlets", "row": 0, "column": "curve_number", "value": "80"})
    session.do("TC-001", {"kind": "stage", "value": "half"})
    after = {outlet_id: shown(session, outlet_id) for outlet_id in ("TC-001", "TC-003", "TC-005")}
    assert after["TC-003"]["tc_h"] > before["tc_h"]
    assert after["TC-003"]["channel_length_ft"] < before["channel_length_ft"]
    session.save()
    for _ in range(2):  # as saved, and computed once more from the files alone
        for outlet_id, figures in after.items():
            row = outlet(run, outlet_id)
            assert {name: float(row[name]) for name in figures} == figures
        pipeline.retime(run)
    assert [row["edited"] for row in rows(run, "segments") if row["outlet_id"] == "TC-003"].count("true") >= 2


def test_undo_to_the_start_gives_the_original_bytes(run: Path, sample: Path) -> None:
    session = Session(run)
    drag(session, "TC-003", 0.5)
    session.save()
    assert (run / "segments.csv").read_bytes() != (sample / "segments.csv").read_bytes()
    session.do("TC-003", {"kind": "cell", "table": "cover_shares", "row": 0, "column": "curve_number", "value": "99"})
    session.do("TC-002", {"kind": "mark", "value": "accepted"})
    session.save()
    while session.undo():
        pass
    session.save()
    assert [
        name for name in TABLES if (run / f"{name}.csv").read_bytes() != (sample / f"{name}.csv").read_bytes()
    ] == []
    assert {row["state"] for row in rows(run, "review")} == {"left"}
    log = rows(run, "edits")  # nothing is ever taken out of the log
    assert [row["reason"] for row in log].count("taken back") == 3
    assert log[0]["reason"] == "gully on the photo"


def test_redo_after_undo_gives_the_same_numbers(run: Path) -> None:
    session = Session(run)
    drag(session, "TC-003", 0.5)
    drag(session, "TC-003", 3.0)
    wanted = shown(session, "TC-003")
    assert session.undo() == "TC-003"
    assert shown(session, "TC-003") != wanted
    assert session.redo() == "TC-003"
    assert shown(session, "TC-003") == wanted
    assert session.redo() is None


def test_a_crash_loses_no_finished_step(run: Path) -> None:
    first = Session(run)
    drag(first, "TC-003", 0.5)
    drag(first, "TC-005", 0.7)
    first.undo()
    wanted = shown(first, "TC-003")
    journal = first.journal.path
    with journal.open("a", encoding="utf-8") as stream:
        stream.write('{"step": {"time": "torn in the mid')
    again = Session(run)
    assert (again.resumed, again.unsaved) == (3, 1)
    assert shown(again, "TC-003") == wanted
    assert channel_start(again, "TC-005") == channel_start(first, "TC-005")
    again.save()
    assert not journal.exists()
    assert float(outlet(run, "TC-003")["tc_h"]) == wanted["tc_h"]


def test_the_journal_of_other_tables_is_not_taken_up(run: Path) -> None:
    first = Session(run)
    drag(first, "TC-003", 0.5)
    lines = first.journal.path.read_text(encoding="utf-8").splitlines(keepends=True)
    lines[0] = json.dumps({"run": "of another run"}) + "\n"
    first.journal.path.write_text("".join(lines), encoding="utf-8")
    assert Session(run).resumed == 0


def test_what_is_given_up_is_gone(run: Path) -> None:
    session = Session(run)
    before = shown(session, "TC-003")
    drag(session, "TC-003", 0.5)
    session.discard()
    assert shown(session, "TC-003") == before
    assert Session(run).resumed == 0


def test_tables_that_somebody_else_changed_are_not_overwritten(run: Path) -> None:
    session = Session(run)
    drag(session, "TC-003", 0.5)
    other = Session(run)
    other.do("TC-008", {"kind": "cell", "table": "outlets", "row": 0, "column": "tc_h", "value": "2"})
    other.save()
    stood = (run / "segments.csv").read_bytes()
    with pytest.raises(InputRejected, match="somebody else"):
        session.save()
    assert (run / "segments.csv").read_bytes() == stood
    assert float(outlet(run, "TC-008")["tc_h"]) == 2.0


def test_the_outlets_that_need_eyes_come_first(run: Path) -> None:
    queue = Session(run).queue()
    rank = ["failed", "serious", "warning", "note", "ok"]
    order = [(rank.index(entry["severity"]), -entry["outlets_above"]) for entry in queue]
    assert order == sorted(order)
    assert queue[0]["severity"] == "serious"


@pytest.mark.parametrize(
    ("action", "said"),
    [
        ({"kind": "shell"}, "no action"),
        ({"kind": "joint", "which": "divide", "at": 3}, "none that can be moved"),
        ({"kind": "joint", "which": "channel_start", "at": "nan"}, "none that can be moved"),
        (
            {"kind": "cell", "table": "outlets", "row": 0, "column": "outlet_id", "value": "x"},
            "none that can be edited",
        ),
        ({"kind": "cell", "table": "../run", "row": 0, "column": "area", "value": "1"}, "none that can be edited"),
        ({"kind": "cell", "table": "segments", "row": 99, "column": "slope", "value": "1"}, "none that can be edited"),
        ({"kind": "cell", "table": "segments", "row": 1, "column": "slope", "value": "steep"}, "not a finite number"),
        ({"kind": "cell", "table": "segments", "row": 1, "column": "regime", "value": "waterfall"}, "is unknown"),
        ({"kind": "mark", "value": "maybe"}, "is not 'maybe'"),
        ({"kind": "mark", "value": "rejected", "reason": "  "}, "is missing"),
        ({"kind": "stage", "value": "flood"}, "is not 'flood'"),
    ],
)
def test_what_cannot_be_done_changes_nothing(run: Path, action: dict[str, Any], said: str) -> None:
    session = Session(run)
    with pytest.raises(InputRejected, match=said):
        session.do("TC-003", action)
    assert (session.unsaved, session.revision, session.journal.path.exists()) == (0, 0, False)


def test_tables_edited_by_hand_are_to_be_computed_first(run: Path) -> None:
    text = (run / "outlets.csv").read_text(encoding="utf-8")
    (run / "outlets.csv").write_text(text.replace("Mill Lane", "Mill Road"), encoding="utf-8")
    with pytest.raises(InputRejected, match="retime"):
        Session(run)
