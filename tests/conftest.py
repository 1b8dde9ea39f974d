"""What tests of several rooms share: terrain on paper, runs to look at, and a browser to look with."""

from __future__ import annotations

import os
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from affine import Affine
from hypothesis import settings
from pyproj import CRS
from report_projects import HOSTILE, valley_project

from basinwright import pipeline
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
def sample_run(tmp_path_factory: pytest.TempPathFactory) -> Any:
    """Run the sample without the audit; return the outcome. Nobody may write into its folder."""
    file = pipeline.copy_sample(tmp_path_factory.mktemp("county"))
    text = file.read_text(encoding="utf-8")
    file.write_text(text.replace('second_opinion = "all"', 'second_opinion = "none"'), encoding="utf-8")
    return pipeline.run(file)


@pytest.fixture(scope="session")
def sample(sample_run: Any) -> Path:
    """Return the folder of the sample's run."""
    return sample_run.folder


@pytest.fixture(scope="session")
def hostile(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Run a valley whose project, outlets and capacities have hostile names; return its folder."""
    cells = {outlet_id: (20 + 6 * i, 20) for i, outlet_id in enumerate(HOSTILE)}
    evil = "<script>window.pwned=1</script>\u202e " + "A" * 300
    file = valley_project(tmp_path_factory.mktemp("hostile"), cells, HOSTILE, project={"name": evil})
    return pipeline.run(file).folder


@pytest.fixture(scope="session")
def browser():
    """Start a real headless Chromium; without one, skip, or fail where BASINWRIGHT_REQUIRE_BROWSER is set."""

    def without(why: str) -> None:
        if os.environ.get("BASINWRIGHT_REQUIRE_BROWSER"):
            pytest.fail(f"browser test not run: {why}")
        pytest.skip(f"browser test skipped: {why}")

    path = next(
        (found for name in ("chromium", "chromium-browser", "google-chrome") if (found := shutil.which(name))), None
    )
    if path is None:
        without("no chromium on this machine (Debian: apt-get install chromium)")
    try:
        from playwright.sync_api import sync_playwright
    except ImportError as error:
        without(f"{error}")
    with sync_playwright() as driver:
        chromium = driver.chromium.launch(executable_path=path, args=["--no-sandbox"])
        yield chromium
        chromium.close()


@pytest.fixture(scope="session")
def many(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Run a valley of 27 outlets, one of which fails; return its folder."""
    cells = {f"P{i:02d}": (8 + 2 * i, 20) for i in range(26)} | {"outside": (400, 20)}
    return pipeline.run(valley_project(tmp_path_factory.mktemp("many"), cells, {"P00": "first"})).folder
