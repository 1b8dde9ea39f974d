"""Breaching: a way out of each pit by the least cut, within limits of depth and length.

1. A single cell below all its neighbours is raised to the lowest of them: less ground is moved so than by any cut.
2. Neighbouring cells of equal elevation without lower ground beside them are one pit.
3. From each pit the way to lower ground that costs least is sought, cost being the root of the depth of the cut
   times the distance. It is cut to the level of the pit, so that every level of a cut stands in the terrain. Where
   cost ties, as across a level floor, the way nearest to the middle of the pit is taken.
4. A pit from which no way lies within the limits is filled part of the way, as little as helps, and sought from
   again for a way out of the lake that filling it would make.
5. What still does not drain is filled, from each pit outwards only as far as its lake reaches.

Every search reads the same surface and only notes its cuts; all are made at the end, the deepest counting where
they meet. Neither the order of the pits nor the number of threads can then change a bit. A pit drains to ground
strictly below it, and cuts only lower ground, so that a pit that was breached cannot close again.

The search for the least cost is that of Dijkstra (1959); breaching by least cost within limits, with filling of the
rest, is the idea of Lindsay (2016), "Efficient hybrid breaching-filling sink removal methods for flow path
enforcement in digital elevation models", Hydrological Processes 30(6), and of Soille (2004), "Optimal removal of
spurious pits in grid digital elevation models", Water Resources Research 40(12).

Elevations are -inf in voids and halo here, so that the outside is lower than any ground. NaN is ground that is not
known, beyond the edge of a window of a larger raster: a pit whose search meets it is OPEN.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels.geometry import neighbours, steps
from basinwright.kernels.heap import enlarged

# What is noted of a cell, as bits of a byte.
_LOW = 1  # no neighbour is lower
_SINGLE = 2  # all neighbours are higher
_SEEN = 4  # grouped already
CUT = 8
END = 16  # keeps its water
FIXED = 32  # drains by prescription
_POOL = 64  # in the lake that is being filled
_RAISED = 128  # in a lake that was filled
_ALL = 255

TO_DO, BREACHED, BREACHED_FROM_POOL, DRAINED, FAILED, OPEN = range(6)
"""What became of a pit. DRAINED: by another pit's cut."""

BLOCK = 16
"""Side of the blocks whose lowest cells tell in advance that a search is hopeless."""

# Key of a cell in a search: cost, then the way walked as a tie-break, then the place in its window, row by row.
_PLACE_BITS = 24
_TIE_BITS = 12
_COST_SHIFT = _PLACE_BITS + _TIE_BITS
_PLACE = np.uint64((1 << _PLACE_BITS) - 1)
_MOST_TIE = np.uint64((1 << _TIE_BITS) - 1)
_UNREACHED = np.uint64((1 << 64) - 1)
MOST_COST = 1 << 27
"""Cost of a cut of the greatest depth along the greatest length."""

_WAY = 7  # in the byte of a cell in a search: the direction by which it was reached
_SOURCE = 8  # it belongs to the pit or its pool
_REACHED = 16
_WET = 32  # in the pool, or at its edge
_SHARES = (0.1, 0.25, 0.5, 0.75, 0.9)
"""Parts of a lake's depth to which its pit is filled by and by."""


@njit(cache=True, nogil=True)
def find_low_cells(z: np.ndarray, nrows: int, ncols: int, mark: np.ndarray) -> None:
    """Mark every cell without a lower neighbour, and those without an equal one.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations, -inf in voids and halo.
    nrows, ncols : int
    mark : uint8 array, shape (cells,)
        Result.
    """
    stride = ncols + 2
    for i in range(stride):
        mark[i] = 0
        mark[(nrows + 1) * stride + i] = 0
    for row in range(1, nrows + 1):
        start = row * stride
        above = z[start - stride : start]
        here = z[start : start + stride]
        below = z[start + stride : start + 2 * stride]
        out = mark[start : start + stride]
        out[0] = 0
        out[ncols + 1] = 0
        for i in range(1, ncols + 1):
            c = here[i]
            lowest = min(
                above[i - 1], above[i], above[i + 1], here[i - 1], here[i + 1], below[i - 1], below[i], below[i + 1]
            )
            out[i] = np.uint8((lowest >= c) & (c > -np.inf)) + np.uint8(2) * np.uint8((lowest > c) & (c > -np.inf))


@njit(cache=True, nogil=True, inline="always")
def _walled(walls: np.ndarray, walled: bool, cell: int | np.integer, way: int) -> bool:
    """Whether a wall stands between a cell and its neighbour."""
    return walled and (walls[cell] >> way) & 1 != 0


@njit(cache=True, nogil=True)
def _lowest_beside(z: np.ndarray, walls: np.ndarray, walled: bool, stride: int, cell: int | np.integer) -> np.floating:
    """Lowest neighbour that water can step to; the outside whatever walls there are; +inf where there is none."""
    o = neighbours(stride)
    c = np.uint64(cell)
    lowest = np.float32(np.inf)
    for k in range(8):
        height = z[c + o[k]]
        if height < lowest and (height == -np.inf or not _walled(walls, walled, c, k)):
            lowest = height
    return lowest


@njit(cache=True, nogil=True)
def note_constraints(
    z: np.ndarray, walls: np.ndarray, ends: np.ndarray, fixed: np.ndarray, nrows: int, ncols: int, mark: np.ndarray
) -> None:
    """Amend `find_low_cells` by what maps prescribe: walls, cells that keep their water, fixed directions.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    walls : uint8 array, shape (cells,)
    ends : bool array, shape (cells,)
    fixed : uint8 array, shape (cells,)
        See `basinwright.terrain.constraints`.
    nrows, ncols : int
    mark : uint8 array, shape (cells,)
        Amended.
    """
    stride = ncols + 2
    for c in range(stride, (nrows + 1) * stride):
        if z[c] == -np.inf:
            continue
        if ends[c]:
            mark[c] = END
        elif fixed[c] < 8:
            mark[c] = FIXED
        elif walls[c]:
            lowest = _lowest_beside(z, walls, True, stride, c)
            mark[c] = np.uint8(lowest >= z[c]) + np.uint8(2) * np.uint8(lowest > z[c])


@njit(cache=True, nogil=True)
def raise_single_cells(z: np.ndarray, mark: np.ndarray, walls: np.ndarray, walled: bool, nrows: int, ncols: int) -> int:
    """Raise every cell below all its neighbours to the lowest of them; returns how many.

    Two such cells are never neighbours, so their order does not matter.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Raised in place.
    mark : uint8 array, shape (cells,)
        From `find_low_cells`, kept true.
    walls : uint8 array, shape (cells,)
        Not read unless `walled`.
    walled : bool
    nrows, ncols : int
    """
    stride = ncols + 2
    o = neighbours(stride)
    raised = 0
    for cell in range(stride, (nrows + 1) * stride):
        if not mark[cell] & _SINGLE:
            continue
        c = np.uint64(cell)
        mark[c] = _LOW
        lowest = _lowest_beside(z, walls, walled, stride, cell)
        if lowest == np.inf:
            continue
        z[c] = lowest
        raised += 1
        for k in range(8):
            n = c + o[k]
            if z[n] == lowest and not mark[n] and _lowest_beside(z, walls, walled, stride, n) >= lowest:
                mark[n] = _LOW
    return raised


@njit(cache=True, nogil=True)
def group_pits(
    z: np.ndarray, mark: np.ndarray, walls: np.ndarray, walled: bool, nrows: int, ncols: int, members: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Group neighbouring low cells of equal elevation, and keep the groups that nothing drains.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    mark : uint8 array, shape (cells,)
        From `raise_single_cells`.
    walls : uint8 array, shape (cells,)
        Not read unless `walled`.
    walled : bool
    nrows, ncols : int
    members : int32 array, shape (cells,)
        Result: the cells of the pits, one pit after the other, the first of each being its first in memory.

    Returns
    -------
    bounds : int32 array, shape (pits + 1,)
        Where the members of each pit begin and end.
    state : uint8 array, shape (pits,)
        TO_DO, or OPEN beside ground that is not known.
    """
    stride = ncols + 2
    o = neighbours(stride)
    bounds = np.zeros(1024, np.int32)
    state = np.zeros(1024, np.uint8)
    pits = 0
    for start in range(stride, (nrows + 1) * stride):
        if mark[start] & (_LOW | _SEEN) != _LOW:
            continue
        level = z[start]
        head = bounds[pits]
        members[head] = start
        tail = head + 1
        mark[start] |= _SEEN
        drained = False
        unknown = False
        while head < tail:
            c = np.uint64(members[head])
            head += 1
            for k in range(8):
                n = c + o[k]
                height = z[n]
                if height == level:
                    if _walled(walls, walled, c, k):
                        continue
                    if not mark[n] & _LOW:
                        drained = True
                    elif not mark[n] & _SEEN:
                        mark[n] |= _SEEN
                        members[tail] = n
                        tail += 1
                elif height != height:
                    unknown = True
        if drained and not unknown:
            continue
        state[pits] = OPEN if unknown else TO_DO
        pits += 1
        if pits == state.size:
            bounds = enlarged(bounds, pits, 2 * pits)
            state = enlarged(state, pits, 2 * pits)
        bounds[pits] = tail
    return bounds[: pits + 1], state[:pits]


@njit(cache=True, nogil=True)
def lowest_around(z: np.ndarray, nrows: int, ncols: int, lowest: np.ndarray) -> None:
    """Lowest of each cell and its eight neighbours; nothing for the halo.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    nrows, ncols : int
    lowest : float32 array, shape (cells,) [m]
        Result.
    """
    stride = ncols + 2
    for row in range(1, nrows + 1):
        start = row * stride
        above = z[start - stride : start]
        here = z[start : start + stride]
        below = z[start + stride : start + 2 * stride]
        out = lowest[start : start + stride]
        for i in range(1, ncols + 1):
            out[i] = min(
                above[i - 1], above[i], above[i + 1], here[i - 1], here[i], here[i + 1],
                below[i - 1], below[i], below[i + 1],
            )  # fmt: skip


@njit(cache=True, nogil=True)
def block_minima(z: np.ndarray, nrows: int, ncols: int) -> np.ndarray:
    """Lowest elevation of every block of the padded raster, -inf where the outside or unknown ground is in it.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    nrows, ncols : int

    Returns
    -------
    float32 array, shape (blocks, blocks) [m]
    """
    stride = ncols + 2
    across = (stride + BLOCK - 1) // BLOCK
    lowest = np.full(((nrows + 2 + BLOCK - 1) // BLOCK, across), np.float32(np.inf))
    columns = np.empty(across * BLOCK, np.float32)
    for i in range(columns.size):
        columns[i] = np.inf
    for row in range(nrows + 2):
        here = z[row * stride : (row + 1) * stride]
        for i in range(stride):
            columns[i] = here[i] if not here[i] >= columns[i] else columns[i]
        if row % BLOCK == BLOCK - 1 or row == nrows + 1:
            out = lowest[row // BLOCK]
            for b in range(across):
                least = np.float32(np.inf)
                for i in range(b * BLOCK, (b + 1) * BLOCK):
                    least = columns[i] if not columns[i] >= least else least
                out[b] = least if least == least else np.float32(-np.inf)
            for i in range(columns.size):
                columns[i] = np.inf
    return lowest


@njit(cache=True, nogil=True)
def _is_hopeless(
    lowest: np.ndarray, stride: int, row0: int, row1: int, col0: int, col1: int, level: np.floating
) -> bool:
    """Whether no cell of a rectangle of the padded raster lies below a level; it may reach beyond what is known."""
    for b in range(max(row0, 0) // BLOCK, min(row1 // BLOCK + 1, lowest.shape[0])):
        for a in range(max(col0, 0) // BLOCK, min(col1, stride - 1) // BLOCK + 1):
            if lowest[b, a] < level:
                return False
    return True


@njit(cache=True, nogil=True)
def _push(heap: np.ndarray, size: int, key: np.uint64) -> None:
    """Put a key into a heap of `size` keys."""
    at = size
    while at > 0:
        above = (at - 1) >> 1
        if heap[above] <= key:
            break
        heap[at] = heap[above]
        at = above
    heap[at] = key


@njit(cache=True, nogil=True)
def _pop(heap: np.ndarray, size: int) -> np.uint64:
    """Take the least key out of a heap of `size` keys."""
    least = heap[0]
    key = heap[size - 1]
    last = size - 1
    at = 0
    while True:
        below = 2 * at + 1
        if below >= last:
            break
        if below + 1 < last and heap[below + 1] < heap[below]:
            below += 1
        if key <= heap[below]:
            break
        heap[at] = heap[below]
        at = below
    heap[at] = key
    return least


@njit(cache=True, nogil=True)
def _middle(sources: np.ndarray, count: int, bits: int, about: np.ndarray, rank: np.ndarray, queue: np.ndarray) -> int:
    """The source farthest from the edge of the sources; of several, the nearest to their centre of gravity.

    Parameters
    ----------
    sources : int32 array
        Places in the window, of which the first `count` count.
    count, bits : int
    about : uint8 array, shape (places,)
        With _SOURCE in every source.
    rank : int32 array, shape (places,)
        Work space, -1 in every source.
    queue : int32 array
        Work space for `count` places.
    """
    if count < 3:
        return sources[0]
    width = 1 << bits
    offsets = (-width, 1 - width, 1, width + 1, width, width - 1, -1, -width - 1)
    tail = 0
    sum_row = 0
    sum_col = 0
    for i in range(count):
        place = sources[i]
        sum_row += place >> bits
        sum_col += place & (width - 1)
        for k in range(8):
            if not about[place + offsets[k]] & _SOURCE:
                rank[place] = 0
                queue[tail] = place
                tail += 1
                break
    head = 0
    while head < tail:
        place = queue[head]
        head += 1
        for k in range(8):
            there = place + offsets[k]
            if about[there] & _SOURCE and rank[there] < 0:
                rank[there] = rank[place] + 1
                queue[tail] = there
                tail += 1
    deepest = rank[queue[tail - 1]]
    best = -1
    nearest = np.inf
    for i in range(tail - 1, -1, -1):
        place = queue[i]
        if rank[place] < deepest:
            break
        off_row = np.float64((place >> bits) * count - sum_row)
        off_col = np.float64((place & (width - 1)) * count - sum_col)
        off = off_row * off_row + off_col * off_col
        if off < nearest or (off == nearest and place < best):
            nearest = off
            best = place
    return best


@njit(cache=True, nogil=True)
def _original(
    cell: int | np.integer, height: float, mark: np.ndarray, cut_cell: np.ndarray, before: np.ndarray
) -> float:
    """Elevation before cuts."""
    if not mark[cell] & CUT:
        return height
    return before[np.searchsorted(cut_cell, cell)]


@njit(cache=True, nogil=True)
def _search(
    z: np.ndarray, drains_at: np.ndarray, around: np.ndarray, mark: np.ndarray, walls: np.ndarray, walled: bool,
    marked: bool, stride: int, cut_cell: np.ndarray, before: np.ndarray, level: np.floating, sources: np.ndarray,
    count: int, row0: int, col0: int, bits: int, step_mm: np.ndarray, limit_mm: int, depth_m: float, unit: float,
    key: np.ndarray, about: np.ndarray, length: np.ndarray, touched: np.ndarray, queue: np.ndarray,
    heap: np.ndarray,
) -> tuple[int | np.integer, int, bool, np.ndarray]:  # fmt: skip
    """Find the way of least cost from the sources to lower ground; of several, the nearest to the sources' middle.

    It ends beside the outside or a cell that drains at an elevation below the level; a first search, which does not
    know that, takes the elevation itself. Returns the place where it ends or -1, the number of touched places, whether
    unknown ground was met, and the heap, which may have grown.
    """
    o = steps(stride)
    width = 1 << bits
    offsets = steps(width)
    unknown = False
    middle = _middle(sources, count, bits, about, length, queue)
    size = 0
    touches = 0
    for i in range(count):
        here = np.uint64(sources[i])
        touched[i] = here
        inside = True
        for k in range(8):
            inside = inside and about[here + offsets[k]] & _SOURCE != 0
        if inside:
            continue
        off_row = np.float64((sources[i] >> bits) - (middle >> bits))
        off_col = np.float64((sources[i] & (width - 1)) - (middle & (width - 1)))
        tie = min(np.uint64(16.0 * np.sqrt(off_row * off_row + off_col * off_col)), _MOST_TIE)
        key[here] = tie << np.uint64(_PLACE_BITS) | here
        length[here] = 0
        if size == heap.size:
            heap = enlarged(heap, size, 2 * size)
        _push(heap, size, key[here])
        size += 1
    touches = count
    nearest = _UNREACHED  # key of the first place found to end at; what comes after it need not be looked at
    while size > 0:
        top = _pop(heap, size)
        size -= 1
        here = top & _PLACE
        if key[here] != top:
            continue
        row = row0 + (np.int64(here) >> bits)
        c = np.uint64(row * stride + col0 + (np.int64(here) & (width - 1)))
        in_table = np.uint64(row - 1)
        if marked and mark[c] & END:
            return np.int64(here), touches, unknown, heap
        if not walled and around[c] < level:
            return np.int64(here), touches, unknown, heap
        for k in range(np.uint64(8 if walled or marked else 0)):
            n = c + o[k]
            height = z[n]
            if height == -np.inf:
                return np.int64(here), touches, unknown, heap
            if drains_at[n] < level:
                if not _walled(walls, walled, c, k):
                    return np.int64(here), touches, unknown, heap
            elif marked and height == level and mark[n] & (END | FIXED) and not _walled(walls, walled, c, k):
                return np.int64(here), touches, unknown, heap
        so_far = top >> np.uint64(_COST_SHIFT)
        walked = (top >> np.uint64(_PLACE_BITS)) & _MOST_TIE
        for k in range(np.uint64(8)):
            there = here + offsets[k]
            if key[there] < top or about[there] & _SOURCE:
                continue
            step = step_mm[in_table, k]
            reach = length[here] + step
            if reach > limit_mm:
                continue
            n = c + o[k]
            depth = np.float64(z[n]) - level
            if not depth <= depth_m:
                unknown = unknown or depth != depth
                continue
            if depth < 0.0:
                depth = np.float64(0.0)
            if marked and depth > 0.0 and mark[n] & (CUT | FIXED):
                if mark[n] & FIXED:
                    continue
                depth = np.float64(_original(np.int64(n), z[n], mark, cut_cell, before)) - level
                if depth > depth_m:
                    continue
            if _walled(walls, walled, c, k):
                continue
            cost = so_far + np.uint64(np.sqrt(depth) * step * unit)
            tie = min(walked + np.uint64(23 if k & 1 else 16), _MOST_TIE)
            new = cost << np.uint64(_COST_SHIFT) | tie << np.uint64(_PLACE_BITS) | there
            if new < key[there] and new < nearest:
                if not walled and around[n] < level:
                    nearest = new
                if not about[there] & _REACHED:
                    touched[touches] = there
                    touches += 1
                key[there] = new
                about[there] = about[there] & _WET | _REACHED | k
                length[there] = reach
                if size == heap.size:
                    heap = enlarged(heap, size, 2 * size)
                _push(heap, size, new)
                size += 1
    return -1, touches, unknown, heap


@njit(cache=True, nogil=True)
def _trace_back(
    z: np.ndarray, stride: int, level: np.floating, goal: int | np.integer, row0: int, col0: int, bits: int,
    about: np.ndarray, cut_cell: np.ndarray, cut_level: np.ndarray, cuts: int,
) -> tuple[np.ndarray, np.ndarray, int]:  # fmt: skip
    """Note the cuts along the way to a place, which the search found."""
    width = 1 << bits
    offsets = (-width, 1 - width, 1, width + 1, width, width - 1, -1, -width - 1)
    here = goal
    while not about[here] & _SOURCE:
        c = (row0 + (here >> bits)) * stride + col0 + (here & (width - 1))
        if z[c] > level:
            if cuts == cut_cell.size:
                cut_cell = enlarged(cut_cell, cuts, 2 * cuts)
                cut_level = enlarged(cut_level, cuts, 2 * cuts)
            cut_cell[cuts] = c
            cut_level[cuts] = level
            cuts += 1
        here -= offsets[about[here] & _WAY]
    return cut_cell, cut_level, cuts


@njit(cache=True, nogil=True)
def _bits_for(columns: int) -> int:
    bits = 1
    while 1 << bits < columns:
        bits += 1
    return bits


@njit(cache=True, nogil=True)
def _reach(row0: int, row1: int, step_mm: np.ndarray, limit_mm: int) -> tuple[int, int]:
    """Rows and columns that the longest way from some rows can lead away; cell sizes change one way with the row."""
    rows = step_mm.shape[0]
    down = limit_mm // max(min(step_mm[0, 0], step_mm[rows - 1, 0]), 1) + 2
    north = min(max(row0 - down, 1), rows) - 1
    south = min(max(row1 + down, 1), rows) - 1
    return down, limit_mm // max(min(step_mm[north, 2], step_mm[south, 2]), 1) + 2


@njit(cache=True, nogil=True)
def breach_pits(
    z: np.ndarray, mark: np.ndarray, walls: np.ndarray, walled: bool, marked: bool, ncols: int,
    around: np.ndarray, lowest: np.ndarray, members: np.ndarray, bounds: np.ndarray, first: int, last: int,
    step_mm: np.ndarray, limit_mm: int, depth_m: float, edges: np.ndarray, state: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Search a way out of some of the pits.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations after `raise_single_cells`; read only, as all arrays but `state`.
    mark : uint8 array, shape (cells,)
    walls : uint8 array, shape (cells,)
        Not read unless `walled`.
    walled, marked : bool
        Whether there are walls; whether any cell is marked END or FIXED.
    ncols : int
    around : float32 array, shape (cells,) [m]
        From `lowest_around`.
    lowest : float32 array, shape (blocks, blocks) [m]
        From `block_minima`.
    members, bounds : int32 arrays
        From `group_pits`.
    first, last : int
        The pits from `first` up to and without `last`.
    step_mm : int32 array, shape (nrows, 8) [mm]
        Length of a step out of a cell, by row and direction.
    limit_mm : int [mm]
        Longest way from the edge of a pit, on the ground.
    depth_m : float [m]
        Deepest cut.
    edges : int64 array, shape (4,)
        First and last row, first and last column of the padded raster; beyond those of `z` where that is a window.
    state : uint8 array, shape (pits,)
        Result for pits that were TO_DO: BREACHED, FAILED or OPEN.

    Returns
    -------
    cut_cell : int32 array, shape (cuts,)
        Cells to cut; a cell may come more than once.
    cut_level : float32 array, shape (cuts,) [m]
        To what level.
    """
    stride = ncols + 2
    unit = MOST_COST / (np.sqrt(max(depth_m, 1e-9)) * max(limit_mm, 1))
    cut_cell = np.empty(256, np.int32)
    cut_level = np.empty(256, np.float32)
    cuts = 0
    none_cell = np.empty(0, np.int32)
    none_level = np.empty(0, np.float32)
    key = np.empty(0, np.uint64)
    about = np.empty(0, np.uint8)
    length = np.empty(0, np.int32)
    touched = np.empty(0, np.int32)
    heap = np.empty(256, np.uint64)
    sources = np.empty(256, np.int32)
    queue = np.empty(256, np.int32)
    for p in range(first, last):
        if state[p] != TO_DO:
            continue
        count = bounds[p + 1] - bounds[p]
        level = z[members[bounds[p]]]
        row0 = members[bounds[p]] // stride
        row1 = row0
        col0 = stride
        col1 = 0
        for i in range(bounds[p], bounds[p + 1]):
            row = members[i] // stride
            col = members[i] - row * stride
            row1 = max(row1, row)
            col0 = min(col0, col)
            col1 = max(col1, col)
        down, across = _reach(row0, row1, step_mm, limit_mm)
        row0 = max(row0 - down, edges[0])
        row1 = min(row1 + down, edges[1])
        col0 = max(col0 - across, edges[2])
        col1 = min(col1 + across, edges[3])
        bits = _bits_for(col1 - col0 + 1)
        places = (row1 - row0 + 1) << bits
        if places > 1 << _PLACE_BITS or _is_hopeless(lowest, stride, row0, row1, col0, col1, level):
            state[p] = FAILED
            continue
        if places > key.size:
            key = np.full(places, _UNREACHED)
            about = np.zeros(places, np.uint8)
            length = np.full(places, np.int32(-1))
            touched = np.empty(places, np.int32)
        if count > sources.size:
            sources = np.empty(2 * count, np.int32)
            queue = np.empty(2 * count, np.int32)
        for i in range(count):
            cell = members[bounds[p] + i]
            row = cell // stride
            place = (row - row0) << bits | (cell - row * stride - col0)
            sources[i] = place
            about[place] = _SOURCE
        goal, touches, unknown, heap = _search(
            z, z, around, mark, walls, walled, marked, stride, none_cell, none_level, level, sources, count,
            row0, col0, bits, step_mm, limit_mm, depth_m, unit, key, about, length, touched, queue, heap,
        )  # fmt: skip
        if unknown:
            state[p] = OPEN
        elif goal < 0:
            state[p] = FAILED
        else:
            state[p] = BREACHED
            cut_cell, cut_level, cuts = _trace_back(
                z, stride, level, goal, row0, col0, bits, about, cut_cell, cut_level, cuts
            )
        for i in range(touches):
            place = touched[i]
            key[place] = _UNREACHED
            about[place] = 0
            length[place] = -1
    return cut_cell[:cuts], cut_level[:cuts]


@njit(cache=True, nogil=True)
def make_cuts(z: np.ndarray, mark: np.ndarray, cut_cell: np.ndarray, cut_level: np.ndarray) -> None:
    """Cut cells down, in place: where several cuts meet the deepest counts.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    mark : uint8 array, shape (cells,)
        Cells that were cut are marked CUT.
    cut_cell : int32 array, shape (cuts,)
    cut_level : float32 array, shape (cuts,) [m]
    """
    for i in range(cut_cell.size):
        c = cut_cell[i]
        z[c] = min(z[c], cut_level[i])
        mark[c] |= CUT


@njit(cache=True, nogil=True, inline="always")
def _rank_of(bits: np.uint32) -> np.uint64:
    """A number that orders float32 values as their bits are given."""
    if bits >> np.uint32(31):
        return np.uint64(bits ^ np.uint32(0xFFFFFFFF))
    return np.uint64(bits | np.uint32(0x80000000))


_GROWN, _TOO_NARROW, _UNKNOWN, _STOPPED = range(4)


@njit(cache=True, nogil=True)
def _let_rise(
    z: np.ndarray, z_bits: np.ndarray, walls: np.ndarray, walled: bool, stride: int, seed: int, top: float,
    row0: int, col0: int, bits: int, north: int, south: int, west: int, east: int,
    about: np.ndarray, queue: np.ndarray, queued: int, water: np.floating,
    pool: np.ndarray, count: int, wet: np.ndarray, wetted: int,
) -> tuple[int, np.ndarray, int, np.floating, int, int]:  # fmt: skip
    """Let the water in a pit rise to the lowest elevation beside it that is not below `top`.

    It stops where a cell lies below the pit, or at its level and before it in memory: then that one's water is the
    matter. The window is too narrow where water comes beyond the given rows and columns of the padded raster.

    Returns how it ended, the queue of cells at the water's edge and its length, the level, the number of places in
    the pool and of those that are wet or at the edge.
    """
    o = neighbours(stride)
    width = 1 << bits
    offsets = (-width, 1 - width, 1, width + 1, width, width - 1, -1, -width - 1)
    level = z[seed]
    while queued > 0:
        here = np.int64(queue[0] & np.uint64(0xFFFFFFFF))
        row = row0 + (here >> bits)
        col = col0 + (here & (width - 1))
        c = np.uint64(row * stride + col)
        if water >= top and z[c] > water:
            return _GROWN, queue, queued, water, count, wetted
        if row < north or row > south or col < west or col > east:
            return _TOO_NARROW, queue, queued, water, count, wetted
        _pop(queue, queued)
        queued -= 1
        water = max(water, z[c])
        pool[count] = here
        count += 1
        for k in range(8):
            n = c + o[k]
            height = z[n]
            there = here + offsets[k]
            if about[there] & _WET or (height > -np.inf and _walled(walls, walled, c, k)):
                continue
            if height != height:
                return _UNKNOWN, queue, queued, water, count, wetted
            if height < level or (height == level and np.int64(n) < seed):
                return _STOPPED, queue, queued, water, count, wetted
            about[there] |= _WET
            wet[wetted] = there
            wetted += 1
            if queued == queue.size:
                queue = enlarged(queue, queued, 2 * queued)
            _push(queue, queued, _rank_of(z_bits[n]) << np.uint64(32) | np.uint64(there))
            queued += 1
    return _STOPPED, queue, queued, water, count, wetted


@njit(cache=True, nogil=True)
def breach_pools(
    z: np.ndarray, filled: np.ndarray, around: np.ndarray, mark: np.ndarray, walls: np.ndarray, walled: bool,
    marked: bool, ncols: int, lowest: np.ndarray, members: np.ndarray, bounds: np.ndarray, pits: np.ndarray,
    first: int, last: int, step_mm: np.ndarray, limit_mm: int, depth_m: float, edges: np.ndarray,
    cut_before: np.ndarray, before: np.ndarray, state: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Fill some of the pits part of the way, and search a way out of the lakes that they would become.

    A pit is filled to some parts of the depth of its lake, lowest first, until a search finds a way to ground that
    drains below that level. Levels from which the greatest depth does not cut down from where the lake spills are
    passed over. All levels are elevations beside the pit. In a lake of several pits the lowest is breached.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations after the cuts of `breach_pits`; read only, as all arrays but `state`.
    filled : float32 array, shape (cells,) [m]
        The same, filled.
    around : float32 array, shape (cells,) [m]
        From `lowest_around` of `filled`.
    lowest : float32 array, shape (blocks, blocks) [m]
        From `block_minima` of `filled`.
    mark, walls, walled, marked, ncols, members, bounds, step_mm, limit_mm, depth_m, edges
        As for `breach_pits`; the cells that were cut are marked CUT.
    pits : int32 array
        Numbers of the pits, of which those from `first` up to and without `last` are looked at.
    first, last : int
    cut_before : int32 array, shape (cuts,)
        The cells that were cut, rising.
    before : float32 array, shape (cuts,) [m]
        Their elevations before.
    state : uint8 array, shape (pits,)
        Result: BREACHED_FROM_POOL, DRAINED, FAILED or OPEN.

    Returns
    -------
    cut_cell : int32 array, shape (cuts,)
    cut_level : float32 array, shape (cuts,) [m]
        As from `breach_pits`.
    """
    stride = ncols + 2
    z_bits = z.view(np.uint32)
    marked = marked or cut_before.size > 0
    unit = MOST_COST / (np.sqrt(max(depth_m, 1e-9)) * max(limit_mm, 1))
    cut_cell = np.empty(256, np.int32)
    cut_level = np.empty(256, np.float32)
    cuts = 0
    key = np.empty(0, np.uint64)
    about = np.empty(0, np.uint8)
    length = np.empty(0, np.int32)
    touched = np.empty(0, np.int32)
    pool = np.empty(0, np.int32)
    wet = np.empty(0, np.int32)
    inner = np.empty(0, np.int32)
    heap = np.empty(256, np.uint64)
    queue = np.empty(256, np.uint64)
    tops = np.empty(len(_SHARES) + 1)
    for i in range(first, last):
        p = pits[i]
        seed = members[bounds[p]]
        level = z[seed]
        depth = np.float64(filled[seed]) - level
        if depth <= 0.0:
            state[p] = DRAINED
            continue
        least = np.float64(filled[seed]) - depth_m
        for j in range(len(_SHARES)):
            tops[j] = level + _SHARES[j] * depth
        tops[len(_SHARES)] = least
        tops.sort()
        row = seed // stride
        col = seed - row * stride
        down, across = _reach(row, row, step_mm, limit_mm)
        beyond = 24
        at = 0
        while at < tops.size and tops[at] < least:
            at += 1
        while at < tops.size:
            north, south, west, east = row - beyond, row + beyond, col - beyond, col + beyond
            row0, row1 = max(north - down, edges[0]), min(south + down, edges[1])
            col0, col1 = max(west - across, edges[2]), min(east + across, edges[3])
            if row0 == edges[0]:
                north = row0
            if row1 == edges[1]:
                south = row1
            if col0 == edges[2]:
                west = col0
            if col1 == edges[3]:
                east = col1
            bits = _bits_for(col1 - col0 + 1)
            places = (row1 - row0 + 1) << bits
            if places > 1 << _PLACE_BITS:
                break
            if places > key.size:
                key = np.full(places, _UNREACHED)
                about = np.zeros(places, np.uint8)
                length = np.full(places, np.int32(-1))
                touched = np.empty(places, np.int32)
                pool = np.empty(places, np.int32)
                wet = np.empty(places, np.int32)
                inner = np.empty(places, np.int32)
            start = (row - row0) << bits | (col - col0)
            about[start] = _WET
            wet[0] = start
            wetted = 1
            queue[0] = _rank_of(z_bits[seed]) << np.uint64(32) | np.uint64(start)
            queued = 1
            count = 0
            water = np.float32(-np.inf)
            how = _GROWN
            while at < tops.size:
                last_water = water
                how, queue, queued, water, count, wetted = _let_rise(
                    z, z_bits, walls, walled, stride, seed, tops[at], row0, col0, bits, north, south, west, east,
                    about, queue, queued, water, pool, count, wet, wetted,
                )  # fmt: skip
                if how != _GROWN or water >= filled[seed]:
                    break
                at += 1
                if water == last_water or _is_hopeless(lowest, stride, row0, row1, col0, col1, water):
                    continue
                for s in range(count):
                    about[pool[s]] = _WET | _SOURCE
                goal, touches, unknown, heap = _search(
                    z, filled, around, mark, walls, walled, marked, stride, cut_before, before, water, pool, count,
                    row0, col0, bits, step_mm, limit_mm, depth_m, unit, key, about, length, touched, inner, heap,
                )  # fmt: skip
                if unknown:
                    how = _UNKNOWN
                elif goal >= 0:
                    state[p] = BREACHED_FROM_POOL
                    how = _STOPPED
                    cut_cell, cut_level, cuts = _trace_back(
                        z, stride, water, goal, row0, col0, bits, about, cut_cell, cut_level, cuts
                    )
                for s in range(touches):
                    place = touched[s]
                    key[place] = _UNREACHED
                    about[place] &= _WET
                    length[place] = -1
                if how != _GROWN:
                    break
            for s in range(wetted):
                about[wet[s]] = 0
            if how == _UNKNOWN:
                state[p] = OPEN
            if how != _TOO_NARROW:
                break
            beyond *= 2
    return cut_cell[:cuts], cut_level[:cuts]


@njit(cache=True, nogil=True)
def fill_lakes(
    z: np.ndarray, mark: np.ndarray, ncols: int, seeds: np.ndarray, lake: np.ndarray, most_cells: int
) -> bool:
    """Fill what does not drain yet, from each seed only as far as its lake reaches.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Filled in place.
    mark : uint8 array, shape (cells,)
    ncols : int
    seeds : int32 array, shape (seeds,)
        A cell of every pit that may not drain.
    lake : int32 array, shape (cells,)
        Work space.
    most_cells : int
        Give up when the lakes together have more cells than this: filling all terrain at once is then faster. What
        has been filled by then is filled to its final level at most, so that the result is the same.

    Returns
    -------
    bool
        Whether all is filled.
    """
    o = neighbours(ncols + 2)
    for seed in seeds:
        mark[seed] &= _ALL - _RAISED
    z_bits = z.view(np.uint32)
    heap = np.empty(256, np.uint64)
    looked_at = 0
    for seed in seeds:
        if mark[seed] & _RAISED:
            continue
        if looked_at > most_cells:
            return False
        heap[0] = _rank_of(z_bits[seed]) << np.uint64(32) | np.uint64(seed)
        mark[seed] |= _POOL
        size = 1
        count = 0
        water = np.float32(-np.inf)
        spills = False
        while size > 0 and not spills:
            c = _pop(heap, size) & np.uint64(0xFFFFFFFF)
            size -= 1
            lake[count] = c
            count += 1
            water = max(water, z[c])
            for k in range(8):
                n = c + o[k]
                height = z[n]
                if mark[n] & _POOL:
                    continue
                if height < water:
                    spills = True
                    break
                mark[n] |= _POOL
                if size == heap.size:
                    heap = enlarged(heap, size, 2 * size)
                _push(heap, size, _rank_of(z_bits[n]) << np.uint64(32) | n)
                size += 1
        looked_at += count
        for i in range(size):
            mark[heap[i] & np.uint64(0xFFFFFFFF)] &= _ALL - _POOL
        for i in range(count):
            c = np.uint64(lake[i])
            mark[c] &= _ALL - _POOL
            if spills:
                mark[c] |= _RAISED
                z[c] = water
    return True


@njit(cache=True, nogil=True)
def close_voids(z: np.ndarray) -> None:
    """Turn voids and halo from -inf to +inf, in place."""
    for c in range(z.size):
        z[c] = np.inf if z[c] == -np.inf else z[c]
