"""From the tables to travel times, curve-number patches and times of concentration."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrology.doubts import IN_CHANNEL
from basinwright.hydrology.frames import Frame
from basinwright.hydrology.settings import Settings
from basinwright.runoff import Patches
from basinwright.schemes import Scheme
from basinwright.tables import SEGMENTS
from basinwright.timing import SegmentTimes, sum_by_outlet, time_segments
from basinwright.timing.segments import PLAIN_ROUGHNESS_N
from basinwright.units import M_PER_FT

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from basinwright.editing import Cell


def timed(segments: Frame, settings: Settings, held: set[Cell]) -> SegmentTimes:
    """Time the segments: what a person filled stands, the rest follows from the row."""
    project, scheme = settings.project, settings.scheme
    filled = {cell[1:] for cell in held if cell[0] == "segments"}

    def given(stem: str) -> NDArray[np.float64]:
        if not filled:
            return np.full(segments.outlet.size, np.nan)
        keys = zip(segments.text("outlet_id").tolist(), segments.text("segment").tolist(), strict=True)
        mask = np.array([(*key, stem) in filled for key in keys], dtype=bool)
        return np.where(mask, segments.number(stem), np.nan)

    sheet, shallow = segments.among("regime", ("sheet",)), segments.among("regime", ("shallow",))
    roughness = given("roughness") * np.where(shallow & (segments.system == "us"), M_PER_FT, 1.0)
    sheet_n = segments.by_text("cover", lambda code: found.sheet_n if (found := scheme.find(code)) else np.nan)
    channel_n: Any = project.channel.roughness
    words = "n of the project"
    if isinstance(channel_n, str) and channel_n != "jarrett":
        words = f"n of the stream lines, {PLAIN_ROUGHNESS_N:g} off them"
        mapped = np.where(segments.among("regime", ("channel",)), segments.number("roughness"), np.nan)
        channel_n = np.where(np.isnan(mapped), PLAIN_ROUGHNESS_N, mapped)
    weighted = np.where(sheet, segments.number("roughness"), np.nan)  # by length along the path, from the terrain
    columns = {
        "outlet": segments.outlet,
        "regime": segments.text("regime"),
        **{f"{stem}_m": segments.number(stem) for stem in ("from", "to", "top_elevation", "bottom_elevation")},
        "area_km2": segments.number("area"),
        "slope": given("slope"),
        "roughness": roughness,
        "hydraulic_radius_m": given("hydraulic_radius"),
        "hydraulic_radius_half_m": given("hydraulic_radius_half"),
        "sheet_n": np.where(np.isnan(weighted), sheet_n, weighted),
        "shallow_category": segments.by_text(
            "cover", lambda code: found.shallow if (found := scheme.find(code)) else "", dtype=object
        ),
    }
    return time_segments(
        columns,
        two_year_depth_mm=project.storm.two_year_depth_mm,
        relation=settings.relation,
        channel_roughness=channel_n,
        channel_roughness_words=words,
        slope_floor=project.flow_path.slope_floor,
        open_water_depth_m=project.channel.open_water_depth,
    )


@dataclass(frozen=True)
class PathTimes:
    """Travel times along the paths by how they answer to roughness, and what timing methods take from the path.

    Parameters
    ----------
    sheet_h : array, shape (n,)
        Sheet flow: as roughness^0.8 [h].
    resisted_h, resisted_half_h : arrays, shape (n,)
        Shallow, channel and conduit flow, at bankfull and at half the depth: as roughness [h].
    water_h : array, shape (n,)
        Open water: whatever the roughness [h].
    inputs : dict of arrays, shape (n,)
        See `path_inputs`.
    """

    sheet_h: NDArray[np.float64]
    resisted_h: NDArray[np.float64]
    resisted_half_h: NDArray[np.float64]
    water_h: NDArray[np.float64]
    inputs: dict[str, NDArray[np.float64]]

    def or_else(self, other: PathTimes, keep: NDArray[np.bool_]) -> PathTimes:
        """Return these times for the outlets of a mask, another path's for the rest."""

        def chosen(name: str) -> NDArray[np.float64]:
            return np.where(keep, getattr(self, name), getattr(other, name))

        inputs = {name: np.where(keep, values, other.inputs[name]) for name, values in self.inputs.items()}
        return PathTimes(chosen("sheet_h"), chosen("resisted_h"), chosen("resisted_half_h"), chosen("water_h"), inputs)


def path_times(segments: Frame, times: SegmentTimes, scheme: Scheme, count: int) -> PathTimes:
    """Add up the travel times of each outlet by their answer to roughness; NaN for an outlet without segments."""
    regime = segments.text("regime")
    sheet, water = regime == "sheet", regime == "open_water"

    def summed(hours: NDArray[np.float64], mask: NDArray[np.bool_]) -> NDArray[np.float64]:
        return sum_by_outlet(segments.outlet, np.where(mask, hours, 0.0), count)

    return PathTimes(
        summed(times.travel_time_h, sheet),
        summed(times.travel_time_h, ~sheet & ~water),
        summed(times.travel_time_half_h, ~sheet & ~water),
        summed(times.travel_time_h, water),
        path_inputs(segments, times, scheme, count),
    )


def path_times_h(segments: pd.DataFrame, ids: Sequence[str], settings: Settings) -> NDArray[np.float64]:
    """Return the travel time along the path of each outlet at the stage that counts, NaN where it has no segments.

    Parameters
    ----------
    segments : DataFrame
        Segments as the terrain gives them, unedited.
    ids : sequence of str
        The outlets.
    settings : Settings
    """
    frame = Frame(SEGMENTS, segments, settings.project).of_outlets({outlet_id: i for i, outlet_id in enumerate(ids)})
    times = timed(frame, settings, set())
    hours = times.travel_time_half_h if settings.project.channel.stage == "half" else times.travel_time_h
    some = np.bincount(frame.outlet, minlength=len(ids)) > 0
    return np.where(some, sum_by_outlet(frame.outlet, hours, len(ids)), np.nan)


def patches_of(shares: Frame, scheme: Scheme, count: int) -> tuple[Patches, dict[str, Any], dict[str, Any]]:
    """Return the curve-number patches, the columns that were empty now filled, and means over each basin."""
    area, curve = shares.number("area"), shares.number("curve_number")
    impervious, source = shares.number("impervious_pct"), shares.text("source").copy()
    cover, group = shares.text("cover").tolist(), shares.text("soil_group").tolist()
    for i in np.flatnonzero(np.isnan(curve) | np.isnan(impervious) | (source == "")):
        found = scheme.find(cover[i])
        if found is None:
            continue
        if np.isnan(curve[i]):
            curve[i] = found.curve_number_on(group[i])
        if np.isnan(impervious[i]):
            impervious[i] = found.impervious_pct
        source[i] = source[i] or found.source
    offsets = np.searchsorted(shares.outlet, np.arange(count + 1))
    patches = Patches(offsets, area, curve)
    means = {
        "impervious_pct": patches.sums(patches.weights() * np.nan_to_num(impervious)),
        "runoff_coefficient": _mean_coefficient(patches, cover, scheme),
    }
    return patches, {"curve_number": curve, "impervious_pct": impervious, "source": source}, means


def _mean_coefficient(patches: Patches, cover: list[str], scheme: Scheme) -> NDArray[np.float64]:
    """Return the mean runoff coefficient of each basin, NaN where the scheme lacks one of its classes'."""
    of_class = {code: found.runoff_coefficient if (found := scheme.find(code)) else np.nan for code in set(cover)}
    return patches.sums(patches.weights() * np.array([of_class[code] for code in cover], dtype=np.float64))


def replaced(patches: Patches, curve_number: NDArray[np.float64]) -> Patches:
    """Put one patch in the place of an outlet's patches where a curve number was supplied for it."""
    supplied = ~np.isnan(curve_number)
    if not supplied.any():
        return patches
    first = np.zeros(patches.area_km2.size, dtype=bool)
    first[patches.offsets[:-1]] = True
    keep = ~supplied[patches.outlet] | first
    kept_outlet = patches.outlet[keep]
    curve = np.where(supplied[kept_outlet], curve_number[kept_outlet], patches.curve_number[keep])
    area = np.where(supplied[kept_outlet], 1.0, patches.area_km2[keep])
    return Patches(np.searchsorted(kept_outlet, np.arange(patches.outlets + 1)), area, curve)


def path_inputs(segments: Frame, times: SegmentTimes, scheme: Scheme, count: int) -> dict[str, NDArray[np.float64]]:
    """Return what timing methods take from the path: its overland part, sheet roughness, retardance, elevation."""
    outlet = segments.outlet
    length = segments.number("to") - segments.number("from")
    fall = segments.number("top_elevation") - segments.number("bottom_elevation")
    sheet, overland = segments.among("regime", ("sheet",)), segments.among("regime", ("sheet", "shallow"))

    def summed(values: NDArray[np.float64]) -> NDArray[Any]:
        return np.bincount(outlet, weights=values, minlength=count)

    overland_m, sheet_m = summed(length * overland), summed(length * sheet)
    overland_fall_m = summed(fall * overland)
    weighted_n = summed(np.where(sheet, length * times.roughness, 0.0))
    lowest = np.full(count, np.inf)
    np.minimum.at(lowest, outlet, segments.number("bottom_elevation"))
    with np.errstate(invalid="ignore", divide="ignore"):
        return {
            "overland_length_m": np.where(overland_m > 0, overland_m, np.nan),
            "overland_slope_pct": np.where(overland_fall_m > 0, 100.0 * overland_fall_m / overland_m, np.nan),
            "sheet_n": np.where(sheet_m > 0, weighted_n / sheet_m, np.nan),
            "retardance_n": _retardance(segments, length * overland, scheme, count),
            "outlet_elevation_m": np.where(np.isfinite(lowest), lowest, np.nan),
        }


def _retardance(segments: Frame, overland_m: NDArray[np.float64], scheme: Scheme, count: int) -> NDArray[np.float64]:
    """Return Kerby's N of the cover on most of each overland reach: the table is not to be interpolated."""
    rows = np.flatnonzero(overland_m > 0)
    cover = segments.text("cover")[rows].tolist()
    of_class = {code: found.retardance_n if (found := scheme.find(code)) else np.nan for code in set(cover)}
    result, longest = [np.nan] * count, [0.0] * count
    by_class: dict[tuple[int, str], float] = {}
    for outlet, code, metres in zip(segments.outlet[rows].tolist(), cover, overland_m[rows].tolist(), strict=True):
        total = by_class[outlet, code] = by_class.get((outlet, code), 0.0) + metres
        if total > longest[outlet]:
            longest[outlet], result[outlet] = total, of_class[code]
    return np.array(result, dtype=np.float64)


def lengths(segments: Frame, count: int) -> dict[str, NDArray[Any]]:
    """Sum the lengths of the path by regime, in the unit of the file: exact, since distances are binary fractions."""
    length = segments.shown("to") - segments.shown("from")
    kinds = {"sheet_length": ("sheet",), "shallow_length": ("shallow",), "channel_length": IN_CHANNEL}
    return {
        stem: np.bincount(segments.outlet, weights=length * segments.among("regime", names), minlength=count)
        for stem, names in kinds.items()
    }
