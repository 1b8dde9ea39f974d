"""Terrain by tiles on two workers against the same terrain in memory: time, and memory of all processes.

By themselves the rows run 64 million cells. Four times as many need 15 GB of disk and much of an hour:
``bench.py --only tiles --cells 256000000``.
"""

from __future__ import annotations

import os
import tempfile
import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from harness import Row, terrain

CELL_M = 10.0
JOBS = 2
SIDE = 2048
_IN_MEMORY = "the same in memory, one thread"


def _row(name: str, work: str, unit: str, side: str, target: float, how: str) -> Row:
    return Row(
        name=f"tiles-{name}", work=work, unit=unit, ours=f"tiled_{side}", peer=f"whole_{side}", peer_name=_IN_MEMORY,
        target=target, goal="ratio", args=("stationary", how), cells=64_000_000,
    )  # fmt: skip


_SLOWER = round(1 / 1.3, 3)

ROWS = [
    _row("fill-time", "filling to area in tiles on 2 workers, {cells} cells", "s", "seconds", _SLOWER, "fill"),
    _row("breach-time", "breaching to area in tiles on 2 workers, {cells} cells", "s", "seconds", _SLOWER, "breach"),
    _row("memory", "anonymous memory of all processes for filling, {cells} cells", "MB", "megabytes", 2.0, "fill"),
]


class Watched:
    """The most anonymous memory that this process and its children held together while it was open [MB] (Linux)."""

    def __enter__(self) -> Watched:
        self.peak_mb = 0.0
        self._done = threading.Event()
        self._thread = threading.Thread(target=self._watch)
        self._thread.start()
        return self

    def __exit__(self, *error: object) -> None:
        self._done.set()
        self._thread.join()

    def _watch(self) -> None:
        import psutil

        me = psutil.Process()
        while not self._done.wait(0.1):
            total = 0
            for process in [me, *me.children(recursive=True)]:
                try:
                    lines = Path(f"/proc/{process.pid}/status").read_text().splitlines()
                except OSError:
                    continue
                total += sum(int(line.split()[1]) for line in lines if line.startswith("RssAnon:"))
            self.peak_mb = max(self.peak_mb, total / 1024)


def in_tiles(folder: Path, elevation_m: np.ndarray, how: str, work: Callable[[Callable[[], Any]], float]) -> float:
    """Route by tiles; `work` is handed what does it, with all workers warm."""
    from affine import Affine

    from basinwright.grid import Grid
    from basinwright.pipeline.machine import Machine
    from basinwright.project import Compute
    from basinwright.terrain import Conditioning
    from basinwright.terrain.tiled import condition_and_route_tiles
    from basinwright.terrain.tiling import Tiling
    from basinwright.terrain.workspace import Workspace

    with Machine(Compute(jobs=JOBS), Grid(1, 1, Affine(1, 0, 0, 0, -1, 0), "")) as machine:

        def route(z: np.ndarray, name: str, side: int) -> Any:
            place = folder / name
            (place / "scratch").mkdir(parents=True)
            np.save(place / "elevation.npy", z)
            size = np.full(len(z), CELL_M)
            return lambda: condition_and_route_tiles(
                place / "elevation.npy", size, size, size * size, Tiling.of_side(*z.shape, side),
                Workspace(place, place / "scratch", machine), Conditioning(how),
            )  # fmt: skip

        route(np.random.default_rng(0).random((64, 64), np.float32), "warm", 20)()
        return work(route(elevation_m, "measured", SIDE))


def _seconds(route: Callable[[], Any]) -> float:
    start = time.perf_counter()
    route()
    return time.perf_counter() - start


def _megabytes(route: Callable[[], Any]) -> float:
    with Watched() as watched:
        route()
    return watched.peak_mb


def tiled_seconds(cells: int, name: str, how: str) -> float:
    """Wall time by tiles [s]."""
    with tempfile.TemporaryDirectory(dir=os.environ.get("BASINWRIGHT_BENCH_FOLDER")) as folder:
        return in_tiles(Path(folder), terrain(name, cells), how, _seconds)


def tiled_megabytes(cells: int, name: str, how: str) -> float:
    """Anonymous memory by tiles, of this process and the workers [MB]."""
    with tempfile.TemporaryDirectory(dir=os.environ.get("BASINWRIGHT_BENCH_FOLDER")) as folder:
        return in_tiles(Path(folder), np.load(_file_of(terrain(name, cells), folder), mmap_mode="r"), how, _megabytes)


def _file_of(elevation_m: np.ndarray, folder: str) -> Path:
    file = Path(folder, "given.npy")
    np.save(file, elevation_m)
    return file


def _whole(elevation_m: np.ndarray, how: str) -> Callable[[], Any]:
    from basinwright.terrain import Conditioning, condition_and_route

    def route(z: np.ndarray) -> Any:
        size = np.full(len(z), CELL_M)
        return condition_and_route(z, size, size, size * size, Conditioning(how))  # type: ignore[arg-type]

    route(np.random.default_rng(0).random((64, 64), np.float32))
    return lambda: route(elevation_m)


def whole_seconds(cells: int, name: str, how: str) -> float:
    """Wall time in memory [s]."""
    return _seconds(_whole(terrain(name, cells), how))


def whole_megabytes(cells: int, name: str, how: str) -> float:
    """Anonymous memory in memory [MB]."""
    return _megabytes(_whole(terrain(name, cells), how))
