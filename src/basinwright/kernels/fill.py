"""Depression filling: the lowest surface above the terrain from which every cell drains to the outside.

The filled surface is unique, so any correct method gives the same bits. This one grows upslope from the
rim and the voids with a plain stack: a neighbour that is not lower than a finished cell is finished at its
own elevation, in whatever order it is met, and never enters the queue. What remains are depressions. The
cells around them wait as spill candidates in linear buckets on elevation; the lowest candidate floods its
depression, and growth goes on from there. Only the open bucket is kept in order, in a small heap.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels.geometry import neighbour_offsets

_UNSEEN = np.uint8(0)
_SEEN = np.uint8(1)


@njit(cache=True, nogil=True)
def raise_single_pits(z: np.ndarray, nrows: int, ncols: int) -> None:
    """Raise every cell that is lower than all its neighbours to the lowest of them, in place.

    The filled surface stays the same, and most of the small pits of a rough terrain are gone at the price of
    one pass in memory order. Voids and halo must be -inf, so that the cells beside them stay.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    nrows, ncols : int
    """
    stride = ncols + 2
    lowest = np.empty(stride, np.float32)
    for row in range(1, nrows + 1):
        above = z[(row - 1) * stride : row * stride]
        here = z[row * stride : (row + 1) * stride]
        below = z[(row + 1) * stride : (row + 2) * stride]
        for i in range(stride):
            lowest[i] = min(above[i], below[i])
        for i in range(1, ncols + 1):
            around = min(min(lowest[i - 1], lowest[i]), lowest[i + 1])
            here[i] = max(here[i], min(around, min(here[i - 1], here[i + 1])))


@njit(cache=True, nogil=True)
def _mark_and_seed(z: np.ndarray, state: np.ndarray, nrows: int, ncols: int, stack: np.ndarray) -> int:
    """Mark voids and halo as seen, put every cell beside them on the stack; returns the stack's height."""
    stride = ncols + 2
    o = neighbour_offsets(stride)
    for c in range(z.size):
        state[c] = _SEEN if z[c] == -np.inf else _UNSEEN
    height = 0
    for row in range(1, nrows + 1):
        for c in range(row * stride + 1, row * stride + ncols + 1):
            if z[c] == -np.inf:
                continue
            for k in range(8):
                if z[c + o[k]] == -np.inf:
                    stack[height] = c
                    height += 1
                    break
    for i in range(height):
        state[stack[i]] = _SEEN
    return height


@njit(cache=True, nogil=True)
def _finite_range(z: np.ndarray) -> tuple[float, float]:
    low = np.float32(np.inf)
    high = np.float32(-np.inf)
    for c in range(z.size):
        if z[c] != -np.inf:
            low = min(low, z[c])
            high = max(high, z[c])
    return low, high


@njit(cache=True, nogil=True)
def _heap_push(heap: np.ndarray, size: int, cell: int, z: np.ndarray) -> None:
    """Add a cell to the binary heap on elevation; the caller has made room."""
    key = z[cell]
    i = size
    while i > 0:
        parent = (i - 1) >> 1
        if z[heap[parent]] <= key:
            break
        heap[i] = heap[parent]
        i = parent
    heap[i] = cell


@njit(cache=True, nogil=True)
def _heap_pop(heap: np.ndarray, size: int, z: np.ndarray) -> int:
    """Take the lowest cell; the heap then holds ``size - 1``."""
    top = heap[0]
    last = heap[size - 1]
    key = z[last]
    n = size - 1
    i = 0
    while True:
        child = 2 * i + 1
        if child >= n:
            break
        if child + 1 < n and z[heap[child + 1]] < z[heap[child]]:
            child += 1
        if z[heap[child]] >= key:
            break
        heap[i] = heap[child]
        i = child
    heap[i] = last
    return top


@njit(cache=True, nogil=True)
def fill_depressions(
    z: np.ndarray, state: np.ndarray, nrows: int, ncols: int, stack: np.ndarray, link: np.ndarray
) -> None:
    """Fill every depression in place, exactly; voids and halo turn from -inf to +inf.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Padded elevations with -inf in voids and halo; filled on return, with +inf there.
    state : uint8 array, shape (cells,)
        Work space.
    nrows, ncols : int
    stack, link : int32 arrays, shape (cells,)
        Work space.

    Notes
    -----
    Seeds, which keep their elevation, are the cells at the rim and beside voids. The idea of a queue that
    releases cells by elevation is that of Barnes, Lehman & Mulla (2014), "Priority-flood", Computers &
    Geosciences 62.
    """
    stride = ncols + 2
    o = neighbour_offsets(stride)
    low, high = _finite_range(z)
    height = _mark_and_seed(z, state, nrows, ncols, stack)

    buckets = max(1, min(1 << 20, z.size // 8))
    scale = 0.0
    if high > low:
        scale = (buckets - 1) / (np.float64(high) - np.float64(low))
    head = np.full(buckets, -1, np.int32)
    heap = np.empty(1024, np.int32)
    heaped = 0
    opened = -1
    level = np.float32(-np.inf)

    while True:
        # Growth. Stack from the bottom of its array, spill candidates from the top: a cell is in one of them.
        candidates = 0
        while height > 0:
            height -= 1
            c = stack[height]
            zc = z[c]
            spills = False
            for k in range(8):
                n = c + o[k]
                if state[n] == _UNSEEN:
                    zn = z[n]
                    if zn < zc:
                        if zc > level:
                            spills = True
                            continue
                        z[n] = zc
                    state[n] = _SEEN
                    stack[height] = n
                    height += 1
            if spills:
                candidates += 1
                stack[stack.size - candidates] = c

        # Queue the candidates that still have an unseen neighbour now that growth has ended.
        for i in range(candidates):
            c = stack[stack.size - 1 - i]
            waits = False
            for k in range(8):
                if state[c + o[k]] == _UNSEEN:
                    waits = True
                    break
            if not waits:
                continue
            b = int((np.float64(z[c]) - low) * scale)
            if b > opened:
                link[c] = head[b]
                head[b] = c
            else:
                if heaped == heap.size:
                    grown = np.empty(2 * heap.size, np.int32)
                    grown[: heap.size] = heap
                    heap = grown
                _heap_push(heap, heaped, c, z)
                heaped += 1

        # Flood from the lowest candidate that still has something to flood.
        while height == 0:
            while heaped == 0 and opened < buckets - 1:
                opened += 1
                c = head[opened]
                while c >= 0:
                    for k in range(8):
                        if state[c + o[k]] == _UNSEEN:
                            if heaped == heap.size:
                                grown = np.empty(2 * heap.size, np.int32)
                                grown[: heap.size] = heap
                                heap = grown
                            _heap_push(heap, heaped, c, z)
                            heaped += 1
                            break
                    c = link[c]
            if heaped == 0:
                break
            c = _heap_pop(heap, heaped, z)
            heaped -= 1
            level = z[c]
            for k in range(8):
                n = c + o[k]
                if state[n] == _UNSEEN:
                    z[n] = level
                    state[n] = _SEEN
                    stack[height] = n
                    height += 1
        if height == 0:
            break

    for c in range(z.size):
        if z[c] == -np.inf:
            z[c] = np.inf
