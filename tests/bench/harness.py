"""What a row of the benchmark is, and how each of its sides is run in a child process of its own.

To add rows: write a module ``rows_<subject>.py`` beside this one with a list ``ROWS``. A side is a function of
that module, ``side(cells, *args) -> float``, named in the row. It measures itself, so that imports, compiling
and reading the input stay outside, and runs in a fresh process.
"""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np

HERE = Path(__file__).parent


@dataclass(frozen=True)
class Row:
    """One comparison or one measurement.

    Parameters
    ----------
    name : str
        Unique.
    work : str
        What is done; ``{cells}`` stands for the number of cells in millions.
    unit : str
        Of `ours` and `peer`.
    ours : str
        Name of a function of the row's module.
    target : float or None
        For ``goal="ratio"`` the least peer / ours, else the bound of ours; None is for information.
    goal : {"ratio", "at_most", "at_least"}
    peer : str
        Name of a function; empty for a measurement without a peer.
    peer_name : str
        Library and version.
    args : tuple of str
        Handed to both sides.
    cells : int
        Size of the input, unless the command line says otherwise.
    """

    name: str
    work: str
    unit: str
    ours: str
    target: float | None
    goal: Literal["ratio", "at_most", "at_least"]
    peer: str = ""
    peer_name: str = ""
    args: tuple[str, ...] = ()
    cells: int = 16_000_000


def measure(row: Row, module: str, cells: int | None) -> dict[str, Any]:
    """Run both sides of a row and judge it."""
    size = cells or row.cells
    ours = run_side(module, row.ours, size, row.args)
    peer = run_side(module, row.peer, size, row.args) if row.peer else None
    ratio = peer / ours if peer is not None else None
    met = None
    if row.target is not None:
        compared = ratio if row.goal == "ratio" else ours
        assert compared is not None, f"row {row.name}: a ratio needs a peer"
        met = compared <= row.target if row.goal == "at_most" else compared >= row.target
    return {
        "name": row.name,
        "work": row.work.format(cells=f"{size / 1e6:.3g} M"),
        "unit": row.unit,
        "ours": ours,
        "peer": peer,
        "peer_name": row.peer_name or None,
        "ratio": ratio,
        "target": row.target,
        "met": met,
    }


def run_side(module: str, function: str, cells: int, args: tuple[str, ...]) -> float:
    """Call one function of a row's module in a fresh process and return the number it measured."""
    command = [sys.executable, str(HERE / "bench.py"), "--side", module, function, str(cells), *args]
    done = subprocess.run(command, check=False, stdout=subprocess.PIPE, text=True)
    if done.returncode != 0:
        raise RuntimeError(f"{module}.{function} failed with status {done.returncode}")
    return float(json.loads(done.stdout.splitlines()[-1]))


def best_of(work: Callable[[], object], repeats: int = 3) -> float:
    """Shortest wall time of a few runs [s]."""
    shortest = math.inf
    for _ in range(repeats):
        start = time.perf_counter()
        result = work()
        shortest = min(shortest, time.perf_counter() - start)
        del result
    return shortest


def terrain(name: str, cells: int) -> np.ndarray:
    """A square synthetic terrain of about so many cells, made once per benchmark run and shared by all sides."""
    n = math.isqrt(cells)
    folder = Path(os.environ.get("BASINWRIGHT_BENCH_FOLDER") or tempfile.gettempdir())
    path = folder / f"{name}-{n}.npy"
    if not path.exists():
        make = "import sys, numpy, terrains; numpy.save(sys.argv[1], terrains.TERRAINS[sys.argv[2]](int(sys.argv[3])))"
        subprocess.run([sys.executable, "-c", make, str(path), name, str(n)], check=True, cwd=HERE)
    elevation: np.ndarray = np.load(path)
    return elevation


@contextmanager
def shared_folder() -> Iterator[None]:
    """A temporary folder for the terrains of one benchmark run."""
    with tempfile.TemporaryDirectory(prefix="basinwright-bench-") as folder:
        os.environ["BASINWRIGHT_BENCH_FOLDER"] = folder
        yield


def peak_over_start_bytes(work: Callable[[], object]) -> int:
    """How far the resident memory of this process rises over its present size while `work` runs (Linux)."""
    Path("/proc/self/clear_refs").write_text("5")  # reset the high-water mark
    start = _status_kb("VmRSS")
    result = work()
    peak = _status_kb("VmHWM")
    del result
    return (peak - start) * 1024


def _status_kb(field: str) -> int:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith(field + ":"):
            return int(line.split()[1])
    raise RuntimeError(f"no {field} in /proc/self/status")
