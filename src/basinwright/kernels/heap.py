"""A queue by least key, then least tie, on two arrays that grow."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def enlarged(kept: np.ndarray, count: int, size: int) -> np.ndarray:
    """A longer array with the first `count` values of another; by a loop, as a slice costs seconds to compile."""
    larger = np.empty(size, kept.dtype)
    for i in range(count):
        larger[i] = kept[i]
    return larger


@njit(cache=True, nogil=True)
def push(keys: np.ndarray, ties: np.ndarray, size: int, key: float, tie: int) -> int:
    """Put an entry in; there must be room. Returns the new size.

    Parameters
    ----------
    keys : float64 array
    ties : int64 array
    size : int
        Entries in the queue.
    key, tie
        The new entry.
    """
    i = size
    while i > 0:
        above = (i - 1) >> 1
        if keys[above] < key or (keys[above] == key and ties[above] <= tie):
            break
        keys[i] = keys[above]
        ties[i] = ties[above]
        i = above
    keys[i] = key
    ties[i] = tie
    return size + 1


@njit(cache=True, nogil=True)
def pop(keys: np.ndarray, ties: np.ndarray, size: int) -> int:
    """Take the least entry out and leave it behind the others, at the new size, which is returned."""
    size -= 1
    least_key = keys[0]
    least_tie = ties[0]
    key = keys[size]
    tie = ties[size]
    i = 0
    while True:
        child = 2 * i + 1
        if child >= size:
            break
        other = child + 1
        if other < size and (keys[other] < keys[child] or (keys[other] == keys[child] and ties[other] < ties[child])):
            child = other
        if keys[child] > key or (keys[child] == key and ties[child] >= tie):
            break
        keys[i] = keys[child]
        ties[i] = ties[child]
        i = child
    keys[i] = key
    ties[i] = tie
    keys[size] = least_key
    ties[size] = least_tie
    return size
