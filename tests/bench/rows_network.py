"""The channel network: orders and reaches, and the constant-drop test."""

from __future__ import annotations

import os
import tempfile

import numpy as np
from harness import Row, best_of, terrain

CELL_M = 10.0
STREAM_AREA_KM2 = 0.05

ROWS = [
    Row(
        name="network-reaches",
        work="Strahler order and reaches of the channels of {cells} cells of river-like terrain, from its directions",
        unit="s",
        ours="reaches",
        peer="pyflwdir",
        peer_name="pyflwdir 0.5.12: stream_order, streams",
        target=10,
        goal="ratio",
        args=("river-like",),
        cells=4_000_000,
    ),
    Row(
        name="network-drop-test",
        work="all tested areas of the constant-drop test on {cells} cells of river-like terrain",
        unit="ns per cell",
        ours="drop_test_ns",
        target=100,
        goal="at_most",
        args=("river-like",),
        cells=4_000_000,
    ),
]


def _routed(name: str, cells: int):  # type: ignore[no-untyped-def]
    from basinwright.terrain import condition_and_route

    elevation = terrain(name, cells)
    size = np.full(elevation.shape[0], CELL_M)
    return condition_and_route(elevation, size, size, size * size)


def reaches(cells: int, name: str) -> float:
    """Seconds of `channel_reaches`."""
    from basinwright.terrain.network import channel_reaches

    channel_reaches(_routed("rough", 10_000), STREAM_AREA_KM2 / 10)  # compiles
    routed = _routed(name, cells)
    return best_of(lambda: channel_reaches(routed, STREAM_AREA_KM2))


def pyflwdir(cells: int, name: str) -> float:
    """Seconds of pyflwdir's orders and stream features on the same directions; their geometries are made in Python."""
    routed = _routed(name, cells)
    os.environ.setdefault("NUMBA_CACHE_DIR", tempfile.gettempdir())
    import pyflwdir as library

    def flow(source):  # type: ignore[no-untyped-def]
        codes = np.array([64, 128, 1, 2, 4, 8, 16, 32, 0, 247], np.uint8)[source.directions_grid]
        return library.from_array(codes, ftype="d8", check_ftype=False)

    def chain(source, given):  # type: ignore[no-untyped-def]
        mask = source.area_grid >= STREAM_AREA_KM2 * 1e6
        return given.streams(mask=mask, strord=given.stream_order(type="strahler", mask=mask))

    small = _routed("rough", 40_000)
    chain(small, flow(small))
    return best_of(lambda: chain(routed, flow(routed)), repeats=1)


def drop_test_ns(cells: int, name: str) -> float:
    """Nanoseconds per cell of `drop_test`."""
    from basinwright.terrain.network import drop_test

    drop_test(_routed("rough", 40_000))
    routed = _routed(name, cells)
    return best_of(lambda: drop_test(routed)) / routed.data_cells * 1e9
