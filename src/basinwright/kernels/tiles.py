"""What the tiles of a large raster need beyond the kernels of a whole one: the ways across their rims.

A tile is a flat padded raster of its own. What it cannot know by itself is told to it, and by it, cell by cell along
its rim; the amount of that grows with the side of a tile, not with its area.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, FLAT, NO_CELL, VOID
from basinwright.kernels.flats import _BY_DISTANCE
from basinwright.kernels.geometry import neighbours, steps

_LOW_HALF = (1 << 32) - 1
UNREACHED = np.iinfo(np.int32).max
"""Steps of a cell of a flat that nothing has reached yet."""
NO_FLAT = 0
"""Steps of a cell that is in no flat that crosses a rim. Zero, as memory comes: most of it is never touched."""
NO_CODE = 255


@njit(cache=True, nogil=True)
def _union_of(up: np.ndarray, i: int) -> int:
    while up[i] != i:
        up[i] = up[up[i]]
        i = up[i]
    return i


@njit(cache=True, nogil=True)
def join_catchments(
    terminal: np.ndarray, pair: np.ndarray, level: np.ndarray, by_level: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Reduce the passes between a tile's catchments to those between the catchments at its rim.

    Parameters
    ----------
    terminal : bool array, shape (labels,)
        Catchments at the rim, and the outside (0).
    pair : int64 array, shape (passes,)
        As `fill.find_passes` gives them.
    level : float32 array, shape (passes,) [m]
    by_level : int64 array, shape (passes,)
        Positions of the passes, lowest first.

    Returns
    -------
    spill : float32 array, shape (labels,) [m]
        Lowest over all ways to any terminal of the highest pass on the way; -inf for terminals.
    reached : int32 array, shape (labels,)
        A terminal to which that way leads.
    edge : int64 array, shape (edges,)
        Pairs of terminals, packed as `pair`: a spanning tree of theirs, so fewer than there are terminals.
    edge_level : float32 array, shape (edges,) [m]

    Notes
    -----
    Kruskal's minimum spanning tree (1956). Between any two terminals the highest pass of the best way through the
    tile is the highest of the tree's edges between them. From any catchment the best way to the outside leads over
    the terminal that it reaches at the lowest level: a way over another is as high as the one between the two.
    """
    labels = terminal.size
    up = np.empty(labels, np.int32)
    host = np.empty(labels, np.int32)  # of each union, its terminal
    spill = np.empty(labels, np.float32)
    reached = np.empty(labels, np.int32)
    for i in range(labels):
        up[i] = i
        host[i] = i if terminal[i] else NO_CELL
        reached[i] = host[i]
        spill[i] = -np.inf
    joined = np.empty(labels, np.int32)
    joined_to = np.empty(labels, np.int32)
    joins = 0
    edge = np.empty(labels, np.int64)
    edge_level = np.empty(labels, np.float32)
    edges = 0
    for e in by_level:
        a = _union_of(up, pair[e] >> 32)
        b = _union_of(up, pair[e] & _LOW_HALF)
        if a == b:
            continue
        if host[a] == NO_CELL:
            a, b = b, a
        up[b] = a
        if host[b] != NO_CELL:
            edge[edges] = np.int64(host[a]) << 32 | np.int64(host[b])
            edge_level[edges] = level[e]
            edges += 1
            continue
        joined[joins] = b
        joined_to[joins] = a
        joins += 1
        if host[a] != NO_CELL:  # all that b has gathered leaves over this pass
            spill[b] = level[e]
            reached[b] = host[a]
    for j in range(joins - 1, -1, -1):
        b = joined[j]
        if reached[b] == NO_CELL:
            spill[b] = spill[joined_to[j]]
            reached[b] = reached[joined_to[j]]
    return spill, reached, edge[:edges], edge_level[:edges]


@njit(cache=True, nogil=True)
def find_open_flats(
    z: np.ndarray, directions: np.ndarray, stride: int, ring: np.ndarray, queue: np.ndarray
) -> tuple[int, np.ndarray, np.ndarray, np.ndarray]:
    """Find the flats of a tile that go on beyond it, and hide them.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Conditioned elevations of the tile and the ring of cells around it, padded.
    directions : uint8 array, shape (cells,)
        By steepest descent. The FLAT cells of the ring and of the flats that they belong to become VOID.
    stride : int
    ring : int32 array
        Cells of the ring.
    queue : int32 array, shape (cells,)
        Work space.

    Returns
    -------
    of_ring : int
        How many of the cells are of the ring; they come first.
    cells : int32 array, shape (n,)
        Cells of the open flats.
    towards : uint8 array, shape (n,)
        Direction to a neighbour of equal elevation that drains, the nearer ones first; NO_CODE without one.
    beside_higher : bool array, shape (n,)
    """
    o = neighbours(stride)
    tail = 0
    for c in ring:
        if directions[c] == FLAT:
            directions[c] = VOID
            queue[tail] = c
            tail += 1
    of_ring = tail
    head = 0
    while head < tail:
        c = np.uint64(queue[head])
        head += 1
        for k in range(8):
            n = c + o[k]
            if directions[n] == FLAT:
                directions[n] = VOID
                queue[tail] = n
                tail += 1
    towards = np.full(tail, NO_CODE, np.uint8)
    beside_higher = np.zeros(tail, np.bool_)
    for i in range(of_ring, tail):
        c = np.uint64(queue[i])
        for k in _BY_DISTANCE:
            n = c + o[k]
            if z[n] > z[c]:
                beside_higher[i] = True
            elif z[n] == z[c] and towards[i] == NO_CODE and directions[n] <= EXIT:
                towards[i] = k
    return of_ring, queue[:tail].copy(), towards, beside_higher


@njit(cache=True, nogil=True)
def spread_steps(field: np.ndarray, stride: int, sources: np.ndarray, queue: np.ndarray) -> None:
    """Count the steps from the sources across open flats, breadth first.

    Parameters
    ----------
    field : int32 array, shape (cells,)
        NO_FLAT outside flats, UNREACHED or an upper bound inside; lowered in place.
    stride : int
    sources : int32 array
        Cells to start from, those with the fewest steps first.
    queue : int32 array, shape (cells,)
        Work space.
    """
    o = neighbours(stride)
    at_start = field[sources]
    s = 0
    head = 0
    tail = 0
    while s < sources.size or head < tail:
        if head < tail and (s == sources.size or field[queue[head]] <= at_start[s]):
            c = np.uint64(queue[head])
            head += 1
        else:
            c = np.uint64(sources[s])
            s += 1
            if field[c] != at_start[s - 1]:
                continue  # reached in fewer steps since
        following = field[c] + np.int32(1)
        for k in range(8):
            n = c + o[k]
            if field[n] > following:
                field[n] = following
                queue[tail] = n
                tail += 1


@njit(cache=True, nogil=True)
def drain_open_flats(
    directions: np.ndarray, stride: int, cells: np.ndarray, towards: np.ndarray, nearer: np.ndarray, away: np.ndarray
) -> int:
    """Give the cells of open flats their directions, as `flats` does; returns how many got none.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
        Written to.
    stride : int
    cells : int32 array, shape (n,)
    towards : uint8 array, shape (n,)
        Direction to a cell that drains, or NO_CODE.
    nearer, away : int32 arrays, shape (cells,)
        Steps to lower ground, and from higher ground.
    """
    o = steps(stride)
    undrained = 0
    for i in range(cells.size):
        c = np.uint64(cells[i])
        code = towards[i]
        if code == NO_CODE:
            best = -1
            for k in _BY_DISTANCE:
                n = c + o[k]
                if nearer[n] == NO_FLAT or nearer[n] != nearer[c] - 1:
                    continue
                steps_away = away[n] if away[n] != UNREACHED else 0  # nowhere in this flat is there higher ground
                if steps_away > best:
                    best = steps_away
                    code = k
        if code == NO_CODE or nearer[c] == UNREACHED:
            undrained += 1
        else:
            directions[c] = code
    return undrained


@njit(cache=True, nogil=True)
def ways_across(directions: np.ndarray, stride: int, starts: np.ndarray, mark: np.ndarray) -> np.ndarray:
    """Where the water of each start leaves its tile.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
        Finished directions of the tile, VOID in its halo.
    stride : int
    starts : int32 array, shape (n,)
    mark : int32 array, shape (cells,)
        Work space; must come in as zeros.

    Returns
    -------
    int32 array, shape (n,)
        The cell of the halo; NO_CELL where the water ends inside, or there is none.
    """
    o = steps(stride)
    ends = np.empty(starts.size, np.int32)
    for i in range(starts.size):
        c = np.uint64(starts[i])
        ends[i] = NO_CELL
        while True:
            if mark[c] > 0:
                ends[i] = ends[mark[c] - 1]
                break
            mark[c] = i + 1
            code = directions[c]
            if code >= EXIT:
                break
            c += o[code]
            if directions[c] == VOID:
                ends[i] = c
                break
    return ends


@njit(cache=True, nogil=True)
def pour_in(
    directions: np.ndarray, stride: int, entries: np.ndarray, inflow: np.ndarray, total: np.ndarray,
    coming: np.ndarray, passing: np.ndarray,
) -> None:  # fmt: skip
    """Add what enters a tile to all cells that it passes.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
        Finished directions of the tile, VOID in its halo.
    stride : int
    entries : int32 array, shape (n,)
        No cell twice.
    inflow : float64 array, shape (n,)
    total : float64 array, shape (cells,)
        Added to.
    coming : uint8 array, shape (cells,)
        Work space; must come in as zeros.
    passing : float64 array, shape (cells,)
        Work space; must come in as zeros.
    """
    o = steps(stride)
    for start in entries:  # count what comes together where
        c = np.uint64(start)
        while directions[c] != VOID:
            coming[c] += 1
            if coming[c] > 1 or directions[c] >= EXIT:
                break
            c += o[directions[c]]
    for i in range(entries.size):
        c = np.uint64(entries[i])
        flow = inflow[i]
        while directions[c] != VOID:
            passing[c] += flow
            coming[c] -= 1
            if coming[c] > 0:
                break
            flow = passing[c]
            total[c] += flow
            if directions[c] >= EXIT:
                break
            c += o[directions[c]]
