"""The shapes of a run: made once, kept in the store, written beside whatever the tables say by then."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.grid import Grid
from basinwright.hydrology import Columns
from basinwright.outputs.layers import keep_geometries, kept_geometries, write_layers
from basinwright.pipeline import mapping
from basinwright.pipeline.inputs import Inputs
from basinwright.pipeline.terrain_half import TerrainHalf, keep_columns, kept_columns
from basinwright.project import Project
from basinwright.store import Draft, Entry, Store
from basinwright.tables import SEGMENTS

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from basinwright.paths import Paths
    from basinwright.terrain import Terrain


@dataclass
class Shapes:
    """Basins, paths and streams of a run, and what cuts the paths into segments.

    Parameters
    ----------
    grid : Grid
    kept : Entry
        The stage that holds the geometries.
    paths : Paths
    terrain : Terrain
    """

    grid: Grid
    kept: Entry
    paths: Paths
    terrain: Terrain

    def write(self, path: Path, tables: Mapping[str, Columns], project: Project) -> None:
        """Write ``basins.gpkg`` with the columns of these tables."""
        names = ("basins", "subbasins", "flow_paths")
        geometries = {name: kept_geometries(self.kept, name) for name in names}
        geometries["segments"] = self._segments(tables, project)
        streams = {
            "geometry": kept_geometries(self.kept, "streams"),
            **kept_columns(self.kept, "streams"),
        }
        write_layers(path, tables, project, self.grid, geometries, streams)

    def _segments(self, tables: Mapping[str, Columns], project: Project) -> NDArray[Any]:
        """Cut the flow paths at the distances of the segment table, edited or not."""
        from basinwright.paths.lines import segment_lines

        system, columns = project.project.units, tables["segments"]
        index = {outlet_id: i for i, outlet_id in enumerate(tables["outlets"]["outlet_id"])}

        def metres(stem: str) -> NDArray[np.float64]:
            column = SEGMENTS.column(stem)
            return np.asarray(columns[column.name(system)], dtype=np.float64) * column.inside_per_shown(system)

        segments = {
            "outlet": np.array([index[outlet_id] for outlet_id in columns["outlet_id"]], dtype=np.int64),
            "from_m": metres("from"),
            "to_m": metres("to"),
        }
        return segment_lines(self.grid, self.terrain, self.paths, segments)


def shapes(inputs: Inputs, half: TerrainHalf, store: Store) -> Shapes:
    """Make the shapes, or find them in the store."""
    from basinwright.paths import Paths

    kept = store.stage(
        "shapes",
        "Drawing basins, paths and streams",
        {"paths": half.paths.key, "channels": half.channels.key},
        lambda draft: _draw(half, draft),
    )
    return Shapes(half.grid, kept, half.paths.record(Paths, "paths"), half.routed())


def _draw(half: TerrainHalf, draft: Draft) -> None:
    from basinwright.basins import Basins
    from basinwright.basins.polygons import subbasin_polygons, whole_basin_polygons
    from basinwright.paths import Paths
    from basinwright.paths.lines import path_lines, stream_reaches

    grid, terrain = half.grid, half.routed()
    basins = half.basins.record(Basins, "basins")
    subbasins = subbasin_polygons(grid, terrain, basins)
    whole = whole_basin_polygons(grid, terrain, basins)
    placed = basins.outlet_label >= 0

    def by_outlet(by_label: NDArray[Any]) -> list[Any]:
        return [by_label[label] if fine else None for label, fine in zip(basins.outlet_label, placed, strict=True)]

    keep_geometries(draft, "basins", by_outlet(whole))
    keep_geometries(draft, "subbasins", by_outlet(subbasins))
    keep_geometries(draft, "flow_paths", path_lines(grid, terrain, half.paths.record(Paths, "paths")))
    streams = stream_reaches(grid, terrain, half.stream_area_km2, mapping.mapped_channels(half.channels))
    keep_geometries(draft, "streams", streams.pop("geometry"))
    keep_columns(draft, "streams", streams)
    draft.values(
        "grid", {"nrows": grid.nrows, "ncols": grid.ncols, "transform": list(grid.transform)[:6], "crs": grid.crs_wkt}
    )


def stored(about: Mapping[str, Any], folder: Path) -> Shapes | None:
    """Find the shapes of a finished run by its manifest; None where its store is not there."""
    from affine import Affine

    from basinwright.paths import Paths
    from basinwright.terrain import Terrain

    entries = {
        stage["stage"]: Entry(stage["stage"], stage["key"], folder / f"{stage['stage']}-{stage['key']}")
        for stage in about["stages"]
        if "key" in stage
    }
    needed = [entries.get(name) for name in ("shapes", "paths", "routing")]
    kept, paths, routing = needed
    if kept is None or paths is None or routing is None or not all(entry and entry.folder.is_dir() for entry in needed):
        return None
    about_grid = kept.values("grid")
    grid = Grid(about_grid["nrows"], about_grid["ncols"], Affine(*about_grid["transform"]), about_grid["crs"])
    return Shapes(grid, kept, paths.record(Paths, "paths"), routing.record(Terrain, "terrain"))
