"""The grid: one immutable object that says where a raster's cells lie and how large they truly are."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from affine import Affine

from basinwright.errors import GridError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray
    from pyproj import CRS


@dataclass(frozen=True)
class Grid:
    """A north-up raster grid.

    Parameters
    ----------
    nrows, ncols : int
        Shape; row 0 is the northernmost.
    transform : Affine
        From (column, row) to map coordinates: ``a`` > 0, ``e`` < 0, no rotation.
    crs_wkt : str
        The coordinate reference system as WKT.

    Raises
    ------
    GridError
        Where the transform is rotated or not north-up, or the shape is empty.
    """

    nrows: int
    ncols: int
    transform: Affine
    crs_wkt: str

    def __post_init__(self) -> None:
        t = self.transform
        if t.b or t.d or t.a <= 0 or t.e >= 0:
            raise GridError("the raster is rotated or not north-up: warp it to a north-up grid first")
        if self.nrows < 1 or self.ncols < 1:
            raise GridError("the raster has no cells")

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns."""
        return self.nrows, self.ncols

    @cached_property
    def crs(self) -> CRS:
        """The coordinate reference system."""
        from pyproj import CRS

        return CRS.from_wkt(self.crs_wkt)

    @property
    def is_geographic(self) -> bool:
        """Whether coordinates are longitude and latitude."""
        return bool(self.crs.is_geographic)

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """West, south, east and north edge in map coordinates."""
        west, north = self.transform.c, self.transform.f
        return west, north + self.nrows * self.transform.e, west + self.ncols * self.transform.a, north

    @cached_property
    def _sizes(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Width [m], height [m] and area [m2] of the cells, by row."""
        width, height = self.transform.a, -self.transform.e
        if not self.is_geographic:
            metres = float(self.crs.axis_info[0].unit_conversion_factor)
            ones = np.ones(self.nrows)
            return (
                ones * (width * metres),
                ones * (height * metres),
                ones * (width * metres * height * metres),
            )
        radians = float(self.crs.axis_info[0].unit_conversion_factor)
        edges = np.clip((self.transform.f - height * np.arange(self.nrows + 1)) * radians, -np.pi / 2, np.pi / 2)
        return _ellipsoidal_sizes(edges, width * radians, self.crs.ellipsoid)

    @property
    def dx_m(self) -> NDArray[np.float64]:
        """East-west size of a cell [m], shape (nrows,)."""
        return self._sizes[0]

    @property
    def dy_m(self) -> NDArray[np.float64]:
        """North-south size of a cell [m], shape (nrows,)."""
        return self._sizes[1]

    @property
    def cell_area_m2(self) -> NDArray[np.float64]:
        """Area of a cell [m2], shape (nrows,)."""
        return self._sizes[2]

    @property
    def cell_size_m(self) -> float:
        """Typical size of a cell [m]: the square root of its area at mid-height."""
        return float(np.sqrt(self.cell_area_m2[self.nrows // 2]))

    def coarsened(self, cells: int) -> Grid:
        """Return the grid of blocks of so many cells a side from the upper left corner; the last ones reach beyond."""
        t = self.transform
        transform = Affine(cells * t.a, 0.0, t.c, 0.0, cells * t.e, t.f)
        return Grid(-(-self.nrows // cells), -(-self.ncols // cells), transform, self.crs_wkt)

    def xy(self, row: ArrayLike, col: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return map coordinates of cell centres (rows and columns may be fractional)."""
        x = self.transform.c + (np.asarray(col, dtype=float) + 0.5) * self.transform.a
        y = self.transform.f + (np.asarray(row, dtype=float) + 0.5) * self.transform.e
        return x, y

    def rowcol(self, x: ArrayLike, y: ArrayLike) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Return the cell of each map coordinate; row or column is -1 where it lies outside the grid."""
        with np.errstate(invalid="ignore"):
            col = np.floor((np.asarray(x, dtype=float) - self.transform.c) / self.transform.a)
            row = np.floor((np.asarray(y, dtype=float) - self.transform.f) / self.transform.e)
            inside = (row >= 0) & (row < self.nrows) & (col >= 0) & (col < self.ncols)
        return np.where(inside, row, -1).astype(np.int64), np.where(inside, col, -1).astype(np.int64)

    def describe(self) -> dict[str, Any]:
        """Return the grid as plain values for a manifest."""
        authority = self.crs.to_authority()
        return {
            "rows": self.nrows,
            "columns": self.ncols,
            "transform": list(self.transform)[:6],
            "crs": ":".join(authority) if authority else self.crs_wkt,
            "crs_name": self.crs.name,
            "geographic": self.is_geographic,
            "cell_size_m": self.cell_size_m,
        }


def _ellipsoidal_sizes(
    edges_rad: NDArray[np.float64], width_rad: float, ellipsoid: Any
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Return width, height and area of the cells between parallels.

    Source: J. P. Snyder, Map Projections: A Working Manual, USGS Professional Paper 1395 (1987): radius of a
    parallel from eq. 4-21, of the meridian from eq. 4-19, area of the zone from the authalic function q,
    eq. 3-12. The height is the meridian's radius at mid-latitude times the angle.
    """
    a, b = float(ellipsoid.semi_major_metre), float(ellipsoid.semi_minor_metre)
    e2 = 1.0 - (b / a) ** 2
    e = np.sqrt(e2)
    mid = 0.5 * (edges_rad[:-1] + edges_rad[1:])
    w2 = 1.0 - e2 * np.sin(mid) ** 2
    width_m = a * np.cos(mid) / np.sqrt(w2) * width_rad  # eq. 4-21
    height_m = a * (1.0 - e2) / w2**1.5 * (edges_rad[:-1] - edges_rad[1:])  # eq. 4-19
    s = np.sin(edges_rad)
    if e > 0:
        q = (1.0 - e2) * (s / (1.0 - e2 * s * s) - np.log((1.0 - e * s) / (1.0 + e * s)) / (2.0 * e))  # eq. 3-12
    else:
        q = 2.0 * s
    return width_m, height_m, 0.5 * a * a * width_rad * (q[:-1] - q[1:])
