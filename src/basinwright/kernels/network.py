"""The channel network: its cells as a small graph, Strahler orders, reaches and stream drops.

The graph is a forest in compressed form. Channel cells are numbered from the divides downstream, each after all that
drain into it; ``below`` is the number of the next one, `NO_CELL` where the channel leaves the raster or ends. A cell
counts as channel where its contributing area reaches a threshold, so whatever lies below a channel is one too.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from basinwright.kernels import EXIT, NO_CELL
from basinwright.kernels.geometry import steps


@njit(cache=True, nogil=True)
def channel_graph(
    directions: np.ndarray, area_m2: np.ndarray, ncols: int, least_m2: float
) -> tuple[np.ndarray, np.ndarray]:
    """Channel cells and how they hang together.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    area_m2 : float64 array, shape (cells,) [m2]
        Never smaller downstream; 0 in voids and halo.
    ncols : int
    least_m2 : float [m2]
        Area at which a cell is a channel; over 0.

    Returns
    -------
    cells : int32 array, shape (m,)
        Padded indices, from the divides downstream, whatever order the rest of the terrain was routed in.
    below : int32 array, shape (m,)
        Position in ``cells`` of the next cell down, -1 for none.
    """
    o = steps(ncols + 2)
    count = 0
    for c in range(area_m2.size):
        count += area_m2[c] >= least_m2
    rowwise = np.empty(count, np.int32)
    count = 0
    for c in range(area_m2.size):
        if area_m2[c] >= least_m2:
            rowwise[count] = c
            count += 1
    down = np.full(count, NO_CELL, np.int32)
    donors = np.zeros(count, np.uint8)
    for i in range(count):
        c = rowwise[i]
        if directions[c] < EXIT:
            down[i] = np.searchsorted(rowwise, np.int32(c + np.int64(o[directions[c]])))
            donors[down[i]] += np.uint8(1)

    cells = np.empty(count, np.int32)
    position = np.empty(count, np.int32)
    done = 0
    for head in range(count):
        i = head
        while i >= 0 and donors[i] == 0:
            donors[i] = 255  # done
            cells[done] = rowwise[i]
            position[i] = done
            done += 1
            i = down[i]
            if i >= 0:
                donors[i] -= np.uint8(1)
    below = np.full(count, NO_CELL, np.int32)
    for i in range(count):
        if down[i] >= 0:
            below[position[i]] = position[down[i]]
    return cells, below


@njit(cache=True, nogil=True)
def mark_below(directions: np.ndarray, ncols: int, mark: np.ndarray) -> None:
    """Mark every cell below a marked one.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    ncols : int
    mark : uint8 array, shape (cells,)
        1 for the marked cells, else 0; on return 2 for them and all below.
    """
    o = steps(ncols + 2)
    for start in range(mark.size):
        c = start
        while mark[c] == 1 or (c != start and mark[c] == 0):
            mark[c] = 2
            if directions[c] >= EXIT:
                break
            c = int(c + np.int64(o[directions[c]]))


@njit(cache=True, nogil=True)
def strahler_orders(below: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Strahler order of every channel cell, and how many channels join in it.

    A cell without channel above is of order 1; where two of the highest order that joins meet, the order rises by one
    (Strahler 1957).

    Parameters
    ----------
    below : int32 array, shape (m,)

    Returns
    -------
    strahler : uint8 array, shape (m,)
    donors : uint8 array, shape (m,)
    """
    strahler = np.zeros(below.size, np.uint8)
    donors = np.zeros(below.size, np.uint8)
    twice = np.zeros(below.size, np.bool_)
    for i in range(below.size):
        if donors[i] == 0:
            strahler[i] = 1
        elif twice[i]:
            strahler[i] += np.uint8(1)
        b = below[i]
        if b >= 0:
            donors[b] += np.uint8(1)
            if strahler[i] > strahler[b]:
                strahler[b] = strahler[i]
                twice[b] = False
            elif strahler[i] == strahler[b]:
                twice[b] = True
    return strahler, donors


@njit(cache=True, nogil=True)
def stream_drops(below: np.ndarray, strahler: np.ndarray, elevation_m: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Fall of every Strahler stream from where it begins to the channel of higher order that it joins.

    Parameters
    ----------
    below : int32 array, shape (m,)
    strahler : uint8 array, shape (m,)
        As `strahler_orders` gives it.
    elevation_m : float64 array, shape (m,) [m]

    Returns
    -------
    order : uint8 array, shape (streams,)
    drop_m : float64 array, shape (streams,) [m]
        Streams that leave the raster, or end, before they join another are left out: their fall is not known whole.
    """
    top_m = np.full(below.size, np.nan)
    order = np.empty(below.size, np.uint8)
    drop_m = np.empty(below.size)
    found = 0
    for i in range(below.size):
        if np.isnan(top_m[i]):
            top_m[i] = elevation_m[i]
        b = below[i]
        if b < 0:
            continue
        if strahler[b] == strahler[i]:
            top_m[b] = top_m[i]
        else:
            order[found] = strahler[i]
            drop_m[found] = top_m[i] - elevation_m[b]
            found += 1
    return order[:found], drop_m[:found]


@njit(cache=True, nogil=True)
def trace_reaches(
    cells: np.ndarray, below: np.ndarray, donors: np.ndarray, heads: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Reaches of the network, from a channel head or junction to the next junction or to where the channel ends.

    Parameters
    ----------
    cells, below : int32 arrays, shape (m,)
    donors : uint8 array, shape (m,)
    heads : int64 array, shape (reaches,)
        Positions of the reaches' upper cells: every cell with a next one where not exactly one channel comes in.

    Returns
    -------
    bounds : int64 array, shape (reaches + 1,)
    path : int32 array, shape (reach cells,)
        Positions in ``cells``. The junction at a reach's lower end is its last cell, and the first of the next reach.
    to_reach : int32 array, shape (reaches,)
        The reach that begins where this one ends, -1 for none.
    """
    bounds = np.zeros(heads.size + 1, np.int64)
    reach_at = np.full(cells.size, NO_CELL, np.int32)
    for k in range(heads.size):
        reach_at[heads[k]] = k
        i = below[heads[k]]
        count = 2
        while donors[i] == 1 and below[i] >= 0:
            i = below[i]
            count += 1
        bounds[k + 1] = bounds[k] + count
    path = np.empty(bounds[heads.size], np.int32)
    to_reach = np.empty(heads.size, np.int32)
    for k in range(heads.size):
        i = np.int32(heads[k])
        for j in range(bounds[k], bounds[k + 1]):
            path[j] = i
            to_reach[k] = reach_at[i]
            i = below[i]
    return bounds, path, to_reach


@njit(cache=True, nogil=True)
def add_channel_length(
    directions: np.ndarray, area_m2: np.ndarray, label: np.ndarray, ncols: int, step_um: np.ndarray, least_m2: float,
    length_um: np.ndarray,
) -> None:  # fmt: skip
    """Length of the channels within every label.

    A step belongs to the label of the cell it leads to: the one from an outlet's cell down lies below that outlet.

    Parameters
    ----------
    directions : uint8 array, shape (cells,)
    area_m2 : float64 array, shape (cells,) [m2]
    label : int32 array, shape (cells,)
    ncols : int
    step_um : int64 array, shape (nrows, 8) [micrometres]
    least_m2 : float [m2]
    length_um : int64 array, shape (n,) [micrometres]
        Added to.
    """
    stride = ncols + 2
    o = steps(stride)
    for row in range(step_um.shape[0]):
        start = (row + 1) * stride + 1
        for c in range(np.uint64(start), np.uint64(start + ncols)):
            if area_m2[c] >= least_m2 and directions[c] < EXIT:
                i = label[c + o[directions[c]]]
                if i >= 0:
                    length_um[i] += step_um[row, directions[c]]
