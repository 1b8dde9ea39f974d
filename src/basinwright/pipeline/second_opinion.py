"""Which basins the audit looks at, and what it makes of the answers."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from basinwright.audit import DIFFERS_OVER, MARGIN_CELLS, Clip, Opinion, second_opinion
from basinwright.flags import Flag
from basinwright.pipeline.inputs import Inputs
from basinwright.pipeline.terrain_half import TerrainHalf, kept_columns
from basinwright.store import Draft, Store

if TYPE_CHECKING:
    from basinwright.basins import Basins

SAMPLE = 20
"""Outlets that ``second_opinion = "sample"`` looks at, evenly spread over their list."""


def audit(inputs: Inputs, half: TerrainHalf, store: Store) -> list[Flag]:
    """Ask pysheds for the areas of basins, and flag those that differ."""
    extent = inputs.project.audit.second_opinion
    entry = store.stage(
        "audit",
        "Asking pysheds for a second opinion on the basins (its first use on a machine compiles for a minute or two)",
        {"basins": half.basins.key, "extent": extent},
        lambda draft: _ask(half, extent, draft),
    )
    ids = inputs.points.ids
    return [Flag(ids[i], "AUDIT_DIFFERS", words) for i, words in entry.values("differs")]


def _ask(half: TerrainHalf, extent: str, draft: Draft) -> None:
    from basinwright.basins import Basins

    basins = half.basins.record(Basins, "basins")
    area_km2 = kept_columns(half.basins, "measures")["area_km2"]
    chosen = np.flatnonzero(basins.outlet_label >= 0)
    if extent == "sample" and chosen.size > SAMPLE:
        chosen = chosen[np.linspace(0, chosen.size - 1, SAMPLE).round().astype(int)]
    answers = second_opinion(_clips(half, basins, chosen))
    found, differs = [], []
    for i, opinion in zip(chosen.tolist(), answers, strict=True):
        found.append({"outlet": i, "area_km2": float(area_km2[i]), **vars(opinion)})
        if words := _difference(float(area_km2[i]), opinion):
            differs.append([i, words])
    draft.values("opinions", found)
    draft.values("differs", differs)


def _difference(area_km2: float, opinion: Opinion) -> str:
    """Say how the second opinion differs; empty where it agrees, or has none on so much of the basin."""
    parts = []
    for name, other, lost in (
        ("on our directions", opinion.same_directions_km2, 0.0),
        ("by its own conditioning", opinion.own_conditioning_km2, opinion.lost_km2),
    ):
        off = other / area_km2 - 1.0
        if max(off, -off - lost / area_km2) > DIFFERS_OVER:
            parts.append(f"pysheds {name} {other:.4g} km2, {off:+.1%}")
    if parts and opinion.differs_km2 > 0:
        causes = ", ".join(f"{name} {km2:.3g}" for name, km2 in opinion.causes_km2.items())
        parts.append(f"{opinion.differs_km2:.4g} km2 belong to one basin only (by cause, km2: {causes})")
    if parts and opinion.lost_km2 > 0:
        parts.append(f"its flats left {opinion.lost_km2:.4g} km2 undrained")
    return "; ".join(parts)


def _clips(half: TerrainHalf, basins: Basins, chosen: np.ndarray) -> list[Clip]:
    """Cut out each basin with a margin, voids outside the raster."""
    terrain, grid = half.routed(), half.grid
    elevation, directions = half.elevation.array("elevation_m"), terrain.directions_grid
    conditioned = terrain.grid(terrain.conditioned_m)
    boxes = _boxes(terrain.grid(basins.label), basins)
    clips = []
    for i in chosen.tolist():
        label = int(basins.outlet_label[i])
        top, left, bottom, right = boxes[label].tolist()
        rows = slice(max(top - MARGIN_CELLS, 0), min(bottom + MARGIN_CELLS, grid.nrows - 1) + 1)
        cols = slice(max(left - MARGIN_CELLS, 0), min(right + MARGIN_CELLS, grid.ncols - 1) + 1)
        row, col = (int(values[0]) for values in terrain.rows_cols(basins.label_cell[label : label + 1]))
        middle = (rows.start + rows.stop) // 2
        clips.append(
            Clip(
                np.array(elevation[rows, cols]),
                np.array(conditioned[rows, cols]),
                np.array(directions[rows, cols]),
                np.array(grid.cell_area_m2[rows]),
                (float(grid.dx_m[middle]), float(grid.dy_m[middle])),
                (row - rows.start, col - cols.start),
            )
        )
    return clips


def _boxes(label: np.ndarray, basins: Basins) -> np.ndarray:
    """Return the first and last row and column of each whole basin, shape (labels, 4)."""
    from scipy.ndimage import find_objects

    boxes = np.array(
        [
            (rows.start, cols.start, rows.stop - 1, cols.stop - 1)
            for rows, cols in find_objects(label + 1, max_label=basins.n_labels)
        ]
    )
    for here in basins.upstream_first.tolist():
        if (below := int(basins.parent[here])) >= 0:
            boxes[below, :2] = np.minimum(boxes[below, :2], boxes[here, :2])
            boxes[below, 2:] = np.maximum(boxes[below, 2:], boxes[here, 2:])
    return boxes
