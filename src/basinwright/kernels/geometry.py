"""Neighbours and rows on a flat padded array."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(cache=True, nogil=True)
def steps(stride: int) -> np.ndarray:
    """Index offset of a step by direction: uint64 array, shape (8,), clockwise from north.

    Parameters
    ----------
    stride : int
        Cells from one row of the padded array to the next, ``ncols + 2``.

    Notes
    -----
    Unsigned, so that numba leaves out its test for negative indices, a third of the time of the walks; an
    offset backwards is its complement to 2**64, and sums wrap round. An array, because numba turns a tuple that
    is indexed at run time into a chain of branches.
    """
    return np.array((-stride, -stride + 1, 1, stride + 1, stride, stride - 1, -1, -stride - 1)).astype(np.uint64)


@njit(cache=True, nogil=True)
def neighbours(stride: int) -> tuple[np.uint64, ...]:
    """As `steps`, as a tuple: for loops over all neighbours, which the compiler then unrolls."""
    o = steps(stride)
    return (o[0], o[1], o[2], o[3], o[4], o[5], o[6], o[7])


@njit(cache=True, nogil=True, inline="always")
def row_of(cell: int | np.integer, per_stride: float) -> int:
    """Row (0-based, without the halo) of a padded index; `per_stride` is ``1 / (ncols + 2)``.

    A product is several times faster than a division of integers. The half keeps it exact for every index
    below 2**31 and any stride below 2**21: the product's rounding is then smaller than half a cell.
    """
    return int((cell + 0.5) * per_stride) - 1
