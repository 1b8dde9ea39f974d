"""Carries a person's edits of the base onto the tables of a variant: by outlet, and by distance along the path.

The difference between the base as the run first wrote it and as it stands now is laid onto what the terrain half made
of the variant: on each stretch of the path, and on each class and soil group, what a person decided stands, and the
rest is the variant's.
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from itertools import pairwise
from typing import TYPE_CHECKING

from basinwright.editing import Cell, Edited, Record, Row, by_outlet, by_row, profile, same, tolerance
from basinwright.tables import COVER_SHARES, OUTLETS, SEGMENTS, Table
from basinwright.units import System

if TYPE_CHECKING:
    import pandas as pd

_SAID = ("regime", "cover", "note")
"""What a person says of a stretch of the path."""
_HELD = ("slope", "roughness", "hydraulic_radius", "hydraulic_radius_half")
"""What a person may hold there; all but the slope mean something else in another regime."""
_OF_PATCH = ("curve_number", "impervious_pct", "source")


@dataclass(frozen=True)
class Carried:
    """A variant's tables with the edits of the base in them.

    Parameters
    ----------
    edited : Edited
        As `basinwright.editing.apply` returns it.
    left_out : dict of str to str
        Edits that make no sense in the variant, by outlet.
    """

    edited: Edited
    left_out: dict[str, str] = field(default_factory=dict)


def carry(
    edits: Edited, record: Record, onto: Mapping[str, pd.DataFrame], supplied: Iterable[Cell], system: System
) -> Carried:
    """Carry the edits of a run's base onto the tables of a variant.

    Parameters
    ----------
    edits : Edited
        The base as it stands, with a person's edits.
    record : Record
        What the manifest keeps of the base.
    onto : mapping of str to DataFrame
        The variant's tables as the terrain half made them: ``outlets``, ``segments`` and ``cover_shares``.
    supplied : iterable of Cell
        Dependent cells that the outlet layer supplied.
    system : {"us", "si"}
        Unit system of the project.
    """
    import pandas as pd

    supplied = set(supplied)
    if not edits.segments and not edits.shares and edits.held == supplied:
        return Carried(Edited(dict(onto), supplied))
    carriers = [kind(edits, record, system) for kind in (_OutletCarrier, _SegmentCarrier, _ShareCarrier)]
    tables = dict(onto)
    result = Carried(Edited(tables, set()))
    for carrier in carriers:
        frame = onto[carrier.table.name]
        rows = carrier.carry(by_outlet(frame), by_row(supplied, carrier.table.name))
        tables[carrier.table.name] = pd.DataFrame(rows, columns=list(frame.columns), dtype=object)
        result.edited.held.update(carrier.held)
        result.left_out.update(carrier.left_out)
    result.edited.segments.update(carriers[1].edited)
    result.edited.shares.update(carriers[2].edited)
    return result


class _Carrier:
    """One table."""

    table: Table

    def __init__(self, edits: Edited, record: Record, system: System) -> None:
        name = self.table.name
        self.name = {column.stem: column.name(system) for column in self.table.columns}
        self.first, self.now = by_outlet(record.first[name]), by_outlet(edits.tables[name])
        self.now_held = by_row(edits.held, name)
        self.held: set[Cell] = set()
        self.edited: set[tuple[str, str]] = set()
        self.left_out: dict[str, str] = {}

    def carry(self, onto: Mapping[str, list[Row]], supplied: Mapping[tuple[str, str], set[str]]) -> list[Row]:
        """Return the variant's rows, outlet by outlet, with the edits in them."""
        raise NotImplementedError

    def hold(self, outlet_id: str, key: str, stems: Iterable[str]) -> None:
        """Note cells that stand as given."""
        self.held |= {(self.table.name, outlet_id, key, stem) for stem in stems}


class _OutletCarrier(_Carrier):
    """What a person wrote into outlets.csv stands in every variant."""

    table = OUTLETS

    def carry(self, onto: Mapping[str, list[Row]], supplied: Mapping[tuple[str, str], set[str]]) -> list[Row]:
        """Return the variant's rows."""
        rows = []
        for outlet_id, (row,) in onto.items():
            held = self.now_held.get((outlet_id, ""), set())
            if row[self.name["area"]]:  # else it failed in the variant
                now = self.now[outlet_id][0]
                row = row | {self.name[stem]: now[self.name[stem]] for stem in held}
                row |= {self.name[stem]: "" for stem in supplied.get((outlet_id, ""), set()) - held}
                self.hold(outlet_id, "", held)
            rows.append(row)
        return rows


@dataclass
class _Piece:
    """A stretch of the path on which the variant, the base as it stands and as first written have one row each.

    Parameters
    ----------
    start, end : float
        Distances from the divide.
    row : dict
        The variant's row with what a person said of the stretch.
    now, first : dict
        The base's rows.
    held : set of str
        Stems of the cells that stand as given.
    """

    start: float
    end: float
    row: Row
    now: Row
    first: Row
    held: set[str]


class _SegmentCarrier(_Carrier):
    """What a person said of a stretch of the path stands on that stretch, wherever the variant cuts it."""

    table = SEGMENTS

    def carry(self, onto: Mapping[str, list[Row]], supplied: Mapping[tuple[str, str], set[str]]) -> list[Row]:
        """Return the variant's rows."""
        touched = {outlet_id for (outlet_id, _), _ in self.now_held.items()}
        every: list[Row] = []
        for outlet_id, rows in onto.items():
            first, now = self.first.get(outlet_id, []), self.now.get(outlet_id, [])
            if outlet_id not in touched and self._as_rows(first) == self._as_rows(now):
                every += rows
            elif self._as_rows(first) == self._as_rows(rows):
                every += self._as_base(outlet_id, now, first, rows)
            else:
                every += self._laid(outlet_id, now, first, rows)
        return every

    def _as_rows(self, rows: list[Row]) -> list[tuple[str, ...]]:
        stems = ("regime", "cover", "from", "to", "top_elevation", "bottom_elevation", "note")
        return [tuple(row[self.name[stem]] for stem in stems) for row in rows]

    def _as_base(self, outlet_id: str, now: list[Row], first: list[Row], rows: list[Row]) -> list[Row]:
        """Return the base's rows: the variant cuts the path as the base does."""
        before = {row["segment"]: row for row in first}
        own = {row["segment"]: row for row in rows}
        carried = []
        for row in now:
            key = row["segment"]
            held = self.now_held.get((outlet_id, key), set())
            row = row | {self.name[stem]: row[self.name[stem]] if stem in held else "" for stem in _HELD}
            unlike = key not in before or self._as_rows([row]) != self._as_rows([before[key]])
            if held or unlike:
                self.edited.add((outlet_id, key))
            elif key in own:
                row = own[key]
            self.hold(outlet_id, key, held)
            carried.append(row)
        self._weighted_roughness(carried, rows)
        return carried

    def _laid(self, outlet_id: str, now: list[Row], first: list[Row], rows: list[Row]) -> list[Row]:
        """Lay what a person said, stretch by stretch, onto rows that are cut elsewhere."""
        if not rows or not first:
            return rows
        pieces = self._joined(self._pieces(outlet_id, now, first, rows), now, first, rows)
        start, end, top, bottom = columns = tuple(
            self.name[stem] for stem in ("from", "to", "top_elevation", "bottom_elevation")
        )
        own = {row["segment"]: row for row in rows}
        following, taken = max(map(int, own)), set[str]()
        carried = []
        for piece in pieces:
            row = piece.row
            row[start], row[end] = self._text(piece.start, rows), self._text(piece.end, rows)
            row[top] = self._elevation(top, piece.start, piece.now, first, rows, columns)
            row[bottom] = self._elevation(bottom, piece.end, piece.now, first, rows, columns)
            if (key := row["segment"]) in taken:
                following += 1
                key = row["segment"] = str(following)
            taken.add(key)
            if piece.held or key not in own or self._as_rows([row]) != self._as_rows([own[key]]):
                self.edited.add((outlet_id, key))
            self.hold(outlet_id, key, piece.held)
            carried.append(row)
        if len(carried) != len(rows):
            self.edited.add((outlet_id, ""))
        self._weighted_roughness(carried, rows)
        return carried

    def _pieces(self, outlet_id: str, now: list[Row], first: list[Row], rows: list[Row]) -> list[_Piece]:
        ends = sorted({float(row[self.name["to"]]) for of_one in (rows, now, first) for row in of_one})
        cuts = [0.0]
        for end in ends:
            if end > cuts[-1] + tolerance(end):
                cuts.append(end)
        pieces = []
        for start, end in pairwise(cuts):
            middle = 0.5 * (start + end)
            own, base, before = (self._at(of_one, middle) for of_one in (rows, now, first))
            said = {name: base[name] for stem in _SAID if not same(base[name := self.name[stem]], before[name])}
            row = own | said
            stood = self.now_held.get((outlet_id, base["segment"]), set())
            held = {stem for stem in stood if stem == "slope" or row["regime"] == base["regime"]}
            unlike = row["regime"] != own["regime"] or row["cover"] != own["cover"]
            for stem in _HELD:
                kept = stem == "roughness" and not unlike  # the terrain's weighted roughness of sheet flow
                row[self.name[stem]] = base[self.name[stem]] if stem in held else own[self.name[stem]] if kept else ""
            pieces.append(_Piece(start, end, row, base, before, held))
        return pieces

    def _joined(self, pieces: list[_Piece], now: list[Row], first: list[Row], rows: list[Row]) -> list[_Piece]:
        """Join stretches that nobody cut: neither the variant, but where a person took the cut away, nor a person."""
        cuts = {key: [float(row[self.name["to"]]) for row in of_one] for key, of_one in
                (("now", now), ("first", first), ("own", rows))}  # fmt: skip

        def is_cut(key: str, at: float) -> bool:
            place = bisect_left(cuts[key], at - tolerance(at))
            return place < len(cuts[key]) and cuts[key][place] <= at + tolerance(at)

        joined = pieces[:1]
        for piece in pieces[1:]:
            above, at = joined[-1], piece.start
            alike = above.held == piece.held and all(
                above.row[name] == piece.row[name]
                for name in ("regime", "cover", "note", *(self.name[stem] for stem in piece.held))
            )
            by_person = is_cut("now", at) and not is_cut("first", at)
            by_variant = is_cut("own", at) and (is_cut("now", at) or not is_cut("first", at))
            if not alike or by_person or by_variant:
                joined.append(piece)
                continue
            kept = above if above.first["segment"] == above.now["segment"] else piece
            joined[-1] = _Piece(above.start, piece.end, kept.row, kept.now, kept.first, kept.held)
        return joined

    def _at(self, rows: list[Row], distance: float) -> Row:
        place = bisect_left(rows, distance, key=lambda row: float(row[self.name["to"]]))
        return rows[min(place, len(rows) - 1)]

    def _text(self, distance: float, rows: list[Row]) -> str:
        """Return a distance as the variant writes it, where it cuts there."""
        for row in rows:
            for name in (self.name["from"], self.name["to"]):
                if abs(float(row[name]) - distance) <= tolerance(distance):
                    return row[name]
        return repr(distance)

    def _elevation(
        self, column: str, at: float, now: Row, first: list[Row], rows: list[Row], columns: tuple[str, ...]
    ) -> str:
        """Return an elevation of the variant's profile with a person's correction."""
        start, end, top, bottom = columns
        own = profile(rows, columns, self._nearest(at, rows))
        moves = []
        for name, place in ((top, float(now[start])), (bottom, float(now[end]))):
            before = profile(first, columns, self._nearest(place, first))
            moved = not same(now[name], before)
            if moved and name == column and abs(place - at) <= tolerance(at):
                return now[name]
            moves.append(float(now[name]) - float(before) if moved else 0.0)
        if moves == [0.0, 0.0]:
            return own
        low, high = float(now[start]), float(now[end])
        share = min(max((at - low) / (high - low), 0.0), 1.0)
        return repr(float(own) + moves[0] + share * (moves[1] - moves[0]))

    def _nearest(self, at: float, rows: list[Row]) -> float:
        """Return the distance at which rows are cut, where they are cut this near."""
        ends = [float(rows[0][self.name["from"]]), *(float(row[self.name["to"]]) for row in rows)]
        place = bisect_right(ends, at - tolerance(at))
        return ends[place] if place < len(ends) and abs(ends[place] - at) <= tolerance(at) else at

    def _weighted_roughness(self, carried: list[Row], rows: list[Row]) -> None:
        """Give sheet flow on the variant's first class the roughness that the terrain half had weighted."""
        name, top = self.name["roughness"], rows[0]
        for row in carried:
            if row["regime"] == top["regime"] == "sheet" and row["cover"] == top["cover"] and not row[name]:
                row[name] = top[name]


class _ShareCarrier(_Carrier):
    """What a person said of a class on a soil group stands for that class and group; areas are the variant's own."""

    table = COVER_SHARES

    def carry(self, onto: Mapping[str, list[Row]], supplied: Mapping[tuple[str, str], set[str]]) -> list[Row]:
        """Return the variant's rows."""
        every: list[Row] = []
        for outlet_id, rows in onto.items():
            first, now = self.first.get(outlet_id, []), self.now.get(outlet_id, [])
            keys = {key for owner, key in self.now_held if owner == outlet_id}
            if not keys and self._as_rows(first) == self._as_rows(now):
                every += rows
            elif self._as_rows(first) == self._as_rows(rows):
                every += self._as_base(outlet_id, now, rows)
            else:
                every += self._laid(outlet_id, now, first, rows)
        return every

    def _kind(self, row: Row) -> tuple[str, str]:
        return row["cover"], row["soil_group"]

    def _as_rows(self, rows: list[Row]) -> list[tuple[str, ...]]:
        return [(*self._kind(row), row[self.name["area"]]) for row in rows]

    def _as_base(self, outlet_id: str, now: list[Row], rows: list[Row]) -> list[Row]:
        """Return the base's patches, with the variant's numbers where a person gave none."""
        own = {self._kind(row): row for row in rows}
        carried = []
        for place, row in enumerate(now, start=1):
            held = self.now_held.get((outlet_id, str(place)), set())
            like = own.get(self._kind(row), {})
            row = row | {name: row[name] if name in held else like.get(name, "") for name in _OF_PATCH}
            self.hold(outlet_id, str(place), held)
            if held:
                self.edited.add((outlet_id, str(place)))
            carried.append(row)
        return carried

    def _laid(self, outlet_id: str, now: list[Row], first: list[Row], rows: list[Row]) -> list[Row]:
        """Lay what a person said of each class and group onto the variant's patches of them."""
        renamed, lost = self._renamed(now, first)
        said = {}
        for place, row in enumerate(now, start=1):
            held = self.now_held.get((outlet_id, str(place)), set())
            before = next((old for old, new in renamed.items() if new == self._kind(row)), self._kind(row))
            if held or before in renamed:
                said[before] = row, held
        carried = []
        for place, row in enumerate(rows, start=1):
            if self._kind(row) in said:
                given, held = said[self._kind(row)]
                another = self._kind(given) != self._kind(row)
                row = row | {"cover": given["cover"], "soil_group": given["soil_group"]}
                row |= {name: given[name] if name in held else "" if another else row[name] for name in _OF_PATCH}
                self.hold(outlet_id, str(place), held)
                self.edited.add((outlet_id, str(place)))
            carried.append(row)
        if lost:
            self.left_out[outlet_id] = "areas of land cover that were edited in the base are the scenario's own here"
        return carried

    def _renamed(self, now: list[Row], first: list[Row]) -> tuple[dict[tuple[str, str], tuple[str, str]], bool]:
        """Return whole patches that a person put into another class or group, and whether areas were edited too."""
        area = self.name["area"]
        now_kinds, first_kinds = {self._kind(row) for row in now}, {self._kind(row) for row in first}
        gone = [row for row in first if self._kind(row) not in now_kinds]
        come = [row for row in now if self._kind(row) not in first_kinds]
        renamed = {}
        for row in gone:
            if (new := next((other for other in come if same(other[area], row[area])), None)) is not None:
                come.remove(new)
                renamed[self._kind(row)] = self._kind(new)
        kept = {self._kind(row): row[area] for row in first if self._kind(row) in now_kinds}
        changed = any(not same(row[area], kept[self._kind(row)]) for row in now if self._kind(row) in kept)
        return renamed, changed or bool(come) or len(renamed) != len(gone) or len(now) != len(first)
