"""Interior voids: small ones are bridged by interpolation."""

from __future__ import annotations

import numpy as np


def fill_small_voids(
    elevation_m: np.ndarray, dx_m: np.ndarray, dy_m: np.ndarray, cell_area_m2: np.ndarray, largest_m2: float
) -> dict[str, int]:
    """Interpolate voids inside the terrain up to a size, in place.

    A void becomes a membrane stretched between the cells around it: each of its cells is the mean of its four
    neighbours, weighted by the inverse square of their distance (Laplace's equation by finite differences). A plane is
    continued exactly, and the membrane has neither pits nor peaks of its own.

    Parameters
    ----------
    elevation_m : float array, shape (nrows, ncols) [m]
        NaN in voids.
    dx_m, dy_m : arrays, shape (nrows,) [m]
    cell_area_m2 : array, shape (nrows,) [m2]
    largest_m2 : float [m2]
        Voids of more than this area stay, and those at the raster's rim. Cells that touch at a corner are one void.

    Returns
    -------
    dict of str to int
        ``voids_filled``, ``void_cells_filled`` and ``voids_left`` (inside the terrain).
    """
    from scipy.ndimage import find_objects, label

    facts = {"voids_filled": 0, "void_cells_filled": 0, "voids_left": 0}
    if not any(np.isnan(row).any() for row in elevation_m):
        return facts
    void = np.isnan(elevation_m)
    number, count = label(void, structure=np.ones((3, 3)))
    area = np.bincount(number.ravel(), np.broadcast_to(cell_area_m2[:, None], void.shape).ravel(), count + 1)
    at_rim = np.unique(np.concatenate([number[0], number[-1], number[:, 0], number[:, -1]]))
    inner = np.setdiff1d(np.arange(1, count + 1), at_rim)
    small = inner[area[inner] <= largest_m2]
    facts["voids_left"] = int(inner.size - small.size)
    if small.size == 0:
        return facts
    places = find_objects(number)
    for void_number in small.tolist():
        rows, cols = places[void_number - 1]
        window = (slice(rows.start - 1, rows.stop + 1), slice(cols.start - 1, cols.stop + 1))
        mask = number[window] == void_number
        elevation_m[window][mask] = _membrane(elevation_m[window], mask, dx_m[window[0]], dy_m[window[0]])
        facts["void_cells_filled"] += int(mask.sum())
    facts["voids_filled"] = int(small.size)
    return facts


def _membrane(around_m: np.ndarray, mask: np.ndarray, dx_m: np.ndarray, dy_m: np.ndarray) -> np.ndarray:
    """Elevations of the cells of a void, in memory order, from those around it."""
    from scipy.sparse import csr_array
    from scipy.sparse.linalg import spsolve

    rows, cols = np.nonzero(mask)
    place = np.full(mask.shape, -1)
    place[rows, cols] = np.arange(rows.size)
    here = np.arange(rows.size)
    total, known = np.zeros(rows.size), np.zeros(rows.size)
    entries: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []
    for drow, dcol, distance_m in ((-1, 0, dy_m), (1, 0, dy_m), (0, -1, dx_m), (0, 1, dx_m)):
        weight = 1.0 / distance_m[rows] ** 2
        beside = place[rows + drow, cols + dcol]
        free = beside >= 0
        total += weight
        known += np.where(free, 0.0, weight * around_m[rows + drow, cols + dcol].astype(np.float64))
        entries.append((here[free], beside[free], -weight[free]))
    entries.append((here, here, total))
    i, j, value = (np.concatenate(parts) for parts in zip(*entries, strict=True))
    return np.atleast_1d(spsolve(csr_array((value, (i, j)), shape=(rows.size, rows.size)).tocsc(), known))
