"""Breaching of a rectangle of terrain in memory."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from basinwright.terrain.constraints import Constraints, levels

_CHUNKS_PER_THREAD = 16
_LOCAL_SHARE = 8
_CELLS_PER_LAKE = 50_000
"""Lakes are filled one by one where they are few: one to so many cells, and less than an eighth of the terrain."""

_NONE = np.zeros(1, np.uint8)


@dataclass(frozen=True)
class Pits:
    """What became of the pits.

    Attributes
    ----------
    raised_pits : int
        Single cells raised to their lowest neighbour.
    pits : int
        Pits besides, or after that: cells of equal elevation that nothing drained.
    breached, breached_second, failed : int
        Of these, pits with a way out within the limits; with one from a pool; without, which were filled.
    """

    raised_pits: int = 0
    pits: int = 0
    breached: int = 0
    breached_second: int = 0
    failed: int = 0


def breach(
    z: np.ndarray,
    nrows: int,
    ncols: int,
    step_um: np.ndarray,
    depth_m: float,
    length_m: float,
    constraints: Constraints | None,
    work: tuple[np.ndarray, np.ndarray, np.ndarray],
    threads: int,
) -> Pits:
    """Make every cell drain by cuts within the limits, and by filling where there are none.

    Under constraints the cuts alone are made: what they leave is filled by `constraints.drain`.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations, -inf in voids and halo. Conditioned in place; voids and halo become +inf.
    nrows, ncols : int
    step_um : int64 array, shape (nrows, 8) [micrometres]
        Length of a step out of a cell, by row and direction.
    depth_m, length_m : float [m]
        The deepest and the longest cut.
    constraints : Constraints or None
    work : uint8 and two int32 arrays, shape (cells,)
        Work space.
    threads : int
        The result does not depend on it.

    Returns
    -------
    Pits
    """
    from basinwright.kernels import breach as kernel

    mark, members, lake = work
    kernel.find_low_cells(z, nrows, ncols, mark)
    walls, walled, marked = _NONE, False, False
    if constraints is not None:
        walls, fixed, ends = constraints.arrays(z.size)
        walled, marked = constraints.walls is not None, True
        kernel.note_constraints(z, walls, ends, fixed, nrows, ncols, mark)
    raised = kernel.raise_single_cells(z, mark, walls, walled, nrows, ncols)
    bounds, state = kernel.group_pits(z, mark, walls, walled, nrows, ncols, members)
    step_mm = np.rint(step_um / 1000).astype(np.int32)
    limit_mm = int(length_m * 1000)
    edges = np.array([0, nrows + 1, 0, ncols + 1])
    if state.size:
        around = lake.view(np.float32)
        kernel.lowest_around(z, nrows, ncols, around)
        lowest = kernel.block_minima(z, nrows, ncols)

        def search(first: int, last: int) -> tuple[np.ndarray, np.ndarray]:
            return kernel.breach_pits(
                z, mark, walls, walled, marked, ncols, around, lowest, members, bounds, first, last,
                step_mm, limit_mm, depth_m, edges, state,
            )  # fmt: skip

        cut_cell, cut_level = _in_chunks(search, state.size, threads)
        failed = np.flatnonzero(state == kernel.FAILED).astype(np.int32)
        cut_before = np.unique(cut_cell if failed.size else cut_cell[:0])
        before = z[cut_before]
        kernel.make_cuts(z, mark, cut_cell, cut_level)
        if failed.size:
            seeds = members[bounds[failed]]

            def filled_now() -> np.ndarray:
                if constraints is not None:
                    return levels(z, nrows, ncols, constraints)
                return _filled(z, nrows, ncols, mark, seeds, lake)

            filled = filled_now()
            around_filled = np.empty_like(z)
            kernel.lowest_around(filled, nrows, ncols, around_filled)
            lowest_filled = kernel.block_minima(filled, nrows, ncols)

            def search_again(first: int, last: int) -> tuple[np.ndarray, np.ndarray]:
                return kernel.breach_pools(
                    z, filled, around_filled, mark, walls, walled, marked, ncols, lowest_filled, members, bounds,
                    failed, first, last, step_mm, limit_mm, depth_m, edges,
                    cut_before, before, state,
                )  # fmt: skip

            kernel.make_cuts(z, mark, *_in_chunks(search_again, failed.size, threads))
            if constraints is None:
                z[:] = _filled(z, nrows, ncols, mark, seeds, lake)
    kernel.close_voids(z)
    return _count(raised, state)


def _filled(z: np.ndarray, nrows: int, ncols: int, mark: np.ndarray, seeds: np.ndarray, lake: np.ndarray) -> np.ndarray:
    """Filled elevations: from a cell of every pit, or of all terrain at once where the lakes are many."""
    from basinwright.kernels import breach as kernel
    from basinwright.kernels import fill

    filled = z.copy()
    few = seeds.size <= 16 + z.size // _CELLS_PER_LAKE
    if not (few and kernel.fill_lakes(filled, mark, ncols, seeds, lake, z.size // _LOCAL_SHARE)):
        work = np.empty(z.size, np.uint8), np.empty(z.size, np.int32)
        fill.fill_everywhere(filled, nrows, ncols, *work, lake)
        np.copyto(filled, z, where=z == -np.inf)
    return filled


def _count(raised: int, state: np.ndarray) -> Pits:
    from basinwright.kernels import breach as kernel

    number = np.bincount(state, minlength=8)
    return Pits(
        raised_pits=raised,
        pits=state.size,
        breached=int(number[kernel.BREACHED] + number[kernel.DRAINED]),
        breached_second=int(number[kernel.BREACHED_FROM_POOL]),
        failed=int(number[kernel.FAILED]),
    )


def _in_chunks(
    search: Callable[[int, int], tuple[np.ndarray, np.ndarray]], pits: int, threads: int
) -> tuple[np.ndarray, np.ndarray]:
    """Search chunks of pits in threads, and put their cuts together."""
    chunks = min(pits, _CHUNKS_PER_THREAD * threads)
    edges = np.linspace(0, pits, chunks + 1).astype(np.int64)
    if threads == 1 or pits < 64:
        found = [search(0, pits)]
    else:
        with ThreadPoolExecutor(threads) as pool:
            found = list(pool.map(search, edges[:-1].tolist(), edges[1:].tolist()))
    cells, levels = zip(*found, strict=True)
    return np.concatenate(cells), np.concatenate(levels)
