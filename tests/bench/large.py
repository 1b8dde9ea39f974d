"""A terrain that never fits: made by tiles, routed by tiles, to the statistics of 1,000 outlets.

    python tests/bench/large.py [--side 32000] [--jobs 2] [--folder DIR] [--out bench-large.json]

1,024 million cells need about 60 GB of disk and some tens of minutes; a smaller side shows the same per cell. The time
counts from the elevations in a file to the measures of the basins; no rasters are copied to GeoTIFF.
"""

from __future__ import annotations

import argparse
import json
import tempfile
import time
from pathlib import Path

import numpy as np
from rows_tiles import CELL_M, SIDE, Watched

OUTLETS = 1000
LEAST_CELLS_PER_S, MOST_GB = 2.5e6, 6.0


def ground(rows: slice, cols: slice) -> np.ndarray:
    """Elevations of a tile [m]: hills of many sizes from noise on lattices, the same wherever the tile is cut.

    Every lattice point's height is a hash of its place; between them it runs smoothly.
    """
    z = np.zeros((rows.stop - rows.start, cols.stop - cols.start), np.float32)
    for octave in range(2, 12):
        length = 2**octave
        r, c = np.arange(rows.start, rows.stop) / length, np.arange(cols.start, cols.stop) / length
        first_r, first_c = int(r[0]), int(c[0])
        heights = _hashed(np.arange(first_r, int(r[-1]) + 2), np.arange(first_c, int(c[-1]) + 2), octave)
        i, j = r.astype(int) - first_r, c.astype(int) - first_c
        u, v = _smooth(r % 1)[:, None], _smooth(c % 1)[None, :]
        upper = heights[i][:, j] * (1 - v) + heights[i][:, j + 1] * v
        lower = heights[i + 1][:, j] * (1 - v) + heights[i + 1][:, j + 1] * v
        z += ((upper * (1 - u) + lower * u) * length**0.8).astype(np.float32)
    return z


def _smooth(t: np.ndarray) -> np.ndarray:
    return t * t * (3 - 2 * t)


def _hashed(rows: np.ndarray, cols: np.ndarray, octave: int) -> np.ndarray:
    """Numbers in [0, 1) from places, by the finaliser of a multiplicative hash."""
    with np.errstate(over="ignore"):
        key = rows[:, None].astype(np.uint64) << np.uint64(32) | cols[None, :].astype(np.uint64)
        key = (key + np.uint64(octave + 1) * np.uint64(0x9E3779B97F4A7C15)) * np.uint64(0xBF58476D1CE4E5B9)
        key = (key ^ key >> np.uint64(29)) * np.uint64(0x94D049BB133111EB)
        key ^= key >> np.uint64(32)
    return (key >> np.uint64(11)).astype(np.float64) / 2.0**53


def main() -> None:
    """Make the terrain, measure, and write what was found."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--side", type=int, default=32_000)
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--folder", type=Path, help="where there is room")
    parser.add_argument("--out", type=Path, default=Path("bench-large.json"))
    options = parser.parse_args()
    with tempfile.TemporaryDirectory(dir=options.folder, prefix="basinwright-large-") as folder:
        found = measure(Path(folder), options.side, options.jobs)
    options.out.write_text(json.dumps(found, indent=1) + "\n")
    for row in found:
        print(
            f"{row['name']}: {row['ours']:.4g} {row['unit']} (target {row['target']}, met: {row['met']}): {row['work']}"
        )


def measure(folder: Path, side: int, jobs: int) -> list[dict[str, object]]:
    """Run the job; returns the rows of the benchmark."""
    from affine import Affine
    from pyproj import CRS

    from basinwright.basins import delineate
    from basinwright.basins import measure as measure_basins
    from basinwright.grid import Grid
    from basinwright.pipeline.machine import Machine
    from basinwright.project import Compute
    from basinwright.terrain.tiled import condition_and_route_tiles
    from basinwright.terrain.tiling import Tiling
    from basinwright.terrain.workspace import Workspace

    grid = Grid(side, side, Affine(CELL_M, 0, 500_000, 0, -CELL_M, 4_500_000), CRS("EPSG:32614").to_wkt())
    tiling = Tiling.of_side(side, side, SIDE)
    (folder / "scratch").mkdir()
    file = folder / "elevation.npy"
    elevation = np.lib.format.open_memmap(file, mode="w+", shape=grid.shape, dtype=np.float32)
    for tile in tiling:
        elevation[tile.rows, tile.cols] = ground(tile.rows, tile.cols)
        print(f"\rmade tile {tile.index + 1} of {len(tiling)}", end="", flush=True)
    print()
    with Machine(Compute(jobs=jobs), grid) as machine, Watched() as watched:
        space = Workspace(folder, folder / "scratch", machine)
        start = time.perf_counter()
        terrain = condition_and_route_tiles(file, grid.dx_m, grid.dy_m, grid.cell_area_m2, tiling, space)
        routed = time.perf_counter()
        rng = np.random.default_rng(1)
        rows, cols = rng.integers(0, side, (2, 400 * OUTLETS))
        cells = terrain.cells_at(rows, cols)
        cells = cells[terrain.area_m2[cells] > 2000 * CELL_M**2][:OUTLETS]
        basins = delineate(terrain, cells, space)
        labelled = time.perf_counter()
        measure_basins(grid, terrain, elevation, basins)
        end = time.perf_counter()
    rate, peak_gb = side * side / (end - start), watched.peak_mb / 1000
    parts = f"routing {routed - start:.1f} s, labels {labelled - routed:.1f} s, measures {end - labelled:.1f} s"
    work = f"elevations to measures of {cells.size} outlets, {side} x {side} cells, {jobs} workers ({parts})"
    common = {"peer": None, "peer_name": None, "ratio": None}
    return [
        {"name": "large-rate", "work": work, "unit": "cells/s", "ours": rate, "target": LEAST_CELLS_PER_S,
         "met": rate >= LEAST_CELLS_PER_S, **common},
        {"name": "large-memory", "work": "anonymous memory of all processes for the same", "unit": "GB",
         "ours": peak_gb, "target": MOST_GB, "met": peak_gb <= MOST_GB, **common},
    ]  # fmt: skip


if __name__ == "__main__":
    main()
