"""Moving the points of a path where sheet flow ends and where the channel begins."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

from basinwright.tables import SEGMENTS
from basinwright.units import System

Row = dict[str, str]
Which = Literal["sheet_end", "channel_start"]

CHANNELS = ("channel", "pipe", "lined_channel")
"""Regimes that a channel start begins."""


@dataclass(frozen=True)
class Joint:
    """A point of a path that a person may move.

    Parameters
    ----------
    which : {"sheet_end", "channel_start"}
    at : float
        Distance from the divide, in the unit of the table.
    low, high : float
        How far it may go: open water and the other joint stay where they are.
    place : int
        Number of rows above it.
    """

    which: Which
    at: float
    low: float
    high: float
    place: int


class Names:
    """The columns of segments.csv in a unit system."""

    def __init__(self, system: System) -> None:
        self.start, self.end, self.top, self.bottom, self.radius, self.radius_half = (
            SEGMENTS.column(stem).name(system)
            for stem in (
                "from", "to", "top_elevation", "bottom_elevation", "hydraulic_radius", "hydraulic_radius_half",
            )
        )  # fmt: skip


def joints(rows: Sequence[Row], names: Names) -> list[Joint]:
    """Find the joints of a path that may be moved: of none, one or both kinds.

    Parameters
    ----------
    rows : sequence of dict
        The segments of one outlet as text, in downstream order.
    names : Names
    """
    if not rows:
        return []
    regimes = [row["regime"] for row in rows]
    length = float(rows[-1][names.end])
    sheet = next((i for i, regime in enumerate(regimes) if regime != "sheet"), len(rows))
    channel = next((i for i, regime in enumerate(regimes) if regime in CHANNELS), len(rows))
    water = [i for i, regime in enumerate(regimes) if regime == "open_water"]
    found = []
    start = float(rows[channel][names.start]) if channel < len(rows) else length
    above = max((float(rows[i][names.end]) for i in water if i < channel), default=0.0)
    beyond = min((float(rows[i][names.start]) for i in water if i >= channel), default=length)
    sheet_end = float(rows[sheet - 1][names.end]) if sheet else 0.0
    if sheet:
        stop = min((float(rows[i][names.start]) for i in water if i >= sheet), default=length)
        found.append(Joint("sheet_end", sheet_end, 0.0, min(start, stop) if channel < len(rows) else stop, sheet))
    if above < length:  # a path that ends in open water has no place for a channel
        found.append(Joint("channel_start", start, max(sheet_end, above), beyond, channel))
    return found


def moved(rows: Sequence[Row], names: Names, joint: Joint, at: float, elevation: Callable[[float], str]) -> list[Row]:
    """Return the segments with a joint moved to another distance.

    The segment that the joint moves into gives way, up to vanishing; the one on the other side follows.

    Parameters
    ----------
    rows : sequence of dict
        As for `joints`.
    names : Names
    joint : Joint
    at : float
        Where to; brought within the joint's limits.
    elevation : callable
        Elevation of the profile at a distance, as text.
    """
    at = min(max(at, joint.low), joint.high)
    if at == joint.at:
        return [dict(row) for row in rows]
    text, level = repr(at), elevation(at)
    above = [dict(row) for row in rows[: joint.place]]
    below = [dict(row) for row in rows[joint.place :]]
    if joint.which == "channel_start" and not below:
        below = [_new_channel(above[-1], names)]
    if at < joint.at:
        above = [row for row in above if float(row[names.start]) < at]
    else:
        below = [row for row in below if float(row[names.end]) > at]
        if not above:  # the channel began at the divide: what lies above it now flows as shallow flow
            above = [{**rows[0], "segment": "", "regime": "shallow", **_no_section(names)}]
    if above:
        above[-1] |= {names.end: text, names.bottom: level}
    if below:
        below[0] |= {names.start: text, names.top: level}
    return above + below


def _new_channel(last: Mapping[str, str], names: Names) -> Row:
    return {**last, "segment": "", "regime": "channel", names.start: last[names.end], **_no_section(names)}


def _no_section(names: Names) -> Row:
    return {"slope": "", "roughness": "", names.radius: "", names.radius_half: ""}
