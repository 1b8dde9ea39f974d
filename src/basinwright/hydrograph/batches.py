"""Work on many outlets in blocks, in threads; and their convolution on its own."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.hydrograph.unit_hydrograph import row_offsets
from basinwright.numbers import Floats, Integers, check_offsets, not_negative


def blocks(values: Integers, size: int) -> list[tuple[int, int]]:
    """Divide outlets into runs of about `size` values each.

    Parameters
    ----------
    values : int array, shape (n,)
        Values of each outlet.
    size : int
        Values of a run; an outlet with more is a run by itself.

    Returns
    -------
    list of (int, int)
        First outlet of each run and the one after its last.
    """
    number = np.cumsum(values) // size
    bounds = [0, *(np.flatnonzero(np.diff(number)) + 1).tolist(), values.size]
    return [(first, last) for first, last in itertools.pairwise(bounds) if last > first]


def for_each(work: Callable[[tuple[int, int]], None], runs: list[tuple[int, int]], jobs: int) -> None:
    """Do the work of every run, in `jobs` threads: the compiled loops hold no lock."""
    if jobs == 1:
        for run in runs:
            work(run)
        return
    with ThreadPoolExecutor(jobs) as pool:
        list(pool.map(work, runs))  # the list raises what a thread raised


def convolve_batch(
    excess_mm: ArrayLike, excess_offsets: ArrayLike, ordinates: ArrayLike, ordinate_offsets: ArrayLike, jobs: int = 1
) -> tuple[Floats, Integers]:
    """Flow of many outlets of different lengths: each one's excess convolved with its own unit hydrograph.

    Parameters
    ----------
    excess_mm : array, shape (rows, T)
        Excess rain by step, T storms side by side, one outlet after another [mm].
    excess_offsets : int array, shape (n + 1,)
        Outlet i owns the rows ``excess_offsets[i]`` up to ``excess_offsets[i + 1]``.
    ordinates : array, shape (ordinates,)
        Unit hydrographs at the outlets' own steps [m3/s per mm].
    ordinate_offsets : int array, shape (n + 1,)
        As `excess_offsets`.
    jobs : int
        Threads; the result is the same to the last bit.

    Returns
    -------
    flow_m3s : array, shape (flow rows, T)
        Full convolution: each outlet has as many rows as steps and ordinates together, less one [m3/s].
    flow_offsets : int array, shape (n + 1,)
        As `excess_offsets`.

    Raises
    ------
    RangeError
        Where a number is negative or not finite, or offsets do not fit.

    Examples
    --------
    >>> flow, offsets = convolve_batch([[2.0], [1.0], [3.0]], [0, 2, 3], [0.0, 4.0, 2.0, 0.0, 5.0], [0, 3, 5])
    >>> flow.ravel().tolist(), offsets.tolist()
    ([0.0, 8.0, 8.0, 2.0, 0.0, 15.0], [0, 4, 6])
    """
    from basinwright.kernels.convolve import convolve

    excess = np.ascontiguousarray(excess_mm, dtype=np.float64)
    units = np.ascontiguousarray(not_negative("ordinates", ordinates))
    if excess.ndim != 2 or units.ndim != 1:
        raise RangeError("excess_mm must have a column for each storm, ordinates one value a row")
    excess_rows = check_offsets("excess_offsets", excess_offsets, excess.shape[0])
    unit_rows = check_offsets("ordinate_offsets", ordinate_offsets, units.size)
    if excess_rows.size != unit_rows.size:
        raise RangeError(f"excess of {excess_rows.size - 1} outlets, unit hydrographs of {unit_rows.size - 1}")
    flow_rows = row_offsets(np.maximum(np.diff(excess_rows) + np.diff(unit_rows) - 1, 0))
    flow = np.zeros((flow_rows[-1], excess.shape[1]))

    def work(run: tuple[int, int]) -> None:
        outlets = slice(run[0], run[1] + 1)
        if not convolve(excess, excess_rows[outlets], units, unit_rows[outlets], flow, flow_rows[outlets]):
            not_negative("excess_mm", excess)  # raises, naming the row

    runs = (
        blocks(np.diff(flow_rows), -(-int(flow_rows[-1]) // (4 * jobs)) or 1) if jobs > 1 else [(0, flow_rows.size - 1)]
    )
    for_each(work, runs, jobs)
    return flow, flow_rows
