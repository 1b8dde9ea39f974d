"""A grid and small layers made on the spot."""

import numpy as np
import pytest
import rasterio
from affine import Affine

from basinwright.grid import Grid


@pytest.fixture
def grid():
    """Return 4 x 6 cells of 10 m in UTM zone 14."""
    transform = Affine(10.0, 0.0, 500_000.0, 0.0, -10.0, 4_400_000.0)
    return Grid(4, 6, transform, rasterio.crs.CRS.from_epsg(32614).to_wkt())


@pytest.fixture
def on_grid(tmp_path, grid):
    """Write a raster on the grid's cells and return its path."""

    def write(name, rows, dtype="uint8", nodata=None):
        array = np.asarray(rows, dtype=dtype)
        path = tmp_path / name
        with rasterio.open(
            path, "w", driver="GTiff", count=1, height=array.shape[0], width=array.shape[1], dtype=dtype,
            crs=grid.crs_wkt, transform=grid.transform, nodata=nodata,
        ) as out:  # fmt: skip
            out.write(array, 1)
        return path

    return write
