"""Flow directions from elsewhere, in the publisher's codes, instead of our own."""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import numpy as np

from basinwright.kernels import EXIT, SINK, VOID
from basinwright.terrain.routing import Terrain, measure_conditioning, pad, route, sizes_by_row, step_lengths_um
from basinwright.terrain.summable import summable_areas_m2


class Fault(NamedTuple):
    """What is wrong with given directions: how many cells, and the first of them."""

    what: str
    fix: str
    cells: int
    row: int
    col: int


def given_terrain(
    elevation_m: np.ndarray,
    dx_m: np.ndarray,
    dy_m: np.ndarray,
    cell_area_m2: np.ndarray,
    given: np.ma.MaskedArray,
    codes: Mapping[float, int | str],
) -> tuple[Terrain | None, list[Fault]]:
    """Route a terrain by directions that somebody else published; elevations stay as they are.

    Water of a cell whose direction leads off the raster or into a void leaves there. A cell with elevation but no
    direction is a void where such cells reach the raster's rim or a void of the terrain, else a fault.

    Parameters
    ----------
    elevation_m : float array, shape (nrows, ncols) [m]
        NaN in voids.
    dx_m, dy_m, cell_area_m2 : arrays, shape (nrows,)
    given : masked array, shape (nrows, ncols)
        The publisher's codes.
    codes : mapping of number to azimuth [degrees], "exit" or "sink"

    Returns
    -------
    terrain : Terrain or None
        None where there is a fault.
    faults : list of Fault
        Codes that are not in the table, cells without direction, loops.
    """
    from basinwright.kernels import hydrography as kernel

    nrows, ncols = elevation_m.shape
    dx, dy, cell_area = sizes_by_row(nrows, ncols, dx_m, dy_m, cell_area_m2)
    void = ~np.isfinite(elevation_m)
    own, faults = _own_codes(given, codes, void)
    if faults:
        return None, faults
    z, largest_rounding = pad(elevation_m)
    directions = np.full((nrows + 2, ncols + 2), VOID, np.uint8)
    directions[1:-1, 1:-1] = own
    directions = directions.reshape(-1)
    z[directions == VOID] = np.inf
    kernel.send_off(directions, nrows, ncols)
    row_area = summable_areas_m2(cell_area, ncols)
    area, order = route(directions, nrows, ncols, row_area)
    data_cells = int(np.count_nonzero(directions != VOID))
    if order.size != data_cells:
        loops = kernel.find_loops(directions, ncols, order)
        row, col = divmod(int(loops[0]), ncols + 2)
        what = f"directions go round in {loops.size} loop{'s' if loops.size > 1 else ''}"
        return None, [Fault(what, "mend the raster, or let directions be computed", loops.size, row - 1, col - 1)]
    terrain = Terrain(
        nrows=nrows,
        ncols=ncols,
        conditioned_m=z,
        directions=directions,
        area_m2=area,
        order=order,
        row_area_m2=row_area,
        step_um=step_lengths_um(dx, dy),
        data_cells=data_cells,
        flat_cells=0,
        largest_rounding_m=largest_rounding,
        **measure_conditioning(elevation_m, z, row_area),
    )
    return terrain, []


def _own_codes(
    given: np.ma.MaskedArray, codes: Mapping[float, int | str], void: np.ndarray
) -> tuple[np.ndarray, list[Fault]]:
    """Direction codes of ours, VOID where there are none, and what is wrong with the given ones."""
    from scipy.ndimage import binary_dilation, label

    values, absent = np.ma.getdata(given), np.ma.getmaskarray(given)
    eight = np.ones((3, 3))
    own = np.full(values.shape, VOID, np.uint8)
    known = np.zeros(values.shape, bool)
    for code, meaning in codes.items():
        here = values == code
        known |= here
        own[here] = {"exit": EXIT, "sink": SINK}[meaning] if isinstance(meaning, str) else meaning // 45
    faults = []
    unknown = ~known & ~absent & ~void
    if unknown.any():
        listed = ", ".join(f"{value:g}" for value in np.unique(values[unknown])[:5])
        fix = "add them to terrain.flow_direction_codes, or declare the raster's nodata value"
        faults.append(_fault(f"codes that terrain.flow_direction_codes does not list ({listed})", fix, unknown))
    own[void | absent] = VOID
    number, _ = label(absent & ~void, structure=eight)
    outside = np.pad(void, 1, constant_values=True)
    beside = np.unique(number[binary_dilation(outside, structure=eight)[1:-1, 1:-1]])
    inner = (number > 0) & ~np.isin(number, beside)
    if inner.any():
        fix = 'give them a direction, "exit" or "sink", or make them void in the DEM'
        faults.append(_fault("cells inside the terrain without a direction", fix, inner))
    return own, faults


def _fault(what: str, fix: str, where: np.ndarray) -> Fault:
    row, col = divmod(int(np.argmax(where)), where.shape[1])
    return Fault(what, fix, int(where.sum()), row, col)
