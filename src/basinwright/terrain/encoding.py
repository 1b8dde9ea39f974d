"""Flow directions as they are written: azimuths in degrees clockwise from grid north."""

from __future__ import annotations

import numpy as np

from basinwright.errors import TerrainError
from basinwright.kernels import EXIT, SINK, VOID

AZIMUTH_SINK = 65533
"""Water stays here: a declared sink."""
AZIMUTH_EXIT = 65534
"""Water leaves the raster here."""
AZIMUTH_NODATA = 65535

_CODES = np.array([0, 1, 2, 3, 4, 5, 6, 7, SINK, EXIT, VOID], np.uint8)
_AZIMUTHS = np.array([0, 45, 90, 135, 180, 225, 270, 315, AZIMUTH_SINK, AZIMUTH_EXIT, AZIMUTH_NODATA], np.uint16)
_BY_CODE = np.full(SINK + 1, AZIMUTH_NODATA, np.uint16)
_BY_CODE[_CODES] = _AZIMUTHS


def to_azimuth(directions: np.ndarray) -> np.ndarray:
    """Azimuths of direction codes.

    Parameters
    ----------
    directions : uint8 array, any shape
        Finished directions: 0 to 7, EXIT, SINK or VOID.

    Returns
    -------
    uint16 array, same shape [degrees]
        0, 45, ... 315; 65533 where it stays, 65534 where it leaves; 65535 without data.
    """
    return _BY_CODE[directions]


def from_azimuth(azimuth: np.ndarray) -> np.ndarray:
    """Direction codes of azimuths, the inverse of `to_azimuth`.

    Parameters
    ----------
    azimuth : uint16 array, any shape [degrees]

    Returns
    -------
    uint8 array, same shape

    Raises
    ------
    TerrainError
        Where a value is none of the eleven.
    """
    places = np.searchsorted(_AZIMUTHS, azimuth)  # 65535, the largest, is the last of them
    wrong = _AZIMUTHS[places] != azimuth
    if wrong.any():
        value = np.asarray(azimuth)[wrong].flat[0]
        raise TerrainError(
            f"flow direction {value} is not an azimuth of 0, 45, ... 315 degrees, {AZIMUTH_SINK} (sink), "
            f"{AZIMUTH_EXIT} (exit) or "
            f"{AZIMUTH_NODATA} (no data): recode the raster"
        )
    return _CODES[places]
