"""The terrain half, stage by stage: rasters in, the three tables and the geometry out."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.errors import InputRejected
from basinwright.flags import Flag
from basinwright.grid import Grid
from basinwright.hydrology import OTHER_STARTS, Settings, bankfull_relation_of, path_times_h
from basinwright.paths.tracing import DEEP_FILL_M
from basinwright.pipeline import mapping
from basinwright.pipeline.inputs import Inputs
from basinwright.pipeline.machine import Machine
from basinwright.project import Project
from basinwright.store import Draft, Entry, Store
from basinwright.tables import COVER_SHARES, OUTLETS, SEGMENTS, TIME_AREA, Table, texts
from basinwright.terrain.workspace import file_of
from basinwright.units import KM2_PER_MI2, M_PER_FT, MM_PER_IN, UNITS

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from basinwright.basins import Basins, Snapped
    from basinwright.cover import CoverLayer, CoverShares, Impervious
    from basinwright.paths import Cut, Paths
    from basinwright.terrain import Conditioning, Terrain

AREA_TOLERANCE = 0.1
"""Relative difference from the expected area above which AREA_MISMATCH is raised."""
LONGEST_TOLERANCE = 0.05
"""Relative difference in travel time of the paths longest in length and in time above which it is a doubt."""
SMALL_BASIN_CELLS = 200
STORAGE_FILLED_MM = 2.54
"""0.1 in over the basin."""
LAKE_STORAGE_PCT = 1.0
BREACH_INSIDE_M = 1.0
"""A deeper cut than this takes water through something that was built or has to be looked at."""
_FACTS = (
    "data_cells", "flat_cells", "raised_pits", "pits", "breached", "breached_second", "failed",
    "filled_cells", "filled_volume_m3", "deepest_fill_m", "cut_cells", "cut_volume_m3", "deepest_cut_m",
    "largest_rounding_m",
)  # fmt: skip
"""What the manifest says of the terrain."""
_DEEPEST_MM = 10_000.0
"""Deeper storms than this are no storms but a missing nodata value."""
_OF_DEPTHS = {"depths", "depth_rasters", "depth_raster_unit"}
_BLOCK_ROWS = 256
QUANTUM = 2.0**-20
"""Distances along the path are written as whole multiples of this many feet or metres: sums of them are exact."""


@dataclass
class TerrainHalf:
    """What the terrain half hands over.

    Parameters
    ----------
    grid : Grid
        The working grid.
    alignment : list of dict
        How each input came onto the grid.
    hydrography : Entry or None
        What maps prescribe, where the project names any of it.
    terrain, elevation, channels, cover, basins, paths, tables, time_area : Entry
        Stages in the store; ``tables`` holds the three tables and the flags.
    channel_starts : Entry or None
        The segments where channels begin at a smaller and at a larger area, where the project asks for them.
    """

    grid: Grid
    alignment: list[dict[str, Any]]
    elevation: Entry
    hydrography: Entry | None
    terrain: Entry
    channels: Entry
    cover: Entry
    basins: Entry
    paths: Entry
    tables: Entry
    time_area: Entry
    channel_starts: Entry | None = None

    def routed(self) -> Terrain:
        """Return the routed terrain."""
        from basinwright.terrain import Terrain

        return self.terrain.record(Terrain, "terrain")

    def facts(self) -> dict[str, Any]:
        """Return what was done to the terrain, as plain values."""
        terrain = self.routed()
        facts = {name: getattr(terrain, name) for name in _FACTS}
        facts |= self.elevation.values("voids")
        if self.hydrography is not None:
            facts["hydrography"] = self.hydrography.values("facts")
        return facts | {name: self.channels.values(name) for name in ("stream_area_km2", "drop_test")}

    @property
    def stream_area_km2(self) -> float:
        """Contributing area at which channels begin, also where the drop test found it [km2]."""
        return float(self.channels.values("stream_area_km2"))

    def frames(self, project: Project) -> dict[str, pd.DataFrame]:
        """Return the tables that the hydrology reads, in the units of the project, its storms with their factor."""
        frames = {table.name: self.tables.frame(table.name) for table in (OUTLETS, SEGMENTS, COVER_SHARES)}
        column, system = OUTLETS.column("depth_{T}yr"), project.project.units
        depths = [column.name(system, period) for period in project.storm.periods]
        frames[OUTLETS.name][depths] *= project.storm.depth_factor
        frames[TIME_AREA.name] = self.time_area.frame(TIME_AREA.name)
        if self.channel_starts is not None:
            frames |= {name: self.channel_starts.frame(name) for name in OTHER_STARTS}
        return frames

    def keys(self) -> list[str]:
        """Return the keys of the stages that those tables come from."""
        stages = (self.tables, self.time_area, self.channel_starts)
        return [stage.key for stage in stages if stage is not None]

    def flags(self) -> list[Flag]:
        """Return what the terrain half flagged."""
        return [Flag(*row) for row in self.tables.values("flags")]


def run(inputs: Inputs, store: Store) -> TerrainHalf:
    """Run every stage of the terrain half that is not in the store yet."""
    with Machine(inputs.project.compute, inputs.plan.grid) as machine:
        if inputs.mapped and machine.tiling is not None:
            what = (
                f"allows {machine.budget_gb:.3g} GB, but mapped {', '.join(inputs.mapped)} need all terrain in memory"
            )
            fix = f"give it {machine.needed_gb:.3g} GB, or cut the terrain to the basins"
            raise InputRejected.one(inputs.file.name, "compute.memory", what, fix)
        return _run(inputs, store, machine)


def _run(inputs: Inputs, store: Store, machine: Machine) -> TerrainHalf:
    from basinwright.terrain import Terrain

    project = inputs.project
    elevation = store.stage(
        "elevation",
        "Reading the terrain",
        {
            "dem": inputs.sha256(*inputs.dem),
            "crs": project.terrain.crs,
            "vertical_unit": project.terrain.vertical_unit,
            "fill_voids": project.terrain.fill_voids,
        },
        lambda draft: _elevation(inputs, machine, draft),
    )
    for problem in elevation.values("damaged"):
        store.on_stage(f"{problem}; until then it is void")
    grid = inputs.plan.grid
    if inputs.coarsened > 1:
        fine = elevation
        elevation = store.stage(
            "coarser_elevation",
            f"Averaging the terrain over {inputs.coarsened} x {inputs.coarsened} cells",
            {"elevation": fine.key, "cells": inputs.coarsened},
            lambda draft: _coarser(fine, inputs.coarsened, draft),
        )
    hydrography = mapping.run(inputs, elevation, store) if inputs.mapped else None
    routing = store.stage(
        "routing",
        f"Conditioning and routing {grid.nrows * grid.ncols / 1e6:.2f} million cells{_compiling()}",
        {
            "elevation": elevation.key,
            "conditioning": vars(_conditioning(project)),
            "hydrography": hydrography.key if hydrography else None,
        },
        lambda draft: _routing(project, grid, elevation, hydrography, machine, draft),
    )
    channels = store.stage(
        "channels",
        "Finding where channels begin",
        {"routing": routing.key, "stream_area": project.terrain.stream_area},
        lambda draft: _channels(inputs, routing.record(Terrain, "terrain"), hydrography, draft),
    )
    cover = store.stage(
        "cover",
        "Aligning land cover and soils",
        {
            "elevation": elevation.key,
            "cover": [*inputs.sha256(inputs.cover), project.cover.field],
            "soils": [*inputs.sha256(inputs.soils), project.soils.model_dump(mode="json")],
            "scheme": inputs.scheme.to_rows(),
        },
        lambda draft: _cover(inputs, machine, draft),
    )
    outlets = {
        "ids": list(inputs.points.ids),
        "x": inputs.x.tolist(),
        "y": inputs.y.tolist(),
        "expected": _plain(inputs.expected_area_km2),
        "within": project.outlets.snap_within,
    }
    basins = store.stage(
        "basins",
        f"Snapping {len(inputs.points)} outlets and delineating their basins",
        {"routing": routing.key, "channels": channels.key, "outlets": outlets},
        lambda draft: _basins(inputs, grid, elevation, routing, channels, machine, draft),
    )
    time_area = store.stage(
        "time_area",
        "Adding up travel times along the flow",
        {
            "basins": basins.key,
            "hydrography": hydrography.key if hydrography else None,
            "cover": cover.key,
            "options": project.model_dump(mode="json", include={"project", "terrain", "flow_path", "channel"}),
            "two_year_depth": project.storm.two_year_depth_mm,
        },
        lambda draft: _time_area(
            inputs,
            {"routing": routing, "channels": channels, "cover": cover, "basins": basins},
            hydrography,
            machine,
            draft,
        ),
    )
    paths = store.stage(
        "paths",
        "Tracing the longest flow paths",
        {
            "basins": basins.key,
            "length_correction": project.terrain.length_correction,
            "farthest": time_area.key if project.flow_path.farthest == "time" else "length",
        },
        lambda draft: _paths(inputs, grid, elevation, routing.record(Terrain, "terrain"), basins, time_area, draft),
    )
    tables = store.stage(
        "tables",
        "Cutting the paths into segments and adding up land cover",
        {
            "paths": paths.key,
            "time_area": time_area.key,
            "cover": cover.key,
            "scheme": inputs.scheme.to_rows(),
            "hydrography": hydrography.key if hydrography else None,
            "impervious": inputs.sha256(inputs.impervious),
            "depth_rasters": inputs.sha256(*inputs.depth_rasters.values()),
            "options": project.model_dump(
                mode="json", include={"project", "terrain", "outlets", "cover", "soils", "flow_path", "channel"}
            ),
            "storm": project.storm.model_dump(mode="json", include=_OF_DEPTHS),
            "points": [
                list(inputs.points.names),
                inputs.points.texts(basis) if (basis := project.outlets.capacity_basis) else [],
                _plain(inputs.capacity_m3s),
                {k: _plain(v) for k, v in inputs.overrides.items()},
            ],
        },
        lambda draft: _tables(
            inputs,
            {
                "routing": routing,
                "channels": channels,
                "cover": cover,
                "basins": basins,
                "time_area": time_area,
                "paths": paths,
            },
            hydrography,
            machine,
            draft,
        ),
    )
    factors = project.uncertainty.stream_area_factor if project.uncertainty is not None else None
    channel_starts = None
    if factors is not None:
        channel_starts = store.stage(
            "channel_starts",
            "Cutting the paths where channels would begin at other areas",
            {
                "paths": paths.key,
                "channels": channels.key,
                "cover": cover.key,
                "hydrography": hydrography.key if hydrography else None,
                "scheme": inputs.scheme.to_rows(),
                "options": project.model_dump(mode="json", include={"project", "terrain", "flow_path", "channel"}),
                "factors": factors,
            },
            lambda draft: _channel_starts(
                inputs,
                {"routing": routing, "channels": channels, "cover": cover, "paths": paths, "tables": tables},
                hydrography,
                factors,
                draft,
            ),
        )
    return TerrainHalf(
        grid,
        [
            *elevation.values("alignment"),
            *(hydrography.values("alignment") if hydrography else ()),
            *cover.values("alignment"),
        ],
        elevation,
        hydrography,
        routing,
        channels,
        cover,
        basins,
        paths,
        tables,
        time_area,
        channel_starts,
    )


def _plain(values: NDArray[np.float64]) -> list[float | None]:
    return [None if np.isnan(value) else float(value) for value in values]


def _compiling() -> str:
    from basinwright.kernels import cache_is_cold

    return " (first run on this machine: compiling, under a minute)" if cache_is_cold() else ""


def _elevation(inputs: Inputs, machine: Machine, draft: Draft) -> None:
    from basinwright.io.elevation import open_terrain
    from basinwright.terrain.voids import fill_small_voids

    project = inputs.project
    with machine.space(draft) as space:
        terrain = open_terrain(inputs.dem, project.terrain.crs, project.terrain.vertical_unit, space)
    grid, largest_m2 = terrain.grid, project.terrain.fill_voids * 1e6
    facts = fill_small_voids(terrain.elevation_m, grid.dx_m, grid.dy_m, grid.cell_area_m2, largest_m2)
    draft.array("elevation_m", terrain.elevation_m)
    draft.values("voids", facts)
    draft.values("damaged", [str(problem) for problem in terrain.damaged])
    damaged = {Path(problem.file).name: {"damaged": problem.what} for problem in terrain.damaged}
    draft.values("alignment", [entry | damaged.get(entry["path"], {}) for entry in terrain.plan.alignment])


def _conditioning(project: Project) -> Conditioning:
    from basinwright.terrain import Conditioning

    options = project.terrain
    if options.conditioning == "fill":
        return Conditioning("fill")
    return Conditioning("breach", options.breach_depth, options.breach_length)


def _coarser(elevation: Entry, cells: int, draft: Draft) -> None:
    from basinwright.terrain.coarsening import block_means

    draft.array("elevation_m", block_means(elevation.array("elevation_m"), cells))
    draft.values("alignment", elevation.values("alignment"))


def _routing(
    project: Project, grid: Grid, elevation: Entry, hydrography: Entry | None, machine: Machine, draft: Draft
) -> None:
    from basinwright.terrain import condition_and_route
    from basinwright.terrain.hydrography import sink_spills
    from basinwright.terrain.tiled import condition_and_route_tiles

    sizes, conditioning = (grid.dx_m, grid.dy_m, grid.cell_area_m2), _conditioning(project)
    constraints = mapping.constraints(hydrography)
    terrain = mapping.given_terrain(hydrography)
    given = elevation.array("elevation_m")
    if terrain is None and machine.tiling is not None:
        with machine.space(draft) as space:
            terrain = condition_and_route_tiles(Path(file_of(given)), *sizes, machine.tiling, space, conditioning)
    elif terrain is None:
        terrain = condition_and_route(given, *sizes, conditioning, constraints, threads=project.compute.jobs)
    draft.record(terrain, "terrain")
    draft.record(sink_spills(terrain, constraints), "sinks")


def _channels(inputs: Inputs, terrain: Terrain, hydrography: Entry | None, draft: Draft) -> None:
    """Decide where channels begin: at which contributing area, or at the heads of mapped lines."""
    from basinwright.terrain.network import FALLBACK_KM2, chosen_stream_area_km2, drop_test, mapped_channels

    given = inputs.project.terrain.stream_area
    draft.values("mapped", given == "mapped")
    if given == "mapped" and hydrography is not None:
        draft.array("channels", mapped_channels(terrain, hydrography.array("stream_mask")))
    tested = drop_test(terrain) if given == "auto" else []
    chosen = chosen_stream_area_km2(tested)
    draft.values("stream_area_km2", given if not isinstance(given, str) else chosen or FALLBACK_KM2)
    draft.values("drop_test", [{**vars(entry), "passes": entry.passes} for entry in tested])
    words = ""
    if given == "auto" and chosen is None:
        words = f"none of {len(tested)} tested areas passes the drop test: {FALLBACK_KM2} km2 stands in"
    elif tested and chosen == tested[0].stream_area_km2:
        words = f"the smallest tested area, {chosen:g} km2, passes the drop test: channels may begin higher up"
    draft.values("doubt", words)


def _basins(
    inputs: Inputs, grid: Grid, elevation: Entry, routing: Entry, channels: Entry, machine: Machine, draft: Draft
) -> None:
    from basinwright.basins import delineate, drainage_density_per_km, measure, snap
    from basinwright.basins.contact import contact_lengths_m, sink_areas_km2
    from basinwright.terrain import Terrain
    from basinwright.terrain.hydrography import Sinks

    project, terrain = inputs.project, routing.record(Terrain, "terrain")
    stream_area_km2 = float(channels.values("stream_area_km2"))
    within = project.outlets.snap_within
    snapped = snap(
        grid,
        terrain,
        inputs.x,
        inputs.y,
        stream_area_km2=stream_area_km2,
        channels=mapping.mapped_channels(channels),
        within_m=None if isinstance(within, str) else within,
        expected_area_km2=inputs.expected_area_km2,
    )
    with machine.space(draft, terrain) as space:
        basins = delineate(terrain, snapped.cell, space)
    measures = measure(grid, terrain, elevation.array("elevation_m"), basins)
    measures["drainage_density_per_km"] = drainage_density_per_km(
        terrain, basins, stream_area_km2, mapping.mapped_channels(channels)
    )
    measures["sink_area_km2"] = sink_areas_km2(terrain, basins, routing.record(Sinks, "sinks"))
    measures |= {f"contact_{side}_m": m for side, m in contact_lengths_m(grid, terrain, basins).items()}
    draft.record(snapped, "snapped")
    draft.record(basins, "basins")
    keep_columns(draft, "measures", measures)


def _paths(
    inputs: Inputs,
    grid: Grid,
    elevation: Entry,
    terrain: Terrain,
    basins_entry: Entry,
    time_area: Entry,
    draft: Draft,
) -> None:
    from basinwright.basins import Basins
    from basinwright.paths import profile_measures, reach_measures, trace

    basins = basins_entry.record(Basins, "basins")
    measures = kept_columns(basins_entry, "measures")
    correction = inputs.project.terrain.length_correction
    in_time = inputs.project.flow_path.farthest == "time"
    paths = trace(terrain, basins, correction, time_area.array("farthest_cell") if in_time else None)
    profile = profile_measures(
        grid, terrain, elevation.array("elevation_m"), paths, measures["centroid_x"], measures["centroid_y"]
    )
    draft.record(paths, "paths")
    keep_columns(draft, "profile", profile)
    keep_columns(draft, "reaches", reach_measures(terrain, basins, correction))


def _cover(inputs: Inputs, machine: Machine, draft: Draft) -> None:
    from basinwright.cover import align_cover, align_soils

    project, grid = inputs.project, inputs.plan.grid
    is_raster = project.cover.raster is not None
    section = project.soils
    with machine.space(draft) as space:
        cover = align_cover(
            grid,
            inputs.scheme,
            raster=inputs.cover if is_raster else None,
            vector=None if is_raster else inputs.cover,
            field=project.cover.field,
            space=space,
        )
        soils = align_soils(
            grid,
            raster=inputs.soils if section.raster is not None else None,
            vector=inputs.soils if section.vector is not None else None,
            field=section.field,
            group=section.group,
            groups=section.groups,
            dual_groups=section.dual_groups,
            missing=section.missing,
            space=space,
        )
    draft.record(cover, "cover")
    draft.record(soils, "soils")
    draft.values("alignment", [cover.record, soils.record])


def _unmapped_m(segments: Mapping[str, NDArray[Any]], count: int) -> NDArray[np.float64]:
    """Return the length of channel without a mapped roughness, by outlet."""
    unmapped = (segments["regime"] == "channel") & np.isnan(segments["roughness"])
    lengths: NDArray[Any] = (segments["to_m"] - segments["from_m"]) * unmapped
    return np.bincount(segments["outlet"], lengths, count).astype(np.float64)


def _tables(
    inputs: Inputs, stages: Mapping[str, Entry], hydrography: Entry | None, machine: Machine, draft: Draft
) -> None:
    """Make the three tables, with the flags of the terrain half and the cells that the user supplied."""
    from basinwright.basins import Basins, Snapped
    from basinwright.cover import CoverLayer, SoilLayer, combine, cover_shares
    from basinwright.paths import Paths
    from basinwright.terrain import Terrain

    project, grid = inputs.project, inputs.plan.grid
    terrain = stages["routing"].record(Terrain, "terrain")
    basins = stages["basins"].record(Basins, "basins")
    snapped = stages["basins"].record(Snapped, "snapped")
    paths = stages["paths"].record(Paths, "paths")
    measures = kept_columns(stages["basins"], "measures") | kept_columns(stages["paths"], "profile")
    measures |= kept_columns(stages["paths"], "reaches")
    cover = stages["cover"].record(CoverLayer, "cover")
    with machine.space(draft, terrain) as space:
        patches = combine(cover, stages["cover"].record(SoilLayer, "soils"), space)
        shares = cover_shares(
            _patch_areas_km2(terrain, basins, patches.cells, len(patches)),
            patches,
            inputs.scheme,
            project.cover.gap_limit,
            _impervious(inputs, terrain, basins, patches.cells, len(patches)),
        )
    depths = _mean_depths_mm(inputs, terrain, basins)
    stream_area_km2 = float(stages["channels"].values("stream_area_km2"))
    channel_n = mapping.channel_n(inputs, hydrography)
    channels = mapping.mapped_channels(stages["channels"])
    cut = _cut(inputs, terrain, paths, cover, stream_area_km2, channels, channel_n)
    other_paths = _other_paths(inputs, stages, terrain, basins)
    along_other = _cut(inputs, terrain, other_paths, cover, stream_area_km2, channels, channel_n)

    failed = _failures(snapped, measures, shares.failed, depths)
    fine = np.array([i not in failed for i in range(len(inputs.points))], dtype=bool)
    ids = np.array(inputs.points.ids, dtype=object)
    segments, other_segments = (
        _as_frame(SEGMENTS, _of_fine(each.segments, ids, fine) | {"edited": None}, project)
        for each in (cut, along_other)
    )
    measures |= _times_of_both(inputs, ids.tolist(), segments, other_segments)
    marks = {"sheet_limited": cut.sheet_limited, **vars(snapped), **measures}
    marks["unmapped_m"] = _unmapped_m(cut.segments, len(inputs.points)) if channel_n is not None else np.zeros(1)
    flags = _flags(inputs, marks, shares, failed, stages["channels"].values("doubt"))
    outlets = _outlet_rows(inputs, grid, ids, snapped, measures, shares.open_water_pct, depths, fine)
    draft.frame(OUTLETS.name, _as_frame(OUTLETS, outlets, project))
    draft.frame(SEGMENTS.name, segments)
    draft.frame(COVER_SHARES.name, _as_frame(COVER_SHARES, _of_fine(shares.rows, ids, fine), project))
    draft.values("flags", [list(flag) for flag in flags])
    draft.values(
        "held",
        [
            ["outlets", ids[i], "", stem]
            for stem, values in inputs.overrides.items()
            if not stem.startswith("depth_")  # flagged here: a person does not edit depths later
            for i in np.flatnonzero(~np.isnan(values) & fine).tolist()
        ],
    )


def _cut(
    inputs: Inputs,
    terrain: Terrain,
    paths: Paths,
    cover: CoverLayer,
    stream_area_km2: float,
    channels: NDArray[np.bool_] | None,
    channel_n: NDArray[np.float64] | None,
) -> Cut:
    """Cut the paths into segments where channels begin at an area."""
    from basinwright.paths import CoverOnGrid, CutRules, cut_segments
    from basinwright.timing import bankfull_width_m, sheet_limit_m

    project = inputs.project
    rules = CutRules(
        stream_area_km2=stream_area_km2,
        sheet_limit_m=project.flow_path.sheet_limit,
        min_segment_m=project.flow_path.min_segment,
        slope_floor=project.flow_path.slope_floor,
        mccuen_spiess_m=sheet_limit_m,
        bankfull_width_m=partial(bankfull_width_m, relation=bankfull_relation_of(project)),
        channels=channels,
    )
    on_grid = CoverOnGrid(
        cover.classes, cover.codes, cover.sheet_n(inputs.scheme), cover.open_water(inputs.scheme), channel_n
    )
    return cut_segments(inputs.plan.grid, terrain, paths, on_grid, rules)


def _channel_starts(
    inputs: Inputs,
    stages: Mapping[str, Entry],
    hydrography: Entry | None,
    factors: tuple[float, float],
    draft: Draft,
) -> None:
    """Cut the stored paths again where channels begin at a smaller and at a larger area."""
    from basinwright.cover import CoverLayer
    from basinwright.paths import Paths
    from basinwright.terrain import Terrain

    project = inputs.project
    terrain = stages["routing"].record(Terrain, "terrain")
    paths, cover = stages["paths"].record(Paths, "paths"), stages["cover"].record(CoverLayer, "cover")
    failed = {Flag(*row).outlet_id for row in stages["tables"].values("flags") if row[1] == "OUTLET_FAILED"}
    ids = np.array(inputs.points.ids, dtype=object)
    fine = np.array([outlet_id not in failed for outlet_id in inputs.points.ids], dtype=bool)
    for name, factor in zip(OTHER_STARTS, factors, strict=True):
        stream_area_km2 = factor * float(stages["channels"].values("stream_area_km2"))
        cut = _cut(inputs, terrain, paths, cover, stream_area_km2, None, mapping.channel_n(inputs, hydrography))
        columns = _of_fine(cut.segments, ids, fine) | {"edited": None}
        draft.frame(name, _as_frame(SEGMENTS, columns, project))


def _other_paths(inputs: Inputs, stages: Mapping[str, Entry], terrain: Terrain, basins: Basins) -> Paths:
    """Trace the paths that are longest in the sense that does not count, where they are other paths."""
    from basinwright.kernels import NO_CELL
    from basinwright.paths import trace

    project, in_time = inputs.project, stages["time_area"].array("farthest_cell")
    other = in_time if project.flow_path.farthest == "length" else basins.farthest_cell
    differs = np.where(in_time == basins.farthest_cell, NO_CELL, other).astype(np.int32)
    return trace(terrain, basins, project.terrain.length_correction, differs)


def _times_of_both(
    inputs: Inputs, ids: list[str], counted: pd.DataFrame, other: pd.DataFrame
) -> dict[str, NDArray[np.float64]]:
    """Return the travel times along the paths longest in length and longest in time, by their segments [h]."""
    project, design = inputs.project, inputs.design
    settings = Settings(project, inputs.scheme, design.storm, design.ddf)
    own_h, other_h = (path_times_h(segments, ids, settings) for segments in (counted, other))
    other_h = np.where(np.isnan(other_h), own_h, other_h)  # one path is the longest in both senses
    in_length_h, in_time_h = (own_h, other_h) if project.flow_path.farthest == "length" else (other_h, own_h)
    return {"tc_longest_in_length_h": in_length_h, "tc_longest_in_time_h": in_time_h}


def _patch_areas_km2(terrain: Terrain, basins: Basins, cells: NDArray[np.int32], count: int) -> NDArray[np.float64]:
    """Add up the area of each patch of cover and soils over each whole basin, shape (outlets, patches)."""
    from basinwright.kernels import reduce

    area_m2 = np.zeros((basins.n_labels, count))
    for first in range(0, terrain.nrows, _BLOCK_ROWS):
        block = np.ascontiguousarray(cells[first : first + _BLOCK_ROWS])
        reduce.add_classes(basins.label, terrain.ncols, terrain.row_area_m2, first, block, area_m2)
    return basins.by_outlet(basins.whole_sums(area_m2), failed=0.0) / 1e6


def _impervious(
    inputs: Inputs, terrain: Terrain, basins: Basins, cells: NDArray[np.int32], count: int
) -> Impervious | None:
    """Average the raster of percent impervious over each patch of each whole basin; None where there is none."""
    from basinwright.cover import Impervious
    from basinwright.io.rasters import read_blocks_onto
    from basinwright.kernels import reduce
    from basinwright.runoff import composite_curve_number
    from basinwright.terrain.summable import quantum

    if inputs.impervious is None:
        return None
    sums, weight = np.zeros((basins.n_labels, count)), np.zeros((basins.n_labels, count))
    step = quantum(100.0 * float(terrain.row_area_m2.sum()) * terrain.ncols)
    for first, block in read_blocks_onto(inputs.impervious, inputs.plan.grid, "nearest"):
        percent = np.ma.filled(block.astype(np.float64), np.nan)
        percent[(percent < 0.0) | (percent > 100.0)] = np.nan  # 127 and the like: none
        classes = np.ascontiguousarray(cells[first : first + len(block)])
        reduce.add_class_values(
            basins.label, terrain.ncols, terrain.row_area_m2, first, classes, percent, step, sums, weight
        )
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = basins.whole_sums(sums) / basins.whole_sums(weight)
    composite = partial(composite_curve_number, connected_fraction=inputs.project.cover.connected_fraction)
    return Impervious(basins.by_outlet(mean), composite)


def _mean_depths_mm(inputs: Inputs, terrain: Terrain, basins: Basins) -> dict[str, NDArray[np.float64]]:
    """Average each raster of storm depth over each whole basin [mm]; NaN where it covers nothing of it."""
    from basinwright.io.rasters import read_blocks_onto
    from basinwright.kernels import reduce
    from basinwright.terrain.summable import quantum

    factor = UNITS[inputs.project.storm.depth_raster_unit][1]
    means = {}
    for period, path in inputs.depth_rasters.items():
        sums, weight = np.zeros(basins.n_labels), np.zeros(basins.n_labels)
        step = quantum(_DEEPEST_MM * float(terrain.row_area_m2.sum()) * terrain.ncols)
        for first, block in read_blocks_onto(path, inputs.plan.grid, "bilinear"):
            depth = np.ma.filled(block.astype(np.float64), np.nan) * factor
            depth[~((depth > 0.0) & (depth <= _DEEPEST_MM))] = np.nan
            reduce.add_values(basins.label, terrain.ncols, terrain.row_area_m2, first, depth, step, sums, weight)
        whole = basins.whole_sums(np.column_stack([sums, weight]))
        with np.errstate(invalid="ignore", divide="ignore"):
            means[period] = basins.by_outlet(whole[:, 0] / whole[:, 1])
    return means


def _time_area(
    inputs: Inputs, stages: Mapping[str, Entry], hydrography: Entry | None, machine: Machine, draft: Draft
) -> None:
    """Find the cells farthest in time, and draw the time-area curves as the table that the hydrology reads."""
    from basinwright.basins import Basins
    from basinwright.basins.time_area import farthest_in_time, time_area_curves, travel_times_us
    from basinwright.cover import CoverLayer
    from basinwright.pipeline.travel import StepTimes
    from basinwright.terrain import Terrain

    terrain = stages["routing"].record(Terrain, "terrain")
    basins = stages["basins"].record(Basins, "basins")
    channels = mapping.mapped_channels(stages["channels"])
    step_times = StepTimes(
        inputs.project,
        inputs.scheme,
        stages["cover"].record(CoverLayer, "cover"),
        float(stages["channels"].values("stream_area_km2")),
        None if channels is None else terrain.grid(channels),
        mapping.channel_n(inputs, hydrography),
    )
    with machine.space(draft, terrain) as space:
        time_us = travel_times_us(terrain, step_times, space)
        draft.array("farthest_cell", farthest_in_time(terrain, basins, time_us))
        curves = time_area_curves(terrain, basins, time_us)
    ids = np.array(inputs.points.ids, dtype=object)
    columns = {"outlet_id": ids[curves["outlet"]], **{k: v for k, v in curves.items() if k != "outlet"}}
    draft.frame(TIME_AREA.name, _as_frame(TIME_AREA, columns, inputs.project))


def _failures(
    snapped: Snapped,
    measures: Mapping[str, NDArray[Any]],
    uncovered: Mapping[int, str],
    depths: Mapping[str, NDArray[np.float64]],
) -> dict[int, str]:
    """Say which outlets cannot be computed, and why."""
    failed = {i: str(why) for i, why in enumerate(snapped.failed.tolist()) if why}
    for i in np.flatnonzero(~(measures["path_length_m"] > 0)).tolist():
        failed.setdefault(i, "its basin is a single cell: move it onto its flow line or use finer terrain")
    for i, why in uncovered.items():
        failed.setdefault(i, why)
    for period, depth in depths.items():
        for i in np.flatnonzero(np.isnan(depth)).tolist():
            failed.setdefault(i, f"the {period}-year depth raster covers nothing of its basin")
    return failed


def _flags(
    inputs: Inputs,
    marks: Mapping[str, NDArray[Any]],
    shares: CoverShares,
    failed: Mapping[int, str],
    channel_doubt: str,
) -> list[Flag]:
    """Raise the flags that terrain, snap and cover give, outlet by outlet."""
    project = inputs.project
    us = project.project.units == "us"
    length, foot = ("ft", M_PER_FT) if us else ("m", 1.0)
    raised: list[tuple[int, str, str]] = [(i, "OUTLET_FAILED", why) for i, why in failed.items()]

    def where(mask: NDArray[np.bool_], key: str, words: Callable[[int], str]) -> None:
        raised.extend((i, key, words(i)) for i in np.flatnonzero(mask).tolist())

    area, expected = marks["area_km2"], inputs.expected_area_km2
    moved, water = np.maximum(marks["deepest_fill_m"], marks["deepest_cut_m"]), shares.open_water_pct
    cut_inside = marks["deepest_cut_inside_m"]
    with np.errstate(invalid="ignore", divide="ignore"):
        filled_mm = marks["filled_volume_m3"] / area / 1000.0
        off = area / expected - 1.0
        where(
            marks["contact_cells"] > 0,
            "EDGE_TOUCH",
            lambda i: _contact_words(marks, i, length, foot),
        )
        where(
            marks["sink_area_km2"] > 0,
            "SINK_INSIDE",
            lambda i: (
                f"{marks['sink_area_km2'][i] / (KM2_PER_MI2 if us else 1):.3g} {'mi2' if us else 'km2'} drain to sinks"
            ),
        )
        where(
            marks["unmapped_m"] > 0,
            "ROUGHNESS_UNMAPPED",
            lambda i: f"{marks['unmapped_m'][i] / foot:.4g} {length} of channel",
        )
        where(marks["far"], "SNAP_FAR", lambda i: f"moved {marks['snap_m'][i] / foot:.3g} {length}")
        where(marks["ambiguous"], "SNAP_AMBIGUOUS", lambda i: "another flow line passes within the search distance")
        where(np.abs(off) > AREA_TOLERANCE, "AREA_MISMATCH", lambda i: f"{off[i]:+.0%} against the expected area")
        where(marks["cells"] < SMALL_BASIN_CELLS, "SMALL_BASIN", lambda i: f"{int(marks['cells'][i])} cells")
        in_length_h, in_time_h = marks["tc_longest_in_length_h"], marks["tc_longest_in_time_h"]
        where(
            np.abs(in_time_h / in_length_h - 1.0) > LONGEST_TOLERANCE,
            "LONGEST_IN_TIME_DIFFERS",
            lambda i: (
                f"{in_time_h[i]:.3g} h along the path longest in time, {in_length_h[i]:.3g} h along the one "
                "longest in length"
            ),
        )
        where(marks["sheet_limited"], "SHEET_LIMIT", lambda i: "100 root S / n (ft) is under flow_path.sheet_limit")
        for how, deepest in (("raised", marks["deepest_fill_m"]), ("cut", marks["deepest_cut_m"])):
            where(
                (deepest > DEEP_FILL_M) & (deepest == moved),
                "DEEP_FILL",
                lambda i, how=how: f"{how} by up to {moved[i] / foot:.3g} {length} under the path",  # type: ignore[misc]
            )
        where(
            cut_inside > BREACH_INSIDE_M,
            "BREACH_INSIDE",
            lambda i: f"a cut of up to {cut_inside[i] / foot:.3g} {length} lets water through",
        )
        where(
            filled_mm > STORAGE_FILLED_MM,
            "STORAGE_FILLED",
            lambda i: f"{filled_mm[i] / (MM_PER_IN if us else 1):.3g} {'in' if us else 'mm'} over the basin",
        )
        where(water > LAKE_STORAGE_PCT, "LAKE_STORAGE", lambda i: f"open water covers {water[i]:.3g} %")
    raised += shares.flags
    if inputs.plan.unit_assumed:
        raised += [(i, "VERTICAL_UNIT_ASSUMED", "metres assumed") for i in range(len(inputs.points))]
    if channel_doubt:
        raised += [(i, "STREAM_AREA_UNSURE", channel_doubt) for i in range(len(inputs.points))]
    for stem, values in inputs.overrides.items():
        if stem.startswith("depth_"):
            where(~np.isnan(values), "OVERRIDE", lambda i, stem=stem: f"{stem} is a supplied value")  # type: ignore[misc]
    ids = inputs.points.ids
    return [Flag(ids[i], key, words) for i, key, words in raised if i not in failed or key == "OUTLET_FAILED"]


def _contact_words(marks: Mapping[str, NDArray[Any]], i: int, unit: str, per_unit: float) -> str:
    """Say where a basin touches the raster's edge or voids, and how much of its boundary lies there."""
    found = {side: float(marks[f"contact_{side}_m"][i]) / per_unit for side in ("north", "east", "south", "west")}
    parts = [f"{side} edge {value:.4g} {unit}" for side, value in found.items() if value > 0]
    if (voids := float(marks["contact_void_m"][i]) / per_unit) > 0:
        parts.append(f"voids {voids:.4g} {unit}")
    cells = int(marks["contact_cells"][i])
    return f"{cells} cells at the edge or beside a void" + (f"; boundary there: {', '.join(parts)}" if parts else "")


def _outlet_rows(
    inputs: Inputs,
    grid: Grid,
    ids: NDArray[Any],
    snapped: Snapped,
    measures: Mapping[str, NDArray[Any]],
    open_water_pct: NDArray[np.float64],
    depths: Mapping[str, NDArray[np.float64]],
    fine: NDArray[np.bool_],
) -> dict[str, Any]:
    """Return the columns of outlets.csv that the terrain half knows, by inside name or stem."""
    from pyproj import Transformer

    to_degrees = Transformer.from_crs(grid.crs, "EPSG:4326", always_xy=True)
    # As lists: of an array of one, pyproj makes a plain number.
    longitude, latitude = map(np.array, to_degrees.transform(snapped.x.tolist(), snapped.y.tolist()))
    project, points = inputs.project, inputs.points
    downstream = measures["downstream_outlet"]
    columns: dict[str, Any] = {
        "outlet_id": ids,
        "name": np.array(points.names, dtype=object),
        "downstream_outlet_id": np.where(downstream >= 0, ids[downstream], ""),
        "x": snapped.x,
        "y": snapped.y,
        "longitude": longitude,
        "latitude": latitude,
        "snap_m": snapped.snap_m,
        "open_water_pct": open_water_pct,
        **{name: measures[name] for name in _MEASURED},
    }
    for stem in ("curve_number", "tc_h"):
        if stem in inputs.overrides:
            columns[stem] = inputs.overrides[stem]
    for period in project.storm.periods:
        supplied = inputs.overrides.get(f"depth_{period}yr", np.full(len(ids), np.nan))
        depth = depths[period] if period in depths else np.full(len(ids), project.storm.depths[period])
        columns[f"depth_{period}yr_mm"] = np.where(np.isnan(supplied), depth, supplied)
    optional = {
        "areal_factor": project.storm.areal_reduction != "none",
        "critical_duration_h": project.storm.critical_duration,
        "translation_peak_rate_factor": True,
    }
    columns |= {name: None for name, wanted in optional.items() if wanted}
    if project.outlets.capacity is not None:
        columns["capacity_m3s"] = inputs.capacity_m3s
        columns["exceeded_at_yr"] = None
    if project.outlets.capacity_basis is not None:
        columns["capacity_basis"] = np.array(points.texts(project.outlets.capacity_basis), dtype=object)
    terrain = project.terrain
    if terrain.sinks or terrain.barriers or "sink" in (terrain.flow_direction_codes or {}).values():
        columns["sink_area_km2"] = measures["sink_area_km2"]
    known = {"outlet_id", "name", "capacity_m3s", "capacity_basis"}
    for name, values in columns.items():
        if values is not None and name not in known:
            columns[name] = values.astype(object)
            columns[name][~fine] = None
    return columns


_MEASURED = (
    "area_km2", "centroid_length_m", "path_length_m", "path_length_raw_m", "relief_m", "basin_slope_pct",
    "path_slope_pct", "path_slope_1085_pct", "mean_elevation_m", "drainage_density_per_km", "reach_length_m",
    "reach_fall_m", "reach_area_km2", "tc_longest_in_time_h",
)  # fmt: skip


def _of_fine(columns: Mapping[str, NDArray[Any]], ids: NDArray[Any], fine: NDArray[np.bool_]) -> dict[str, Any]:
    """Return the rows of the outlets that did not fail, with their ids."""
    outlet = columns["outlet"]
    rows = fine[outlet]
    return {"outlet_id": ids[outlet[rows]], **{k: v[rows] for k, v in columns.items() if k != "outlet"}}


def _as_frame(table: Table, columns: Mapping[str, Any], project: Project) -> pd.DataFrame:
    """Return a table as it would be read from its file, in the units of the project; what is not known is empty."""
    import pandas as pd

    system, periods = project.project.units, project.storm.periods
    optional = [column.stem for column in table.columns if column.optional and column.name("si") in columns]
    inside = {entry.name: entry for entry in table.fields("si", periods, optional)}
    count = len(columns["outlet_id"])
    shown: dict[str, Any] = {}
    for entry, name in zip(table.fields(system, periods, optional), inside, strict=True):
        values = columns.get(name)
        if entry.column.type == "number":
            numbers = np.full(count, np.nan) if values is None else np.asarray(values, dtype=np.float64) / entry.factor
            shown[entry.name] = np.round(numbers / QUANTUM) * QUANTUM if entry.stem in _ALONG_PATH else numbers
        elif entry.column.type == "integer" and values is not None:
            shown[entry.name] = np.asarray(values, dtype=np.int64)
        else:
            shown[entry.name] = np.array([""] * count if values is None else texts(values), dtype=object)
    return pd.DataFrame(shown)


_ALONG_PATH = ("from", "to", "path_length", "path_length_raw")


def keep_columns(draft: Draft, name: str, columns: dict[str, NDArray[Any]]) -> None:
    """Keep columns in the store under a name."""
    for stem, values in columns.items():
        draft.array(f"{name}.{stem}", np.asarray(values))
    draft.values(name, list(columns))


def kept_columns(entry: Entry, name: str) -> dict[str, NDArray[Any]]:
    """Read columns that a stage kept under a name."""
    return {stem: entry.array(f"{name}.{stem}") for stem in entry.values(name)}
