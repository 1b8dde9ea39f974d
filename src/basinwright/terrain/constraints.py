"""What maps say about where water may and may not go, on the cells of the terrain."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from basinwright.kernels import FREE, SINK


@dataclass(frozen=True, eq=False)
class Constraints:
    """Prescriptions for conditioning and routing, as flat padded arrays (see `basinwright.kernels`) or None each.

    Attributes
    ----------
    walls : uint8 array, shape (cells,), or None
        Bit d (0 to 7, clockwise from north) is set where water may not step from a cell to its neighbour d;
        the neighbour has the bit of the opposite direction.
    ends : bool array, shape (cells,), or None
        Cells that keep their water: declared sinks.
    fixed : uint8 array, shape (cells,), or None
        Prescribed direction (0 to 7) of the cells of a mapped stream and of what is led into it, 255 elsewhere. A
        prescribed step leads through walls.
    cut_cells : int32 array, shape (cuts,), or None
        Cells whose elevation is lowered before anything else, so that it never rises along `fixed`.
    cut_m : float32 array, shape (cuts,), or None [m]
        The elevations they are lowered to.
    """

    walls: np.ndarray | None = None
    ends: np.ndarray | None = None
    fixed: np.ndarray | None = None
    cut_cells: np.ndarray | None = None
    cut_m: np.ndarray | None = None

    def cut(self, z: np.ndarray) -> None:
        """Lower elevations where that is prescribed.

        Parameters
        ----------
        z : float32 array, shape (cells,) [m]
            Changed in place.
        """
        if self.cut_cells is not None and self.cut_m is not None:
            z[self.cut_cells] = np.minimum(z[self.cut_cells], self.cut_m)

    def arrays(self, cells: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Copies of `walls`, `fixed` and `ends`, whole where they are None."""
        walls = np.zeros(cells, np.uint8) if self.walls is None else self.walls.copy()
        fixed = np.full(cells, FREE, np.uint8) if self.fixed is None else self.fixed.copy()
        ends = np.zeros(cells, bool) if self.ends is None else self.ends.copy()
        return walls, fixed, ends


def levels(z: np.ndarray, nrows: int, ncols: int, constraints: Constraints) -> np.ndarray:
    """Elevations filled under constraints, -inf in voids and halo; see `drain` for the arguments."""
    from basinwright.kernels import constraints as kernel

    walls, fixed, ends = constraints.arrays(z.size)
    void = np.isinf(z)
    level = np.empty_like(z)
    ground = np.where(void, np.float32(np.inf), z)
    kernel.constrained_levels(ground, nrows, ncols, walls, fixed, ends & ~void, np.empty(z.size, np.int32), level)
    level[void] = -np.inf
    return level


def drain(
    z: np.ndarray, nrows: int, ncols: int, dx_m: np.ndarray, dy_m: np.ndarray, constraints: Constraints
) -> tuple[np.ndarray, np.ndarray, int]:
    """Fill what still holds water under constraints, and give every cell a direction.

    Parameters
    ----------
    z : float32 array, shape (cells,) [m]
        Elevations, infinite in voids and halo.
    nrows, ncols : int
    dx_m, dy_m : float64 arrays, shape (nrows,) [m]
    constraints : Constraints
        Where no cell could drain otherwise, single prescribed directions are passed over, and ground that walls
        enclose keeps its water at its lowest cell.

    Returns
    -------
    level : float32 array, shape (cells,) [m]
        Filled elevations, +inf in voids and halo.
    directions : uint8 array, shape (cells,)
        0 to 7, EXIT, SINK or VOID.
    flat_cells : int
        Cells without a lower neighbour that got a direction.
    """
    from basinwright.kernels import constraints as kernel
    from basinwright.kernels import directions, flats

    walls, fixed, ends = constraints.arrays(z.size)
    z = np.where(np.isinf(z), np.float32(np.inf), z)
    ends &= np.isfinite(z)
    work, away, queue = (np.empty(z.size, np.int32) for _ in range(3))
    level = np.empty_like(z)
    kernel.constrained_levels(z, nrows, ncols, walls, fixed, ends, work, level)
    code = np.empty(z.size, np.uint8)
    directions.steepest_descent(level, nrows, ncols, dx_m, dy_m, code)
    kernel.constrain_directions(level, nrows, ncols, dx_m, dy_m, walls, fixed, ends, code)
    flat_cells = kernel.resolve_constrained_flats(level, code, nrows, ncols, walls, fixed, work, away, queue)
    flat_cells += flats.resolve_flats(level, code, nrows, ncols, work, away)
    code[ends] = SINK
    return level, code, flat_cells
