"""Rasters: what a header says, reading any raster onto a grid, writing cloud-optimised GeoTIFFs."""

from __future__ import annotations

import glob
import re
import warnings
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from affine import Affine

from basinwright.errors import InputRejected, Problem
from basinwright.grid import Grid
from basinwright.progress import tell

if TYPE_CHECKING:
    from numpy.typing import NDArray
    from pyproj import CRS, Transformer
    from rasterio.io import DatasetReader

Resampling = Literal["nearest", "bilinear", "average"]

BLOCK_CELLS = 2**22
"""Cells read or written at a time."""

WARP_TOLERANCE = 0.01
"""Error allowed to the approximated map transformation, in source cells (the library's default is 0.125)."""

Location = Path | str
"""A local file as Path; a remote source (see `is_remote`) as the text the user wrote, which Path would mangle."""

_DRIVER_PREFIX = re.compile(r"[A-Za-z][A-Za-z0-9_+.\-]+:")  # two characters at least: "C:" is a drive


def is_remote(text: str) -> bool:
    """Say whether a text names something other than a local file to the raster and vector libraries.

    Parameters
    ----------
    text : str
        A path as the user wrote it.

    Returns
    -------
    bool
        True for URLs (``https://``, ``s3:``), virtual file systems (``/vsizip/``), driver prefixes (``NETCDF:``,
        ``GTIFF_DIR:``), archives (``zip:``) and inline documents (``<VRTDataset>``, JSON).

    Examples
    --------
    >>> [is_remote(text) for text in ("dem.tif", "C:/data/dem.tif", "/vsicurl/https://host/dem.tif", "zip:a.zip")]
    [False, False, True, True]
    """
    text = text.strip()
    return (
        "://" in text
        or text.replace("\\", "/").lower().startswith("/vsi")
        or text.startswith(("<", "{"))
        or _DRIVER_PREFIX.match(text) is not None
    )


def refers_to_remote(path: Location) -> bool:
    """Say whether a local XML file (a virtual raster, a web service description) leads to something remote."""
    try:
        with open(path, "rb") as stream:
            if not stream.read(64).lstrip(b"\xef\xbb\xbf \t\r\n").startswith(b"<"):
                return False
            stream.seek(0)
            text = stream.read().lower()
    except OSError:
        return False
    return b"/vsi" in text or b"://" in text


def expand_paths(patterns: Sequence[str], folder: Path) -> tuple[list[Location], list[Problem]]:
    """Resolve paths and globs relative to a folder, in the order written, matches of a glob by name.

    Parameters
    ----------
    patterns : sequence of str
        Paths or globs (``tiles/*.tif``).
    folder : Path
        What they are relative to.

    Returns
    -------
    paths : list of Path or str
        Without repetitions; remote sources stay as written.
    problems : list of Problem
        One for each glob that matches nothing.
    """
    paths: dict[Location, None] = {}
    problems = []
    for pattern in patterns:
        if is_remote(pattern):
            paths[pattern] = None
            continue
        whole = str(folder / pattern)
        if glob.has_magic(pattern) and not Path(whole).exists():
            matches = sorted(glob.glob(whole, recursive=True))
            if not matches:
                problems.append(
                    Problem(pattern, "file", "matches no file", f"check the pattern; it starts at {folder}")
                )
            paths.update(dict.fromkeys(Path(match) for match in matches))
        else:
            paths[Path(whole)] = None
    return list(paths), problems


def horizontal_crs(wkt: str) -> CRS:
    """Return the horizontal part of a coordinate reference system, which is what a grid lies in."""
    from pyproj import CRS

    crs = CRS.from_wkt(wkt)
    while crs.is_bound and crs.source_crs is not None:
        crs = crs.source_crs
    if crs.is_compound:
        crs = crs.sub_crs_list[0]
    return crs.to_2d()


@dataclass(frozen=True)
class Header:
    """What a raster says about itself, read without its cells.

    Parameters
    ----------
    path : Path or str
        The file.
    transform : Affine
        From (column, row) to map coordinates; always north-up, see `south_up`.
    south_up : bool
        Whether row 0 of the file is the southernmost: its rows are to be read in reverse.
    nrows, ncols, bands : int
        Shape and number of bands.
    dtype : str
        Type of band 1.
    crs_wkt : str
        The coordinate reference system, vertical part included.
    unit : str
        The declared unit of band 1, or empty.
    """

    path: Location
    transform: Affine
    south_up: bool
    nrows: int
    ncols: int
    bands: int
    dtype: str
    crs_wkt: str
    unit: str

    @property
    def crs(self) -> CRS:
        """The horizontal coordinate reference system."""
        return horizontal_crs(self.crs_wkt)

    @property
    def grid(self) -> Grid:
        """The raster's own cells as a grid."""
        return Grid(self.nrows, self.ncols, self.transform, self.crs.to_wkt())

    def record(self, method: str) -> dict[str, Any]:
        """Return how this raster was brought onto the grid, as plain values for the manifest."""
        return {
            "path": short_name(self.path),
            "crs": crs_label(self.crs),
            "shape": [self.nrows, self.ncols],
            "resolution": [self.transform.a, -self.transform.e],
            "band": f"1 of {self.bands}",
            "method": method,
        }


def short_name(path: Location) -> str:
    """Return the name of a file without its folders, or a remote source as it is."""
    return path if isinstance(path, str) and is_remote(path) else Path(path).name


def crs_label(crs: CRS) -> str:
    """Return the short name of a coordinate reference system: its code, else its name."""
    authority = crs.to_authority()
    return ":".join(authority) if authority else crs.name


def read_header(path: Location) -> tuple[Header | None, list[Problem]]:
    """Read what a raster says about itself.

    Parameters
    ----------
    path : Path or str
        Any raster that GDAL reads.

    Returns
    -------
    header : Header or None
        None where there is a problem.
    problems : list of Problem
        Missing, unreadable, no CRS or none of the map kind, no georeference, rotated, complex numbers.
    """
    import rasterio
    from rasterio.errors import NotGeoreferencedWarning, RasterioIOError

    file = str(path)
    if not is_remote(file) and not Path(path).is_file():
        what = "is a folder" if Path(path).is_dir() else "does not exist"
        return None, [Problem(file, "file", what, "check the path")]
    problems = []
    try:
        with warnings.catch_warnings(), rasterio.Env(GTIFF_REPORT_COMPD_CS=True):
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            with rasterio.open(path) as source:
                transform, shape, bands = source.transform, source.shape, source.count
                dtype = source.dtypes[0] if bands else "none"
                crs_wkt = source.crs.to_wkt() if source.crs else ""
                unit = (source.units[0] or "") if bands else ""
    except RasterioIOError as error:
        return None, [Problem(file, "file", f"is not a readable raster ({error})", "give a raster that GDAL reads")]
    if bands == 0:
        problems.append(Problem(file, "bands", "has no band of its own", "name one raster of this container"))
    if "complex" in dtype:
        problems.append(Problem(file, "bands", "holds complex numbers", "give a raster of real numbers"))
    if not crs_wkt:
        problems.append(Problem(file, "crs", "has no coordinate reference system", "assign the one it was made in"))
    elif not (horizontal_crs(crs_wkt).is_geographic or horizontal_crs(crs_wkt).is_projected):
        what = f"its coordinate reference system ({horizontal_crs(crs_wkt).name}) is not a map's"
        problems.append(Problem(file, "crs", what, "warp it to a geographic or projected one"))
    if transform.is_identity:
        problems.append(Problem(file, "georeference", "has none", "give a georeferenced raster"))
    elif max(abs(transform.b), abs(transform.d)) > 1e-9 * abs(transform.a) or transform.a <= 0:  # less is rounding
        problems.append(Problem(file, "georeference", "is rotated or mirrored", "warp it to a north-up grid"))
    if problems:
        return None, problems
    south_up = transform.e > 0
    top = transform.f + shape[0] * transform.e if south_up else transform.f
    transform = Affine(transform.a, 0.0, transform.c, 0.0, -abs(transform.e), top)
    return Header(path, transform, south_up, shape[0], shape[1], bands, dtype, crs_wkt, unit), []


@contextmanager
def cells_of(path: Location) -> Iterator[DatasetReader]:
    """Open a raster to read its cells; a damaged file is rejected when that shows.

    Raises
    ------
    InputRejected
        Where the file cannot be opened or its cells cannot be read.
    """
    import rasterio
    from rasterio.errors import RasterioError, RasterioIOError

    try:
        with rasterio.open(path) as source:
            yield source
    except (RasterioError, RasterioIOError) as error:
        what, fix = f"its cells cannot be read ({error})", "the file is damaged: get it again"
        raise InputRejected.one(str(path), "cells", what, fix) from error


def check_raster(path: Location, grid: Grid | None = None) -> list[Problem]:
    """List what is wrong with a raster that is to be read onto a grid (see `read_header`).

    Parameters
    ----------
    path : Path or str
        The raster.
    grid : Grid, optional
        The grid it must overlap.
    """
    header, problems = read_header(path)
    if header is not None and grid is not None and not _overlap(header.grid, grid):
        problems.append(Problem(str(path), "extent", "does not overlap the terrain", "check its CRS and extent"))
    return problems


def _overlap(one: Grid, other: Grid) -> bool:
    from pyproj import Transformer

    to_other = Transformer.from_crs(one.crs, other.crs, always_xy=True)
    west, south, east, north = to_other.transform_bounds(*one.bounds, densify_pts=21)
    box = other.bounds
    if not np.isfinite([west, south, east, north]).all():
        return True  # not decidable from the corners
    return west < box[2] and east > box[0] and south < box[3] and north > box[1]


def read_blocks_onto(
    path: Location, grid: Grid, resampling: Resampling = "nearest"
) -> Iterator[tuple[int, np.ma.MaskedArray[Any, Any]]]:
    """Read a raster of any CRS and resolution onto a grid, in blocks of whole rows.

    Parameters
    ----------
    path : Path or str
        The raster; its band 1 is read.
    grid : Grid
        The grid to read onto.
    resampling : {"nearest", "bilinear", "average"}
        ``nearest`` for classes.

    Yields
    ------
    first_row : int
        Row of the grid at which the block begins.
    block : masked array, shape (rows, ncols)
        Values in the raster's own type, masked where the raster has none.

    Raises
    ------
    InputRejected
        Where the file is damaged.
    """
    from rasterio.enums import Resampling as Methods
    from rasterio.vrt import WarpedVRT
    from rasterio.windows import Window

    rows = max(1, BLOCK_CELLS // grid.ncols)
    with cells_of(path) as source:
        # A raster without a nodata value has no number to spare for "none": an alpha band says it instead.
        empty = {"add_alpha": True} if source.nodata is None else {"nodata": source.nodata}
        with WarpedVRT(
            source,
            src_crs=horizontal_crs(source.crs.to_wkt()).to_wkt(),
            crs=grid.crs_wkt,
            transform=grid.transform,
            height=grid.nrows,
            width=grid.ncols,
            resampling=Methods[resampling],
            tolerance=WARP_TOLERANCE,
            **empty,
        ) as warped:
            for first in range(0, grid.nrows, rows):
                window = Window(0, first, grid.ncols, min(rows, grid.nrows - first))
                block = warped.read(1, window=window, masked=True)
                yield first, np.ma.masked_invalid(block, copy=False) if block.dtype.kind == "f" else block
                tell(first + len(block), grid.nrows, "rows")


def read_onto(
    path: Location, grid: Grid, resampling: Resampling = "nearest", missing: float | None = None
) -> NDArray[Any]:
    """Read a raster of any CRS and resolution onto a grid, as one array.

    Parameters
    ----------
    path, grid, resampling
        As in `read_blocks_onto`.
    missing : float, optional
        What stands where the raster has no value. By default NaN, and the array is floating.

    Returns
    -------
    ndarray, shape (nrows, ncols)
    """
    out: NDArray[Any] | None = None
    for first, block in read_blocks_onto(path, grid, resampling):
        if out is None:
            floating = np.result_type(block.dtype, np.float32)
            out = np.empty(grid.shape, dtype=floating if missing is None else block.dtype)
        part = out[first : first + len(block)]
        part[:] = block.data
        part[np.ma.getmaskarray(block)] = np.nan if missing is None else missing
    if out is None:
        raise ValueError("the grid has no rows")
    return out


def align_record(path: Location, grid: Grid, resampling: Resampling = "nearest") -> dict[str, Any]:
    """Return how a raster is brought onto a grid, as plain values for the manifest."""
    header, problems = read_header(path)
    if header is None:
        raise ValueError("; ".join(map(str, problems)))
    own = header.grid
    same_crs = own.crs.equals(grid.crs, ignore_axis_order=True)
    if same_crs and on_lattice(own.transform, grid.transform):
        return header.record("native")
    return header.record(resampling if same_crs else f"{resampling}, to {crs_label(grid.crs)}")


LATTICE_TOLERANCE = 0.01
"""How far, in cells, the corners of two rasters of one lattice may lie off whole cells (origins are rounded)."""


def on_lattice(one: Affine, other: Affine, tolerance: float = LATTICE_TOLERANCE) -> bool:
    """Say whether two transforms have one cell size and lie whole cells apart."""
    same_size = abs(one.a / other.a - 1.0) < 1e-6 and abs(one.e / other.e - 1.0) < 1e-6
    col, row = (one.c - other.c) / other.a, (one.f - other.f) / other.e
    return same_size and abs(col - round(col)) < tolerance and abs(row - round(row)) < tolerance


def write_cog(
    path: Path,
    array: NDArray[Any] | Callable[[slice], NDArray[Any]],
    grid: Grid,
    *,
    meaning: str,
    unit: str = "",
    nodata: float | None = None,
    tags: Mapping[str, str] | None = None,
    overview_resampling: Resampling = "nearest",
) -> None:
    """Write an array as a cloud-optimised GeoTIFF, window by window; the same input gives the same bytes.

    Parameters
    ----------
    path : Path
        The file to write; its folder exists.
    array : ndarray, shape (nrows, ncols), or callable
        The values, which need not be contiguous; or what makes those of some rows.
    grid : Grid
        Where they lie.
    meaning : str
        What the values are: the band's description.
    unit : str
        Their unit, as the band declares it.
    nodata : float, optional
        The value that stands for none.
    tags : mapping, optional
        More tags of the file.
    overview_resampling : {"nearest", "average", "bilinear"}
        ``nearest`` for codes and for values that must not be averaged.
    """
    import rasterio
    from rasterio.shutil import copy
    from rasterio.windows import Window

    if not callable(array) and array.shape != grid.shape:
        raise ValueError(f"the array has shape {array.shape}, the grid {grid.shape}")
    # The bytes of a file written by window depend on the order of writing; those of its copy do not.
    draft = path.with_name(f".{path.name}.draft.tif")
    values = array if callable(array) else array.__getitem__
    rows = max(1, BLOCK_CELLS // grid.ncols)
    try:
        with rasterio.open(
            draft, "w", driver="GTiff", height=grid.nrows, width=grid.ncols, count=1, dtype=values(slice(0, 1)).dtype,
            crs=grid.crs_wkt, transform=grid.transform, nodata=nodata, BIGTIFF="IF_SAFER",
        ) as out:  # fmt: skip
            for first in range(0, grid.nrows, rows):
                block = values(slice(first, first + rows))
                out.write(block, 1, window=Window(0, first, grid.ncols, len(block)))
            out.set_band_description(1, meaning)
            out.units = (unit,)
            out.update_tags(meaning=meaning, unit=unit, **(tags or {}))
        # Deflate is read everywhere; its first level is half as slow as the sixth for 2 to 8 % more bytes.
        copy(
            draft, path, driver="COG", COMPRESS="DEFLATE", LEVEL="1", PREDICTOR="YES", BLOCKSIZE="512",
            OVERVIEW_RESAMPLING=overview_resampling.upper(), BIGTIFF="IF_SAFER",
        )  # fmt: skip
    finally:
        draft.unlink(missing_ok=True)


@cache
def _transformer(from_crs: str, to_crs: str) -> Transformer:
    from pyproj import Transformer

    return Transformer.from_crs(from_crs, to_crs, always_xy=True)


def pixel_at(path: Location, crs: str, x: float, y: float) -> tuple[int, int, str] | None:
    """Return the pixel of a raster under a point: row and column from 0, and its value as text.

    Parameters
    ----------
    path : Path or str
        The raster.
    crs : str
        CRS of the point.
    x, y : float
        The point.

    Returns
    -------
    tuple of int, int and str, or None
        None where the point lies outside. The value is ``nodata`` where the raster has none.
    """
    import rasterio
    from rasterio.windows import Window

    with rasterio.open(path) as source:
        easting, northing = _transformer(crs, source.crs.to_wkt()).transform(x, y)
        row, col = source.index(easting, northing)
        if not (0 <= row < source.height and 0 <= col < source.width):
            return None
        value = source.read(1, window=Window(col, row, 1, 1), masked=True)[0, 0]
        return row, col, "nodata" if np.ma.is_masked(value) else repr(value.item())


def read_whole(path: Path) -> tuple[NDArray[Any], Affine, str]:
    """Read a raster of this program whole: values (floating ones NaN where there is no data), transform, CRS as WKT."""
    with cells_of(path) as source:
        band = source.read(1, masked=True)
        values = band.filled(np.nan) if band.dtype.kind == "f" else band.data
        return values, source.transform, source.crs.to_wkt()
