"""Depression filling: the lowest surface above the terrain from which every cell drains to the outside.

The filled surface is unique, so any correct method gives the same bits. Here:

1. Every cell is followed down the raw terrain, never climbing, to where the descent ends: at a pit or a part of
   a plateau, or outside, beyond the rim or in a void. That cuts the terrain into catchments without a queue.
2. Between two catchments that touch only the lowest pass matters.
3. Water leaves a catchment over its lowest pass, the catchments joined by that leave together over the lowest
   pass of the union, and so on until the outside is reached. The highest pass on that way is the level to
   which a catchment fills.
4. A cell is raised to the level of its catchment, if it lies lower: from any cell the bottom of its catchment is
   reached without climbing.

Only maxima and minima of given elevations are taken, so nothing is rounded.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import FLAT, NE, NW, SE, SW, E, N, S, W
from basinwright.kernels.geometry import steps

_OUTSIDE = 0
_UNLABELLED = -1


@njit(cache=True, nogil=True)
def ways_down(z: np.ndarray, nrows: int, ncols: int, ways: np.ndarray) -> None:
    """A neighbour of each cell that is not higher, chosen so that most labels can be copied in memory order.

    The lowest of the four neighbours that precede the cell in memory, if that is not higher than the cell;
    else the lowest of the four that follow, if lower; else none (FLAT). Following these ways never climbs
    and never turns in a ring: among equal cells it only goes back in memory.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations, -inf in voids and halo.
    nrows, ncols : int
    ways : uint8 array, shape (cells,)
        Result, as direction codes; the halo is left alone.
    """
    stride = ncols + 2
    for row in range(1, nrows + 1):
        start = row * stride
        above = z[start - stride : start]
        here = z[start : start + stride]
        below = z[start + stride : start + 2 * stride]
        out = ways[start : start + stride]
        for i in range(1, ncols + 1):
            c = here[i]
            lowest = here[i - 1]
            before = np.int32(W)
            if above[i - 1] < lowest:
                lowest = above[i - 1]
                before = np.int32(NW)
            if above[i] < lowest:
                lowest = above[i]
                before = np.int32(N)
            if above[i + 1] < lowest:
                lowest = above[i + 1]
                before = np.int32(NE)
            low_after = c
            after = np.int32(FLAT)
            if here[i + 1] < low_after:
                low_after = here[i + 1]
                after = np.int32(E)
            if below[i - 1] < low_after:
                low_after = below[i - 1]
                after = np.int32(SW)
            if below[i] < low_after:
                low_after = below[i]
                after = np.int32(S)
            if below[i + 1] < low_after:
                after = np.int32(SE)
            out[i] = np.uint8(before if lowest <= c else after)


@njit(cache=True, nogil=True)
def label_catchments(
    z: np.ndarray, ways: np.ndarray, nrows: int, ncols: int, label: np.ndarray, stack: np.ndarray
) -> int:
    """Number the catchments; 0 is the outside.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations, -inf in voids and halo.
    ways : uint8 array, shape (cells,)
        From `ways_down`.
    nrows, ncols : int
    label : int32 array, shape (cells,)
        Result.
    stack : int32 array, shape (cells,)
        Work space.

    Returns
    -------
    int
        Number of labels, the outside included.
    """
    stride = ncols + 2
    o = steps(stride)
    for cell in range(z.size):
        label[cell] = _OUTSIDE if z[cell] == -np.inf else _UNLABELLED
    labels = 1
    for row in range(1, nrows + 1):
        for start in range(row * stride + 1, row * stride + ncols + 1):
            if label[start] != _UNLABELLED:
                continue
            c = np.uint64(start)
            height = 0
            own = _UNLABELLED
            while own == _UNLABELLED:
                stack[height] = c
                height += 1
                way = ways[c]
                if way == FLAT:
                    own = labels
                    labels += 1
                else:
                    c += o[way]
                    own = label[c]
            for i in range(height):
                label[np.uint64(stack[i])] = own
    return labels


# Passes met are kept in a small table by pair of catchments until another pair needs the place: along the rows
# of a raster a pair's cells follow each other soon, so that few pairs are written out more than once.
_TABLE_SIZE = 1 << 14
_EMPTY = -1
_LOW_HALF = (1 << 32) - 1


@njit(cache=True, nogil=True)
def _scan_row(
    z: np.ndarray, label: np.ndarray, start: int, stride: int, held_pair: np.ndarray, held_level: np.ndarray,
    pair: np.ndarray, level: np.ndarray, count: int,
) -> int:  # fmt: skip
    """Passes between the cells of one row and the neighbours that follow them in memory."""
    forward = (np.uint64(1), np.uint64(stride - 1), np.uint64(stride), np.uint64(stride + 1))
    for c in range(np.uint64(start), np.uint64(start + stride - 2)):
        a = label[c]
        for k in range(4):
            n = c + forward[k]
            b = label[n]
            if a == b:
                continue
            height = max(z[c], z[n])
            low = np.int64(min(a, b))
            high = np.int64(max(a, b))
            key = low << 32 | high
            slot = np.uint64((low * 40503 + high * 30011) & (_TABLE_SIZE - 1))
            if held_pair[slot] == key:
                if height < held_level[slot]:
                    held_level[slot] = height
                continue
            pair[count] = held_pair[slot]
            level[count] = held_level[slot]
            count += held_pair[slot] != _EMPTY
            held_pair[slot] = key
            held_level[slot] = height
    return count


@njit(cache=True, nogil=True)
def _enlarged(kept: np.ndarray, count: int, size: int) -> np.ndarray:
    """A longer array with the first `count` values of another; by a loop, as a slice costs seconds to compile."""
    larger = np.empty(size, kept.dtype)
    for i in range(count):
        larger[i] = kept[i]
    return larger


@njit(cache=True, nogil=True)
def find_passes(z: np.ndarray, label: np.ndarray, nrows: int, ncols: int) -> tuple[np.ndarray, np.ndarray]:
    """Passes between neighbouring catchments, the lowest of each pair among them.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    label : int32 array, shape (cells,)
    nrows, ncols : int

    Returns
    -------
    pair : int64 array, shape (passes,)
        The two catchments: the smaller number times 2**32, plus the larger.
    level : float32 array, shape (passes,) [m]
        The higher of the two cells of the pass.
    """
    stride = ncols + 2
    held_pair = np.empty(_TABLE_SIZE, np.int64)
    held_level = np.empty(_TABLE_SIZE, np.float32)
    for slot in range(_TABLE_SIZE):
        held_pair[slot] = _EMPTY
    most_per_row = 4 * ncols + _TABLE_SIZE
    pair = np.empty(2 * most_per_row, np.int64)
    level = np.empty(2 * most_per_row, np.float32)
    count = 0
    for row in range(nrows + 1):  # from the halo above: its neighbours are the first row
        if count + most_per_row > pair.size:
            pair = _enlarged(pair, count, 2 * pair.size)
            level = _enlarged(level, count, 2 * level.size)
        count = _scan_row(z, label, row * stride + 1, stride, held_pair, held_level, pair, level, count)
    for slot in range(_TABLE_SIZE):
        if held_pair[slot] != _EMPTY:
            pair[count] = held_pair[slot]
            level[count] = held_level[slot]
            count += 1
    return pair[:count], level[:count]


@njit(cache=True, nogil=True)
def spill_levels(labels: int, pair: np.ndarray, level: np.ndarray) -> np.ndarray:
    """Level at which each catchment spills on its way to the outside.

    Parameters
    ----------
    labels : int
        Catchments; 0 is the outside.
    pair : int64 array, shape (passes,)
        From `find_passes`; used up.
    level : float32 array, shape (passes,) [m]
        Used up.

    Returns
    -------
    float32 array, shape (labels,) [m]
        The lowest over all ways to the outside of the highest pass on the way; -inf for the outside.

    Notes
    -----
    Rounds in the manner of Boruvka's minimum spanning tree (1926): each union of catchments looks across its
    lowest pass (of equal ones the first in the list, so that no rings arise but pairs that look at each other)
    and joins what lies there. Along such a chain the passes never rise, so a catchment that joins the outside
    in this round leaves over its own pass. Otherwise it leaves over the higher of its own pass and that of its
    union in later rounds.
    """
    passes = pair.size
    spill = np.empty(labels, np.float32)  # by union of this round, all rounds one after the other
    union = np.empty(labels, np.int32)  # the union each becomes part of, as an index into `spill`
    begins = 0
    unions = labels
    while unions > 1:
        lowest = spill[begins : begins + unions]
        towards = union[begins : begins + unions]
        for i in range(unions):
            lowest[i] = np.inf
            towards[i] = i
        for e in range(passes):
            a = pair[e] >> 32
            b = pair[e] & _LOW_HALF
            if level[e] < lowest[a]:
                lowest[a] = level[e]
                towards[a] = b
            if level[e] < lowest[b]:
                lowest[b] = level[e]
                towards[b] = a
        lowest[0] = -np.inf
        towards[0] = 0

        # A union of the next round for each pair that look at each other, and the outside's; then all that look
        # towards them.
        joined = np.empty(unions, np.int32)
        joined[0] = 0
        next_unions = 1
        for i in range(1, unions):
            joined[i] = -1
            if towards[towards[i]] == i and i <= towards[i]:
                joined[i] = next_unions
                next_unions += 1
        for i in range(unions):
            root = i
            while joined[root] < 0:
                root = towards[root]
            found = joined[root]
            root = i
            while joined[root] < 0:
                joined[root] = found
                root = towards[root]

        kept = 0
        for e in range(passes):
            a = np.int64(joined[pair[e] >> 32])
            b = np.int64(joined[pair[e] & _LOW_HALF])
            if a != b:
                pair[kept] = a << 32 | b
                level[kept] = level[e]
                kept += 1
        passes = kept
        ends = begins + unions
        for i in range(unions):
            towards[i] = ends + joined[i]
        if spill.size < ends + next_unions:
            spill = _enlarged(spill, ends, ends + next_unions)
            union = _enlarged(union, ends, ends + next_unions)
        begins = ends
        unions = next_unions
    spill[begins] = -np.inf
    for i in range(begins - 1, -1, -1):
        spill[i] = max(spill[i], spill[union[i]])
    return spill[:labels]


@njit(cache=True, nogil=True)
def raise_to_levels(z: np.ndarray, label: np.ndarray, spill: np.ndarray) -> None:
    """Raise every cell to the level of its catchment, in place; voids and halo turn from -inf to +inf.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
    label : int32 array, shape (cells,)
    spill : float32 array, shape (labels,) [m]
    """
    for c in range(z.size):
        filled = max(z[c], spill[label[c]])
        z[c] = np.inf if filled == -np.inf else filled


def fill_everywhere(
    z: np.ndarray, nrows: int, ncols: int, ways: np.ndarray, label: np.ndarray, stack: np.ndarray
) -> None:
    """Fill the whole raster in place; voids and halo turn from -inf to +inf.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations, -inf in voids and halo.
    nrows, ncols : int
    ways, label, stack : uint8 and two int32 arrays, shape (cells,)
        Work space.
    """
    ways_down(z, nrows, ncols, ways)
    labels = label_catchments(z, ways, nrows, ncols, label, stack)
    raise_to_levels(z, label, spill_levels(labels, *find_passes(z, label, nrows, ncols)))


@njit(cache=True, nogil=True)
def measure_change(
    conditioned: np.ndarray, ncols: int, first_row: int, given: np.ndarray, row_filled_m: np.ndarray,
    row_cut_m: np.ndarray,
) -> tuple[int, float, int, float]:  # fmt: skip
    """How far conditioning raised and cut a block of rows.

    Parameters
    ----------
    conditioned : float32 array, shape (cells,) [m]
        +inf in voids.
    ncols, first_row : int
    given : float32 array, shape (rows, ncols) [m]
        The terrain before.
    row_filled_m, row_cut_m : float64 arrays, shape (nrows,) [m]
        Results for the rows of the block: sums of depths.

    Returns
    -------
    filled_cells : int
    deepest_fill_m : float
    cut_cells : int
    deepest_cut_m : float
    """
    filled_cells = 0
    cut_cells = 0
    deepest_fill = 0.0
    deepest_cut = 0.0
    for r in range(given.shape[0]):
        start = (first_row + r + 1) * (ncols + 2) + 1
        filled = 0.0
        cut = 0.0
        for col in range(ncols):
            level = conditioned[start + col]
            if level != given[r, col] and level < np.inf:
                rise = np.float64(level) - np.float64(given[r, col])
                if rise > 0.0:
                    filled_cells += 1
                    filled += rise
                    deepest_fill = max(deepest_fill, rise)
                else:
                    cut_cells += 1
                    cut -= rise
                    deepest_cut = max(deepest_cut, -rise)
        row_filled_m[first_row + r] = filled
        row_cut_m[first_row + r] = cut
    return filled_cells, deepest_fill, cut_cells, deepest_cut
