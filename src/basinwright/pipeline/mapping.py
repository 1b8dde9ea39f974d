"""The stage of mapped hydrography: layers and published directions read, and turned into what routing obeys."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.editing import LIMITS
from basinwright.errors import InputRejected, Problem
from basinwright.pipeline.inputs import Inputs, roughness_column
from basinwright.store import Draft, Entry, Store

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from basinwright.terrain import Constraints, Terrain


def run(inputs: Inputs, elevation: Entry, store: Store) -> Entry:
    """Read what maps prescribe; the stage of a project that names any of it."""
    terrain = inputs.project.terrain
    return store.stage(
        "hydrography",
        "Reading mapped hydrography",
        {
            "elevation": elevation.key,
            "files": {key: inputs.sha256(source) for key, source in inputs.mapped.items()},
            "codes": terrain.flow_direction_codes,
            "roughness": roughness_column(inputs.project),
            "crest": terrain.breach_depth,
        },
        lambda draft: _read(inputs, elevation, draft),
    )


def _read(inputs: Inputs, elevation: Entry, draft: Draft) -> None:
    from basinwright.io.hydrography import read_lines, read_sinks
    from basinwright.terrain.hydrography import Lines, lines_on_cells, prescribe

    grid, mapped = inputs.plan.grid, inputs.mapped
    elevation_m = elevation.array("elevation_m")
    sizes = grid.dx_m, grid.dy_m, grid.cell_area_m2
    records: list[dict[str, Any]] = []
    lines: dict[str, Lines] = {}
    of_line = np.empty(0)
    for key in ("stream_lines", "barriers"):
        if key in mapped:
            column = roughness_column(inputs.project) if key == "stream_lines" else None
            table = read_lines(mapped[key], grid, column, LIMITS["roughness"])
            lines[key] = Lines(table.x, table.y, table.bounds)
            records.append(table.record)
            of_line = table.values if key == "stream_lines" else of_line
    sinks = None
    if "sinks" in mapped:
        sinks, record = read_sinks(mapped["sinks"], grid)
        records.append(record)
    if "flow_direction" in mapped:
        draft.record(_given(inputs, elevation_m), "given")
        facts: dict[str, Any] = {"directions": "given"}
        line_of = lines_on_cells(elevation_m, lines["stream_lines"]) if lines else None
    else:
        found = prescribe(
            elevation_m,
            *sizes,
            streams=lines.get("stream_lines"),
            barriers=lines.get("barriers"),
            sinks=sinks,
            crest_m=inputs.project.terrain.breach_depth,
        )
        draft.record(found.constraints, "constraints")
        facts, line_of = found.facts, found.line_of
    if line_of is not None and of_line.size:
        draft.array("stream_n", np.append(of_line, np.nan)[line_of])
        draft.array("stream_mask", line_of >= 0)
    draft.values("facts", facts)
    draft.values("has", {"given": "flow_direction" in mapped, "streams": "stream_lines" in mapped})
    draft.values("alignment", records)


def _given(inputs: Inputs, elevation_m: NDArray[Any]) -> Terrain:
    """Route by the published directions.

    Raises
    ------
    InputRejected
        With every fault of theirs: what, how many cells, where the first one lies.
    """
    from basinwright.io.hydrography import read_cells
    from basinwright.terrain.given import given_terrain as route_given

    grid, source = inputs.plan.grid, inputs.mapped["flow_direction"]
    codes = {float(code): meaning for code, meaning in (inputs.project.terrain.flow_direction_codes or {}).items()}
    terrain, faults = route_given(elevation_m, grid.dx_m, grid.dy_m, grid.cell_area_m2, read_cells(source, grid), codes)
    if terrain is not None:
        return terrain
    problems = []
    for fault in faults:
        x, y = grid.xy(fault.row, fault.col)
        what = f"{fault.what}: {fault.cells} in all, the first at x {float(x):.10g}, y {float(y):.10g}"
        problems.append(Problem(str(source), "directions", what, fault.fix))
    raise InputRejected(problems)


def mapped_channels(channels: Entry) -> NDArray[np.bool_] | None:
    """Return the channels that begin where mapped lines begin, on padded cells; None where an area decides."""
    return channels.array("channels") if channels.values("mapped") else None


def constraints(hydrography: Entry | None) -> Constraints | None:
    """Return what routing has to obey; None where nothing is prescribed."""
    from basinwright.terrain import Constraints

    if hydrography is None or hydrography.values("has")["given"]:
        return None
    return hydrography.record(Constraints, "constraints")


def given_terrain(hydrography: Entry | None) -> Terrain | None:
    """Return the terrain routed by published directions; None where they are our own."""
    from basinwright.terrain import Terrain

    if hydrography is None or not hydrography.values("has")["given"]:
        return None
    return hydrography.record(Terrain, "given")


def channel_n(inputs: Inputs, hydrography: Entry | None) -> NDArray[np.float64] | None:
    """Return Manning's n of mapped channels on the grid, NaN elsewhere; None where it does not come from maps."""
    if hydrography is None or roughness_column(inputs.project) is None:
        return None
    return hydrography.array("stream_n")


def check(inputs: Inputs) -> None:
    """Look at the cells of published directions, which a header does not show.

    Raises
    ------
    InputRejected
        With every fault.
    """
    from basinwright.io.elevation import open_terrain

    if "flow_direction" in inputs.mapped:
        terrain = open_terrain(inputs.dem, inputs.project.terrain.crs, inputs.project.terrain.vertical_unit)
        _given(inputs, terrain.elevation_m)
