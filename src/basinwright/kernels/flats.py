"""Directions across flats: towards lower ground and away from higher ground.

Two breadth-first fields per flat, after the idea of Barnes, Lehman & Mulla (2014), "An efficient assignment of
drainage direction over flat surfaces in raster digital elevation models", Computers & Geosciences 62: the
steps to a cell that drains, and the steps from the foot of higher ground. A cell flows to the neighbour that
minimises 2 x (steps to lower ground) - (steps from higher ground). Steps of neighbours differ by one at most,
so that neighbour is always one step nearer to lower ground, and among those the one farthest from higher
ground: no cycle is possible. Neither flat labels nor additions to the elevations are needed.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, FLAT
from basinwright.kernels.geometry import neighbour_offsets

# While a flat is in work its cells carry, in the high bits of their direction, where they stand.
_STEP = 16  # 16, 32, 48: steps to lower ground modulo 3, which tells nearer, equal and farther neighbours
_OPEN = 64  # not reached yet
_OPEN_LOW = 80  # not reached yet, beside a cell of equal elevation that drains
_CODE = 15

# Nearer neighbours first: on equal merit water takes the shorter step.
_BY_DISTANCE = (0, 2, 4, 6, 1, 3, 5, 7)


@njit(cache=True, nogil=True)
def resolve_flats(
    z: np.ndarray, directions: np.ndarray, nrows: int, ncols: int, queue: np.ndarray, away: np.ndarray
) -> int:
    """Give every FLAT cell a direction; returns how many were flat.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Filled elevations.
    directions : uint8 array, shape (cells,)
        Directions by steepest descent, completed in place. A flat that nothing drains (impossible on a
        filled surface) is left above VOID.
    nrows, ncols : int
    queue, away : int32 arrays, shape (cells,)
        Work space.
    """
    stride = ncols + 2
    o = neighbour_offsets(stride)
    flat_cells = 0
    for row in range(1, nrows + 1):
        for start in range(row * stride + 1, row * stride + ncols + 1):
            if directions[start] != FLAT:
                continue

            # Collect the flat; note which of its cells touch lower or higher ground.
            level = z[start]
            directions[start] = _OPEN
            queue[0] = start
            size = 1
            lows = 0
            highs = 0
            head = 0
            while head < size:
                c = queue[head]
                head += 1
                high = 0
                low = False
                for k in range(8):
                    n = c + o[k]
                    d = directions[n]
                    if d == FLAT:
                        directions[n] = _OPEN
                        queue[size] = n
                        size += 1
                    elif d < FLAT:
                        if z[n] == level:
                            low = True
                        else:
                            high = 1
                away[c] = high
                highs += high
                if low:
                    directions[c] = _OPEN_LOW
                    lows += 1
            flat_cells += size
            if lows == 0:
                for i in range(size):
                    directions[queue[i]] = FLAT | _OPEN
                continue

            # Steps from higher ground. Afterwards the queue again holds every cell of the flat.
            if 0 < highs < size and lows < size:
                tail = 0
                for i in range(size):
                    c = queue[i]
                    if away[c] == 1:
                        queue[tail] = c
                        tail += 1
                head = 0
                while head < tail:
                    c = queue[head]
                    head += 1
                    steps = away[c] + 1
                    for k in range(8):
                        n = c + o[k]
                        if directions[n] >= _OPEN and away[n] == 0:
                            away[n] = steps
                            queue[tail] = n
                            tail += 1

            # Steps to lower ground, step by step: the first ring flows out of the flat ...
            tail = 0
            for i in range(size):
                c = queue[i]
                if directions[c] == _OPEN_LOW:
                    queue[tail] = c
                    tail += 1
            ring = _STEP
            head = 0
            end = tail
            while head < end:
                c = queue[head]
                head += 1
                code = -1
                for k in _BY_DISTANCE:
                    n = c + o[k]
                    d = directions[n]
                    if d == _OPEN:
                        directions[n] = _STEP * 2
                        queue[tail] = n
                        tail += 1
                    elif code < 0 and d <= EXIT and z[n] == level:
                        code = k
                directions[c] = ring | code
            # ... and each further ring to the ring before it.
            while head < tail:
                nearer = ring
                ring = ring + _STEP if ring < 3 * _STEP else _STEP
                farther = ring + _STEP if ring < 3 * _STEP else _STEP
                end = tail
                while head < end:
                    c = queue[head]
                    head += 1
                    code = -1
                    best = -1
                    for k in _BY_DISTANCE:
                        n = c + o[k]
                        d = directions[n]
                        if d == _OPEN:
                            directions[n] = farther
                            queue[tail] = n
                            tail += 1
                        elif d & ~_CODE == nearer and away[n] > best:
                            best = away[n]
                            code = k
                    directions[c] = ring | code
            for i in range(size):
                directions[queue[i]] &= _CODE
    return flat_cells
