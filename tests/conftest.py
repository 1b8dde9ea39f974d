"""Terrain on paper, shared by the tests of the terrain half."""

from __future__ import annotations

import os
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest
from affine import Affine
from hypothesis import settings
from pyproj import CRS

from basinwright.grid import Grid
from basinwright.terrain import Terrain, condition_and_route

# In continuous integration the same examples every time; at a desk new ones.
settings.register_profile("ci", derandomize=True, deadline=None)
settings.register_profile("desk", deadline=None)
settings.load_profile("ci" if os.environ.get("CI") else "desk")


@dataclass(frozen=True)
class Landscape:
    """Elevations with their grid and routing."""

    grid: Grid
    elevation_m: np.ndarray
    terrain: Terrain

    def cell(self, row: int, col: int) -> int:
        return int(self.terrain.cells_at(np.array([row]), np.array([col]))[0])


def make_landscape(
    elevation_m: np.ndarray,
    cell: tuple[float, float] = (10.0, 10.0),
    corner: tuple[float, float] = (500_000.0, 4_000_000.0),
    crs: str = "EPSG:32617",
) -> Landscape:
    """Route elevations (rows from north to south) on cells of a width and height in units of the CRS."""
    z = np.asarray(elevation_m, np.float64)
    grid = Grid(*z.shape, Affine(cell[0], 0, corner[0], 0, -cell[1], corner[1]), CRS.from_user_input(crs).to_wkt())
    return Landscape(grid, z, condition_and_route(z, grid.dx_m, grid.dy_m, grid.cell_area_m2))


@pytest.fixture(scope="session")
def landscape() -> Callable[..., Landscape]:
    return make_landscape


@pytest.fixture(scope="session")
def sample_run(tmp_path_factory):
    """Run the sample without the audit; return the outcome. Nobody may write into its folder."""
    from basinwright import pipeline

    file = pipeline.copy_sample(tmp_path_factory.mktemp("county"))
    text = file.read_text(encoding="utf-8")
    file.write_text(text.replace('second_opinion = "all"', 'second_opinion = "none"'), encoding="utf-8")
    return pipeline.run(file)


@pytest.fixture(scope="session")
def sample(sample_run):
    """Return the folder of the sample's run."""
    return sample_run.folder
