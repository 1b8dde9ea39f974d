"""What a run may use of the machine: memory, and above it tiles and the workers that process them."""

from __future__ import annotations

import math
import os
import shutil
import tempfile
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

from basinwright.errors import BasinwrightError, Problem
from basinwright.grid import Grid
from basinwright.progress import tell
from basinwright.project import Compute
from basinwright.store import Draft, peak_memory_mb, reset_peak_memory
from basinwright.terrain.tiling import Tiling
from basinwright.terrain.workspace import IN_MEMORY, Workspace

if TYPE_CHECKING:
    from distributed import Client

    from basinwright.terrain import Terrain

SHARE_OF_FREE = 0.5
"""Of the memory that is free when a run begins, what ``compute.memory = "auto"`` takes."""
BYTES_PER_CELL = 64
"""Of the largest stage where all of the terrain is in memory, the rasters that the system may map included."""
TILE_BYTES_PER_CELL = 48
"""Of the largest step on a tile."""
STORE_BYTES_PER_CELL, RASTER_BYTES_PER_CELL = 31, 8
"""On disk: the arrays of the store, and the terrain rasters with what is drawn from them."""
SCRATCH_BYTES_PER_CELL = 20
"""On disk, for what the steps on tiles hand each other."""
PROCESS_BYTES = 3.5e8
"""Of a process before any terrain: libraries and compiled kernels."""
LARGEST_SIDE, SMALLEST_SIDE = 4096, 64
ATTEMPTS = 3
"""How often a step on one tile may lose its worker."""
_PATIENCE = "10s"


class Machine:
    """Memory and workers of a run; a cluster of workers is started when tiles first need it.

    Parameters
    ----------
    compute : Compute
        The section of the project.
    grid : Grid
    """

    def __init__(self, compute: Compute, grid: Grid) -> None:
        self.compute = compute
        budget = memory_bytes(compute.memory)
        cells = grid.nrows * grid.ncols
        self.budget_gb, self.needed_gb = budget / 1e9, cells * BYTES_PER_CELL / 1e9
        self.tiling: Tiling | None = None
        if self.needed_gb > self.budget_gb:
            share = budget / (compute.jobs + 1) / TILE_BYTES_PER_CELL
            side = 2 ** math.floor(math.log2(math.sqrt(share)))
            tiling = Tiling.of_side(grid.nrows, grid.ncols, min(max(side, SMALLEST_SIDE), LARGEST_SIDE))
            self.tiling = tiling if len(tiling) > 1 else None
        self._cells = cells
        self._open = ExitStack()
        self._client: Client | None = None
        self._peaks_mb: dict[str, float] = {}

    def __enter__(self) -> Machine:
        return self

    def __exit__(self, *error: object) -> None:
        self._open.close()

    def plan(self, place: Path, coarser: Sequence[int], *, rasters: bool) -> str:
        """Say what the run will take.

        Parameters
        ----------
        place : Path
            Where it is built.
        coarser : sequence of int
            Cells along a side of those that the job is repeated on.
        rasters : bool
            Whether rasters and layers are written too.
        """
        disk = self._cells * (
            STORE_BYTES_PER_CELL * (1 + sum(k**-2 for k in coarser)) + RASTER_BYTES_PER_CELL * rasters
        )
        memory = PROCESS_BYTES + self._cells * BYTES_PER_CELL
        how = "in memory"
        if self.tiling is not None:
            rows, cols = next(iter(self.tiling)).shape
            jobs, at = self.compute.jobs, self.compute.scheduler
            who = f"the cluster at {at}" if at else f"{jobs} workers"
            how = f"in {len(self.tiling)} tiles of {rows} x {cols} on {who}"
            memory = (jobs + 1) * (PROCESS_BYTES + rows * cols * TILE_BYTES_PER_CELL)
            disk += self._cells * SCRATCH_BYTES_PER_CELL
        free = shutil.disk_usage(place).free
        short = "; that is more than is free: make room, or choose another --out" if disk > free else ""
        return (
            f"Plan: {self._cells / 1e6:,.3g} million cells {how}; about {memory / 1e9:.2g} GB of memory and "
            f"{disk / 1e9:.2g} GB of disk ({free / 1e9:.3g} GB free){short}"
        )

    @contextmanager
    def space(self, draft: Draft, terrain: Terrain | None = None) -> Iterator[Workspace]:
        """Room for a stage, and workers; what it scratches is taken away at its end.

        Parameters
        ----------
        draft : Draft
        terrain : Terrain, optional
            What the stage works on: it may have been routed by tiles when there was less memory.
        """
        if self.tiling is None and (terrain is None or len(terrain.tiling) == 1):
            yield IN_MEMORY
            return
        scratch = draft.folder / "scratch"
        scratch.mkdir()
        self._peaks_mb.clear()
        yield Workspace(draft.folder.resolve(), scratch.resolve(), self)
        shutil.rmtree(scratch)
        draft.workers_peak_mb = sum(self._peaks_mb.values())

    def map(self, function: Callable[..., Any], calls: Sequence[tuple[Any, ...]]) -> list[Any]:
        """Call a function for each tuple of arguments, on the workers; results in that order.

        Raises
        ------
        BasinwrightError
            Where a step loses its worker again and again.
        """
        from distributed import KilledWorker, as_completed

        client = self._started()
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", message="Sending large graph")  # what a tile must be told is told so
            futures = client.map(_measured, [function] * len(calls), calls, pure=False)
        for done, _ in enumerate(as_completed(futures), start=1):
            tell(done, len(futures), "tiles")
        results = []
        try:
            for result, worker, peak_mb in client.gather(futures):
                results.append(result)
                self._peaks_mb[worker] = max(peak_mb, self._peaks_mb.get(worker, 0.0))
        except KilledWorker as error:
            raise BasinwrightError(
                f"{ATTEMPTS} workers in a row died on one tile: give them more memory (fewer compute.jobs, or a "
                "smaller compute.memory for smaller tiles), then repeat the command with --resume"
            ) from error
        return results

    def _started(self) -> Client:
        if self._client is None:
            import dask
            from distributed import Client, LocalCluster

            self._open.enter_context(dask.config.set({"distributed.scheduler.allowed-failures": ATTEMPTS - 1}))
            if self.compute.scheduler:
                self._client = self._open.enter_context(Client(self.compute.scheduler, timeout=_PATIENCE))
            else:
                cluster = LocalCluster(
                    n_workers=self.compute.jobs, threads_per_worker=1, processes=True, dashboard_address=":0",
                    memory_limit=0, silence_logs=50, local_directory=tempfile.gettempdir(),
                )  # fmt: skip
                self._open.enter_context(cluster)
                self._client = self._open.enter_context(Client(cluster))
        return self._client


def _measured(function: Callable[..., Any], call: tuple[Any, ...]) -> tuple[Any, str, float]:
    """Call a function on a worker; returns the result, who that was, and its peak memory [MB]."""
    reset_peak_memory()
    result = function(*call)
    return result, f"{os.uname().nodename}:{os.getpid()}", peak_memory_mb() or 0.0


def memory_bytes(memory: float | str) -> float:
    """Return what ``compute.memory`` allows.

    Parameters
    ----------
    memory : float or str
        [MB], or ``auto``: a share of what is free.
    """
    if not isinstance(memory, str):
        return memory * 1e6
    return SHARE_OF_FREE * _free_bytes()


def _free_bytes() -> float:
    """Free memory of the machine, or of the container where that allows less."""
    free = math.inf
    with suppress(OSError, StopIteration):
        lines = Path("/proc/meminfo").read_text().splitlines()
        free = 1024.0 * int(next(line for line in lines if line.startswith("MemAvailable:")).split()[1])
    with suppress(OSError, ValueError):
        group = Path("/sys/fs/cgroup")
        allowed = int((group / "memory.max").read_text()) - int((group / "memory.current").read_text())
        free = min(free, max(float(allowed), 0.0))
    if math.isinf(free):  # not Linux: half of all there is
        free = 0.5 * os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    return free


def scheduler_problems(project_file: str, address: str) -> list[Problem]:
    """List what speaks against the running cluster that ``compute.scheduler`` names."""
    if not address:
        return []
    from distributed import Client

    try:
        with Client(address, timeout=_PATIENCE) as client:
            workers = len(client.scheduler_info()["workers"])
    except (OSError, ValueError) as error:
        what = f"no Dask scheduler answers at {address!r} ({error})"
        return [Problem(project_file, "compute.scheduler", what, "start it, mend the address, or leave it empty")]
    if workers == 0:
        what = f"the scheduler at {address!r} has no workers"
        return [Problem(project_file, "compute.scheduler", what, "start some, or leave it empty")]
    return []
