"""Cutting the longest flow path into segments of one flow regime."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from basinwright.grid import Grid
from basinwright.paths.tracing import Paths
from basinwright.tables import REGIMES
from basinwright.terrain import Terrain

WIDE_WATER = 3.0
"""Open water is wider than this many bankfull widths."""
LEAST_TRIBUTARY = 0.1
"""Share of the stream area that a tributary must bring to cut shallow flow: near the divide every few cells
of hillside raise the area by half, and none of them is a flow line of its own."""
_HALVINGS = 50
"""Enough to bring the length of a sheet reach down to the last bits of a float."""


@dataclass(frozen=True)
class CutRules:
    """Where the flow regime changes along a path.

    Parameters
    ----------
    stream_area_km2 : float [km2]
        Contributing area at which channels begin; also the measure of a tributary.
    sheet_limit_m : float [m]
        Longest sheet flow.
    min_segment_m : float [m]
        Shorter pieces join a neighbour of the same regime.
    slope_floor : float
        Lowest slope [ratio]; flatter water is open water.
    mccuen_spiess_m : callable
        ``(roughness_n, slope) -> length [m]``, on arrays.
    bankfull_width_m : callable
        ``(area_km2) -> width [m]``, on arrays.
    channels : bool array, shape (cells,), optional
        The channels themselves, whatever area they begin at.
    """

    stream_area_km2: float
    sheet_limit_m: float
    min_segment_m: float
    slope_floor: float
    mccuen_spiess_m: Callable[[np.ndarray, np.ndarray], np.ndarray]
    bankfull_width_m: Callable[[np.ndarray], np.ndarray]
    channels: np.ndarray | None = None


@dataclass(frozen=True)
class CoverOnGrid:
    """Land cover on the terrain's grid.

    Parameters
    ----------
    classes : int array, shape (nrows, ncols)
        Position of each cell's class in the next three; negative where it has none.
    codes : sequence of str, length k
        Class codes.
    sheet_n : float64 array, shape (k,)
        Manning n for sheet flow; NaN where the scheme has none.
    open_water : bool array, shape (k,)
    channel_n : float array, shape (nrows, ncols), optional
        Manning n of mapped channels; NaN where there is none.
    """

    classes: np.ndarray
    codes: Sequence[str]
    sheet_n: np.ndarray
    open_water: np.ndarray
    channel_n: np.ndarray | None = None


@dataclass(frozen=True, eq=False)
class Cut:
    """Segments of all paths, and what is to be said about the cutting.

    Attributes
    ----------
    segments : dict of arrays, shape (segments,)
        ``outlet`` (index), ``segment`` (from 1), ``regime``, ``cover``, ``from_m``, ``to_m``,
        ``top_elevation_m``, ``bottom_elevation_m``, ``roughness`` (sheet flow and mapped channels, else NaN),
        ``area_km2``; outlet by outlet, downstream.
    sheet_limited : bool array, shape (n,)
        The McCuen-Spiess limit ended the sheet flow, not `CutRules.sheet_limit_m`, a channel, open water or
        the outlet (SHEET_LIMIT).
    no_channel : bool array, shape (n,)
        The path has no channel segment (NO_CHANNEL).
    """

    segments: dict[str, np.ndarray]
    sheet_limited: np.ndarray
    no_channel: np.ndarray


def cut_segments(grid: Grid, terrain: Terrain, paths: Paths, cover: CoverOnGrid, rules: CutRules) -> Cut:
    """Cut every path into sheet, shallow, channel and open-water segments.

    Sheet flow runs from the divide to the shortest of its limit, the McCuen-Spiess limit with the reach's own slope
    and length-weighted roughness, and the start of channel or open water. The channel starts at the centre of the first
    cell with the stream area. Open water is where the cover is water, the profile falls by less than the slope
    floor times the length, the stretch is at least the shortest segment long, and most transects across it are wider
    than three bankfull widths at its middle. Shallow and channel flow are cut midway between cells of different cover
    (channels also where the roughness of mapped ones changes), and at a cell whose area is 1.5 times that of the one
    above or more; in shallow flow such a tributary must also bring a tenth of the stream area.

    Pieces shorter than the shortest segment, looked at from the divide down, join the longer neighbour of
    their regime, the upstream one of equals; without such a neighbour they stay. A joined piece has the cover of
    most length, and pieces that then have the same cover with no tributary between them are one.

    Parameters
    ----------
    grid : Grid
    terrain : Terrain
    paths : Paths
    cover : CoverOnGrid
        A path cell without a class takes that of the nearest cell of its path, and a class without sheet-flow
        roughness the roughness of the nearest; ties upstream. Where a whole path has none there is no sheet flow.
    rules : CutRules

    Returns
    -------
    Cut
        Segments of a path are contiguous (each begins at the very number where the one above ends), the first
        begins at 0 and the last ends at the path's length. Empty and single-cell paths have none.
    """
    from basinwright.kernels import paths as kernel

    bounds, distance, elevation = paths.bounds, paths.distance_m, paths.elevation_m
    classes = cover.classes[terrain.rows_cols(paths.cells)]
    classes = _gaps_filled(paths, classes, classes >= 0)
    path, first, last = _open_water(grid, paths, classes, terrain.ncols, cover, rules)
    area_km2 = paths.area_km2
    if rules.channels is not None:
        area_km2 = np.where(rules.channels[paths.cells], np.inf, 0.0)
    channel, sheet_end = kernel.regime_starts(bounds, distance, area_km2, rules.stream_area_km2, path, first)
    sheet, roughness, limited = _sheet(paths, classes, cover, sheet_end, rules)

    n_classes = len(cover.codes)
    channel_n, kind = _channel_kinds(terrain, paths, cover, rules)
    kinds = channel_n.size
    segment_bounds, pieces = kernel.cut(
        bounds, distance, paths.area_km2, (np.where(classes < 0, n_classes, classes) * kinds + kind).astype(np.int32),
        (n_classes + 1) * kinds, sheet, channel, np.searchsorted(path, np.arange(paths.n + 1)), first, last,
        LEAST_TRIBUTARY * rules.stream_area_km2, rules.min_segment_m,
    )  # fmt: skip
    to_m = pieces[:, 0].copy()
    regime, main = pieces[:, 1:].astype(np.int64).T
    main, kind = np.divmod(main, kinds)
    from_m, top, bottom, area = kernel.at_segments(bounds, distance, elevation, paths.area_km2, segment_bounds, to_m)
    outlet = np.repeat(np.arange(paths.n), np.diff(segment_bounds))
    segments = {
        "outlet": outlet,
        "segment": np.arange(to_m.size) - segment_bounds[outlet] + 1,
        "regime": np.asarray(REGIMES, object)[regime],
        "cover": np.asarray([*cover.codes, ""], object)[main],
        "from_m": from_m,
        "to_m": to_m,
        "top_elevation_m": top,
        "bottom_elevation_m": bottom,
        "roughness": np.where(
            regime == kernel.SHEET, roughness[outlet], np.where(regime == kernel.CHANNEL, channel_n[kind], np.nan)
        ),
        "area_km2": area,
    }
    has_channel = np.bincount(outlet[regime == kernel.CHANNEL], minlength=paths.n) > 0
    return Cut(segments, limited, ~has_channel & (np.diff(bounds) > 0))


def _channel_kinds(
    terrain: Terrain, paths: Paths, cover: CoverOnGrid, rules: CutRules
) -> tuple[np.ndarray, np.ndarray]:
    """Values of Manning n of mapped channels, NaN the last, and which of them each cell of the paths has."""
    if cover.channel_n is None:
        return np.full(1, np.nan), np.zeros(paths.cells.size, np.int64)
    along = np.where(
        paths.area_km2 >= rules.stream_area_km2, cover.channel_n[terrain.rows_cols(paths.cells)], np.nan
    ).astype(np.float64)
    known = np.unique(along[~np.isnan(along)])
    return np.append(known, np.nan), np.where(np.isnan(along), known.size, np.searchsorted(known, along))


def _gaps_filled(paths: Paths, values: np.ndarray, known: np.ndarray) -> np.ndarray:
    """Values along the paths, unknown ones taken from the nearest cell of the path that is known, if any is."""
    from basinwright.kernels import paths as kernel

    if known.all():
        return values
    nearest = kernel.nearest_valid(paths.bounds, paths.distance_m, known)
    return values[np.where(nearest >= 0, nearest, np.arange(values.size))]


def _open_water(
    grid: Grid, paths: Paths, classes: np.ndarray, ncols: int, cover: CoverOnGrid, rules: CutRules
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Stretches of open water: path, first and last position, in downstream order."""
    from basinwright.kernels import paths as kernel

    is_water = np.asarray(cover.open_water, bool)
    water = np.append(is_water, False)[classes]
    path, first, last = kernel.flat_water(
        paths.bounds, paths.distance_m, paths.elevation_m, water, rules.slope_floor, rules.min_segment_m
    )
    if path.size == 0:
        return path, first, last
    wide_m = WIDE_WATER * np.asarray(rules.bankfull_width_m(paths.area_km2[(first + last) // 2]), np.float64)
    wide = kernel.wide_water(
        paths.bounds, paths.cells, path, first, last, ncols, grid.dx_m, grid.dy_m, cover.classes, is_water, wide_m
    )
    return path[wide], first[wide], last[wide]


def _sheet(
    paths: Paths, classes: np.ndarray, cover: CoverOnGrid, end_m: np.ndarray, rules: CutRules
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Length and roughness of sheet flow, and whether the McCuen-Spiess limit ended it, by path.

    The limit depends on the slope and roughness of the reach that it ends. The length L at which the two agree
    is found by halving the interval on the sign of limit(L) - L: it is positive near 0, since neither slope
    nor roughness vanishes there.
    """
    from basinwright.kernels import paths as kernel

    n_of_class = np.append(np.asarray(cover.sheet_n, np.float64), np.nan)[classes]
    n_along = _gaps_filled(paths, n_of_class, ~np.isnan(n_of_class))
    known = ~np.isnan(paths.at_ends(n_along)[0])

    def agrees(length_m: np.ndarray) -> np.ndarray:
        """Whether the limit of the reach is at least its length; false where there is no reach."""
        slope, roughness = kernel.sheet_reach(paths.bounds, paths.distance_m, paths.elevation_m, n_along, length_m)
        some = length_m > 0
        limit_m = np.full(paths.n, -np.inf)
        limit_m[some] = rules.mccuen_spiess_m(roughness[some], np.maximum(slope[some], rules.slope_floor))
        return limit_m >= length_m

    longest = np.where(known, np.minimum(end_m, rules.sheet_limit_m), 0.0)
    limited = (longest > 0) & ~agrees(longest)
    low, high = np.where(limited, 0.0, longest), longest.copy()
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        shorter = limited & ~agrees(np.where(limited, middle, 0.0))
        low, high = np.where(shorter, low, middle), np.where(shorter, middle, high)
    length = np.where(limited, low, longest)
    roughness = kernel.sheet_reach(paths.bounds, paths.distance_m, paths.elevation_m, n_along, length)[1]
    return length, roughness, limited
