"""The reach below each outlet: the flow path from it to the next outlet downstream."""

from __future__ import annotations

import numpy as np

from basinwright.basins import Basins
from basinwright.paths.tracing import LengthCorrection, along
from basinwright.terrain import Terrain


def reach_measures(
    terrain: Terrain, basins: Basins, length_correction: LengthCorrection = "none"
) -> dict[str, np.ndarray]:
    """Length, fall and contributing area of the reach from every outlet to the next downstream.

    Parameters
    ----------
    terrain : Terrain
    basins : Basins
    length_correction : {"none", "straight"}
        See `basinwright.paths.tracing.along`.

    Returns
    -------
    dict of arrays, shape (n,)
        ``reach_length_m``; ``reach_fall_m``, on the conditioned terrain; ``reach_area_km2``, contributing area at the
        last cell in the upper half of the reach. NaN for an outlet with none downstream.
    """
    from basinwright.kernels.trace import trace_paths

    n = basins.n_labels
    measures = {name: np.full(n, np.nan) for name in ("reach_length_m", "reach_fall_m", "reach_area_km2")}
    joined = np.flatnonzero(basins.parent >= 0)
    if joined.size:
        starts, ends = basins.label_cell[joined], basins.label_cell[basins.parent[joined]]
        bounds, cells = trace_paths(terrain.directions, terrain.ncols, starts, ends)
        distance_m, _, elevation_m, area_km2 = along(terrain, bounds, cells, length_correction)
        first, last = bounds[:-1], bounds[1:] - 1
        length = distance_m[last]
        in_upper_half = distance_m <= np.repeat(0.5 * length, np.diff(bounds))
        middle = first + np.add.reduceat(in_upper_half, first) - 1
        measures["reach_length_m"][joined] = length
        measures["reach_fall_m"][joined] = elevation_m[first] - elevation_m[last]
        measures["reach_area_km2"][joined] = area_km2[middle]
    return {name: basins.by_outlet(values) for name, values in measures.items()}
