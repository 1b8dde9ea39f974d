"""Conditioning and routing where maps say how water goes: walls, cells that keep their water, prescribed directions.

Water may step from a cell to a neighbour unless a wall stands between them; a cell with a prescribed direction steps
nowhere else, and does so through walls; a cell that keeps its water steps nowhere. In all kernels here ``walls`` is
a uint8 array with bit d set where direction d is barred, ``fixed`` a uint8 array of directions with FREE where none
is prescribed, ``ends`` a bool array; all flat and padded.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, FLAT, FREE
from basinwright.kernels.heap import enlarged, pop, push

_BY_DISTANCE = (0, 2, 4, 6, 1, 3, 5, 7)  # on equal merit water takes the shorter step


@njit(cache=True, nogil=True)
def offsets(stride: int) -> np.ndarray:
    """Index offset of a step by direction, int64, shape (8,)."""
    return np.array((-stride, -stride + 1, 1, stride + 1, stride, stride - 1, -1, -stride - 1))


@njit(cache=True, nogil=True, inline="always")
def _may_step(walls: np.ndarray, fixed: np.ndarray, c: int, d: int) -> bool:
    """Whether water of a cell that does not keep it may step in a direction."""
    return fixed[c] == d if fixed[c] != FREE else (walls[c] >> d) & 1 == 0


@njit(cache=True, nogil=True)
def _spread(
    z: np.ndarray, stride: int, walls: np.ndarray, fixed: np.ndarray, ends: np.ndarray, level: np.ndarray,
    keys: np.ndarray, ties: np.ndarray, size: int, stack: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Let the flood that starts from the queue reach all cells that it can."""
    o = offsets(stride)
    while size > 0:
        size = pop(keys, ties, size)
        stack[0] = ties[size]
        height = 1
        while height > 0:
            height -= 1
            c = stack[height]
            flood = level[c]
            for k in range(8):
                n = c + o[k]
                if not np.isnan(level[n]) or not _may_step(walls, fixed, n, (k + 4) & 7):
                    continue
                if z[n] <= flood:
                    level[n] = flood
                    stack[height] = n
                    height += 1
                else:
                    level[n] = z[n]
                    if size + 1 >= keys.size:
                        keys = enlarged(keys, size, 2 * keys.size)
                        ties = enlarged(ties, size, 2 * ties.size)
                    size = push(keys, ties, size, np.float64(z[n]), n)
    return keys, ties


@njit(cache=True, nogil=True)
def constrained_levels(
    z: np.ndarray, nrows: int, ncols: int, walls: np.ndarray, fixed: np.ndarray, ends: np.ndarray, stack: np.ndarray,
    level: np.ndarray,
) -> tuple[int, int]:  # fmt: skip
    """Lowest surface above the terrain from which every cell drains by the steps that it may take.

    A flood from outside and from the cells that keep their water, in order of level, against the steps (Barnes, Lehman
    & Mulla 2014, "Priority-flood", Computers & Geosciences 62). Where it ends before all cells are reached, the
    lowest prescribed direction that stands in its way is given up; where none does, the lowest cell that is not
    reached keeps its water, as walls on all sides leave it no other way.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations, +inf in voids and halo.
    nrows, ncols : int
    walls, fixed, ends : arrays, shape (cells,)
        `fixed` and `ends` are changed where that is needed for every cell to drain.
    stack : int32 array, shape (cells,)
        Work space.
    level : float32 array, shape (cells,) [m]
        Result; +inf in voids and halo.

    Returns
    -------
    given_up, closed : int
        Prescribed directions given up, and cells that were made to keep their water.
    """
    stride = ncols + 2
    o = offsets(stride)
    keys = np.empty(4 * (nrows + ncols) + 64, np.float64)
    ties = np.empty(keys.size, np.int64)
    size = 0
    for c in range(z.size):
        level[c] = np.inf if z[c] == np.inf else np.nan
    for row in range(1, nrows + 1):
        for c in range(row * stride + 1, row * stride + ncols + 1):
            if z[c] == np.inf:
                continue
            starts = ends[c]
            if not starts and fixed[c] == FREE:
                for k in range(8):
                    starts |= z[c + o[k]] == np.inf
            if starts:
                level[c] = z[c]
                if size + 1 >= keys.size:
                    keys = enlarged(keys, size, 2 * keys.size)
                    ties = enlarged(ties, size, 2 * ties.size)
                size = push(keys, ties, size, np.float64(z[c]), c)
    keys, ties = _spread(z, stride, walls, fixed, ends, level, keys, ties, size, stack)

    missed = 0
    for c in range(z.size):
        missed += np.isnan(level[c])
    if missed == 0:
        return 0, 0
    left = np.empty(missed, np.int64)
    missed = 0
    for c in range(z.size):
        if np.isnan(level[c]):
            left[missed] = c
            missed += 1
    given_up = 0
    closed = 0
    while True:
        kept = 0
        freed = -1
        freed_level = np.float32(np.inf)
        lowest = -1
        for i in range(missed):
            c = left[i]
            if not np.isnan(level[c]):
                continue
            left[kept] = c
            kept += 1
            if lowest < 0 or z[c] < z[lowest]:
                lowest = c
            if fixed[c] == FREE:
                continue
            for k in range(8):
                n = c + o[k]
                if (walls[c] >> k) & 1 == 0 and level[n] < np.inf and (freed < 0 or max(z[c], level[n]) < freed_level):
                    freed = c
                    freed_level = max(z[c], level[n])
        missed = kept
        if missed == 0:
            return given_up, closed
        if freed >= 0:
            fixed[freed] = FREE
            level[freed] = freed_level
            size = push(keys, ties, 0, np.float64(freed_level), freed)
            given_up += 1
        else:
            fixed[lowest] = FREE
            ends[lowest] = True
            level[lowest] = z[lowest]
            size = push(keys, ties, 0, np.float64(z[lowest]), lowest)
            closed += 1
        keys, ties = _spread(z, stride, walls, fixed, ends, level, keys, ties, size, stack)


@njit(cache=True, nogil=True)
def constrain_directions(
    z: np.ndarray, nrows: int, ncols: int, dx_m: np.ndarray, dy_m: np.ndarray, walls: np.ndarray, fixed: np.ndarray,
    ends: np.ndarray, directions: np.ndarray,
) -> None:  # fmt: skip
    """Mend the directions of `steepest_descent` where walls, prescribed directions or ends concern a cell.

    A cell that keeps its water becomes an EXIT, for the time being. A prescribed direction is taken where it falls;
    where it is level the cell is FLAT. The end of a prescribed course at the raster's rim is an EXIT.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Conditioned elevations, +inf in voids and halo.
    nrows, ncols : int
    dx_m, dy_m : float64 arrays, shape (nrows,) [m]
    walls, fixed, ends : arrays, shape (cells,)
    directions : uint8 array, shape (cells,)
        Changed in place.
    """
    stride = ncols + 2
    o = offsets(stride)
    for row in range(1, nrows + 1):
        dx = dx_m[row - 1]
        dy = dy_m[row - 1]
        diagonal = np.sqrt(dx * dx + dy * dy)
        weights = (diagonal / dy, 1.0, diagonal / dx, 1.0)
        for c in range(row * stride + 1, row * stride + ncols + 1):
            if z[c] == np.inf:
                continue
            if ends[c]:
                directions[c] = EXIT
            elif fixed[c] != FREE:
                directions[c] = fixed[c] if z[c + o[fixed[c]]] < z[c] else FLAT
            elif walls[c]:
                best = np.float32(0.0)
                code = FLAT
                for k in range(8):
                    drop = np.float32((z[c] - z[c + o[k]]) * np.float32(weights[k & 3]))
                    if drop > best and (walls[c] >> k) & 1 == 0:
                        best = drop
                        code = k
                if code == FLAT:
                    for k in range(8):
                        if z[c + o[k]] == np.inf:
                            code = EXIT
                directions[c] = code
    for c in range(stride, z.size - stride):
        if fixed[c] != FREE:
            n = c + o[fixed[c]]
            row = n // stride
            col = n - row * stride
            at_rim = row == 1 or row == nrows or col == 1 or col == ncols
            if at_rim and fixed[n] == FREE:
                directions[n] = EXIT


_COLLECTED = 128
_RING = 16  # 16, 32, 48: steps to lower ground modulo 3
_STATE = 240
_CODE = 15


@njit(cache=True, nogil=True)
def _collect_flat(z: np.ndarray, directions: np.ndarray, stride: int, start: int, queue: np.ndarray) -> int:
    """Put the FLAT cells of one elevation that hang together into the queue; returns how many."""
    o = offsets(stride)
    directions[start] = _COLLECTED
    queue[0] = start
    head = 0
    tail = 1
    while head < tail:
        c = int(queue[head])
        head += 1
        for k in range(8):
            n = c + o[k]
            if directions[n] == FLAT and z[n] == z[c]:
                directions[n] = _COLLECTED
                queue[tail] = n
                tail += 1
    return tail


@njit(cache=True, nogil=True)
def _step_from_higher(
    z: np.ndarray, stride: int, cells: np.ndarray, size: int, away: np.ndarray, queue: np.ndarray
) -> None:
    """Steps from higher ground into a flat; 0 in all its cells where none is higher."""
    o = offsets(stride)
    tail = 0
    for i in range(size):
        away[cells[i]] = 0
    for i in range(size):
        c = int(cells[i])
        for k in range(8):
            if z[c] < z[c + o[k]] < np.inf:
                away[c] = 1
                queue[tail] = c
                tail += 1
                break
    head = 0
    while head < tail:
        c = int(queue[head])
        head += 1
        for k in range(8):
            n = c + o[k]
            if away[n] == 0 and z[n] == z[c]:
                away[n] = away[c] + 1
                queue[tail] = n
                tail += 1


@njit(cache=True, nogil=True)
def _drain_flat(
    z: np.ndarray, directions: np.ndarray, stride: int, walls: np.ndarray, fixed: np.ndarray, cells: np.ndarray,
    size: int, away: np.ndarray, queue: np.ndarray,
) -> None:  # fmt: skip
    """Ring by ring from lower ground inwards, against the steps that cells may take."""
    o = offsets(stride)
    tail = 0
    for i in range(size):
        c = int(cells[i])
        for k in _BY_DISTANCE:
            n = c + o[k]
            if directions[n] <= EXIT and z[n] <= z[c] and _may_step(walls, fixed, c, k):
                directions[c] = _RING | k
                queue[tail] = c
                tail += 1
                break
    head = 0
    nearer = 0
    ring = _RING
    while head < tail:
        farther = ring + _RING if ring < 3 * _RING else _RING
        end = tail
        while head < end:
            c = int(queue[head])
            head += 1
            code = -1
            best = -1
            for k in _BY_DISTANCE:
                n = c + o[k]
                d = directions[n]
                if d == _COLLECTED:
                    if _may_step(walls, fixed, n, (k + 4) & 7):
                        directions[n] = farther
                        queue[tail] = n
                        tail += 1
                elif (
                    nearer
                    and d & _STATE == nearer
                    and away[n] > best
                    and z[n] == z[c]
                    and _may_step(walls, fixed, c, k)
                ):
                    best = away[n]
                    code = k
            if nearer:
                directions[c] = ring | code
        nearer = ring
        ring = farther
    for i in range(size):
        c = cells[i]
        directions[c] = FLAT if directions[c] == _COLLECTED else directions[c] & _CODE
        away[c] = -1


@njit(cache=True, nogil=True)
def resolve_constrained_flats(
    z: np.ndarray, directions: np.ndarray, nrows: int, ncols: int, walls: np.ndarray, fixed: np.ndarray,
    cells: np.ndarray, away: np.ndarray, queue: np.ndarray,
) -> int:  # fmt: skip
    """Give directions to the flats in which walls or prescribed directions stand; other flats are left alone.

    The same rule as for other flats (see `basinwright.kernels.flats`), by steps that are allowed. A cell whose
    prescribed direction is level drains only once the cell below it does, so no cycle is possible.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Conditioned elevations.
    directions : uint8 array, shape (cells,)
        From `constrain_directions`; changed in place.
    nrows, ncols : int
    walls, fixed : arrays, shape (cells,)
    cells, away, queue : int32 arrays, shape (cells,)
        Work space.

    Returns
    -------
    int
        Cells that got a direction.
    """
    stride = ncols + 2
    away[:] = -1
    drained = 0
    for start in range(directions.size):
        if directions[start] == FLAT and (walls[start] or fixed[start] != FREE):
            size = _collect_flat(z, directions, stride, start, cells)
            _step_from_higher(z, stride, cells, size, away, queue)
            _drain_flat(z, directions, stride, walls, fixed, cells, size, away, queue)
            for i in range(size):
                drained += directions[cells[i]] != FLAT
    return drained


@njit(cache=True, nogil=True)
def wall_off(x: np.ndarray, y: np.ndarray, bounds: np.ndarray, nrows: int, ncols: int, walls: np.ndarray) -> None:
    """Walls where lines cross the steps between the centres of cells.

    Water steps from centre to centre, so a course of steps across an unbroken line must cross it in one of the steps:
    the wall is as tight as the line, diagonals included.

    Parameters
    ----------
    x, y : float64 arrays, shape (vertices,) [cells]
        Columns to the right and rows down from the raster's upper left corner.
    bounds : int64 array, shape (lines + 1,)
    nrows, ncols : int
    walls : uint8 array, shape (cells,)
        Added to.
    """
    stride = ncols + 2
    o = offsets(stride)
    for line in range(bounds.size - 1):
        for i in range(bounds[line], bounds[line + 1] - 1):
            # By family of steps: across is constant on the line of centres that holds the step, along runs on it.
            for family in range(4):
                if family == 0:  # east: the lines of centres are rows
                    a0, a1, b0, b1 = y[i], y[i + 1], x[i], x[i + 1]
                elif family == 1:  # south: columns
                    a0, a1, b0, b1 = x[i], x[i + 1], y[i], y[i + 1]
                elif family == 2:  # south-east: column less row
                    a0, a1 = x[i] - y[i], x[i + 1] - y[i + 1]
                    b0, b1 = x[i] + y[i], x[i + 1] + y[i + 1]
                else:  # south-west: column plus row
                    a0, a1 = x[i] + y[i], x[i + 1] + y[i + 1]
                    b0, b1 = y[i] - x[i], y[i + 1] - x[i + 1]
                shift = 0.5 if family < 2 else 0.0
                first = int(np.ceil(min(a0, a1) - shift))
                last = int(np.ceil(max(a0, a1) - shift))
                for k in range(first, last):
                    b = b0 + (b1 - b0) * ((k + shift) - a0) / (a1 - a0)
                    if family == 0:
                        row, col, d = k, int(np.floor(b - 0.5)), 2
                    elif family == 1:
                        row, col, d = int(np.floor(b - 0.5)), k, 4
                    elif family == 2:  # centres have column + row + 1 along, column - row across
                        row = int(np.floor((b - k - 1.0) / 2.0))
                        col, d = row + k, 3
                    else:  # centres have row - column along, column + row + 1 across
                        row = int(np.floor((b + k - 1.0) / 2.0))
                        col, d = k - 1 - row, 5
                    below = row + (d > 2)
                    beside = col + (1 if d < 4 else 0 if d == 4 else -1)
                    if row >= 0 and col >= 0 and beside >= 0 and below < nrows and col < ncols and beside < ncols:
                        c = (row + 1) * stride + col + 1
                        walls[c] |= np.uint8(1 << d)
                        walls[c + o[d]] |= np.uint8(1 << ((d + 4) & 7))
