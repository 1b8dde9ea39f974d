"""What maps say about where water may and may not go, on the cells of the terrain."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


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
        Prescribed direction (0 to 7) of the cells of a mapped stream, 255 elsewhere. Elevations never rise along them.
    """

    walls: np.ndarray | None = None
    ends: np.ndarray | None = None
    fixed: np.ndarray | None = None
