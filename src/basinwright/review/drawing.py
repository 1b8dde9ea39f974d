"""What the page shows of an outlet: figures before and after, the long profile, the map, the floods, the tables."""

from __future__ import annotations

import math
import tempfile
from dataclasses import replace
from pathlib import Path
from typing import Any

from basinwright.errors import InputRejected
from basinwright.flags import FLAGS
from basinwright.hydrology import Results
from basinwright.outputs.writing import write_tables
from basinwright.report import charts, maps, words
from basinwright.report.reading import SUPPLIED, Outlet, Run, read_layers, read_run
from basinwright.review.joints import joints
from basinwright.review.session import Session, State
from basinwright.tables import COVER_SHARES, OUTLETS, SEGMENTS, Column, Table

_FIGURES = ("tc_h", "lag_h", "sheet_length", "shallow_length", "channel_length", "curve_number")
_LABELS = {
    "tc_h": "Tc",
    "lag_h": "lag",
    "sheet_length": "sheet flow",
    "shallow_length": "shallow flow",
    "channel_length": "channel",
    "curve_number": "curve number",
}
_SHOWN: dict[str, tuple[str, ...]] = {
    "segments": ("segment", "regime", "cover", "from", "to", "top_elevation", "bottom_elevation", "slope", "roughness",
                 "hydraulic_radius", "velocity", "travel_time_h", "note"),
    "cover_shares": ("cover", "soil_group", "area", "curve_number", "impervious_pct"),
    "outlets": ("area", "path_length", "basin_slope_pct", "curve_number", "tc_h"),
}  # fmt: skip
_TABLES: dict[str, Table] = {table.name: table for table in (SEGMENTS, COVER_SHARES, OUTLETS)}
_PATH_POINTS = 600
"""More points than this do not make a path on the page any finer."""


class Drawing:
    """Draws the outlets of a session.

    Parameters
    ----------
    session : Session
    """

    def __init__(self, session: Session) -> None:
        self.session = session
        self._of: tuple[str, str] | None = None
        self._held: tuple[Run, Outlet, Outlet | None]

    def _run(self, outlet_id: str) -> tuple[Run, Outlet, Outlet | None]:
        """Return the run with the geometries of an outlet, that outlet, and the outlet as the run first computed it."""
        session = self.session
        session.state(outlet_id)  # refuses an unknown one
        if self._of != (session.identity, outlet_id):
            if self._of is None or self._of[0] != session.identity:
                run = read_run(session.folder, session.about, rows_only=True)
            else:
                run = self._held[0]
                left = self._held[1]  # what was drawn of it is not kept
                left.basin = left.subbasin = left.path = None
                left.lines, left.streams, left.neighbours = {}, [], []
            read_layers(run, outlet_id)
            base = run.outlet(outlet_id)
            first = None if base.failed else self._computed(outlet_id, session.first(outlet_id))
            self._of, self._held = (session.identity, outlet_id), (run, base, first)
        return self._held

    def _computed(self, outlet_id: str, state: State) -> Outlet:
        """Return an outlet as computed from a state of it; computed once where the state is that of the first run."""
        known = self._held[2] if self._of == (self.session.identity, outlet_id) else None
        if known is not None and state.rows == self.session.first(outlet_id).rows:
            return replace(known)
        return self._as_outlet(self.session.compute(outlet_id, state))

    def _as_outlet(self, results: Results) -> Outlet:
        """Return the results of one outlet as the report reads them."""
        about = {**self.session.about, SUPPLIED: [None]}
        with tempfile.TemporaryDirectory() as temporary:
            write_tables(Path(temporary), results.tables, self.session.project)
            return read_run(Path(temporary), about).outlets[0]

    def outlet(self, outlet_id: str, state: State | None = None, *, with_map: bool = True) -> dict[str, Any]:
        """Return all that the page shows of an outlet, as plain values; pictures as SVG.

        Parameters
        ----------
        outlet_id : str
        state : State, optional
            Of the outlet; the one that stands where not given.
        with_map : bool
            Whether to draw the map too.
        """
        session = self.session
        run, base, first = self._run(outlet_id)
        state = session.state(outlet_id) if state is None else state
        shown: dict[str, Any] = {
            "id": outlet_id,
            "heading": words.short(base.id, 60)
            + (f" · {words.short(base.row['name'], 90)}" if base.row["name"] else ""),
            "mark": vars(state.mark),
        }
        if first is None:
            doubts = [self._doubt(doubt.key, doubt.message) for doubt in base.doubts]
            return {**shown, "failed": True, "doubts": doubts}
        now = self._computed(outlet_id, state)
        now.number, now.basin, now.supplied = base.number, base.basin, base.supplied
        now.streams, now.neighbours = base.streams, base.neighbours
        floor = float(session.about["project"]["flow_path"]["slope_floor"])
        length = now.segments[-1]["to"] if now.segments else 1.0
        scale = charts.along_profile(length)
        found = joints(session.standing(outlet_id, state)["segments"], session.names)
        shown |= {
            "failed": False,
            "doubts": [self._doubt(doubt.key, doubt.message) for doubt in now.doubts],
            "figures": self._figures(run, first, now),
            "profile": charts.profile(run, now, floor),
            "scale": {"length": length, "left": scale(0.0), "right": scale(length), "width": charts.WIDE},
            "joints": [vars(joint) for joint in found],
            "floods": charts.floods(run, now),
            "tables": {name: self._table(name, state, now) for name in _SHOWN},
            "unit": words.unit_of(SEGMENTS.column("from"), session.system),
        }
        if with_map:
            now.lines = self._lines(outlet_id, now)
            shown |= {"map": maps.outlet_map(run, now), "path": self._path(outlet_id, run, now)}
        return shown

    def _doubt(self, key: str, message: str) -> dict[str, str]:
        flag = FLAGS[key]
        return {"key": key, "severity": flag.severity, "message": message, "remedy": flag.remedy}

    def _figures(self, run: Run, first: Outlet, now: Outlet) -> list[dict[str, str]]:
        stems = [(stem, _LABELS[stem]) for stem in _FIGURES]
        stems += [(f"peak_{period}yr", f"{period}-year peak") for period in run.periods]
        rows = []
        for stem, label in stems:
            before, after = first.row[stem], now.row[stem]
            change = (after / before - 1.0) * 100.0 if before and before == before else math.nan
            same = before == after or (before != before and after != after)
            schema = stem if not stem.startswith("peak_") else "peak_{T}yr"
            rows.append(
                {
                    "stem": stem,
                    "label": label,
                    "before": words.with_unit(before, schema, run.system),
                    "now": words.with_unit(after, schema, run.system),
                    "change": "" if same or change != change else f"{change:+.1f} %",
                }
            )
        return rows

    def _table(self, name: str, state: State, now: Outlet) -> dict[str, Any]:
        """Return a table to edit: the cells as computed, and which of them a person may change."""
        table, system = _TABLES[name], self.session.system
        computed = {"segments": now.segments, "cover_shares": now.shares, "outlets": [now.row]}[name]
        columns = [table.column(stem) for stem in _SHOWN[name]]
        rows = []
        for decided, row in zip(state.rows[name], computed, strict=True):
            cells = []
            for column in columns:
                value, own = row[column.stem], decided[column.name(system)]
                text = self._text(column.stem, value)
                cells.append({"text": text, "exact": own, "held": bool(own) and column.stem in self._dependent(name)})
            rows.append(cells)
        return {
            "columns": [self._described(column) for column in columns],
            "rows": rows,
            "edited": [row.get("edited") is True for row in computed],
        }

    def _text(self, stem: str, value: Any) -> str:
        """Return a cell as the page shows it."""
        if isinstance(value, str):
            return value
        if value != value:
            return ""
        if stem == "segment":
            return str(int(value))
        if stem in ("from", "to"):
            return words.station(value, self.session.system)
        if stem.endswith("_elevation"):
            return words.elevation(value, self.session.system)
        return words.figure(value)

    def _described(self, column: Column) -> dict[str, Any]:
        return {
            "stem": column.stem,
            "meaning": column.meaning,
            "unit": words.unit_label(column.unit_in(self.session.system)),
            "editable": column.editable and column.stem not in ("from", "to"),  # the handles move these
            "choices": list(column.choices),
            "type": column.type,
        }

    def _dependent(self, name: str) -> tuple[str, ...]:
        from basinwright.editing import dependent_stems

        return dependent_stems(name)

    def _lines(self, outlet_id: str, now: Outlet) -> dict[int, Any]:
        """Cut the flow path at the distances of the segments as they stand."""
        import numpy as np

        from basinwright.paths.lines import segment_lines

        shapes = self.session.shapes
        if shapes is None:
            return {}
        metre = SEGMENTS.column("from").inside_per_shown(self.session.system)
        index = self.session.ids.index(outlet_id)
        lines = segment_lines(
            shapes.grid, shapes.terrain, shapes.paths,
            {"outlet": np.full(len(now.segments), index), **{
                f"{stem}_m": np.array([row[stem] * metre for row in now.segments]) for stem in ("from", "to")}},
        )  # fmt: skip
        return {int(row["segment"]): line for row, line in zip(now.segments, lines, strict=True)}

    def _path(self, outlet_id: str, run: Run, now: Outlet) -> list[list[float]]:
        """Return distance and place on the map of points along the flow path."""
        import numpy as np

        shapes, view = self.session.shapes, maps.outlet_view(run, now)
        if shapes is None or view is None:
            return []
        index = self.session.ids.index(outlet_id)
        along = np.arange(*shapes.paths.bounds[index : index + 2])
        along = along[:: max(1, along.size // _PATH_POINTS)]
        x, y = shapes.grid.xy(*shapes.terrain.rows_cols(shapes.paths.cells[along]))
        left, top = view.place(x, y)
        metre = SEGMENTS.column("from").inside_per_shown(self.session.system)
        distance = shapes.paths.distance_m[along] / metre
        return np.round(np.column_stack([distance, left, top]), 2).tolist()


def refusal(error: InputRejected) -> list[str]:
    """Return the problems of a refused action as the page tells them."""
    return [f"{problem.field}: {problem.what}: {problem.fix}" for problem in error.problems]
