"""Flow paths as compressed rows: profile, cutting into segments, lines.

Path i of a set lies in ``[bounds[i], bounds[i + 1])`` of every array per path cell, from the divide down. Along a
path, each cell owns the stretch from midway to the cell above it to midway to the cell below it.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT
from basinwright.kernels.geometry import row_of

SHEET, SHALLOW, CHANNEL, OPEN_WATER = range(4)
"""Flow regimes, in the order of `basinwright.tables.REGIMES`."""

_BY_REGIME, _BY_COVER, _BY_TRIBUTARY = range(3)
"""Why a piece begins where it does."""


@njit(cache=True, nogil=True)
def profile(
    bounds: np.ndarray, cells: np.ndarray, directions: np.ndarray, ncols: int, step_um: np.ndarray,
    conditioned_m: np.ndarray, area_m2: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:  # fmt: skip
    """Distance, elevation and contributing area of every path cell.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    cells : int32 array, shape (path cells,)
    directions : uint8 array, shape (cells,)
    ncols : int
    step_um : int64 array, shape (nrows, 8) [micrometres]
    conditioned_m : float32 array, shape (cells,) [m]
    area_m2 : float64 array, shape (cells,) [m2]

    Returns
    -------
    distance_m, elevation_m, area_km2 : float64 arrays, shape (path cells,)
        The distance is from the first cell of the path: whole micrometres are added, so that it does not
        depend on how far the path goes on.
    """
    per_stride = 1.0 / (ncols + 2)
    distance_m = np.empty(cells.size)
    elevation_m = np.empty(cells.size)
    area_km2 = np.empty(cells.size)
    for i in range(bounds.size - 1):
        away_um = np.int64(0)
        for j in range(bounds[i], bounds[i + 1]):
            c = cells[j]
            distance_m[j] = away_um / 1e6
            elevation_m[j] = conditioned_m[c]
            area_km2[j] = area_m2[c] / 1e6
            code = directions[c]
            if code < EXIT:
                away_um += step_um[row_of(c, per_stride), code]
    return distance_m, elevation_m, area_km2


@njit(cache=True, nogil=True)
def interpolate(bounds: np.ndarray, distance_m: np.ndarray, values: np.ndarray, at_m: np.ndarray) -> np.ndarray:
    """Value of every path at one distance from its divide, linear between cell centres.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m, values : float64 arrays, shape (path cells,)
    at_m : float64 array, shape (n,) [m]
        Within the path.

    Returns
    -------
    float64 array, shape (n,)
        NaN for an empty path.
    """
    found = np.full(bounds.size - 1, np.nan)
    for i in range(bounds.size - 1):
        a, b = bounds[i], bounds[i + 1]
        if b > a:
            found[i] = _value_at(distance_m[a:b], values[a:b], at_m[i])
    return found


@njit(cache=True, nogil=True)
def _cell_above(distance_m: np.ndarray, at_m: float) -> int:
    """Last cell of a path that lies at or above a distance from the divide; the first cell for a smaller one."""
    low, high = 0, distance_m.size - 1
    while low < high:
        middle = (low + high + 1) // 2
        if distance_m[middle] <= at_m:
            low = middle
        else:
            high = middle - 1
    return low


@njit(cache=True, nogil=True)
def _value_at(distance_m: np.ndarray, values: np.ndarray, at_m: float) -> float:
    """Value at a distance, linear between cell centres."""
    j = _cell_above(distance_m, at_m)
    if distance_m[j] == at_m or j + 1 == distance_m.size:
        return values[j]
    share = (at_m - distance_m[j]) / (distance_m[j + 1] - distance_m[j])
    return values[j] + share * (values[j + 1] - values[j])


@njit(cache=True, nogil=True)
def _longest(bounds: np.ndarray) -> int:
    """Cells of the longest path."""
    most = 0
    for i in range(bounds.size - 1):
        most = max(most, bounds[i + 1] - bounds[i])
    return most


@njit(cache=True, nogil=True)
def nearest_on_path(
    bounds: np.ndarray, cells: np.ndarray, ncols: int, distance_m: np.ndarray, dx_m: np.ndarray, dy_m: np.ndarray,
    row: np.ndarray, col: np.ndarray,
) -> np.ndarray:  # fmt: skip
    """Distance from the divide of the point of each path that is nearest to a given point.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    cells : int32 array, shape (path cells,)
    ncols : int
    distance_m : float64 array, shape (path cells,) [m]
    dx_m, dy_m : float64 arrays, shape (n,) [m]
        Cell size with which nearness is measured, one per path.
    row, col : float64 arrays, shape (n,)
        The point for each path, in cells from the centre of the raster's upper left cell.

    Returns
    -------
    float64 array, shape (n,) [m]
        Of equally near points the one farthest upstream; NaN for an empty path.
    """
    stride = ncols + 2
    per_stride = 1.0 / stride
    found = np.full(bounds.size - 1, np.nan)
    for i in range(bounds.size - 1):
        nearest = np.inf
        ax, ay = 0.0, 0.0
        for j in range(bounds[i], bounds[i + 1]):
            r = row_of(cells[j], per_stride)
            bx = (cells[j] - (r + 1) * stride - 1 - col[i]) * dx_m[i]
            by = (r - row[i]) * dy_m[i]
            share = 1.0
            if j == bounds[i]:
                ax, ay = bx, by
            else:
                ux, uy = bx - ax, by - ay
                share = min(max(-(ax * ux + ay * uy) / (ux * ux + uy * uy), 0.0), 1.0)
                ax, ay = ax + share * ux, ay + share * uy
            apart = ax * ax + ay * ay
            if apart < nearest:
                nearest = apart
                above = max(j - 1, bounds[i])
                found[i] = distance_m[above] + share * (distance_m[j] - distance_m[above])
            ax, ay = bx, by
    return found


@njit(cache=True, nogil=True)
def nearest_valid(bounds: np.ndarray, distance_m: np.ndarray, valid: np.ndarray) -> np.ndarray:
    """For every path cell, the nearest cell along its path that is valid; ties upstream.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m : float64 array, shape (path cells,) [m]
    valid : bool array, shape (path cells,)

    Returns
    -------
    int64 array, shape (path cells,)
        Positions in the arrays; the cell's own where it is valid, -1 where no cell of its path is.
    """
    nearest = np.full(valid.size, -1, np.int64)
    for i in range(bounds.size - 1):
        last = -1
        for j in range(bounds[i], bounds[i + 1]):
            if valid[j]:
                last = j
            nearest[j] = last
        last = -1
        for j in range(bounds[i + 1] - 1, bounds[i] - 1, -1):
            if valid[j]:
                last = j
            up = nearest[j]
            if last >= 0 and (up < 0 or distance_m[last] - distance_m[j] < distance_m[j] - distance_m[up]):
                nearest[j] = last
    return nearest


@njit(cache=True, nogil=True)
def _midway(distance_m: np.ndarray, j: int) -> float:
    """Where cell j of a path begins: midway to the cell above it; for the cell count, where the path ends."""
    if j == 0:
        return distance_m[0]
    if j == distance_m.size:
        return distance_m[-1]
    return 0.5 * (distance_m[j - 1] + distance_m[j])


@njit(cache=True, nogil=True)
def flat_water(
    bounds: np.ndarray, distance_m: np.ndarray, elevation_m: np.ndarray, water: np.ndarray, slope_floor: float,
    least_length_m: float,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:  # fmt: skip
    """Stretches of the paths that lie in water and are flat.

    In every run of water cells the longest stretch is taken over which the profile falls by less than
    ``slope_floor`` times its length, between cell centres; what is left of the run on either side is searched in the
    same way.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m, elevation_m : float64 arrays, shape (path cells,) [m]
    water : bool array, shape (path cells,)
    slope_floor : float
    least_length_m : float [m]
        Shorter stretches are not taken.

    Returns
    -------
    path : int64 array, shape (stretches,)
    first, last : int64 arrays, shape (stretches,)
        Positions in the arrays of the first and last cell, in downstream order within each path.
    """
    most = _longest(bounds)
    fall = np.empty(most)
    low = np.empty(most + 1, np.int64)
    todo = np.empty((most + 1, 2), np.int64)
    path = np.empty(water.size // 2 + 1, np.int64)
    first = np.empty(water.size // 2 + 1, np.int64)
    last = np.empty(water.size // 2 + 1, np.int64)
    found = 0
    for i in range(bounds.size - 1):
        a, n = bounds[i], bounds[i + 1] - bounds[i]
        d, z = distance_m[a : a + n], elevation_m[a : a + n]
        for j in range(n):
            fall[j] = z[j] + slope_floor * d[j]  # rises over any stretch that is flat enough
        pending = 0
        j = n - 1
        while j >= 0:  # runs of water, the lowest on the path first: the stack below turns the order round
            if water[a + j]:
                end = j
                while j > 0 and water[a + j - 1]:
                    j -= 1
                todo[pending, 0], todo[pending, 1] = j, end
                pending += 1
            j -= 1
        while pending:
            pending -= 1
            start, end = todo[pending, 0], todo[pending, 1]
            if start < 0:  # a stretch already found, its turn in downstream order
                path[found], first[found], last[found] = i, a - start - 1, a + end
                found += 1
                continue
            u, v = _longest_rise(d, fall, start, end, low)
            if v <= u or _midway(d, v + 1) - _midway(d, u) < least_length_m:
                continue
            for left, right in ((v + 1, end), (-u - 1, v), (start, u - 1)):
                if left <= right:
                    todo[pending, 0], todo[pending, 1] = left, right
                    pending += 1
    return path[:found], first[:found], last[:found]


@njit(cache=True, nogil=True)
def _longest_rise(d: np.ndarray, value: np.ndarray, start: int, end: int, low: np.ndarray) -> tuple[int, int]:
    """Longest pair u < v within [start, end] with value[u] < value[v]; u == v where there is none."""
    count = 0
    for j in range(start, end + 1):
        if count == 0 or value[j] < value[low[count - 1]]:
            low[count] = j
            count += 1
    best_u, best_v = start, start
    for v in range(end, start, -1):
        while count and value[low[count - 1]] < value[v]:
            u = low[count - 1]
            count -= 1
            if u < v and d[v] - d[u] > d[best_v] - d[best_u]:
                best_u, best_v = u, v
    return best_u, best_v


@njit(cache=True, nogil=True)
def wide_water(
    bounds: np.ndarray, cells: np.ndarray, path: np.ndarray, first: np.ndarray, last: np.ndarray, ncols: int,
    dx_m: np.ndarray, dy_m: np.ndarray, classes: np.ndarray, is_water: np.ndarray, wide_m: np.ndarray,
) -> np.ndarray:  # fmt: skip
    """Whether the water along stretches of paths is wide: most transects across them exceed a width.

    A transect stands at every cell, square to the line from three cells above it to three below, and is
    sampled every quarter of a cell until it leaves the water.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    cells : int32 array, shape (path cells,)
    path, first, last : int64 arrays, shape (stretches,)
        As `flat_water` gives them.
    ncols : int
    dx_m, dy_m : float64 arrays, shape (nrows,) [m]
    classes : int array, shape (nrows, ncols)
        Class of every cell; negative for none.
    is_water : bool array, shape (classes,)
    wide_m : float64 array, shape (stretches,) [m]
        The width.

    Returns
    -------
    bool array, shape (stretches,)
    """
    stride = ncols + 2
    per_stride = 1.0 / stride
    wide = np.zeros(path.size, np.bool_)
    for s in range(path.size):
        a, b = bounds[path[s]], bounds[path[s] + 1]
        wider = 0
        for j in range(first[s], last[s] + 1):
            row = row_of(cells[j], per_stride)
            col = cells[j] - (row + 1) * stride - 1
            up, down = cells[max(j - 3, a)], cells[min(j + 3, b - 1)]
            up_row, down_row = row_of(up, per_stride), row_of(down, per_stride)
            south = (down_row - up_row) * dy_m[row]
            east = ((down - down_row * stride) - (up - up_row * stride)) * dx_m[row]
            along = np.sqrt(east * east + south * south)
            step = 0.25 * min(dx_m[row], dy_m[row])
            per_col, per_row = -south / along * step / dx_m[row], east / along * step / dy_m[row]
            samples = 1
            for side in (-1.0, 1.0):
                k = 1
                while k * step <= wide_m[s]:
                    r = int(np.floor(row + 0.5 + side * k * per_row))
                    c = int(np.floor(col + 0.5 + side * k * per_col))
                    if r < 0 or r >= dx_m.size or c < 0 or c >= ncols:
                        break
                    if classes[r, c] < 0 or not is_water[classes[r, c]]:
                        break
                    samples += 1
                    k += 1
            wider += samples * step > wide_m[s]
        wide[s] = 2 * wider > last[s] - first[s] + 1
    return wide


@njit(cache=True, nogil=True)
def regime_starts(
    bounds: np.ndarray, distance_m: np.ndarray, area_km2: np.ndarray, stream_area_km2: float, path: np.ndarray,
    first: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Where the channel begins on each path, and where sheet flow must have ended.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m, area_km2 : float64 arrays, shape (path cells,)
    stream_area_km2 : float [km2]
    path, first : int64 arrays, shape (stretches,)
        Open water, in downstream order within each path.

    Returns
    -------
    channel : int64 array, shape (n,)
        Position of the first cell with the stream area; ``bounds[i + 1]`` where there is none.
    sheet_end_m : float64 array, shape (n,) [m]
        Start of channel or open water, or the path's length; 0 for an empty path.
    """
    n = bounds.size - 1
    channel = bounds[1:].copy()
    sheet_end_m = np.zeros(n)
    for i in range(n):
        a, b = bounds[i], bounds[i + 1]
        if b == a:
            continue
        sheet_end_m[i] = distance_m[b - 1]
        for j in range(a, b):
            if area_km2[j] >= stream_area_km2:
                channel[i] = j
                sheet_end_m[i] = distance_m[j]
                break
    for s in range(path.size):
        i = path[s]
        a, b = bounds[i], bounds[i + 1]
        sheet_end_m[i] = min(sheet_end_m[i], _midway(distance_m[a:b], first[s] - a))
    return channel, sheet_end_m


@njit(cache=True, nogil=True)
def sheet_reach(
    bounds: np.ndarray, distance_m: np.ndarray, elevation_m: np.ndarray, roughness: np.ndarray,
    length_m: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Slope and length-weighted roughness of the first stretch of each path.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m, elevation_m, roughness : float64 arrays, shape (path cells,)
    length_m : float64 array, shape (n,) [m]
        Length of the stretch.

    Returns
    -------
    slope, roughness : float64 arrays, shape (n,)
        NaN where the length is 0.
    """
    n = bounds.size - 1
    slope = np.full(n, np.nan)
    mean = np.full(n, np.nan)
    for i in range(n):
        length = length_m[i]
        if not length > 0.0:
            continue
        a, b = bounds[i], bounds[i + 1]
        d = distance_m[a:b]
        slope[i] = (elevation_m[a] - _value_at(d, elevation_m[a:b], length)) / length
        total = 0.0
        begin = 0.0
        for j in range(d.size):
            end = min(_midway(d, j + 1), length)
            total += roughness[a + j] * (end - begin)
            begin = end
            if end >= length:
                break
        mean[i] = total / length
    return slope, mean


@njit(cache=True, nogil=True)
def cut(
    bounds: np.ndarray, distance_m: np.ndarray, area_km2: np.ndarray, cover: np.ndarray, n_classes: int,
    sheet_m: np.ndarray, channel: np.ndarray, water_bounds: np.ndarray, water_first: np.ndarray,
    water_last: np.ndarray, least_tributary_km2: float, least_length_m: float,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Cut paths into segments.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m, area_km2 : float64 arrays, shape (path cells,)
    cover : int32 array, shape (path cells,)
        Cover class, 0 to n_classes - 1.
    n_classes : int
    sheet_m : float64 array, shape (n,) [m]
        Length of sheet flow.
    channel : int64 array, shape (n,)
        Position of the first channel cell, as `regime_starts` gives it.
    water_bounds : int64 array, shape (n + 1,)
        Open water of path i is ``[water_bounds[i], water_bounds[i + 1])`` of the next two.
    water_first, water_last : int64 arrays, shape (stretches,)
        Positions of the first and last cell, in downstream order.
    least_tributary_km2 : float [km2]
        In shallow flow, smaller tributaries do not cut.
    least_length_m : float [m]
        Shorter pieces join a neighbour of the same regime.

    Returns
    -------
    segment_bounds : int64 array, shape (n + 1,)
    segments : float64 array, shape (segments, 3)
        Where each ends [m]; its regime; its class of most length. A segment begins where the one before it
        ends, the first of a path at 0.
    """
    n = bounds.size - 1
    most = 2 * _longest(bounds) + 2
    to_m = np.empty(most)
    regime = np.empty(most, np.uint8)
    cause = np.empty(most, np.uint8)
    main = np.empty(most, np.int32)
    weight = np.zeros(n_classes)
    segment_bounds = np.zeros(n + 1, np.int64)
    segments = np.empty((8 * n + 1, 3))
    end = 0
    for i in range(n):
        a, b = bounds[i], bounds[i + 1]
        if b - a >= 2:
            d = distance_m[a:b]
            w = slice(water_bounds[i], water_bounds[i + 1])
            count = _pieces(
                d, area_km2[a:b], cover[a:b], sheet_m[i], channel[i] - a, water_first[w] - a, water_last[w] - a,
                least_tributary_km2, to_m, regime, cause,
            )  # fmt: skip
            count = _join_short(count, least_length_m, to_m, regime, cause)
            _main_cover(d, cover[a:b], count, to_m, weight, main)
            count = _join_alike(count, to_m, regime, cause, main)
            if end + count > len(segments):
                segments = _enlarged(segments, end, 2 * (end + count))
            for s in range(count):
                segments[end + s, 0], segments[end + s, 1], segments[end + s, 2] = to_m[s], regime[s], main[s]
            end += count
        segment_bounds[i + 1] = end
    return segment_bounds, segments[:end]


@njit(cache=True, nogil=True)
def _enlarged(rows: np.ndarray, used: int, size: int) -> np.ndarray:
    """Copy of the rows in use, with room for more."""
    larger = np.empty((size, 3))
    for j in range(used):
        for k in range(3):
            larger[j, k] = rows[j, k]
    return larger


@njit(cache=True, nogil=True)
def _pieces(
    d: np.ndarray, area_km2: np.ndarray, cover: np.ndarray, sheet_m: float, channel: int,
    water_first: np.ndarray, water_last: np.ndarray, least_tributary_km2: float, to_m: np.ndarray,
    regime: np.ndarray, cause: np.ndarray,
) -> int:  # fmt: skip
    """Pieces of one path before short ones are joined; returns how many.

    The path is walked in half cells, from a cell's beginning to its centre and on to its end: regime, cover
    and area change nowhere else, except that sheet flow ends inside one.
    """
    count = 0
    at = 0.0
    lake = 0
    for j in range(d.size):
        while lake < water_last.size and j > water_last[lake]:
            lake += 1
        in_water = lake < water_last.size and j >= water_first[lake]
        for half in range(2):
            end = d[j] if half == 0 else _midway(d, j + 1)
            if at < sheet_m:
                sheet_part = min(end, sheet_m)
                if sheet_part > at:
                    to_m[0], regime[0], cause[0] = sheet_part, SHEET, _BY_REGIME
                    count = 1
                    at = sheet_part
            if end <= at:
                continue
            if in_water:
                here = OPEN_WATER
            elif j > channel or (j == channel and half == 1):
                here = CHANNEL
            else:
                here = SHALLOW
            joins = half == 1 and j > 0 and area_km2[j] >= 1.5 * area_km2[j - 1]
            if here == SHALLOW and joins:
                joins = area_km2[j] - area_km2[j - 1] >= least_tributary_km2
            if count == 0 or regime[count - 1] != here:
                why = _BY_REGIME
            elif here == OPEN_WATER:
                why = -1
            elif joins:
                why = _BY_TRIBUTARY
            elif half == 0 and j > 0 and cover[j] != cover[j - 1]:
                why = _BY_COVER
            else:
                why = -1
            if why >= 0:
                regime[count], cause[count] = here, why
                count += 1
            to_m[count - 1] = end
            at = end
    return count


@njit(cache=True, nogil=True)
def _join_short(count: int, least_length_m: float, to_m: np.ndarray, regime: np.ndarray, cause: np.ndarray) -> int:
    """Join short pieces to the longer neighbour of their regime, in place, from the divide down.

    Of equally long neighbours it is the upstream one. A piece that takes in a shorter one from above and is
    still short looks again.
    """
    kept = 0
    for i in range(count):
        # Pieces [0, kept) are done; piece i, which may have taken in some above it, begins where they end.
        begin = to_m[kept - 1] if kept else 0.0
        if to_m[i] - begin < least_length_m:
            up = down = -1.0
            if kept and regime[kept - 1] == regime[i]:
                up = begin - (to_m[kept - 2] if kept > 1 else 0.0)
            if i + 1 < count and regime[i + 1] == regime[i]:
                down = to_m[i + 1] - to_m[i]
            if up >= 0.0 and up >= down:
                to_m[kept - 1] = to_m[i]
                continue
            if down >= 0.0:
                cause[i + 1] = cause[i]
                continue
        to_m[kept], regime[kept], cause[kept] = to_m[i], regime[i], cause[i]
        kept += 1
    return kept


@njit(cache=True, nogil=True)
def _main_cover(
    d: np.ndarray, cover: np.ndarray, count: int, to_m: np.ndarray, weight: np.ndarray, main: np.ndarray
) -> None:
    """Cover class of most length of every piece; of equal ones the first met on the way down."""
    j = 0
    at = 0.0
    for i in range(count):
        first = j
        while True:
            end = min(_midway(d, j + 1), to_m[i])
            weight[cover[j]] += end - at
            at = end
            if at >= to_m[i] or j + 1 >= d.size:
                break
            j += 1
        best = cover[first]
        for k in range(first, j + 1):
            if weight[cover[k]] > weight[best]:
                best = cover[k]
        for k in range(first, j + 1):
            weight[cover[k]] = 0.0
        main[i] = best


@njit(cache=True, nogil=True)
def _join_alike(count: int, to_m: np.ndarray, regime: np.ndarray, cause: np.ndarray, main: np.ndarray) -> int:
    """Join pieces between which the cover changed only in a short piece that is gone, in place."""
    kept = 0
    for i in range(count):
        if kept and cause[i] == _BY_COVER and main[i] == main[kept - 1]:
            to_m[kept - 1] = to_m[i]
            continue
        to_m[kept], regime[kept], cause[kept], main[kept] = to_m[i], regime[i], cause[i], main[i]
        kept += 1
    return kept


@njit(cache=True, nogil=True)
def at_segments(
    bounds: np.ndarray, distance_m: np.ndarray, elevation_m: np.ndarray, area_km2: np.ndarray,
    segment_bounds: np.ndarray, to_m: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:  # fmt: skip
    """Beginning, elevations of both ends, and contributing area at the middle of every segment.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m, elevation_m, area_km2 : float64 arrays, shape (path cells,)
    segment_bounds : int64 array, shape (n + 1,)
    to_m : float64 array, shape (segments,) [m]

    Returns
    -------
    from_m, top_elevation_m, bottom_elevation_m, middle_area_km2 : float64 arrays, shape (segments,)
        The area is that of the cell at or next above the middle.
    """
    from_m = np.zeros(to_m.size)
    top_m = np.empty(to_m.size)
    bottom_m = np.empty(to_m.size)
    middle_km2 = np.empty(to_m.size)
    for i in range(bounds.size - 1):
        a, b = bounds[i], bounds[i + 1]
        d, z = distance_m[a:b], elevation_m[a:b]
        for s in range(segment_bounds[i], segment_bounds[i + 1]):
            if s > segment_bounds[i]:
                from_m[s] = to_m[s - 1]
            top_m[s] = _value_at(d, z, from_m[s])
            bottom_m[s] = _value_at(d, z, to_m[s])
            middle = 0.5 * (from_m[s] + to_m[s])
            middle_km2[s] = area_km2[a + _cell_above(d, middle)]
    return from_m, top_m, bottom_m, middle_km2


@njit(cache=True, nogil=True)
def cut_lines(
    bounds: np.ndarray, distance_m: np.ndarray, x: np.ndarray, y: np.ndarray, line: np.ndarray,
    from_m: np.ndarray, to_m: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Parts of lines between two distances along them.

    Parameters
    ----------
    bounds : int64 array, shape (n + 1,)
    distance_m, x, y : float64 arrays, shape (path cells,)
        Distances may be true metres whatever the coordinates are: between vertices they are shared out linearly.
    line : int64 array, shape (parts,)
        Which line each part belongs to.
    from_m, to_m : float64 arrays, shape (parts,) [m]

    Returns
    -------
    part_bounds : int64 array, shape (parts + 1,)
    xy : float64 array, shape (vertices, 2)
    """
    n = line.size
    part_bounds = np.zeros(n + 1, np.int64)
    for k in range(n):
        d = distance_m[bounds[line[k]] : bounds[line[k] + 1]]
        last = _cell_above(d, to_m[k])
        if d[last] == to_m[k]:
            last -= 1
        part_bounds[k + 1] = part_bounds[k] + 2 + max(last - _cell_above(d, from_m[k]), 0)
    xy = np.empty((part_bounds[n], 2))
    for k in range(n):
        a, b = bounds[line[k]], bounds[line[k] + 1]
        d = distance_m[a:b]
        first, end = part_bounds[k], part_bounds[k + 1]
        above = a + _cell_above(d, from_m[k])
        for j in range(1, end - first - 1):
            xy[first + j, 0], xy[first + j, 1] = x[above + j], y[above + j]
        xy[first, 0], xy[first, 1] = _value_at(d, x[a:b], from_m[k]), _value_at(d, y[a:b], from_m[k])
        xy[end - 1, 0], xy[end - 1, 1] = _value_at(d, x[a:b], to_m[k]), _value_at(d, y[a:b], to_m[k])
    return part_bounds, xy
