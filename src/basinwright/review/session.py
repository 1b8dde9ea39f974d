"""A review in hand: what the person did, what follows from it, and how it is saved."""

from __future__ import annotations

import hashlib
import math
import tempfile
import time
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

from basinwright import editing
from basinwright.editing import Cell, Record
from basinwright.errors import InputRejected
from basinwright.flags import SEVERITIES
from basinwright.hydrology import Results
from basinwright.pipeline import geometry, manifest, running
from basinwright.review.joints import Joint, Names, Row, joints, moved
from basinwright.review.journal import Journal
from basinwright.store import STORE, RunFolder
from basinwright.tables import EDITS, REVIEW, Table, csv_text, read_csv, write_csv
from basinwright.units import SHOWN, System

if TYPE_CHECKING:
    import pandas as pd

STATES = {
    "left": "not looked at yet",
    "accepted": "reviewed and accepted",
    "edited": "reviewed and edited",
    "rejected": "rejected: not to be used",
    "field_check": "to be checked in the field",
}
"""How far the review of an outlet has come."""
REVIEW_FIELD = "review"
"""What a step changes that is a decision about the outlet and leaves its tables as they are."""
TABLES = ("segments", "outlets", "cover_shares")
_MOST_TEXT = 500


@dataclass(frozen=True)
class Mark:
    """What the person decided about an outlet, and why."""

    state: str = "left"
    reason: str = ""
    time: str = ""


@dataclass
class State:
    """All that a person can change of one outlet: its rows of the editable tables as text, and the mark."""

    rows: dict[str, list[Row]]
    mark: Mark = field(default_factory=Mark)

    def plain(self) -> dict[str, Any]:
        """Return it as plain values."""
        return {"rows": self.rows, "mark": vars(self.mark)}

    @classmethod
    def of(cls, plain: Mapping[str, Any]) -> State:
        """Return what `plain` gave."""
        return cls(plain["rows"], Mark(**plain["mark"]))


@dataclass
class Step:
    """One thing that the person did.

    Parameters
    ----------
    time : str
        UTC, ISO 8601.
    outlet_id : str
    field, old, new : str
        What was changed, from what, to what, as a reader of edits.csv needs it.
    reason : str
    before, after : State
    """

    time: str
    outlet_id: str
    field: str
    old: str
    new: str
    reason: str
    before: State
    after: State

    def plain(self) -> dict[str, Any]:
        """Return it as plain values."""
        return {**vars(self), "before": self.before.plain(), "after": self.after.plain()}

    @classmethod
    def of(cls, plain: Mapping[str, Any]) -> Step:
        """Return what `plain` gave."""
        return cls(**{**plain, "before": State.of(plain["before"]), "after": State.of(plain["after"])})


class Session:
    """The review of one run.

    Parameters
    ----------
    folder : Path
        A finished run whose tables are as they were last written.

    Raises
    ------
    InputRejected
        Where there is no run, or its tables were edited and not computed again.
    """

    def __init__(self, folder: Path) -> None:
        self.run_folder = RunFolder(folder)
        self.run_folder.refuse_absent()
        with self.run_folder.locked():
            self._read()
        self.journal = Journal(self.run_folder.beside("review"), self.identity)
        self.history: list[Step] = []
        self.position = 0
        self.saved = 0
        self.revision = 0
        self.resumed = 0
        for line in self.journal.settle():
            if "step" in line:
                self._advance(Step.of(line["step"]))
            else:
                self._walk(line["to"])
            self.resumed += 1

    def _read(self) -> None:
        self.folder = self.run_folder.final
        self.about = manifest.read(self.folder)
        self.project, self.settings = manifest.settings(self.about)
        self.record = manifest.record(self.about)
        for name, written in self.record.written.items():
            path = self.folder / f"{name}.csv"
            if path.is_file() and not read_csv(path).equals(written):
                what, fix = "was edited after it was computed", f"run: basinwright retime {self.folder}"
                raise InputRejected.one(str(path), "file", what, fix)
        self.system = self.project.project.units
        self.names = Names(self.system)
        self.ids: list[str] = self.record.written["outlets"]["outlet_id"].tolist()
        self.identity = _fingerprint(self.record.written)
        self.ground = manifest.ground(self.about, self.record, self.settings)
        self._written_rows, self._first_rows = _Rows(self.record.written), _Rows(self.record.first)
        self._states: dict[str, State] = {}
        self._marks = self._stored_marks()
        self.__dict__.pop("shapes", None)

    def _stored_marks(self) -> dict[str, Mark]:
        path = self.folder / f"{REVIEW.name}.csv"
        if not path.is_file():
            return {}
        rows = read_csv(path).to_dict("records")
        return {row["outlet_id"]: Mark(row["state"], row["reason"], row["time"]) for row in rows}

    @cached_property
    def shapes(self) -> geometry.Shapes | None:
        """Grid, paths and terrain of the run; None where its store is not there."""
        return geometry.stored(self.about, self.folder / STORE)

    # -- what stands ------------------------------------------------------------------------------------------------

    def state(self, outlet_id: str) -> State:
        """Return what stands of an outlet now.

        Raises
        ------
        InputRejected
            Where there is no such outlet.
        """
        if outlet_id not in self._states:
            if outlet_id not in self.ids:
                raise InputRejected.one("outlets.csv", "outlet_id", f"has no {outlet_id!r}", "choose one of its list")
            return State(self._decided(self._written_rows, self.record.held, outlet_id), self._mark(outlet_id))
        return self._states[outlet_id]

    def first(self, outlet_id: str) -> State:
        """Return an outlet as the run first wrote it."""
        return State(self._decided(self._first_rows, self.record.supplied, outlet_id), self._mark(outlet_id))

    def _decided(self, tables: _Rows, held: set[Cell], outlet_id: str) -> dict[str, list[Row]]:
        """Return the rows of an outlet with every cell empty that is computed: what a person decides, and no more."""
        decided = {}
        for name in TABLES:
            rows = tables.of(name, outlet_id)
            for place, row in enumerate(rows, start=1):
                key = {"segments": row.get("segment", ""), "outlets": "", "cover_shares": str(place)}[name]
                for stem in _DEPENDENT[name]:
                    if (name, outlet_id, key, stem) not in held:
                        row[self._column(name, stem)] = ""
            decided[name] = rows
        return decided

    def _column(self, table: str, stem: str) -> str:
        return _EDITABLE[table].column(stem).name(self.system)

    def shown(self, outlet_id: str, table: str) -> list[Row]:
        """Return the rows of an outlet as last written, computed cells and all."""
        return self._written_rows.of(table, outlet_id)

    def standing(self, outlet_id: str, state: State) -> dict[str, list[Row]]:
        """Return the rows of a state as they would stand in the files: with the cells that nobody may edit."""
        return {name: _refilled(rows, self.shown(outlet_id, name), name, self.system) for name, rows in
                state.rows.items()}  # fmt: skip

    def _mark(self, outlet_id: str) -> Mark:
        standing = self._states.get(outlet_id)
        return self._marks.get(outlet_id, Mark()) if standing is None else standing.mark

    def joints(self, outlet_id: str) -> list[Joint]:
        """Return the joints of an outlet's path that may be moved."""
        return joints(self.state(outlet_id).rows["segments"], self.names)

    @property
    def unsaved(self) -> int:
        """How many steps lie between what is shown and what is saved."""
        return abs(self.position - self.saved)

    def queue(self) -> list[dict[str, Any]]:
        """List the outlets, those first that need eyes first: by severity, then by how many lie downstream."""
        outlets = _plain_rows(self.record.written["outlets"])
        severity = self._severities()
        below = self._influence(outlets)
        order = sorted(outlets, key=lambda row: (-severity[row["outlet_id"]], -below[row["outlet_id"]]))
        words = ("ok", *SEVERITIES, "failed")
        return [
            {
                "id": row["outlet_id"],
                "name": row["name"],
                "severity": words[severity[row["outlet_id"]]],
                "flags": row["flags"].split(),
                "state": self._mark(row["outlet_id"]).state,
                "outlets_above": below[row["outlet_id"]],
            }
            for row in order
        ]

    def _severities(self) -> dict[str, int]:
        path = self.folder / "flags.csv"
        rank: dict[str, int] = {key: i for i, key in enumerate(SEVERITIES, start=1)}
        found = dict.fromkeys(self.ids, 0)
        if path.is_file():
            for outlet_id, severity in read_csv(path)[["outlet_id", "severity"]].itertuples(index=False, name=None):
                found[outlet_id] = max(found[outlet_id], rank[severity])
        failed = self.record.written["outlets"]
        worst: list[str] = failed["outlet_id"][failed["status"] == "failed"].tolist()
        return found | dict.fromkeys(worst, len(SEVERITIES) + 1)

    def _influence(self, outlets: list[dict[str, str]]) -> dict[str, int]:
        """Count the outlets whose basin each outlet's choice of place bounds: all those upstream of it."""
        above = dict.fromkeys(self.ids, 0)
        parent = {row["outlet_id"]: row["downstream_outlet_id"] for row in outlets}
        for outlet_id in self.ids:
            seen = {outlet_id}
            while (outlet_id := parent.get(outlet_id, "")) and outlet_id not in seen:
                seen.add(outlet_id)
                above[outlet_id] += 1
        return above

    def compute(self, outlet_id: str, state: State) -> Results:
        """Compute one outlet from a state of it, as `retime` computes it from the same tables.

        Raises
        ------
        InputRejected
            With what is wrong in its tables.
        """
        record = _of_outlet(self.record, outlet_id)
        with tempfile.TemporaryDirectory() as temporary:
            folder = Path(temporary)
            for name, rows in self.standing(outlet_id, state).items():
                write_csv(folder / f"{name}.csv", _columns(list(record.written[name].columns), rows))
            edits = editing.apply(folder, record, self.system, self.settings.scheme)
        curves = self.ground.time_area
        ground = replace(
            self.ground,
            time_area=curves[curves["outlet_id"] == outlet_id],
            flags=[flag for flag in self.ground.flags if flag.outlet_id == outlet_id],
        )
        return ground.compute(edits, series=True)

    # -- what the person does ---------------------------------------------------------------------------------------

    def attempt(self, outlet_id: str, action: Mapping[str, Any]) -> Step:
        """Return the step that an action would be; nothing is changed.

        Parameters
        ----------
        outlet_id : str
        action : mapping
            ``kind`` and what it needs: ``joint`` (which, at), ``cell`` (table, row, column, value), ``stage`` (value),
            ``mark`` (value), ``first``; and ``reason``.

        Raises
        ------
        InputRejected
            Where the action is none, or impossible.
        """
        before = self.state(outlet_id)
        kinds = {"joint": self._joint, "cell": self._cell, "stage": self._stage, "mark": self._marked,
                 "first": self._first}  # fmt: skip
        make = kinds.get(str(action.get("kind")))
        if make is None:
            raise InputRejected.one("review", "kind", "is no action of this page", f"use one of {', '.join(kinds)}")
        what, old, new, after = make(outlet_id, before, action)
        reason = str(action.get("reason") or "").strip()[:_MOST_TEXT]
        if what != REVIEW_FIELD:
            note = reason or before.mark.reason
            after = State(after.rows, Mark("edited", note, _now()))
        return Step(_now(), outlet_id, what, old, new, reason, before, after)

    def do(self, outlet_id: str, action: Mapping[str, Any]) -> Step:
        """Take an action: checked by computing it, kept on disk, then shown.

        Raises
        ------
        InputRejected
            As for `attempt`, or where its tables cannot be computed; nothing is changed then.
        """
        step = self.attempt(outlet_id, action)
        if step.field != REVIEW_FIELD:
            self.compute(outlet_id, step.after)
        self.journal.append({"step": step.plain()})
        self._advance(step)
        return step

    def undo(self) -> str | None:
        """Take back the last step; returns its outlet, None where there is none."""
        return self._to(self.position - 1)

    def redo(self) -> str | None:
        """Do the next step again; returns its outlet, None where there is none."""
        return self._to(self.position + 1)

    def _to(self, position: int) -> str | None:
        if not 0 <= position <= len(self.history):
            return None
        self.journal.append({"to": position})
        return self._walk(position)

    def _walk(self, position: int) -> str | None:
        outlet_id = None
        while self.position != position:
            forward = self.position < position
            step = self.history[self.position if forward else self.position - 1]
            self._states[step.outlet_id] = step.after if forward else step.before
            self.position += 1 if forward else -1
            outlet_id = step.outlet_id
        self.revision += 1
        return outlet_id

    def _advance(self, step: Step) -> None:
        del self.history[self.position :]
        self.history.append(step)
        self._states[step.outlet_id] = step.after
        self.position += 1
        self.revision += 1

    def _joint(self, outlet_id: str, before: State, action: Mapping[str, Any]) -> tuple[str, str, str, State]:
        which, at = action.get("which"), _number(action.get("at"))
        found = [joint for joint in self.joints(outlet_id) if joint.which == which]
        if not found or at is None:
            raise InputRejected.one("review", "joint", "is none that can be moved", "drag one that the profile shows")
        rows = moved(before.rows["segments"], self.names, found[0], at, lambda d: self.elevation(outlet_id, d))
        after = State({**before.rows, "segments": rows}, before.mark)
        new = next(joint.at for joint in joints(rows, self.names) if joint.which == which)
        unit = SHOWN["length"].suffix(self.system)
        return f"{which}_{unit}", f"{found[0].at:.6g}", f"{new:.6g}", after

    def elevation(self, outlet_id: str, distance: float) -> str:
        """Read the elevation of a path at a distance, as text in the unit of the tables; empty where it is not kept."""
        import numpy as np

        if self.shapes is None:
            return ""
        paths, index = self.shapes.paths, self.ids.index(outlet_id)
        along = slice(*paths.bounds[index : index + 2])
        if along.start == along.stop:
            return ""
        metre = SHOWN["length"].inside_per_shown(self.system)
        level = np.interp(distance * metre, paths.distance_m[along], paths.elevation_m[along])
        return repr(float(level) / metre)

    def _cell(self, outlet_id: str, before: State, action: Mapping[str, Any]) -> tuple[str, str, str, State]:
        name, stem = str(action.get("table")), str(action.get("column"))
        table: Table | None = next((table for table in editing.EDITABLE if table.name == name), None)
        column = None if table is None else next((c for c in table.columns if c.stem == stem and c.editable), None)
        rows = [dict(row) for row in before.rows.get(name, [])]
        place = _number(action.get("row"))
        if column is None or place is None or not 0 <= int(place) < len(rows):
            raise InputRejected.one("review", "cell", "is none that can be edited", "choose one that the page offers")
        row, full = rows[int(place)], column.name(self.system)
        new = str(action.get("value") or "").strip()[:_MOST_TEXT]
        written = self.standing(outlet_id, before)[name][int(place)]
        old = row[full] or self._computed(outlet_id, name, written).get(full, "")
        row[full] = new
        where = f"{row['segment']}." if name == "segments" else f"{int(place) + 1}." if name == "cover_shares" else ""
        return f"{name}.{where}{full}", old, new, State({**before.rows, name: rows}, before.mark)

    def _computed(self, outlet_id: str, name: str, row: Row) -> Row:
        """Return the row of a table as last written that a row came from; empty for a new one."""
        if name != "segments":
            return row
        return next((shown for shown in self.shown(outlet_id, name) if shown["segment"] == row["segment"]), {})

    def _stage(self, outlet_id: str, before: State, action: Mapping[str, Any]) -> tuple[str, str, str, State]:
        """Let an outlet's channels flow at half or full bankfull depth: their hydraulic radius says so."""
        value = str(action.get("value"))
        radius, half = self.names.radius, self.names.radius_half
        if value not in ("bankfull", "half"):
            raise InputRejected.one("review", "stage", f"is not {value!r}", "use bankfull or half")
        rows = [dict(row) for row in before.rows["segments"]]
        halves = {row["segment"]: row[half] for row in self.shown(outlet_id, "segments")}
        channels = [row for row in rows if row["regime"] == "channel" and halves.get(row["segment"])]
        was = "half" if channels and all(row[radius] == halves[row["segment"]] for row in channels) else "bankfull"
        for row in channels:
            row[radius] = halves[row["segment"]] if value == "half" else ""
        return "stage", was, value, State({**before.rows, "segments": rows}, before.mark)

    def _marked(self, outlet_id: str, before: State, action: Mapping[str, Any]) -> tuple[str, str, str, State]:
        value = str(action.get("value"))
        if value not in STATES:
            raise InputRejected.one("review", "mark", f"is not {value!r}", f"use one of {', '.join(STATES)}")
        reason = str(action.get("reason") or "").strip()[:_MOST_TEXT]
        if value in ("rejected", "field_check") and not reason:
            raise InputRejected.one("review", "reason", "is missing", "say why: the next reader has only this")
        return REVIEW_FIELD, before.mark.state, value, State(before.rows, Mark(value, reason, _now()))

    def _first(self, outlet_id: str, before: State, action: Mapping[str, Any]) -> tuple[str, str, str, State]:
        del action
        return "all edits", "as edited", "as first computed", self.first(outlet_id)

    # -- saving -----------------------------------------------------------------------------------------------------

    def save(self) -> None:
        """Write the corrected tables into the run, compute all that follows, and log what was done.

        Raises
        ------
        InputRejected, PublishError
            Where the run could not take them; the review stays as it is.
        """
        touched = sorted({step.outlet_id for step in self._since_saved()}, key=self.ids.index)
        if not touched:
            return
        states = {outlet_id: self.state(outlet_id) for outlet_id in self.ids if outlet_id in self._states}
        marks = {outlet_id: self._mark(outlet_id) for outlet_id in self.ids}
        log = [*_entries(self.folder), *self._log()]

        def revise(folder: Path) -> None:
            if _fingerprint({name: read_csv(folder / f"{name}.csv") for name in TABLES}) != self.identity:
                what, fix = "were changed by somebody else since this page opened", "close it and open it again"
                raise InputRejected.one(str(self.folder), "tables", what, fix)
            for name in TABLES:
                _replace(folder / f"{name}.csv", csv_text(self._with(states, name)))
            _replace(folder / f"{EDITS.name}.csv", csv_text(_columns([c.stem for c in EDITS.columns], log)))
            rows = [{"outlet_id": key, **vars(mark)} for key, mark in marks.items()]
            _replace(folder / f"{REVIEW.name}.csv", csv_text(_columns([c.stem for c in REVIEW.columns], rows)))

        running.retime(self.folder, revise=revise)
        self.journal.clear()
        with self.run_folder.locked():
            self._read()
        self.journal.run = self.identity
        self.saved = self.position
        self.revision += 1

    def discard(self) -> None:
        """Give up everything that is not saved."""
        self.journal.clear()
        self.history.clear()
        self._states.clear()
        self.position = self.saved = 0
        self.revision += 1

    def _since_saved(self) -> list[Step]:
        low, high = sorted((self.saved, self.position))
        return self.history[low:high]

    def _log(self) -> Iterable[Row]:
        steps = self._since_saved()
        if self.position >= self.saved:
            return [
                {"time": s.time, "outlet_id": s.outlet_id, "field": s.field, "from": s.old, "to": s.new,
                 "reason": s.reason} for s in steps
            ]  # fmt: skip
        return [
            {"time": _now(), "outlet_id": s.outlet_id, "field": s.field, "from": s.new, "to": s.old,
             "reason": "taken back"} for s in reversed(steps)
        ]  # fmt: skip

    def _with(self, states: Mapping[str, State], name: str) -> dict[str, list[str]]:
        """Return a table as last written with the rows of these outlets in place of its own."""
        frame = self.record.written[name]
        rows: list[Row] = []
        done = set()
        for row in _plain_rows(frame):
            outlet_id = row["outlet_id"]
            if outlet_id not in states:
                rows.append(row)
            elif outlet_id not in done:
                done.add(outlet_id)
                rows += self.standing(outlet_id, states[outlet_id])[name]
        return _columns([str(column) for column in frame.columns], rows)


_EDITABLE = {table.name: table for table in editing.EDITABLE}
_DEPENDENT = {name: editing.dependent_stems(name) for name in TABLES}


class _Rows:
    """The rows of tables, found by outlet."""

    def __init__(self, frames: Mapping[str, pd.DataFrame]) -> None:
        self._names = {name: [str(column) for column in frame.columns] for name, frame in frames.items()}
        self._cells = {name: frame.to_numpy(object) for name, frame in frames.items()}
        self._places = {name: frame.groupby("outlet_id", sort=False).indices for name, frame in frames.items()}

    def of(self, table: str, outlet_id: str) -> list[Row]:
        """Return the rows of an outlet, in their order; none where the table has none."""
        places = self._places[table].get(outlet_id)
        if places is None:
            return []
        return [dict(zip(self._names[table], row, strict=True)) for row in self._cells[table][places].tolist()]


def _plain_rows(frame: pd.DataFrame) -> list[Row]:
    return [{str(name): cell for name, cell in row.items()} for row in frame.to_dict("records")]


def _refilled(rows: list[Row], written: list[Row], name: str, system: System) -> list[Row]:
    """Return rows with the cells that are not to be edited as they were last written."""
    table = _EDITABLE[name]
    decided = {column.name(system) for column in table.columns if column.editable} | {"segment"}
    key = {"segments": "segment", "outlets": "outlet_id"}.get(name)
    of = {row[key]: row for row in written} if key else {}
    return [
        {**row, **{k: v for k, v in of.get(row[key] if key else "", {}).items() if k not in decided}} for row in rows
    ]


def _of_outlet(record: Record, outlet_id: str) -> Record:
    """Return what the manifest keeps of one outlet."""
    first, written = (
        {name: frame[frame["outlet_id"] == outlet_id].reset_index(drop=True) for name, frame in frames.items()}
        for frames in (record.first, record.written)
    )
    supplied, held = ({cell for cell in cells if cell[1] == outlet_id} for cells in (record.supplied, record.held))
    return Record(first, written, supplied, held)


def _fingerprint(frames: Mapping[str, pd.DataFrame]) -> str:
    """Hash of the editable tables: which steps can be taken up again, and whether somebody else changed them."""
    text = [csv_text(_columns([str(c) for c in frames[name].columns], _plain_rows(frames[name]))) for name in TABLES]
    return hashlib.sha256("".join(text).encode()).hexdigest()


def _columns(names: list[str], rows: list[Row]) -> dict[str, list[str]]:
    return {str(name): [row[name] for row in rows] for name in names}


def _entries(folder: Path) -> list[Row]:
    path = folder / f"{EDITS.name}.csv"
    return _plain_rows(read_csv(path)) if path.is_file() else []


def _replace(path: Path, text: str) -> None:
    path.unlink(missing_ok=True)  # it may be a link to a file of the run as it stands
    path.write_text(text, encoding="utf-8", newline="")


def _number(value: object) -> float | None:
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return None
    return number if math.isfinite(number) else None


def _now() -> str:
    return time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime())
