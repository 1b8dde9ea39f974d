"""Mapped streams on the grid: laying lines, which way they drain, cutting along them, what is led into them.

Cells of the mapped network are listed in ``cells``; ``slot`` (int32, one for each cell of the padded raster) gives a
cell's place in that list, -1 off the network. ``links`` (uint8) has bit d set where a line goes from a cell to its
neighbour d: cells that merely lie side by side are not joined, so that a meander is not cut short at its neck.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, FREE, NO_CELL, VOID
from basinwright.kernels.constraints import offsets
from basinwright.kernels.heap import enlarged, pop, push

_TIE_CELLS = 1 << 31
UNREACHED = -2


@njit(cache=True, nogil=True, inline="always")
def _direction(step: int, o: np.ndarray) -> int:
    """Direction of an index offset; -1 where it is no step to a neighbour."""
    for k in range(8):
        if o[k] == step:
            return k
    return -1


@njit(cache=True, nogil=True)
def _join(links: np.ndarray, o: np.ndarray, a: int, b: int) -> None:
    k = _direction(b - a, o)
    if k >= 0:
        links[a] |= np.uint8(1 << k)
        links[b] |= np.uint8(1 << ((k + 4) & 7))


@njit(cache=True, nogil=True)
def lay_lines(
    x: np.ndarray, y: np.ndarray, bounds: np.ndarray, z: np.ndarray, nrows: int, ncols: int, links: np.ndarray,
    line_of: np.ndarray,
) -> None:  # fmt: skip
    """Lay lines on the grid as chains of neighbouring cells, corners cut; the same whichever way they were drawn.

    Parameters
    ----------
    x, y : float64 arrays, shape (vertices,) [cells]
        Columns to the right and rows down from the raster's upper left corner.
    bounds : int64 array, shape (lines + 1,)
    z : float32 array, shape (cells,) [m]
        +inf in voids and halo, where lines are interrupted.
    nrows, ncols : int
    links : uint8 array, shape (cells,)
        Added to.
    line_of : int32 array, shape (cells,)
        Result where it was -1: the first line on the cell.
    """
    stride = ncols + 2
    o = offsets(stride)
    for line in range(bounds.size - 1):
        before = NO_CELL  # the last cell that stands, and the one after it that may still prove a corner
        here = NO_CELL
        first = bounds[line]
        last = bounds[line + 1] - 1
        onward = x[first] < x[last] or (x[first] == x[last] and y[first] <= y[last])
        for vertex in range(max(last - first, 1)):
            i = first + vertex if onward else last - vertex
            j = min(i + 1, last) if onward else i - 1
            pieces = max(1, int(np.ceil(2.0 * max(abs(x[j] - x[i]), abs(y[j] - y[i])))))
            for piece in range(0 if vertex == 0 else 1, pieces + 1):
                part = piece / pieces
                col = int(np.floor(x[i] + (x[j] - x[i]) * part))
                row = int(np.floor(y[i] + (y[j] - y[i]) * part))
                c = NO_CELL
                if 0 <= row < nrows and 0 <= col < ncols:
                    c = (row + 1) * stride + col + 1
                    if z[c] == np.inf:
                        c = NO_CELL
                if c == here:
                    continue
                if c >= 0 and before >= 0 and (c == before or _direction(c - before, o) >= 0):
                    here = c  # the cell between was a corner
                    if c == before:
                        before = NO_CELL
                    continue
                if here >= 0:
                    if before >= 0:
                        _join(links, o, before, here)
                    if line_of[here] < 0:
                        line_of[here] = line
                before = here if c >= 0 else NO_CELL
                here = c
        if here >= 0:
            if before >= 0:
                _join(links, o, before, here)
            if line_of[here] < 0:
                line_of[here] = line


@njit(cache=True, nogil=True)
def join_straight(
    start: np.ndarray, end: np.ndarray, z: np.ndarray, stride: int, ends: np.ndarray, links: np.ndarray,
    line_of: np.ndarray,
) -> int:  # fmt: skip
    """Bridge gaps by straight chains of cells, unless a void or a cell that keeps its water lies in them.

    Parameters
    ----------
    start, end : int32 arrays, shape (gaps,)
        Cells to be joined.
    z : float32 array, shape (cells,) [m]
    stride : int
    ends : bool array, shape (cells,)
    links, line_of : arrays, shape (cells,)
        Added to; the cells between take the line of the start.

    Returns
    -------
    int
        Gaps bridged.
    """
    o = offsets(stride)
    bridged = 0
    for i in range(start.size):
        rows = end[i] // stride - start[i] // stride
        cols = end[i] % stride - start[i] % stride
        count = max(abs(rows), abs(cols))
        free = True
        for run in range(2):
            before = int(start[i])
            for j in range(1, count + 1):
                row = start[i] // stride + int(np.rint(rows * j / count))
                col = start[i] % stride + int(np.rint(cols * j / count))
                c = row * stride + col
                if run == 0:
                    free &= z[c] < np.inf and (not ends[c] or j == count)
                elif free:
                    _join(links, o, before, c)
                    if line_of[c] < 0:
                        line_of[c] = line_of[start[i]]
                before = c
        bridged += free
    return bridged


@njit(cache=True, nogil=True)
def orient(
    z: np.ndarray, natural: np.ndarray, nrows: int, ncols: int, links: np.ndarray, ends: np.ndarray,
    cells: np.ndarray, slot: np.ndarray, fixed: np.ndarray, along: np.ndarray, mouth: np.ndarray,
) -> None:  # fmt: skip
    """Give every connected part of a mapped network one mouth, and every other cell of it a direction towards that.

    The mouth is the loose end, the contact with the rim or with a cell that keeps its water, from which water would
    leave at the lowest level. From there the part is climbed in order of the highest level on the way, then of
    steps, so that of two ways round a loop each cell takes the one that climbs less, and the loop opens where the
    two meet.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    natural : float32 array, shape (cells,) [m]
        Level at which water leaves each cell, or the ground within reach of it, without the mapped network.
    nrows, ncols : int
    links : uint8 array, shape (cells,)
    ends : bool array, shape (cells,)
        Cells that keep their water: lines do not lead through them.
    cells : int32 array, shape (m,)
    slot : int32 array, shape (cells,)
    fixed : uint8 array, shape (cells,)
        Result on the network: FREE at mouths.
    along : int32 array, shape (m,)
        Result: steps to the mouth.
    mouth : int32 array, shape (m,)
        Result: the mouth's cell.
    """
    stride = ncols + 2
    o = offsets(stride)
    count = cells.size
    for i in range(count):
        fixed[cells[i]] = FREE
        along[i] = 0
        mouth[i] = cells[i] if ends[cells[i]] else NO_CELL
    part = np.full(count, NO_CELL)
    stack = np.empty(count, np.int32)
    keys = np.empty(1024, np.float64)
    ties = np.empty(1024, np.int64)
    for first in range(count):
        if part[first] >= 0 or ends[cells[first]]:
            continue
        part[first] = first
        stack[0] = first
        head = 0
        tail = 1
        best = NO_CELL
        best_is_loose = False
        while head < tail:
            c = int(cells[stack[head]])
            head += 1
            degree = 0
            for k in range(8):
                if (links[c] >> k) & 1:
                    degree += 1
                    n = c + o[k]
                    if ends[n]:
                        if _leaves_lower(z, natural, n, True, best, best_is_loose):
                            best, best_is_loose = n, True
                    elif part[slot[n]] < 0:
                        part[slot[n]] = first
                        stack[tail] = slot[n]
                        tail += 1
            row = c // stride
            col = c - row * stride
            loose = degree <= 1 or row == 1 or row == nrows or col == 1 or col == ncols
            if _leaves_lower(z, natural, c, loose, best, best_is_loose):
                best, best_is_loose = c, loose

        mouth[slot[best]] = best
        size = push(keys, ties, 0, np.float64(z[best]), best)
        while size > 0:
            size = pop(keys, ties, size)
            level = keys[size]
            c = ties[size] % _TIE_CELLS
            for k in range(8):
                n = c + o[k]
                if (links[c] >> k) & 1 == 0 or ends[n]:
                    continue
                i = slot[n]
                if part[i] != first or mouth[i] != NO_CELL:  # another part may touch the same end
                    continue
                mouth[i] = best
                along[i] = along[slot[c]] + 1
                fixed[n] = (k + 4) & 7
                if size + 1 >= keys.size:
                    keys = enlarged(keys, size, 2 * keys.size)
                    ties = enlarged(ties, size, 2 * ties.size)
                size = push(keys, ties, size, max(level, np.float64(z[n])), int(along[i]) * _TIE_CELLS + n)


@njit(cache=True, nogil=True, inline="always")
def _leaves_lower(z: np.ndarray, natural: np.ndarray, c: int, loose: bool, best: int, best_is_loose: bool) -> bool:
    """Whether a cell is a better mouth than the best so far: loose ends first, then level, elevation, index."""
    if best < 0:
        return True
    if loose != best_is_loose:
        return loose
    if natural[c] != natural[best]:
        return natural[c] < natural[best]
    if z[c] != z[best]:
        return z[c] < z[best]
    return c < best


@njit(cache=True, nogil=True)
def find_gaps(
    z: np.ndarray, natural: np.ndarray, nrows: int, ncols: int, ends: np.ndarray, cells: np.ndarray, slot: np.ndarray,
    mouth: np.ndarray, reach: int,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Mouths inside the raster that have a part of the network near them whose own mouth lies lower.

    Only mouths are looked at, so that the heads of two streams are never joined over a divide.

    Parameters
    ----------
    z, natural, nrows, ncols, ends, cells, slot, mouth
        As in `orient`.
    reach : int [cells]
        The widest gap.

    Returns
    -------
    start, end : int32 arrays, shape (gaps,)
        The mouth and the nearest cell of such a part.
    """
    stride = ncols + 2
    start = np.empty(cells.size, np.int32)
    end = np.empty(cells.size, np.int32)
    count = 0
    for i in range(cells.size):
        c = int(cells[i])
        row = c // stride
        col = c - row * stride
        if mouth[i] != c or ends[c] or row == 1 or row == nrows or col == 1 or col == ncols:
            continue
        nearest = (reach + 1) * (reach + 1)
        found = NO_CELL
        for r in range(max(1, row - reach), min(nrows, row + reach) + 1):
            for q in range(max(1, col - reach), min(ncols, col + reach) + 1):
                n = r * stride + q
                apart = (r - row) * (r - row) + (q - col) * (q - col)
                if slot[n] < 0 or apart >= nearest or ends[n]:
                    continue
                other = mouth[slot[n]]
                if other != c and _leaves_lower(z, natural, other, True, c, True):
                    nearest = apart
                    found = n
        if found >= 0:
            start[count] = c
            end[count] = found
            count += 1
    return start[:count], end[:count]


@njit(cache=True, nogil=True)
def cut_along(z: np.ndarray, stride: int, fixed: np.ndarray, cells: np.ndarray) -> None:
    """Lower elevations so that they never rise along prescribed directions.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Changed in place.
    stride : int
    fixed : uint8 array, shape (cells,)
        A forest: following the directions never turns in a ring.
    cells : int32 array, shape (m,)
        All cells with a prescribed direction (others are passed over).
    """
    o = offsets(stride)
    donors = np.zeros(z.size, np.uint8)
    for i in range(cells.size):
        c = int(cells[i])
        if fixed[c] != FREE:
            donors[c + o[fixed[c]]] += np.uint8(1)
    done = np.uint8(255)
    for i in range(cells.size):
        c = int(cells[i])
        while donors[c] == 0 and fixed[c] != FREE:
            donors[c] = done
            n = c + o[fixed[c]]
            z[n] = min(z[n], z[c])
            donors[n] -= np.uint8(1)
            c = n


@njit(cache=True, nogil=True)
def wall_crossings(stride: int, fixed: np.ndarray, cells: np.ndarray, walls: np.ndarray) -> None:
    """Walls across the diagonal steps that would cross a diagonal step of a mapped stream: water stays in it."""
    o = offsets(stride)
    for i in range(cells.size):
        c = int(cells[i])
        d = fixed[c]
        if d != FREE and d & 1:
            left = c + o[(d + 7) & 7]
            right = c + o[(d + 1) & 7]
            across = (d + 2) & 7
            walls[left] |= np.uint8(1 << across)
            walls[right] |= np.uint8(1 << ((across + 4) & 7))


@njit(cache=True, nogil=True)
def corridors(
    z: np.ndarray, stride: int, walls: np.ndarray, ends: np.ndarray, cells: np.ndarray, reach: int,
    apart: np.ndarray, towards: np.ndarray, nearest: np.ndarray,
) -> None:  # fmt: skip
    """The nearest cell of the mapped network for every cell within reach of it, and the way there.

    Distances are counted 5 for a step along rows or columns and 7 for a diagonal one; of equal ways that of the smaller
    index.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    stride : int
    walls, ends : arrays, shape (cells,)
        Ways do not lead through them.
    cells : int32 array, shape (m,)
    reach : int
        Largest distance.
    apart : uint8 array, shape (cells,)
        Result: the distance; 255 out of reach.
    towards : uint8 array, shape (cells,)
        Result within reach: direction of the first step.
    nearest : int32 array, shape (cells,)
        Result within reach: cell of the network.
    """
    o = offsets(stride)
    apart[:] = 255
    keys = np.empty(max(cells.size + 1, 1024), np.float64)
    ties = np.empty(keys.size, np.int64)
    size = 0
    for i in range(cells.size):
        c = int(cells[i])
        apart[c] = 0
        nearest[c] = c
        size = push(keys, ties, size, 0.0, c)
    while size > 0:
        size = pop(keys, ties, size)
        c = ties[size]
        own = int(keys[size])
        if own > apart[c]:
            continue
        for k in range(8):
            n = c + o[k]
            way = own + (7 if k & 1 else 5)
            if way > reach or way >= apart[n] or z[n] == np.inf or ends[n] or (walls[c] >> k) & 1:
                continue
            apart[n] = way
            towards[n] = (k + 4) & 7
            nearest[n] = nearest[c]
            if size + 1 >= keys.size:
                keys = enlarged(keys, size, 2 * keys.size)
                ties = enlarged(ties, size, 2 * ties.size)
            size = push(keys, ties, size, np.float64(way), n)


@njit(cache=True, nogil=True)
def lead_in(
    z: np.ndarray, directions: np.ndarray, order: np.ndarray, area_m2: np.ndarray, ncols: int,
    row_area_m2: np.ndarray, slot: np.ndarray, along: np.ndarray, mouth: np.ndarray, apart: np.ndarray,
    towards: np.ndarray, nearest: np.ndarray, least_run: int, least_run_joining: int, least_share: float,
    least_cells: float, crest_m: float, fixed: np.ndarray,
) -> int:  # fmt: skip
    """Lead natural channels that run beside a mapped one into it: prescribe the way of every cell of theirs.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    directions : uint8 array, shape (cells,)
        As water goes while only the mapped network is prescribed, `order` and `area_m2` with it.
    order : int32 array, shape (data cells,)
    area_m2 : float64 array, shape (cells,) [m2]
    ncols : int
    row_area_m2 : float64 array, shape (nrows,) [m2]
    slot, along, mouth : arrays
        From `orient`.
    apart, towards, nearest : arrays, shape (cells,)
        From `corridors`.
    least_run, least_run_joining : int
        Steps of the mapped network beside which a channel must run; the second where it then joins the network of
        itself.
    least_share : float
        Of the mapped channel's contributing area at the nearest cell.
    least_cells : float
        Least contributing area in cells.
    crest_m : float [m]
        Ground between that rises this much over both channels separates them.
    fixed : uint8 array, shape (cells,)
        Added to.

    Returns
    -------
    int
        Cells that got a prescribed direction.
    """
    stride = ncols + 2
    o = offsets(stride)
    farthest_up = np.zeros(z.size, np.int32)
    farthest_down = np.zeros(z.size, np.int32)
    joins = np.zeros(z.size, np.bool_)
    for i in range(order.size - 1, -1, -1):
        c = int(order[i])
        if apart[c] == 255 or apart[c] == 0:
            continue
        own = slot[nearest[c]]
        farthest_up[c] = along[own]
        farthest_down[c] = along[own]
        if directions[c] < EXIT:
            n = c + o[directions[c]]
            if apart[n] != 255 and mouth[slot[nearest[n]]] == mouth[own]:
                joins[c] = apart[n] == 0 or joins[n]
                farthest_down[c] = along[slot[n]] if apart[n] == 0 else farthest_down[n]
    led = 0
    for i in range(order.size):
        c = int(order[i])
        if apart[c] == 255 or apart[c] == 0:
            continue
        m = nearest[c]
        if directions[c] < EXIT:
            n = c + o[directions[c]]
            if apart[n] != 255 and apart[n] != 0 and mouth[slot[nearest[n]]] == mouth[slot[m]]:
                farthest_up[n] = max(farthest_up[n], farthest_up[c])
        large = area_m2[c] >= max(least_share * area_m2[m], least_cells * row_area_m2[c // stride - 1])
        run = farthest_up[c] - farthest_down[c]
        if not large or run < (least_run_joining if joins[c] else least_run):
            continue
        crest = z[c]
        n = c
        while apart[n] != 0:
            crest = max(crest, z[n])
            n += o[towards[n]]
        if crest > max(z[c], z[m]) + crest_m:
            continue
        n = c
        while apart[n] != 0 and fixed[n] == FREE:
            fixed[n] = towards[n]
            led += 1
            n += o[towards[n]]
    return led


@njit(cache=True, nogil=True)
def spills(
    z: np.ndarray, nrows: int, ncols: int, walls: np.ndarray, fixed: np.ndarray, sink: np.ndarray, level: np.ndarray,
    spill: np.ndarray,
) -> None:  # fmt: skip
    """Where the water of every sink would go if it rose until it spilt.

    A flood from outside, as in `constrained_levels`, but through the cells that keep their water: it comes to what
    drains to a sink first over the lowest pass.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Conditioned elevations, +inf in voids and halo.
    nrows, ncols : int
    walls, fixed : arrays, shape (cells,)
    sink : int32 array, shape (cells,)
        Number of the sink that a cell drains to, -1 for none.
    level : float32 array, shape (cells,)
        Work space.
    spill : int32 array, shape (sinks,)
        Result: the first cell beyond the pass; -1 where it lies outside the raster, `UNREACHED` where walls keep the
        flood away.
    """
    stride = ncols + 2
    o = offsets(stride)
    keys = np.empty(4 * (nrows + ncols) + 64, np.float64)
    ties = np.empty(keys.size, np.int64)
    size = 0
    reached = np.zeros(spill.size, np.bool_)
    spill[:] = UNREACHED
    for c in range(z.size):
        level[c] = np.inf if z[c] == np.inf else np.nan
    for c in range(stride, z.size - stride):
        if z[c] == np.inf or fixed[c] != FREE:
            continue
        beside = False
        for k in range(8):
            beside |= z[c + o[k]] == np.inf
        if beside:
            level[c] = z[c]
            if size + 1 >= keys.size:
                keys = enlarged(keys, size, 2 * keys.size)
                ties = enlarged(ties, size, 2 * ties.size)
            size = push(keys, ties, size, np.float64(z[c]), c)
    while size > 0:
        size = pop(keys, ties, size)
        c = ties[size]
        flood = level[c]
        if sink[c] >= 0 and not reached[sink[c]]:
            reached[sink[c]] = True
            spill[sink[c]] = NO_CELL
        for k in range(8):
            n = c + o[k]
            back = (k + 4) & 7
            if not np.isnan(level[n]):
                continue
            if fixed[n] != back if fixed[n] != FREE else (walls[n] >> back) & 1:
                continue
            level[n] = max(flood, z[n])
            if sink[n] >= 0 and not reached[sink[n]]:
                reached[sink[n]] = True
                spill[sink[n]] = c
            if size + 1 >= keys.size:
                keys = enlarged(keys, size, 2 * keys.size)
                ties = enlarged(ties, size, 2 * ties.size)
            size = push(keys, ties, size, np.float64(level[n]), n)


@njit(cache=True, nogil=True)
def send_off(directions: np.ndarray, nrows: int, ncols: int) -> None:
    """Make an EXIT of every cell whose direction leads into a void or off the raster, in place."""
    stride = ncols + 2
    o = offsets(stride)
    for c in range(stride, directions.size - stride):
        if directions[c] < EXIT and directions[c + o[directions[c]]] == VOID:
            directions[c] = EXIT


@njit(cache=True, nogil=True)
def find_loops(directions: np.ndarray, ncols: int, order: np.ndarray) -> np.ndarray:
    """First cell of every loop of directions.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    ncols : int
    order : int32 array, shape (visited,)
        From `contributing_area`: without the cells on loops and below them.

    Returns
    -------
    int32 array, shape (loops,)
        The smallest index of each.
    """
    o = offsets(ncols + 2)
    seen = np.zeros(directions.size, np.int32)
    for i in range(order.size):
        seen[order[i]] = -1
    first = np.empty(directions.size - order.size, np.int32)
    count = 0
    for start in range(directions.size):
        if directions[start] == VOID or seen[start] != 0:
            continue
        c = start
        while directions[c] < EXIT and seen[c] == 0:
            seen[c] = start
            c += o[directions[c]]
        if directions[c] < EXIT and seen[c] == start:
            least = c
            n = c + o[directions[c]]
            while n != c:
                least = min(least, n)
                n += o[directions[n]]
            first[count] = least
            count += 1
    return first[:count]
