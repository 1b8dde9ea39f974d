"""How the times in timing.csv come to be: the published form of each method, in its published units.

A method without a record here is explained by its registered form and computed by its registered function.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from basinwright.explaining.reading import Here
from basinwright.explaining.records import Get, How, Ref, Value, cell
from basinwright.registry import find
from basinwright.tables import COVER_SHARES, OUTLETS, SEGMENTS

_OVERLAND = ("sheet", "shallow")


def _outlet(stem: str, unit: str = "", scale: tuple[float, str] | None = None) -> Get:
    return cell(stem, unit, OUTLETS.name, scale=scale)


def _travel_time(here: Here) -> Value:
    stem = "tc_bankfull_h" if here.run.project.channel.stage == "bankfull" else "tc_half_bankfull_h"
    return here.cell(stem, "", OUTLETS.name)


def _part(here: Here, regimes: tuple[str, ...]) -> tuple[np.ndarray, np.ndarray, np.ndarray, tuple[Ref, ...]]:
    """Return lengths [m], falls [m] and roughness of the segments in some regimes, and the cells they come from."""
    read = {
        stem: here.column(SEGMENTS.name, stem, unit, lambda row: row["regime"] in regimes)
        for stem, unit in (
            ("from", "m"),
            ("to", "m"),
            ("top_elevation", "m"),
            ("bottom_elevation", "m"),
            ("roughness", ""),
        )
    }
    refs = tuple(ref for value in read.values() for ref in value.refs)
    length = read["to"].value - read["from"].value
    return length, read["top_elevation"].value - read["bottom_elevation"].value, read["roughness"].value, refs


def _overland_length(here: Here) -> Value:
    length, _, _, refs = _part(here, _OVERLAND)
    return Value(float(np.sum(length)), "m", "length of the path in sheet and shallow flow", refs)


def _overland_slope(here: Here) -> Value:
    length, fall, _, refs = _part(here, _OVERLAND)
    return Value(100.0 * float(np.sum(fall)) / float(np.sum(length)), "%", "fall of that part over its length", refs)


def _sheet_n(here: Here) -> Value:
    length, _, n, refs = _part(here, ("sheet",))
    return Value(
        float(np.sum(n * length)) / float(np.sum(length)), "1", "Manning n of the sheet reach, by length", refs
    )


def _retardance(here: Here) -> Value:
    longest: dict[str, float] = {}
    rows = here.rows(SEGMENTS.name, lambda row: row["regime"] in _OVERLAND)
    for row in rows:
        metres = here.at(SEGMENTS.name, row, "to").number("m") - here.at(SEGMENTS.name, row, "from").number("m")
        longest[row["cover"]] = longest.get(row["cover"], 0.0) + metres
    most = max(longest, key=longest.__getitem__)
    found = here.run.settings.scheme.find(most)
    return Value(
        found.retardance_n if found else np.nan, "1", f"Kerby's N of class {most}, on most of the overland reach"
    )


def _height(here: Here) -> Value:
    mean = here.cell("mean_elevation", "m", OUTLETS.name)
    low = float(np.min(here.column(SEGMENTS.name, "bottom_elevation", "m").value))
    return Value(mean.value - low, "m", "mean elevation of the basin over the outlet", mean.refs)


def _coefficient(here: Here) -> Value:
    area = here.column(COVER_SHARES.name, "area").value
    found = [here.run.settings.scheme.find(row["cover"]) for row in here.rows(COVER_SHARES.name)]
    each = np.array([entry.runoff_coefficient if entry else np.nan for entry in found])
    return Value(float(np.sum(area * each) / np.sum(area)), "1", "runoff coefficient of the classes, by area")


def _intensity(here: Here) -> Value:
    return Value(
        here.run.settings.intensity().get("intensity_mm_per_h"), "mm/h", "2-year intensity by duration, storm.ddf"
    )


INPUTS: Mapping[str, Get] = {
    "area_km2": _outlet("area", "km2"),
    "path_length_m": _outlet("path_length", "m"),
    "path_slope_pct": _outlet("path_slope_pct"),
    "basin_slope_pct": _outlet("basin_slope_pct"),
    "curve_number": _outlet("curve_number"),
    "two_year_depth_mm": lambda here: Value(here.run.project.storm.two_year_depth_mm, "mm", "2-year 24-hour depth"),
    "travel_time_h": _travel_time,
    "overland_length_m": _overland_length,
    "overland_slope_pct": _overland_slope,
    "sheet_n": _sheet_n,
    "retardance_n": _retardance,
    "mean_elevation_above_outlet_m": _height,
    "runoff_coefficient": _coefficient,
    "intensity_mm_per_h": _intensity,
}
"""The inputs of the registered methods, by their names there."""

_LENGTH = {unit: _outlet("path_length", unit) for unit in ("ft", "mi", "km")}
_SLOPE = _outlet("path_slope_pct", scale=(0.01, "ft/ft"))
_SLOPE_PCT = _outlet("path_slope_pct")
_AREA = _outlet("area", "km2")

FORMULAS: Mapping[str, tuple[str, str, Mapping[str, Get]]] = {
    "velocity": ("T", "h", {"T": _travel_time}),
    "kirpich": ("0.0078 * L ** 0.77 * S ** -0.385", "min", {"L": _LENGTH["ft"], "S": _SLOPE}),
    "nrcs_lag": (
        "L ** 0.8 * (1000 / CN - 9) ** 0.7 / (1900 * Y ** 0.5) / 0.6",
        "h",
        {"L": _LENGTH["ft"], "CN": _outlet("curve_number"), "Y": _outlet("basin_slope_pct")},
    ),
    "bransby_williams": ("14.6 * L / (A ** 0.1 * S ** 0.2)", "min", {"L": _LENGTH["km"], "A": _AREA, "S": _SLOPE}),
    "california_culverts": (
        "(11.9 * L ** 3 / (5280 * L * S)) ** 0.385",
        "h",
        {"L": _LENGTH["mi"], "S": _SLOPE},
    ),
    "faa": (
        "1.8 * (1.1 - C) * L ** 0.5 / S ** (1 / 3)",
        "min",
        {"C": _coefficient, "L": _LENGTH["ft"], "S": _SLOPE_PCT},
    ),
    "giandotti": ("(4 * A ** 0.5 + 1.5 * L) / (0.8 * H ** 0.5)", "h", {"A": _AREA, "L": _LENGTH["km"], "H": _height}),
    "johnstone_cross": ("5 * (L / (5280 * S)) ** 0.5", "h", {"L": _LENGTH["mi"], "S": _SLOPE}),
    "kerby": (
        "0.828 * (L * N) ** 0.467 * S ** -0.235",
        "min",
        {"L": _LENGTH["ft"], "N": _retardance, "S": _SLOPE},
    ),
    "temez": ("0.3 * (L / J ** 0.25) ** 0.76", "h", {"L": _LENGTH["km"], "J": _SLOPE}),
}
"""Formula, its unit and its symbols, by method."""


def timing_how(here: Here) -> How:
    """Return the record of the method of a row of timing.csv."""
    entry = find("timing", here.row["method"])
    words = f"{entry.name}: {entry.form}"
    if entry.key in FORMULAS:
        formula, unit, inputs = FORMULAS[entry.key]
        return How(words, formula, inputs, unit=unit, source=entry.source)

    def function(_: Here) -> Value:
        def of(*values: object) -> float:
            return float(np.asarray(entry.function(**dict(zip(entry.inputs, values, strict=True)))).ravel()[0])

        return Value(of, "h", f"the registered function of {entry.key}")

    symbols = {name: INPUTS[name] for name in entry.inputs if name in INPUTS}
    return How(words, f"Tc({', '.join(entry.inputs)})", {"Tc": function, **symbols}, unit="h", source=entry.source)
