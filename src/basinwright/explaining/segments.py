"""How the columns of segments.csv come to be, by the regime of the row."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from basinwright.explaining import ground
from basinwright.explaining.outlets import bankfull, bankfull_rows
from basinwright.explaining.reading import Here
from basinwright.explaining.records import FACTORS, Choice, Get, How, PublishedRow, Value, cell, column, option, row_of
from basinwright.schemes import SHIPPED
from basinwright.tables import SEGMENTS

_NEH15 = "USDA NRCS, National Engineering Handbook, Part 630, chapter 15 (2010)"
_MANNING = f"{_NEH15}, eq. 15-10"
_JARRETT = "R. D. Jarrett, Hydraulics of High-Gradient Streams, J. Hydraul. Eng. 110(11), 1984"
_CHANNELS = ("channel", "pipe", "lined_channel")
_NOTHING = How("empty: it plays no part in this regime")


def _sheet(row: Mapping[str, str]) -> bool:
    return row["regime"] == "sheet"


def _of_sheet(stem: str, unit: str = "") -> Get:
    return column(SEGMENTS.name, stem, unit, where=_sheet)


def by_regime(records: Mapping[str, How]) -> Callable[[Here], How]:
    """Return the choice of a record by the regime of the row; nothing stands in the other regimes."""
    return lambda here: records.get(here.row["regime"], _NOTHING)


_SHEET_REACH = {
    "z1": _of_sheet("top_elevation"),
    "z2": _of_sheet("bottom_elevation"),
    "b": _of_sheet("to"),
    "a": _of_sheet("from"),
    "s0": option("flow_path.slope_floor"),
}
_ROW = {
    "z1": cell("top_elevation"),
    "z2": cell("bottom_elevation"),
    "b": cell("to"),
    "a": cell("from"),
    "s0": option("flow_path.slope_floor"),
}
_SLOPE = How("fall over length, not under flow_path.slope_floor", "max((z1 - z2) / (b - a), s0)", _ROW)


def scheme_rows(column_name: str, published_table: str) -> Callable[[Here], list[PublishedRow]]:
    """Return the finder of the scheme's row of the class, and of the published row that it copies."""

    def rows(here: Here) -> list[PublishedRow]:
        scheme = here.run.settings.scheme
        found = scheme.find(here.row["cover"])
        if found is None or scheme.name not in SHIPPED:
            return []
        crosswalk = row_of(f"cover_{scheme.name}_crosswalk", found.code, "code")
        entry = row_of(f"cover_{scheme.name}", found.code, "code")
        copied = crosswalk.row.get(column_name, "")
        return [entry, crosswalk, *([row_of(published_table, copied)] if copied else [])]

    return rows


def _sheet_n(here: Here) -> Value:
    found = here.run.settings.scheme.find(here.row["cover"])
    value = found.sheet_n if found else np.nan
    return Value(value, "1", f"sheet_n of class {here.row['cover']} in scheme {here.run.settings.scheme.name}")


def _shallow(here: Here) -> How:
    unit = "ft/s" if here.run.system == "us" else "m/s"

    def k(here: Here) -> Value:
        from basinwright.timing import shallow_coefficient_mps

        found = here.run.settings.scheme.find(here.row["cover"])
        value = shallow_coefficient_mps(found.shallow) / FACTORS[unit] if found else np.nan
        words = f"velocity over root slope of class {here.row['cover']}: {found.shallow if found else 'none'}"
        return Value(value, unit, words)

    return How(
        "velocity over root slope of the class's kind of shallow flow",
        "k",
        {"k": k},
        rows=scheme_rows("shallow_row", "shallow_flow_neh"),
        places=ground.at_distance("from"),
    )


def _sheet_roughness(here: Here) -> How:
    first = next((row for row in here.rows(SEGMENTS.name, first=True) if row["regime"] == "sheet"), None)
    if first is not None and first["roughness"] == here.row["roughness"] and not _pure(here, first):
        return How(
            "Manning n of the classes that the sheet reach crosses, weighted by length along the path: "
            "the row's class is the one on most of it",
            rows=scheme_rows("sheet_n_row", "sheet_roughness_tr55"),
            places=ground.path_places,
        )
    return How(
        "Manning n of sheet flow of the class",
        "n",
        {"n": _sheet_n},
        rows=scheme_rows("sheet_n_row", "sheet_roughness_tr55"),
        places=ground.at_distance("from"),
    )


def _pure(here: Here, first: Mapping[str, str]) -> bool:
    found = here.run.settings.scheme.find(first["cover"])
    return found is not None and bool(first["roughness"]) and float(first["roughness"]) == found.sheet_n


def _jarrett(here: Here) -> bool:
    return here.run.project.channel.roughness == "jarrett" and not _held(here, "roughness")


def _held(here: Here, stem: str) -> bool:
    return (SEGMENTS.name, here.outlet_id, here.row["segment"], stem) in here.run.record.held


def _channel_n(here: Here) -> How:
    if _jarrett(here):
        from basinwright.timing.channel import JARRETT_SLOPE
        from basinwright.timing.segments import PLAIN_ROUGHNESS_N

        if float(here.row["slope"]) < JARRETT_SLOPE[0]:
            plain = Value(PLAIN_ROUGHNESS_N, "1", "Manning n below the slopes of Jarrett's data")
            return How("a plain natural channel", "n", {"n": lambda _: plain})
        return How(
            "Jarrett's roughness of steep channels",
            "0.39 * S ** 0.38 * R ** -0.16",
            {"S": cell("slope"), "R": cell("hydraulic_radius", "ft")},
            source=_JARRETT,
        )
    if isinstance(here.run.project.channel.roughness, str):
        return How(
            f"Manning n of the stream lines' column {here.run.project.channel.roughness}, 0.045 off them",
            places=ground.at_distance("from"),
        )
    return How("the project's Manning n of channels", "n", {"n": option("channel.roughness")})


def _radius_half(here: Here) -> How:
    if _held(here, "hydraulic_radius"):
        return How(
            "the given radius, in the proportion of the bankfull rectangle at half its depth",
            "R * (W * D / 2 / (W + D)) / (W * D / (W + 2 * D))",
            {"R": cell("hydraulic_radius"), "W": cell("bankfull_width"), "D": cell("bankfull_depth")},
        )
    return How(
        "rectangle of bankfull width at half the bankfull depth",
        "W * (D / 2) / (W + 2 * (D / 2))",
        {"W": cell("bankfull_width"), "D": cell("bankfull_depth")},
    )


def _manning(radius: str) -> How:
    return How(
        "Manning's equation",
        "1.486 / n * R ** (2 / 3) * S ** 0.5",
        {"n": cell("roughness"), "R": cell(radius, "ft"), "S": cell("slope")},
        unit="ft/s",
        source=_MANNING,
    )


def _half_velocity(here: Here) -> How:
    if (
        here.row["regime"] == "channel"
        and _jarrett(here)
        and "Jarrett" in here.row["basis"]
        and "below" not in here.row["basis"]
    ):
        return How(
            "Manning's equation with Jarrett's roughness at that radius",
            "1.486 / (0.39 * S ** 0.38 * R ** -0.16) * R ** (2 / 3) * S ** 0.5",
            {"R": cell("hydraulic_radius_half", "ft"), "S": cell("slope")},
            unit="ft/s",
            source=_JARRETT,
        )
    return (
        _VELOCITIES.get(here.row["regime"], _NOTHING)
        if here.row["regime"] not in _CHANNELS
        else _manning("hydraulic_radius_half")
    )


def _weighted_n(here: Here) -> Value:
    n, b, a = (here.column(SEGMENTS.name, stem, where=_sheet) for stem in ("roughness", "to", "from"))
    length = b.value - a.value
    return Value(
        float(np.sum(n.value * length) / np.sum(length)), "1", "Manning n over the sheet reach, by length", n.refs
    )


def _reach_length(here: Here) -> Value:
    b, a = (here.column(SEGMENTS.name, stem, "ft", _sheet) for stem in ("to", "from"))
    return Value(float(np.sum(b.value - a.value)), "ft", "length of the whole sheet reach", (*a.refs, *b.refs))


def _sheet_slope(here: Here) -> Value:
    fall = here.column(SEGMENTS.name, "slope", where=_sheet)
    b, a = (here.column(SEGMENTS.name, stem, where=_sheet).value for stem in ("to", "from"))
    return Value(float(np.sum(fall.value * (b - a)) / np.sum(b - a)), "1", "slope of the whole sheet reach", fall.refs)


def _two_year_depth(here: Here) -> Value:
    return Value(
        here.run.project.storm.two_year_depth_mm / FACTORS["in"], "in", "2-year 24-hour depth of the project's storm"
    )


_VELOCITIES: dict[str, How] = {
    "sheet": How(
        "length over travel time of the whole sheet reach",
        "L / (3600 * 0.007 * (n * L) ** 0.8 / (P2 ** 0.5 * S ** 0.4))",
        {"L": _reach_length, "n": _weighted_n, "P2": _two_year_depth, "S": _sheet_slope},
        unit="ft/s",
        source=f"{_NEH15}, eq. 15-8",
    ),
    "shallow": How(
        "velocity over root slope times root slope",
        "k * sqrt(S)",
        {"k": cell("roughness"), "S": cell("slope")},
        source=f"{_NEH15}, table 15-3",
    ),
    "open_water": How(
        "speed of a long wave",
        "sqrt(9.80665 * D)",
        {"D": option("channel.open_water_depth", inside="m")},
        unit="m/s",
        source=f"{_NEH15}, travel time through lakes",
    ),
    **{regime: _manning("hydraulic_radius") for regime in _CHANNELS},
}


def _time(velocity: str) -> How:
    return How(
        "length over velocity",
        "(b - a) / (3600 * V)",
        {"b": cell("to", "ft"), "a": cell("from", "ft"), "V": cell(velocity, "ft/s")},
    )


def _half_of_conduit(here: Here) -> How:
    share = {"pipe": 1.0, "lined_channel": 0.5}.get(here.row["regime"])
    if share is None:
        return _NOTHING
    return How(
        "a pipe is as fast half full as full; of a lined channel half the full radius",
        f"{share:g} * R",
        {"R": cell("hydraulic_radius")},
    )


def _middle_area(here: Here) -> Value:
    found = ground.profile(here)
    a, b = here.cell("from", "m").value, here.cell("to", "m").value
    about = f"contributing area of the path's cell at {0.5 * (a + b):.6g} m from the divide"
    if found is None:
        return Value(np.nan, "km2", ground.NOT_THERE)
    k = max(int(np.searchsorted(found[2], 0.5 * (a + b) + 1e-6, side="right")) - 1, 0)
    return Value(float(found[4][k]), "km2", about)


def cover_places(here: Here) -> list[str]:
    """Name the cell and the pixel of the land cover at the middle of the segment."""
    found = ground.profile(here)
    if found is None:
        return [ground.NOT_THERE]
    middle = 0.5 * (here.cell("from", "m").value + here.cell("to", "m").value)
    k = max(int(np.searchsorted(found[2], middle, side="right")) - 1, 0)
    row, col = int(found[0][k]), int(found[1][k])
    x, y = ground.centre(here, row, col)
    pixels = ground.pixel_words(here, "cover.raster", x, y) if here.run.project.cover.raster else []
    return [f"at its middle: {ground.cell_words(here, row, col)}", *pixels]


SEGMENT_HOWS: Mapping[str, Choice] = {
    "outlet_id": How("the outlet whose path it is part of"),
    "segment": How("counted from the divide down"),
    "regime": How(
        "sheet from the divide to the least of flow_path.sheet_limit and 100 root S / n (ft); channel from where "
        "the contributing area reaches terrain.stream_area; open water where the class is; shallow between",
        source=f"{_NEH15}, eq. 15-9 (McCuen and Spiess 1995)",
        places=ground.at_distance("from"),
    ),
    "cover": How(
        "the land-cover class on most of its length",
        places=cover_places,
        rows=scheme_rows("curve_number_row", "curve_numbers_tr55"),
    ),
    "from": How(
        "distance along the path at which the regime, or the class, changes; pieces under flow_path.min_segment "
        "join a neighbour",
        places=ground.at_distance("from"),
    ),
    "to": How("where the next segment begins, or the path ends", places=ground.at_distance("to")),
    "top_elevation": How(
        "conditioned terrain along the path, linear between cell centres",
        "z",
        {"z": ground.profile_elevation("from", "m")},
        unit="m",
        places=ground.at_distance("from"),
    ),
    "bottom_elevation": How(
        "conditioned terrain along the path, linear between cell centres",
        "z",
        {"z": ground.profile_elevation("to", "m")},
        unit="m",
        places=ground.at_distance("to"),
    ),
    "slope": by_regime(
        {
            "sheet": How(
                "fall of the whole sheet reach over its length, not under flow_path.slope_floor",
                "max(sum(z1 - z2) / sum(b - a), s0)",
                _SHEET_REACH,
            ),
            "open_water": How("fall over length: it plays no part", "(z1 - z2) / (b - a)", _ROW),
            "shallow": _SLOPE,
            "channel": _SLOPE,
            "pipe": _SLOPE,
            "lined_channel": _SLOPE,
        }
    ),
    "roughness": lambda here: {"sheet": _sheet_roughness, "shallow": _shallow, "channel": _channel_n}.get(
        here.row["regime"], lambda _: _NOTHING
    )(here),
    "area": How(
        "contributing area of the cell of the path at or next above its middle",
        "A",
        {"A": _middle_area},
        unit="km2",
        places=ground.at_distance("from"),
    ),
    "bankfull_width": by_regime({"channel": bankfull("width", "area")}),
    "bankfull_depth": by_regime({"channel": bankfull("depth", "area")}),
    "hydraulic_radius": by_regime(
        {
            "channel": How(
                "rectangle of bankfull width and depth",
                "W * D / (W + 2 * D)",
                {"W": cell("bankfull_width"), "D": cell("bankfull_depth")},
                rows=bankfull_rows,
            )
        }
    ),
    "hydraulic_radius_half": lambda here: (
        _radius_half(here) if here.row["regime"] == "channel" else _half_of_conduit(here)
    ),
    "velocity": by_regime(_VELOCITIES),
    "velocity_half": _half_velocity,
    "travel_time_h": _time("velocity"),
    "travel_time_half_h": _time("velocity_half"),
    "basis": How("which equation, section and roughness the row was timed with"),
    "edited": How("true where the row differs from what the run first wrote"),
    "note": How("a person's note"),
}
