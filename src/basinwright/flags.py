"""Flags: a doubt about one outlet, with its severity, its trigger and what to do about it.

`FLAGS` is the one list: the tables, the report and the documentation derive from it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal, NamedTuple

Severity = Literal["note", "warning", "serious"]
SEVERITIES: tuple[Severity, ...] = ("note", "warning", "serious")


@dataclass(frozen=True)
class FlagKind:
    """One kind of doubt.

    Parameters
    ----------
    key : str
        The name in the tables.
    severity : {"note", "warning", "serious"}
        How much it weighs.
    trigger : str
        When it is raised.
    remedy : str
        What to do about it.
    """

    key: str
    severity: Severity
    trigger: str
    remedy: str


class Flag(NamedTuple):
    """One doubt about one outlet: its id, the key in `FLAGS`, and the words for this case."""

    outlet_id: str
    key: str
    message: str

    @property
    def severity(self) -> Severity:
        """The severity of its kind."""
        return FLAGS[self.key].severity


FLAGS: dict[str, FlagKind] = {
    kind.key: kind
    for kind in (
        FlagKind("EDGE_TOUCH", "serious",
                 "the basin reaches the raster's edge or a void",
                 "extend the terrain or fill the void: the area is a lower bound, time and peak are not bounded"),
        FlagKind("SINK_INSIDE", "warning",
                 "ground inside the basin drains to sinks that keep its water: it is no part of the area",
                 "add sink_area where the sinks overflow in the design storm, or drop the sink"),
        FlagKind("ROUGHNESS_UNMAPPED", "note",
                 "part of the channel lies off the stream lines that give Manning's n: 0.045 stands in",
                 "extend the lines or fill their column, or give the roughness in segments.csv"),
        FlagKind("SNAP_FAR", "warning",
                 "the outlet was moved over half of outlets.snap_within",
                 "check the point against a map; move it onto its channel or give expected_area"),
        FlagKind("SNAP_AMBIGUOUS", "warning",
                 "another flow line with an area over 2 x different lies within outlets.snap_within",
                 "check which stream the crossing is on; give expected_area or move the point"),
        FlagKind("AREA_MISMATCH", "serious",
                 "the area differs from the expected one by over 10 %",
                 "check the snap, the terrain's barriers and the expected figure"),
        FlagKind("SMALL_BASIN", "warning",
                 "the basin has under 200 cells",
                 "use finer terrain: area, length and slope of so few cells are coarse"),
        FlagKind("BASIN_LARGE", "warning",
                 "the basin is over 20 mi2 under a single unit hydrograph",
                 "divide the basin and route, or use a method made for large basins"),
        FlagKind("SLOPE_FLOOR", "warning",
                 "the slope of a segment was raised to flow_path.slope_floor",
                 "look at the profile; where the flat is real, the travel time is uncertain"),
        FlagKind("SUPERCRITICAL", "warning",
                 "a channel segment is faster than critical",
                 "raise its roughness: a plain Manning n is probably too low for its slope"),
        FlagKind("SHEET_LIMIT", "note",
                 "the McCuen-Spiess limit ended the sheet reach before flow_path.sheet_limit",
                 "nothing, unless a field visit shows longer sheet flow"),
        FlagKind("NO_CHANNEL", "note",
                 "the path has no channel segment",
                 "check terrain.stream_area if a channel is known to reach the outlet"),
        FlagKind("STREAM_AREA_UNSURE", "warning",
                 "stream_area is \"auto\", and no tested area passes the drop test or the smallest already does",
                 "look at the streams layer against a map; give terrain.stream_area"),
        FlagKind("TC_MINIMUM", "note",
                 "the adopted time of concentration was raised to timing.minimum",
                 "nothing, unless local criteria set another minimum"),
        FlagKind("EDIT_LEFT_OUT", "warning",
                 "areas of land cover that a person edited are not carried over to another land cover",
                 "correct that land cover itself, or edit curve_number in outlets.csv"),
        FlagKind("OVERRIDE", "note",
                 "a value supplied by a person replaces the computed one",
                 "keep the reason on file"),
        FlagKind("DEEP_FILL", "warning",
                 "conditioning moved the terrain under the path or at the outlet by over 2 m",
                 "look for an embankment, a pit or a quarry there; correct the terrain or confirm the path"),
        FlagKind("BREACH_INSIDE", "note",
                 "conditioning cut over 1 m deep somewhere in the basin",
                 "look at terrain/conditioning_change.tif: a culvert or bridge there is taken to pass every flow "
                 "without ponding; where there is none, lower terrain.breach_depth or correct the terrain"),
        FlagKind("STORAGE_FILLED", "warning",
                 "the volume filled in the basin exceeds 0.1 in over its area",
                 "real depressions may attenuate the flood: consider routing through them"),
        FlagKind("LAKE_STORAGE", "warning",
                 "open water covers over 1 % of the basin",
                 "attenuation by the water is ignored: route through it if it matters"),
        FlagKind("COVER_GAP", "warning",
                 "part of the basin has no cover or soils, within cover.gap_limit",
                 "fill the gap in the layer: the rest of the basin stands for it"),
        FlagKind("SOILS_ASSUMED", "warning",
                 "soils.missing stands in where soils are unmapped",
                 "map the soils or defend the assumed group"),
        FlagKind("VERTICAL_UNIT_ASSUMED", "serious",
                 "the terrain declares no vertical unit and terrain.vertical_unit is not given: metres assumed",
                 "set terrain.vertical_unit: a wrong unit changes every slope by 3.28"),
        FlagKind("BANKFULL_RANGE", "warning",
                 "a channel segment's contributing area lies outside the bankfull relation's data",
                 "choose a region that covers it, or give surveyed sections in segments.csv"),
        FlagKind("JARRETT_RANGE", "warning",
                 "a channel segment lies outside the slopes or hydraulic radii of Jarrett's (1984) data",
                 "give its roughness in segments.csv"),
        FlagKind("STORM_COARSE", "serious",
                 "the storm's step at the burst exceeds half the time of concentration",
                 "use a distribution with finer steps: the peak is too low"),
        FlagKind("UNIT_STEP_COARSE", "warning",
                 "unit_hydrograph.time_step exceeds a quarter of the time to peak",
                 "use a shorter step or \"auto\": the peak is cut off"),
        FlagKind("CRITICAL_DURATION_END", "warning",
                 "the critical duration is the shortest or longest that was tried",
                 "give storm.ddf more durations beyond it: a longer list may hold a higher peak"),
        FlagKind("METHOD_RANGE", "warning",
                 "the adopted timing method is outside its published range",
                 "choose an applicable method (timing.csv) or defend this one"),
        FlagKind("METHOD_SPREAD", "warning",
                 "applicable timing methods differ by over 2 x",
                 "say why the adopted one fits this basin"),
        FlagKind("AREAL_UNREDUCED", "note",
                 "the basin is over 10 mi2 and point rainfall was not reduced",
                 "apply the areal reduction that local criteria ask for"),
        FlagKind("WEIGHTING_DIFFERS", "note",
                 "the two weightings of curve numbers differ by over 5 % in runoff",
                 "say which one local criteria ask for (runoff.weighting)"),
        FlagKind("RUNOFF_ZERO", "warning",
                 "the storm gives no runoff",
                 "check the curve number and the depth: the peak is reported as zero"),
        FlagKind("PEAKS_FALL", "serious",
                 "the peak of a rarer storm is smaller than that of a more frequent one",
                 "check the depths of both storms at this outlet: no capacity verdict is given"),
        FlagKind("REGRESSION_DIFFERS", "warning",
                 "a peak lies outside the 90 % band of the regional regression (check.regression)",
                 "look again at curve number, time and storm; say why this basin differs from its region"),
        FlagKind("LONGEST_IN_TIME_DIFFERS", "warning",
                 "the path longest in time and the one longest in length differ by over 5 % in travel time",
                 "look at both ends on the map: where water from elsewhere arrives last, set flow_path.farthest to "
                 "time; methods fitted to the longest path by length keep it"),
        FlagKind("AUDIT_DIFFERS", "serious",
                 "the second opinion differs by over 1 % in area",
                 "look where the two part: flats and ties are a matter of the rule, cuts of the conditioning"),
        FlagKind("OUTLET_FAILED", "serious",
                 "this outlet could not be computed",
                 "mend what the message names; the other outlets are not affected"),
    )
}  # fmt: skip


def status_of(flags: Iterable[Flag]) -> str:
    """Return the status of an outlet with these flags: ``ok`` (none), ``flagged`` or ``failed``."""
    keys = {flag.key for flag in flags}
    return "failed" if "OUTLET_FAILED" in keys else "flagged" if keys else "ok"
