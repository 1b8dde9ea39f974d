"""What a report draws from: layers of a run, terrain at the size of a picture, pictures as bytes."""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    import geopandas as gpd
    from numpy.typing import NDArray

Bounds = tuple[float, float, float, float]
"""West, south, east and north edge in map coordinates."""


def read_layer(
    path: Path, layer: str, columns: Sequence[str], *, outlet_id: str | None = None, bounds: Bounds | None = None
) -> gpd.GeoDataFrame:
    """Read a layer of a GeoPackage that this program wrote, with only these columns.

    Parameters
    ----------
    path : Path
    layer : str
    columns : sequence of str
    outlet_id : str, optional
        The one outlet whose features are wanted.
    bounds : tuple of float, optional
        What the wanted features touch, in the layer's CRS.
    """
    import pyogrio

    quoted = None if outlet_id is None else "outlet_id = '{}'".format(outlet_id.replace("'", "''"))
    return pyogrio.read_dataframe(path, layer=layer, columns=list(columns), where=quoted, bbox=bounds)


def read_terrain(path: Path, bounds: Bounds, most_cells: int) -> tuple[NDArray[np.float32], Bounds]:
    """Read the part of a terrain raster that a picture shows, no finer than the picture needs.

    Parameters
    ----------
    path : Path
        The raster.
    bounds : tuple of float
        What the picture shows; whole cells that touch it are read.
    most_cells : int
        Most rows or columns wanted: a larger part is averaged onto fewer.

    Returns
    -------
    elevation : ndarray of float32, shape (rows, columns)
        NaN where there is none; no rows where the picture lies beside the raster.
    bounds : tuple of float
        What was read.
    """
    import rasterio
    from rasterio.enums import Resampling
    from rasterio.windows import Window

    with rasterio.open(path) as source:
        t = source.transform
        first_col, last_col = (int(np.floor((x - t.c) / t.a)) for x in (bounds[0], bounds[2]))
        first_row, last_row = (int(np.floor((y - t.f) / t.e)) for y in (bounds[3], bounds[1]))
        first_col, first_row = max(first_col, 0), max(first_row, 0)
        last_col, last_row = min(last_col, source.width - 1), min(last_row, source.height - 1)
        rows, cols = max(last_row - first_row + 1, 0), max(last_col - first_col + 1, 0)
        west, north = t.c + first_col * t.a, t.f + first_row * t.e
        read = (west, north + rows * t.e, west + cols * t.a, north)
        if rows == 0 or cols == 0:
            return np.empty((0, 0), dtype=np.float32), read
        shrink = max(rows, cols) / most_cells
        shape = (rows, cols) if shrink <= 1 else (max(1, round(rows / shrink)), max(1, round(cols / shrink)))
        data = source.read(
            1,
            window=Window(first_col, first_row, cols, rows),
            out_shape=shape,
            masked=True,
            resampling=Resampling.average,
        )
    return data.astype(np.float32).filled(np.nan), read


def as_jpeg(grey: NDArray[np.uint8], quality: int = 70) -> bytes:
    """Return a grey picture as JPEG; the same picture gives the same bytes."""
    from rasterio.errors import NotGeoreferencedWarning
    from rasterio.io import MemoryFile

    rows, cols = grey.shape
    with warnings.catch_warnings(), MemoryFile() as memory:
        warnings.simplefilter("ignore", NotGeoreferencedWarning)
        with memory.open(
            driver="JPEG", height=rows, width=cols, count=1, dtype="uint8", QUALITY=str(quality)
        ) as picture:
            picture.write(grey, 1)
        return bytes(memory.read())
