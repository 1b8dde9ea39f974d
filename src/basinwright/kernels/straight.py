"""Paths on a grid cut into straight pieces, and the distance along them."""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels.geometry import row_of


@njit(cache=True, nogil=True)
def straight_piece(codes: np.ndarray, start: int) -> int:
    """Where the longest straight piece of a chain of steps that begins at one of them ends.

    A piece is straight where its cells are those that some straight line runs through, one in each column (or row) that
    it crosses: they lie between two parallel lines less than one cell apart. Points are added one by one, in constant
    time each, after Debled-Rennesson & Reveillès (1995): the slope a/b and offset mu of the lines and their first and
    last touching points are kept.

    Parameters
    ----------
    codes : uint8 array, shape (steps,)
        Directions 0 to 7.
    start : int
        First step of the piece.

    Returns
    -------
    int
        The step after its last one.
    """
    first = int(codes[start])
    other = first
    # In the octant of the two directions: the even one is a step along x, the odd one a step along the diagonal.
    y = 0
    a, b, mu = first % 2, 1, 0
    upper_first_x, upper_first_y, upper_x, upper_y = 0, 0, 0, 0
    lower_first_x, lower_first_y, lower_x, lower_y = 0, 0, 0, 0
    for j in range(start, codes.size):
        code = int(codes[j])
        if code != first and code != other:
            apart = (code - first) % 8
            if other != first or (apart != 1 and apart != 7):
                return j
            other = code
        x = j - start + 1
        y += code % 2
        r = a * x - b * y
        if r < mu - 1 or r > mu + b:
            return j
        if r == mu - 1:  # above: the slope grows
            lower_first_x, lower_first_y = lower_x, lower_y
            upper_x, upper_y = x, y
            a, b = y - upper_first_y, x - upper_first_x
            mu = a * x - b * y
        elif r == mu + b:  # below: it falls
            upper_first_x, upper_first_y = upper_x, upper_y
            lower_x, lower_y = x, y
            a, b = y - lower_first_y, x - lower_first_x
            mu = a * x - b * y - b + 1
        else:
            if r == mu:
                upper_x, upper_y = x, y
            if r == mu + b - 1:
                lower_x, lower_y = x, y
    return codes.size


@njit(cache=True, nogil=True)
def straight_distances(
    bounds: np.ndarray, cells: np.ndarray, directions: np.ndarray, ncols: int, step_um: np.ndarray
) -> np.ndarray:
    """Distance along every path, each of its straight pieces as long as the line from its first to its last cell.

    Pieces are taken from the beginning of a path down, each as long as it can be; the next begins where it ends.
    Within a piece distances are shared out like those of its steps.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    cells : int32 array, shape (path cells,)
        Neighbours along the flow.
    directions : uint8 array, shape (cells,)
    ncols : int
    step_um : int64 array, shape (nrows, 8) [micrometres]

    Returns
    -------
    float64 array, shape (path cells,) [m]
        From the first cell of the path.
    """
    per_stride = 1.0 / (ncols + 2)
    east = np.array((0, 1, 1, 1, 0, -1, -1, -1), np.int64)
    south = np.array((-1, -1, 0, 1, 1, 1, 0, -1), np.int64)
    distance_m = np.empty(cells.size)
    for i in range(bounds.size - 1):
        a, b = bounds[i], bounds[i + 1]
        if b == a:
            continue
        codes = directions[cells[a : b - 1]]
        away_um = 0.0
        start = 0
        distance_m[a] = 0.0
        while start < codes.size:
            end = straight_piece(codes, start)
            raw_um, east_um, south_um = np.int64(0), np.int64(0), np.int64(0)
            one_way = True
            for j in range(start, end):
                row, code = row_of(cells[a + j], per_stride), codes[j]
                raw_um += step_um[row, code]
                east_um += east[code] * step_um[row, 2]
                south_um += south[code] * step_um[row, 4]
                one_way &= code == codes[start]
            share = 1.0
            if not one_way:
                share = np.sqrt(float(east_um) ** 2 + float(south_um) ** 2) / raw_um
            so_far_um = np.int64(0)
            for j in range(start, end):
                so_far_um += step_um[row_of(cells[a + j], per_stride), codes[j]]
                distance_m[a + j + 1] = (away_um + share * so_far_um) / 1e6
            away_um += share * so_far_um
            start = end
    return distance_m


@njit(cache=True, nogil=True)
def falling(bounds: np.ndarray, distance_m: np.ndarray, elevation_m: np.ndarray) -> np.ndarray:
    """The profile of every path that never rises and lies nearest to the given one.

    Nearest in least squares, each cell weighted with the length of path that it owns: where the profile rises, the
    neighbours that it takes are levelled at their mean (isotonic regression by pooling adjacent violators; Ayer and
    others 1955). A profile that falls as it is stays as it is, to the last bit.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m, elevation_m : float64 arrays, shape (path cells,) [m]

    Returns
    -------
    float64 array, shape (path cells,) [m]
    """
    result = elevation_m.copy()
    pool_m = np.empty(elevation_m.size)
    weight = np.empty(elevation_m.size)
    first = np.empty(elevation_m.size, np.int64)
    for i in range(bounds.size - 1):
        a, b = bounds[i], bounds[i + 1]
        count = 0
        for j in range(a, b):
            above = distance_m[max(j - 1, a)]
            below = distance_m[min(j + 1, b - 1)]
            pool_m[count], weight[count], first[count] = elevation_m[j], 0.5 * (below - above), j
            count += 1
            while count > 1 and pool_m[count - 1] > pool_m[count - 2]:
                total = weight[count - 2] + weight[count - 1]
                share = weight[count - 1] / total
                pool_m[count - 2] += share * (pool_m[count - 1] - pool_m[count - 2])
                weight[count - 2] = total
                count -= 1
        for k in range(count):
            end = first[k + 1] if k + 1 < count else b
            for j in range(first[k], end):
                result[j] = pool_m[k]
    return result
