"""The channel network of the whole raster, and where its channels begin."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from basinwright.terrain.routing import Terrain

LEAST_CELLS = 50
"""The smallest stream area that is tested holds so many cells of mean size: fewer are hillside, not channels."""
LEAST_STREAMS = (10, 5)
"""Streams of order 1 and of higher orders below which their mean drops are not compared."""
T_LIMIT = 2.0
"""Mean drops differ where Student's t is larger (Tarboton, Bras & Rodriguez-Iturbe 1991)."""
FALLBACK_KM2 = 0.25
"""The stream area where no tested one passes."""

_ANY_M2 = 1e-6
"""Less than any cell's area and more than nothing."""
_SERIES = (1.0, 1.25, 1.6, 2.0, 2.5, 3.15, 4.0, 5.0, 6.3, 8.0)
"""Preferred numbers, ten to a decade (ISO 3, R10): tested areas do not depend on the terrain."""


def stream_area_m2(stream_area_km2: float) -> float:
    """Stream area as the kernels compare it [m2]: 0.07 km2 is 70000 m2, not a hair more."""
    return round(stream_area_km2 * 1e6, 6)


def mapped_channels(terrain: Terrain, mapped: np.ndarray) -> np.ndarray:
    """Channels that begin where mapped lines begin: mapped cells and all below them.

    Parameters
    ----------
    terrain : Terrain
    mapped : bool array, shape (nrows, ncols)
        Cells of mapped streams.

    Returns
    -------
    bool array, shape (cells,)
    """
    from basinwright.kernels import VOID, network

    mark = np.zeros(terrain.directions.size, np.uint8)
    terrain.grid(mark)[...] = mapped & (terrain.directions_grid != VOID)
    network.mark_below(terrain.directions, terrain.ncols, mark)
    return mark == 2


def channel_test(
    terrain: Terrain, stream_area_km2: float, channels: np.ndarray | None = None
) -> tuple[np.ndarray, float]:
    """What the kernels compare to tell a channel: an area of every cell, and the area from which on it is a channel.

    Parameters
    ----------
    terrain : Terrain
    stream_area_km2 : float [km2]
    channels : bool array, shape (cells,), optional
        The channels themselves, as `mapped_channels` gives them; the stream area then does not matter.

    Returns
    -------
    area_m2 : float64 array, shape (cells,) [m2]
        The contributing area; 0 off the given channels.
    least_m2 : float [m2]
    """
    if channels is None:
        return terrain.area_m2, stream_area_m2(stream_area_km2)
    return np.where(channels, terrain.area_m2, 0.0), _ANY_M2


@dataclass(frozen=True, eq=False)
class Reaches:
    """The channel network reach by reach.

    A reach runs from a channel head or a junction to the next junction or to where the channel ends; the junction's
    cell ends it and begins the next one.

    Attributes
    ----------
    bounds : int64 array, shape (reaches + 1,)
    cells : int32 array, shape (reach cells,)
        Padded indices, downstream; reach i lies in ``[bounds[i], bounds[i + 1])``. Reaches are in the order of their
        upper cells, row by row.
    strahler : uint8 array, shape (reaches,)
        Strahler order.
    to_reach : int32 array, shape (reaches,)
        The next reach downstream, -1 where the channel leaves the raster or ends.
    length_m, drop_m : float64 arrays, shape (reaches,) [m]
        The drop is on the conditioned surface.
    top_area_km2, area_km2 : float64 arrays, shape (reaches,) [km2]
        Contributing area at the upper end, and at the lower end just above the junction.
    """

    bounds: np.ndarray
    cells: np.ndarray
    strahler: np.ndarray
    to_reach: np.ndarray
    length_m: np.ndarray
    drop_m: np.ndarray
    top_area_km2: np.ndarray
    area_km2: np.ndarray


def channel_reaches(terrain: Terrain, stream_area_km2: float, channels: np.ndarray | None = None) -> Reaches:
    """Reaches of the channels that begin at a contributing area, or of given ones.

    Parameters
    ----------
    terrain : Terrain
    stream_area_km2 : float [km2]
    channels : bool array, shape (cells,), optional
        See `channel_test`.

    Returns
    -------
    Reaches
    """
    from basinwright.kernels import network

    area_m2, least_m2 = channel_test(terrain, stream_area_km2, channels)
    cells, below = network.channel_graph(terrain.directions, area_m2, terrain.ncols, least_m2)
    strahler, donors = network.strahler_orders(below)
    heads = np.flatnonzero((donors != 1) & (below >= 0))
    heads = heads[np.argsort(cells[heads])]
    bounds, path, to_reach = network.trace_reaches(cells, below, donors, heads)
    along = cells[path]
    first, last = bounds[:-1], bounds[1:] - 1
    if heads.size == 0:
        none = np.empty(0)
        return Reaches(bounds, along, np.empty(0, np.uint8), to_reach, none, none, none, none)

    rows, _ = terrain.rows_cols(along)
    step_um = terrain.step_um[rows, np.minimum(terrain.directions[along], 7)]
    step_um[last] = 0
    junction = donors[path[last]] > 1
    return Reaches(
        bounds=bounds,
        cells=along,
        strahler=strahler[heads],
        to_reach=to_reach,
        length_m=np.add.reduceat(step_um, first) / 1e6,
        drop_m=terrain.conditioned_m[along[first]].astype(np.float64) - terrain.conditioned_m[along[last]],
        top_area_km2=terrain.area_m2[along[first]] / 1e6,
        area_km2=terrain.area_m2[along[np.where(junction, last - 1, last)]] / 1e6,
    )


@dataclass(frozen=True)
class DropComparison:
    """One stream area in the constant-drop test.

    Attributes
    ----------
    stream_area_km2 : float [km2]
    first_streams, higher_streams : int
        Strahler streams of order 1 and of all higher orders; those that leave the raster are not counted.
    first_drop_m, higher_drop_m : float [m]
        Their mean drops.
    t : float
        Student's t of the difference, two samples with a common variance.
    """

    stream_area_km2: float
    first_streams: int
    higher_streams: int
    first_drop_m: float
    higher_drop_m: float
    t: float

    @cached_property
    def passes(self) -> bool:
        """Whether the mean drops do not differ."""
        return abs(self.t) < T_LIMIT


def drop_test(terrain: Terrain) -> list[DropComparison]:
    """Test stream areas by the constancy of stream drops.

    The mean fall of Strahler streams is the same for all orders of a channel network (Broscoe 1959). Where channels
    are begun too high on the hillside, those of order 1 fall more than the others: the smallest area at which they do
    not is that at which channels begin (Tarboton, Bras & Rodriguez-Iturbe 1991).

    Parameters
    ----------
    terrain : Terrain

    Returns
    -------
    list of DropComparison
        In rising order: from the first of the series of tested areas with `LEAST_CELLS` cells, as long as there are
        `LEAST_STREAMS`. Each is a preferred number, so that the same areas are tested on every terrain and cell size.

    References
    ----------
    Broscoe, A. J. (1959). Quantitative analysis of longitudinal stream profiles of small watersheds. Office of Naval
    Research, Project NR 389-042, Technical Report 18, Columbia University.

    Tarboton, D. G., Bras, R. L., & Rodriguez-Iturbe, I. (1991). On the extraction of channel networks from digital
    elevation data. Hydrological Processes, 5(1), 81-100. doi:10.1002/hyp.3360050107
    """
    from basinwright.kernels import network

    mean_cell_km2 = float(terrain.row_area_m2.mean()) / 1e6
    candidates = _candidates(LEAST_CELLS * mean_cell_km2, float(terrain.area_m2.max()) / 1e6)
    if not candidates:
        return []
    cells, below = network.channel_graph(
        terrain.directions, terrain.area_m2, terrain.ncols, stream_area_m2(candidates[0])
    )
    area_m2, elevation_m = terrain.area_m2[cells], terrain.conditioned_m[cells].astype(np.float64)
    tested: list[DropComparison] = []
    for area_km2 in candidates:
        kept = area_m2 >= stream_area_m2(area_km2)  # all below a kept cell are kept too
        below = np.append(np.cumsum(kept, dtype=np.int32) - 1, np.int32(-1))[below[kept]]
        area_m2, elevation_m = area_m2[kept], elevation_m[kept]
        strahler, _ = network.strahler_orders(below)
        order, drop_m = network.stream_drops(below, strahler, elevation_m)
        first, higher = drop_m[order == 1], drop_m[order > 1]
        if first.size < LEAST_STREAMS[0] or higher.size < LEAST_STREAMS[1]:
            break
        tested.append(
            DropComparison(
                area_km2, first.size, higher.size, float(first.mean()), float(higher.mean()), _t(first, higher)
            )
        )
    return tested


def chosen_stream_area_km2(tested: list[DropComparison]) -> float | None:
    """Smallest area down to which the drops are constant; None where they are at no tested area.

    Coming down from the largest area, the test fails for good where two neighbouring areas fail: with the usual limit
    of t one of twenty fails by chance. What passes again below is not looked at: so near the hillslope's scale the
    drops of many short streams may happen to agree.

    Parameters
    ----------
    tested : list of DropComparison
        In rising order.

    Returns
    -------
    float or None [km2]
    """
    chosen, failed = None, False
    for entry in reversed(tested):
        if not entry.passes and failed:
            break
        failed = not entry.passes
        if entry.passes:
            chosen = entry.stream_area_km2
    return chosen


def _candidates(least_km2: float, most_km2: float) -> list[float]:
    """Preferred numbers in a range."""
    decades = range(math.floor(math.log10(least_km2)), math.ceil(math.log10(most_km2)) + 1)
    numbers = [float(f"{number}e{decade}") for decade in decades for number in _SERIES]
    return [number for number in numbers if least_km2 <= number <= most_km2]


def _t(first: np.ndarray, second: np.ndarray) -> float:
    """Student's t of two samples with a common variance; 0 where neither varies and the means are equal."""
    n, m = first.size, second.size
    difference = float(first.mean() - second.mean())
    squares = float(((first - first.mean()) ** 2).sum() + ((second - second.mean()) ** 2).sum())
    error = math.sqrt(squares / (n + m - 2) * (1 / n + 1 / m))
    if error == 0.0:
        return 0.0 if difference == 0.0 else math.copysign(math.inf, difference)
    return difference / error
