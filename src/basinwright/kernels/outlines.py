"""Outlines of regions of cells, as rings of cell corners.

A region is a set of cells whose numbers lie in an interval, so that one raster of numbers can hold nested regions:
basins numbered in the order of a walk through their forest have the basins upstream next to them.

Corner (row, col) is the upper left corner of that cell. Rings run with the region on their right hand: shells
clockwise on the map, holes the other way. Cells that touch only at a corner are not connected, and a ring that
meets itself at a corner is two rings there, so that the polygons are valid.
"""

from __future__ import annotations

import numpy as np
from numba import njit

_EAST, _SOUTH, _WEST, _NORTH = range(4)


@njit(cache=True, nogil=True)
def trace_rings(
    number: np.ndarray, ncols: int, low: np.ndarray, high: np.ndarray, edges: np.ndarray, edge_bounds: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Rings of every region.

    Parameters
    ----------
    number : int32 array, shape (cells,)
        Flat padded; negative for none.
    ncols : int
    low, high : int32 arrays, shape (n,)
        Region k holds the cells with ``low[k] <= number <= high[k]``.
    edges : int32 array
        Cells whose upper neighbour has another number, in the order of their own numbers.
    edge_bounds : int64 array, shape (numbers + 1,)
        Those with number i are ``edges[edge_bounds[i]:edge_bounds[i + 1]]``.

    Returns
    -------
    ring_region : int64 array, shape (rings,)
        Region of each ring, in order.
    ring_shell : int64 array, shape (rings,)
        The ring's own number for a shell, that of its shell for a hole.
    ring_bounds : int64 array, shape (rings + 1,)
    corners : int32 array, shape (vertices, 2)
        Row and column of the corners where a ring turns; its last is its first.
    """
    stride = ncols + 2
    edge_ring = np.empty(number.size, np.int32)  # ring that runs along the upper edge of a cell
    work = np.empty((1024, 2), np.int32)  # corners of the ring being walked
    seen = np.zeros(number.size, np.int32)  # where in it a corner stands, if it does
    ring_region = np.empty(0, np.int64)
    ring_shell = np.empty(0, np.int64)
    ring_bounds = np.zeros(1, np.int64)
    corners = np.empty((0, 2), np.int32)
    for filling in (False, True):  # count first, then fill
        rings, total = 0, 0
        for c in range(edge_ring.size):
            edge_ring[c] = -1
        for k in range(low.size):
            first_ring = rings
            least, most = low[k], high[k]
            for e in range(edge_bounds[least], edge_bounds[most + 1]):
                c = edges[e]
                if edge_ring[c] >= first_ring or least <= number[c - stride] <= most:
                    continue
                if least <= number[c - 1] <= most and not least <= number[c - stride - 1] <= most:
                    continue  # the edge goes on to the left: the ring is walked from where it turns east
                row, col = c // stride - 1, c % stride - 1
                work[0, 0], work[0, 1] = row, col
                seen[row * stride + col] = 0
                count = 1
                r, q, heading = row, col, _EAST
                while True:
                    if heading == _EAST:
                        q += 1
                    elif heading == _SOUTH:
                        r += 1
                    elif heading == _WEST:
                        q -= 1
                    else:
                        r -= 1
                    right, left = _ahead(number, stride, least, most, r, q, heading)
                    if right and not left:
                        continue
                    heading = (heading + 3) % 4 if right else (heading + 1) % 4
                    if r == row and q == col and heading == _EAST:
                        break
                    if left and not right:  # between two cells that touch at a corner: here twice
                        at = seen[r * stride + q]
                        if at < count and work[at, 0] == r and work[at, 1] == q:
                            # Here before: what was walked since then is a ring of its own.
                            _stamp(work, at, count, rings, edge_ring, stride)
                            if filling:
                                _copy(work, at, count, corners, total)
                                ring_region[rings], ring_bounds[rings + 1] = k, total + count - at + 1
                            rings += 1
                            total += count - at + 1
                            count = at
                        seen[r * stride + q] = count
                    if count == len(work):
                        work = _twice_as_long(work)
                    work[count, 0], work[count, 1] = r, q
                    count += 1
                _stamp(work, 0, count, rings, edge_ring, stride)
                if filling:
                    _copy(work, 0, count, corners, total)
                    ring_region[rings], ring_bounds[rings + 1] = k, total + count + 1
                rings += 1
                total += count + 1
            if filling:
                _find_shells(
                    first_ring, rings, ring_bounds, corners, number, stride, least, most, edge_ring, ring_shell
                )
        if not filling:
            ring_region = np.empty(rings, np.int64)
            ring_shell = np.empty(rings, np.int64)
            ring_bounds = np.zeros(rings + 1, np.int64)
            corners = np.empty((total, 2), np.int32)
    return ring_region, ring_shell, ring_bounds, corners


@njit(cache=True, nogil=True)
def _twice_as_long(pairs: np.ndarray) -> np.ndarray:
    longer = np.empty((2 * len(pairs), 2), np.int32)
    for j in range(len(pairs)):
        longer[j, 0], longer[j, 1] = pairs[j, 0], pairs[j, 1]
    return longer


@njit(cache=True, nogil=True)
def _ahead(number: np.ndarray, stride: int, least: int, most: int, r: int, q: int, heading: int) -> tuple[bool, bool]:
    """Whether the cells ahead of a corner, to the right and to the left, are in the region."""
    southeast = (r + 1) * stride + q + 1
    if heading == _EAST:
        right, left = southeast, southeast - stride
    elif heading == _SOUTH:
        right, left = southeast - 1, southeast
    elif heading == _WEST:
        right, left = southeast - stride - 1, southeast - 1
    else:
        right, left = southeast - stride, southeast - stride - 1
    return least <= number[right] <= most, least <= number[left] <= most


@njit(cache=True, nogil=True)
def _stamp(work: np.ndarray, first: int, end: int, ring: int, edge_ring: np.ndarray, stride: int) -> None:
    """Write a ring's number on the cells below its eastward edges."""
    for j in range(first, end):
        following = j + 1 if j + 1 < end else first
        if work[following, 1] > work[j, 1]:
            c = (work[j, 0] + 1) * stride + 1
            for col in range(work[j, 1], work[following, 1]):
                edge_ring[c + col] = ring


@njit(cache=True, nogil=True)
def _copy(work: np.ndarray, first: int, end: int, corners: np.ndarray, at: int) -> None:
    """Copy a ring to the result and close it."""
    for j in range(first, end):
        corners[at + j - first, 0], corners[at + j - first, 1] = work[j, 0], work[j, 1]
    corners[at + end - first, 0], corners[at + end - first, 1] = work[first, 0], work[first, 1]


@njit(cache=True, nogil=True)
def _find_shells(
    first_ring: int, end_ring: int, ring_bounds: np.ndarray, corners: np.ndarray, number: np.ndarray, stride: int,
    least: int, most: int, edge_ring: np.ndarray, ring_shell: np.ndarray,
) -> None:  # fmt: skip
    """Give every hole of one region its shell: the ring met on the way up from the hole, or that ring's shell."""
    for ring in range(first_ring, end_ring):
        ring_shell[ring] = ring
        doubled_area, top, top_col = 0, np.int64(2**31), 0
        for j in range(ring_bounds[ring], ring_bounds[ring + 1] - 1):
            r0, q0, r1, q1 = corners[j, 0], corners[j, 1], corners[j + 1, 0], corners[j + 1, 1]
            doubled_area += np.int64(q0) * r1 - np.int64(q1) * r0
            if q1 < q0 and r1 < top:
                top, top_col = np.int64(r1), q1
        if doubled_area < 0:
            c = top * stride + top_col + 1  # the cell of the region above the hole's upper edge
            while least <= number[c - stride] <= most:
                c -= stride
            ring_shell[ring] = edge_ring[c]
    for ring in range(first_ring, end_ring):
        while ring_shell[ring] != ring_shell[ring_shell[ring]]:
            ring_shell[ring] = ring_shell[ring_shell[ring]]
