"""Delineation: every cell labelled with the next outlet downstream, and the forest that the outlets form."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from basinwright.basins.by_tiles import label_tiles
from basinwright.kernels import NO_CELL
from basinwright.terrain import Terrain
from basinwright.terrain.workspace import IN_MEMORY, Workspace


@dataclass(frozen=True, eq=False)
class Basins:
    """Sub-basins as labels, and how they join into whole basins.

    There is one label per cell that holds an outlet; outlets on one cell share it. A label's cells are its
    sub-basin, what drains to its outlet and to no outlet upstream. Its whole basin is the sub-basin with those of all
    outlets upstream.

    Attributes
    ----------
    label : int32 array, shape (cells,)
        Flat padded; -1 where no outlet lies downstream.
    label_cell : int32 array, shape (labels,)
        Padded index of the outlet's cell.
    outlet_label : int32 array, shape (n,)
        Label of each outlet; -1 for an outlet that failed.
    parent : int32 array, shape (labels,)
        The next label downstream; -1 for none.
    upstream_first : int32 array, shape (labels,)
        Labels in an order in which each comes after all labels upstream of it.
    farthest_cell : int32 array, shape (labels,)
        Padded index of the cell at the divide where the longest flow path of the whole basin starts; of
        equally long ones that with the smallest index.
    farthest_um : int64 array, shape (labels,) [micrometres]
        Length of that path.
    """

    label: np.ndarray
    label_cell: np.ndarray
    outlet_label: np.ndarray
    parent: np.ndarray
    upstream_first: np.ndarray
    farthest_cell: np.ndarray
    farthest_um: np.ndarray

    @property
    def n_labels(self) -> int:
        """Number of labels."""
        return int(self.label_cell.size)

    def by_outlet(self, by_label: np.ndarray, failed: float = np.nan) -> np.ndarray:
        """Spread values by label over the outlets.

        Parameters
        ----------
        by_label : array, shape (labels, ...)
        failed : float
            Value for outlets that failed.

        Returns
        -------
        array, shape (n, ...)
        """
        values = np.full((self.outlet_label.size, *by_label.shape[1:]), failed, by_label.dtype)
        placed = self.outlet_label >= 0
        values[placed] = by_label[self.outlet_label[placed]]
        return values

    def whole_sums(self, by_label: np.ndarray) -> np.ndarray:
        """Sums over whole basins from sums over sub-basins.

        Parameters
        ----------
        by_label : float64 array, shape (labels, quantities)
            For example the area of each cover class; exact sums (`terrain.summable`) stay exact.

        Returns
        -------
        float64 array, shape (labels, quantities)
        """
        from basinwright.kernels import forest

        whole = np.array(by_label, np.float64, order="C")
        forest.combine_sums(self.parent, self.upstream_first, whole)
        return whole

    @property
    def downstream_outlet(self) -> np.ndarray:
        """Index of the next outlet downstream of each outlet, int64, shape (n,); -1 for none.

        Where several outlets share that cell it is the first of them; outlets that share a cell are not
        downstream of each other.
        """
        first_of_label = np.full(self.n_labels + 1, NO_CELL, np.int64)
        labels, first = np.unique(self.outlet_label, return_index=True)
        first_of_label[labels[labels >= 0]] = first[labels >= 0]
        return first_of_label[self.by_outlet(self.parent, failed=NO_CELL)]  # -1 picks the entry kept for none


def delineate(terrain: Terrain, outlet_cells: np.ndarray, space: Workspace = IN_MEMORY) -> Basins:
    """Label the cells of all basins and find their longest flow paths.

    Parameters
    ----------
    terrain : Terrain
    outlet_cells : int32 array, shape (n,)
        Padded indices, as `snap` gives them; -1 for an outlet that failed.
    space : Workspace
        With folders where the terrain was routed by tiles.

    Returns
    -------
    Basins
        What concerns a whole basin does not depend on which other outlets are given.
    """
    from basinwright.kernels import forest

    cells = np.asarray(outlet_cells, np.int32)
    placed = cells >= 0
    label_cell, inverse = np.unique(cells[placed], return_inverse=True)
    outlet_label = np.full(cells.size, NO_CELL, np.int32)
    outlet_label[placed] = inverse
    label, parent, farthest_um, farthest_cell = (label_tiles if len(terrain.tiling) > 1 else _label_whole)(
        terrain, label_cell, space
    )
    order = forest.upstream_first(parent)
    return Basins(label, label_cell, outlet_label, parent, order, farthest_cell, farthest_um)


def _label_whole(
    terrain: Terrain, label_cell: np.ndarray, space: Workspace
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Labels, their parents, and the farthest cells of whole basins, in one sweep."""
    from basinwright.kernels import forest, labels, reduce

    n = label_cell.size
    label = space.result("basins.label", (terrain.directions.size,), np.int32)
    distance_um = np.empty(terrain.directions.size, np.int64)
    parent = np.empty(n, np.int32)
    parent_distance_um = np.empty(n, np.int64)
    labels.label_cells(
        terrain.directions, terrain.order, terrain.ncols, terrain.step_um, label_cell, label, distance_um, parent,
        parent_distance_um,
    )  # fmt: skip
    farthest_um = np.full(n, -1, np.int64)
    farthest_cell = np.full(n, NO_CELL, np.int32)
    reduce.keep_farthest(label, terrain.ncols, distance_um, 0, terrain.nrows, farthest_um, farthest_cell)
    order = forest.upstream_first(parent)
    forest.combine_farthest(parent, order, parent_distance_um, farthest_um, farthest_cell)
    return label, parent, farthest_um, farthest_cell
