"""Labels of many nested outlets."""

from __future__ import annotations

import numpy as np
from harness import Row, best_of, terrain
from rows_terrain import CELL_M

OUTLETS = 10_000
CHANNEL_CELLS = 2_500  # contributing cells at which outlets may lie: 0.25 km2

ROWS = [
    Row(
        name="labels-10000",
        work="labels of 10,000 nested outlets from existing directions and their order, {cells} cells of rough terrain",
        unit="s",
        ours="ours",
        peer="pyflwdir",
        peer_name="pyflwdir 0.5.12: basins",
        target=1,
        goal="ratio",
    ),
]


def _terrain_and_outlets(cells: int):  # type: ignore[no-untyped-def]
    from basinwright.terrain import condition_and_route

    elevation = terrain("rough", cells)
    size = np.full(elevation.shape[0], CELL_M)
    routed = condition_and_route(elevation, size, size, size * size)
    channel = np.flatnonzero(routed.area_m2 >= CHANNEL_CELLS * CELL_M**2).astype(np.int32)
    return routed, np.random.default_rng(0).choice(channel, OUTLETS, replace=False)


def ours(cells: int) -> float:
    """Seconds of the labels; flow distances and the forest of outlets come with them."""
    from basinwright.kernels.labels import label_cells

    routed, outlets = _terrain_and_outlets(cells)
    label, distance = np.empty(routed.directions.size, np.int32), np.empty(routed.directions.size, np.int64)
    parent, parent_distance = np.empty(OUTLETS, np.int32), np.empty(OUTLETS, np.int64)

    def work() -> None:
        label_cells(
            routed.directions, routed.order, routed.ncols, routed.step_um, outlets,
            label, distance, parent, parent_distance,
        )  # fmt: skip

    work()
    return best_of(work)


def pyflwdir(cells: int) -> float:
    """Seconds of `basins`, its order of cells already there."""
    import pyflwdir as library

    routed, outlets = _terrain_and_outlets(cells)
    d8 = np.array([64, 128, 1, 2, 4, 8, 16, 32, 0, 247], np.uint8)[routed.directions_grid]
    flow = library.from_array(d8, ftype="d8", check_ftype=False, latlon=False)
    rows, cols = routed.rows_cols(outlets)
    index = rows * routed.ncols + cols
    flow.basins(idxs=index)
    return best_of(lambda: flow.basins(idxs=index))
