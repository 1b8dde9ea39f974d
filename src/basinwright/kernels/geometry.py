"""Neighbours and rows on a flat padded array."""

from __future__ import annotations

from numba import njit


@njit(cache=True, nogil=True, inline="always")
def neighbour_offsets(stride: int) -> tuple[int, int, int, int, int, int, int, int]:
    """Index offsets of the eight neighbours, clockwise from north.

    Parameters
    ----------
    stride : int
        Cells from one row of the padded array to the next, ``ncols + 2``.
    """
    return (-stride, -stride + 1, 1, stride + 1, stride, stride - 1, -1, -stride - 1)


@njit(cache=True, nogil=True, inline="always")
def row_of(cell: int, per_stride: float) -> int:
    """Row (0-based, without the halo) of a padded index; `per_stride` is ``1 / (ncols + 2)``.

    A product is several times faster than a division of integers. The half keeps it exact for every index
    below 2**31 and any stride below 2**21: the product's rounding is then smaller than half a cell.
    """
    return int((cell + 0.5) * per_stride) - 1
