"""Small rasters made on the spot."""

import numpy as np
import pytest
import rasterio
from affine import Affine


@pytest.fixture
def write_raster(tmp_path):
    """Write an array as a GeoTIFF and return its path."""

    def write(name, array, transform, crs="EPSG:32614", nodata=None, unit=None, **options):
        array = np.asarray(array)
        bands = array if array.ndim == 3 else array[None]
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        with rasterio.open(
            path, "w", driver="GTiff", count=len(bands), height=bands.shape[1], width=bands.shape[2],
            dtype=array.dtype, crs=crs, transform=transform, nodata=nodata, **options,
        ) as out:  # fmt: skip
            out.write(bands)
            if unit:
                out.units = (unit,) * len(bands)
        return path

    return write


@pytest.fixture
def lattice():
    """Return the transform of 10-m cells with its corner in UTM zone 14."""
    return Affine(10.0, 0.0, 500_000.0, 0.0, -10.0, 4_400_000.0)
