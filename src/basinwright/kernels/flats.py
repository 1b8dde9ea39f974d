"""Directions across flats: towards lower ground and away from higher ground.

Two breadth-first fields, after the idea of Barnes, Lehman & Mulla (2014), "An efficient assignment of drainage
direction over flat surfaces in raster digital elevation models", Computers & Geosciences 62: the steps to a
cell that drains, and the steps from the foot of higher ground. A cell flows to the neighbour that minimises
2 x (steps to lower ground) - (steps from higher ground). Steps of neighbours differ by one at most, so that
neighbour is always one step nearer to lower ground, and among those the one farthest from higher ground: no
cycle is possible. Neither labels of flats nor additions to the elevations are needed, because two FLAT
neighbours always have the same elevation.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, FLAT
from basinwright.kernels.geometry import neighbours

# While flats are in work the high half of a direction byte says where the cell stands.
_RING = 16  # 16, 32, 48: steps to lower ground modulo 3, which tells nearer, equal and farther neighbours
_BESIDE_LOWER = 16  # with _OPEN and _COLLECTED: a neighbour of equal elevation drains
_OPEN = 64  # not collected yet
_COLLECTED = 128  # in the flat that is in work, not reached yet; _BESIDE_LOWER stays with it
_STATE = 240
_CODE = 15

# Nearer neighbours first: on equal merit water takes the shorter step.
_BY_DISTANCE = (0, 2, 4, 6, 1, 3, 5, 7)


@njit(cache=True, nogil=True)
def _find_contacts(z: np.ndarray, directions: np.ndarray, nrows: int, ncols: int, away: np.ndarray) -> None:
    """Open the FLAT cells, marking those beside lower ground, and start the steps from higher ground.

    `away` becomes 1 beside higher ground, 0 in other FLAT cells, -1 elsewhere.
    """
    stride = ncols + 2
    for i in range(stride):
        away[i] = -1
        away[(nrows + 1) * stride + i] = -1
    # Elevations of the cells that drain, NaN elsewhere, for three rows in turn.
    drained = np.empty((3, stride), np.float32)
    for i in range(stride):
        drained[0, i] = np.nan
    lower = np.empty(stride, np.bool_)
    higher = np.empty(stride, np.bool_)
    for row in range(nrows + 1):
        start = row * stride
        following = drained[(row + 1) % 3]
        z_next = z[start + stride : start + 2 * stride]
        d_next = directions[start + stride : start + 2 * stride]
        for i in range(stride):
            following[i] = z_next[i] if d_next[i] < FLAT else np.nan
        if row == 0:
            continue
        above = drained[(row - 1) % 3]
        here = drained[row % 3]
        z_here = z[start : start + stride]
        for i in range(1, ncols + 1):
            c = z_here[i]
            lower[i] = (
                (above[i - 1] == c) | (above[i] == c) | (above[i + 1] == c) | (here[i - 1] == c)
                | (here[i + 1] == c) | (following[i - 1] == c) | (following[i] == c) | (following[i + 1] == c)
            )  # fmt: skip
        for i in range(1, ncols + 1):
            c = z_here[i]
            higher[i] = (
                (above[i - 1] > c) | (above[i] > c) | (above[i + 1] > c) | (here[i - 1] > c)
                | (here[i + 1] > c) | (following[i - 1] > c) | (following[i] > c) | (following[i + 1] > c)
            )  # fmt: skip
        d_here = directions[start : start + stride]
        out = away[start : start + stride]
        out[0] = -1
        out[ncols + 1] = -1
        for i in range(1, ncols + 1):
            out[i] = np.int32(higher[i]) if d_here[i] == FLAT else np.int32(-1)
        for i in range(1, ncols + 1):
            opened = np.uint8(_OPEN + _BESIDE_LOWER) if lower[i] else np.uint8(_OPEN)
            d_here[i] = opened if d_here[i] == FLAT else d_here[i]


@njit(cache=True, nogil=True)
def _collect(directions: np.ndarray, stride: int, start: int, queue: np.ndarray) -> int:
    """Put the cells of one flat into the queue; returns how many. Flat by flat the work stays in the cache."""
    o = neighbours(stride)
    directions[start] = directions[start] & ~_OPEN | _COLLECTED
    queue[0] = start
    head = 0
    tail = 1
    while head < tail:
        c = np.uint64(queue[head])
        head += 1
        for k in range(8):
            n = c + o[k]
            d = directions[n]
            if d & _OPEN:
                directions[n] = d & ~_OPEN | _COLLECTED
                queue[tail] = n
                tail += 1
    return tail


@njit(cache=True, nogil=True)
def _step_away(away: np.ndarray, stride: int, queue: np.ndarray, size: int) -> None:
    """Steps from the foot of higher ground across one flat; 0 stays where it has no higher ground."""
    o = neighbours(stride)
    tail = 0
    for i in range(size):
        cell = queue[i]
        if away[cell] == 1:
            queue[tail] = cell
            tail += 1
    head = 0
    while head < tail:
        c = np.uint64(queue[head])
        head += 1
        steps = away[c] + np.int32(1)
        for k in range(8):
            n = c + o[k]
            if away[n] == 0:
                away[n] = steps
                queue[tail] = n
                tail += 1


@njit(cache=True, nogil=True)
def _drain_rings(
    z: np.ndarray, directions: np.ndarray, stride: int, away: np.ndarray, queue: np.ndarray, size: int
) -> int:
    """Point the cells beside lower ground at it, then ring by ring each cell at the ring before."""
    o = neighbours(stride)
    tail = 0
    for i in range(size):
        cell = queue[i]
        if directions[cell] == _COLLECTED + _BESIDE_LOWER:
            queue[tail] = cell
            tail += 1
    head = 0
    end = tail
    while head < end:
        c = np.uint64(queue[head])
        head += 1
        level = z[c]
        code = -1
        for k in _BY_DISTANCE:
            n = c + o[k]
            d = directions[n]
            if d == _COLLECTED:
                directions[n] = 2 * _RING
                queue[tail] = n
                tail += 1
            elif code < 0 and d <= EXIT and z[n] == level:
                code = k
        directions[c] = _RING | code
    ring = _RING
    while head < tail:
        nearer = ring
        ring = ring + _RING if ring < 3 * _RING else _RING
        farther = ring + _RING if ring < 3 * _RING else _RING
        end = tail
        while head < end:
            c = np.uint64(queue[head])
            head += 1
            code = -1
            best = -1
            for k in _BY_DISTANCE:
                n = c + o[k]
                d = directions[n]
                if d == _COLLECTED:
                    directions[n] = farther
                    queue[tail] = n
                    tail += 1
                elif d & _STATE == nearer and away[n] > best:
                    best = away[n]
                    code = k
            directions[c] = ring | code
    for i in range(tail):
        directions[queue[i]] &= _CODE
    return tail


@njit(cache=True, nogil=True)
def resolve_flats(
    z: np.ndarray, directions: np.ndarray, nrows: int, ncols: int, queue: np.ndarray, away: np.ndarray
) -> int:
    """Give every FLAT cell a direction; returns how many got one.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Filled elevations.
    directions : uint8 array, shape (cells,)
        Directions by steepest descent, completed in place. A flat that nothing drains (impossible on a
        filled surface) stays FLAT.
    nrows, ncols : int
    queue, away : int32 arrays, shape (cells,)
        Work space.
    """
    stride = ncols + 2
    _find_contacts(z, directions, nrows, ncols, away)
    drained = 0
    for start in range(directions.size):
        if directions[start] & _OPEN:
            size = _collect(directions, stride, start, queue)
            _step_away(away, stride, queue, size)
            drained += _drain_rings(z, directions, stride, away, queue, size)
    for c in range(directions.size):
        if directions[c] >= _COLLECTED:
            directions[c] = FLAT
    return drained
