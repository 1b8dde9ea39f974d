"""One row per basin with what any rainfall-runoff model asks for: copied from the tables, and the reach's section."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrology.frames import Columns
from basinwright.hydrology.settings import Settings
from basinwright.runoff import retention_mm
from basinwright.tables import BASIN_PARAMETERS, OUTLETS
from basinwright.timing import bankfull_depth_m, bankfull_width_m

if TYPE_CHECKING:
    from numpy.typing import NDArray

_OUTLETS = {column.stem for column in OUTLETS.columns}
COPIED = tuple(column.stem for column in BASIN_PARAMETERS.columns if column.stem in _OUTLETS)
"""Columns that stand in outlets.csv as well, with the same number."""


def basin_parameters(outlets: Columns, outlet_elevation: Mapping[str, str], settings: Settings) -> Columns:
    """List the parameters of every basin.

    Parameters
    ----------
    outlets : columns
        The finished table.
    outlet_elevation : mapping of str to str
        Elevation at the end of the path by outlet, as segments.csv has it.
    settings : Settings

    Returns
    -------
    columns
        A row for each outlet; one that failed has its identifiers only.
    """
    system = settings.project.project.units

    def copied(stem: str) -> Any:
        return outlets[OUTLETS.column(stem).name(system)]

    def number(stem: str) -> NDArray[np.float64]:
        cells = [np.nan if cell is None or cell == "" else float(cell) for cell in copied(stem)]
        return np.array(cells, dtype=np.float64) * OUTLETS.column(stem).inside_per_shown(system)

    middle = number("reach_area")
    known = np.isfinite(middle)
    width, depth = np.full(middle.size, np.nan), np.full(middle.size, np.nan)
    width[known] = bankfull_width_m(middle[known], settings.relation)
    depth[known] = bankfull_depth_m(middle[known], settings.relation)
    places = list(zip(copied("x"), copied("y"), strict=True))
    own = {
        "incremental_area": _incremental(
            number("area"), list(copied("outlet_id")), list(copied("downstream_outlet_id")), places
        ),
        "initial_abstraction": _initial_abstraction_mm(number("curve_number"), settings),
        "reach_slope": np.maximum(
            number("reach_fall") / number("reach_length"), settings.project.flow_path.slope_floor
        ),
        "reach_bankfull_width": width,
        "reach_bankfull_depth": depth,
    }
    columns: Columns = {}
    for entry in BASIN_PARAMETERS.fields(system):
        if entry.stem in COPIED:
            columns[entry.name] = copied(entry.stem)
        elif entry.stem == "outlet_elevation":
            columns[entry.name] = [outlet_elevation.get(outlet_id) for outlet_id in copied("outlet_id")]
        else:
            columns[entry.name] = own[entry.stem] / entry.factor
    return columns


def _incremental(
    area_km2: NDArray[np.float64], ids: list[str], downstream: list[str], places: list[tuple[Any, Any]]
) -> NDArray[np.float64]:
    """Take from each basin those of the outlets next upstream; outlets on one cell count once."""
    place_of = dict(zip(ids, places, strict=True))
    upstream: dict[tuple[Any, Any], dict[tuple[Any, Any], float]] = {}
    for place, below, area in zip(places, downstream, area_km2.tolist(), strict=True):
        if below in place_of:
            upstream.setdefault(place_of[below], {})[place] = area
    return area_km2 - np.array([sum(upstream.get(place, {}).values()) for place in places], dtype=np.float64)


def _initial_abstraction_mm(curve_number: NDArray[np.float64], settings: Settings) -> NDArray[np.float64]:
    ratio = settings.project.runoff.initial_abstraction_ratio
    depth, known = np.full(curve_number.size, np.nan), np.isfinite(curve_number)
    depth[known] = ratio * retention_mm(curve_number[known], ratio)
    return depth
