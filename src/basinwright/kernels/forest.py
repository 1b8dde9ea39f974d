"""Combination of the labels' results up the forest of outlets: from sub-basins to whole basins."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def upstream_first(parent: np.ndarray) -> np.ndarray:
    """Outlets in an order in which each comes after all outlets upstream of it.

    Parameters
    ----------
    parent : int32 array, shape (n,)
        The next outlet downstream, -1 for none.

    Returns
    -------
    int32 array, shape (n,)
        Of the outlets that are ready, the smallest number first along each walk down.
    """
    n = parent.size
    waiting = np.zeros(n, np.int32)
    for i in range(n):
        if parent[i] >= 0:
            waiting[parent[i]] += 1
    order = np.empty(n, np.int32)
    done = 0
    for start in range(n):
        i = start
        while i >= 0 and waiting[i] == 0:
            waiting[i] = -1
            order[done] = i
            done += 1
            i = parent[i]
            if i >= 0:
                waiting[i] -= 1
    return order[:done]


@njit(cache=True, nogil=True)
def combine_sums(parent: np.ndarray, order: np.ndarray, values: np.ndarray) -> None:
    """Add each outlet's row to its parent's, in place: from sub-basins to whole basins.

    Parameters
    ----------
    parent, order : int32 arrays, shape (n,)
        The forest and its order from `upstream_first`.
    values : float64 array, shape (n, quantities)
    """
    for i in order:
        p = parent[i]
        if p >= 0:
            for q in range(values.shape[1]):
                values[p, q] += values[i, q]


@njit(cache=True, nogil=True)
def combine_extremes(
    parent: np.ndarray, order: np.ndarray, lowest: np.ndarray, highest: np.ndarray, highest_cell: np.ndarray
) -> None:
    """Extremes of whole basins from those of the labels, in place; ties to the smallest cell index.

    Parameters
    ----------
    parent, order : int32 arrays, shape (n,)
    lowest, highest : float64 arrays, shape (n,)
    highest_cell : int32 array, shape (n,)
    """
    for i in order:
        p = parent[i]
        if p < 0:
            continue
        lowest[p] = min(lowest[p], lowest[i])
        if highest[i] > highest[p] or (highest[i] == highest[p] and highest_cell[i] < highest_cell[p]):
            highest[p] = highest[i]
            highest_cell[p] = highest_cell[i]


@njit(cache=True, nogil=True)
def combine_largest(parent: np.ndarray, order: np.ndarray, largest: np.ndarray) -> None:
    """Largest values of whole basins from those of the labels, in place.

    Parameters
    ----------
    parent, order : int32 arrays, shape (n,)
    largest : int64 array, shape (n,)
    """
    for i in order:
        p = parent[i]
        if p >= 0:
            largest[p] = max(largest[p], largest[i])


@njit(cache=True, nogil=True)
def combine_farthest(
    parent: np.ndarray,
    order: np.ndarray,
    parent_distance_um: np.ndarray,
    farthest_um: np.ndarray,
    farthest_cell: np.ndarray,
) -> None:
    """Longest flow path of whole basins, in place: through each outlet upstream or from the label itself.

    Parameters
    ----------
    parent, order : int32 arrays, shape (n,)
    parent_distance_um : int64 array, shape (n,) [micrometres]
    farthest_um : int64 array, shape (n,) [micrometres]
    farthest_cell : int32 array, shape (n,)
        Of equally long paths the one with the smallest cell index.
    """
    for i in order:
        p = parent[i]
        if p < 0:
            continue
        through = farthest_um[i] + parent_distance_um[i]
        if through > farthest_um[p] or (through == farthest_um[p] and farthest_cell[i] < farthest_cell[p]):
            farthest_um[p] = through
            farthest_cell[p] = farthest_cell[i]
