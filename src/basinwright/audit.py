"""The second opinion: basin areas again with pysheds, an independent library, in a child process.

Each audited basin is clipped with a margin. pysheds delineates it twice: on our flow directions, which checks labels
and sums, and from the unconditioned elevations with its own filling, flats and directions, which checks the terrain as
well. It runs apart because importing it compiles for a minute the first time, and its faults shall not be ours.

Run as a program (``python -m basinwright.audit``) this module is the child.
"""

from __future__ import annotations

import fcntl
import json
import os
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from basinwright.errors import BasinwrightError
from basinwright.kernels import EXIT

if TYPE_CHECKING:
    import numpy as np

MARGIN_CELLS = 3
DIFFERS_OVER = 0.01
"""Relative difference in area above which an outlet is flagged."""

_PYSHEDS_CODES = (64, 128, 1, 2, 4, 8, 16, 32)
"""What pysheds writes for north, northeast, ... northwest."""


@dataclass(frozen=True)
class Clip:
    """One basin to audit.

    Parameters
    ----------
    elevation_m : (rows, cols) array
        Unconditioned elevations [m], NaN in voids.
    directions : (rows, cols) array of uint8
        Our direction codes.
    cell_area_m2 : (rows,) array
        Area of a cell by row [m2].
    cell_m : tuple of float
        Width and height of a cell in the middle row [m].
    outlet : tuple of int
        Row and column of the outlet's cell in the clip.
    """

    elevation_m: np.ndarray
    directions: np.ndarray
    cell_area_m2: np.ndarray
    cell_m: tuple[float, float]
    outlet: tuple[int, int]


@dataclass(frozen=True)
class Opinion:
    """What pysheds says of one basin, in km2.

    Parameters
    ----------
    same_directions_km2 : float
        Area upstream of the outlet on our directions.
    own_conditioning_km2 : float
        Area by its own filling and directions, at the outlet's cell or at one of the eight around it, whichever is
        nearest to ours: on flat ground two rules may draw one river a cell apart.
    lost_km2 : float
        Area that ends inside the basin, in cells to which its own flats gave no direction: on terrain in whole metres
        often cells of the river. Where that water goes it does not say.
    """

    same_directions_km2: float
    own_conditioning_km2: float
    lost_km2: float


def _ask(folder: str) -> subprocess.CompletedProcess[str]:
    """Run the child on the clips of a folder."""
    return subprocess.run(
        [sys.executable, "-P", "-m", "basinwright.audit", folder],
        env={**os.environ, "NUMBA_CACHE_DIR": str(pysheds_cache())},
        capture_output=True,
        text=True,
        check=False,
    )


@contextmanager
def _cache_to_ourselves() -> Iterator[None]:
    """Hold pysheds' compiled code against a second audit: numba cannot use what another process is still writing."""
    lock = pysheds_cache().with_name("pysheds.lock")
    lock.parent.mkdir(parents=True, exist_ok=True)
    with lock.open("w") as stream:
        fcntl.flock(stream, fcntl.LOCK_EX)
        yield


def pysheds_cache() -> Path:
    """Return the folder of pysheds' compiled code, beside ours: it outlives a change of our kernels."""
    return Path(os.environ["NUMBA_CACHE_DIR"]).with_name("pysheds")


def second_opinion(clips: Sequence[Clip]) -> list[Opinion]:
    """Ask pysheds for the areas of clipped basins.

    Raises
    ------
    BasinwrightError
        Where the child process fails, with the last line of what it said.
    """
    import numpy as np

    if not clips:
        return []
    with tempfile.TemporaryDirectory(prefix="basinwright-audit-") as folder:
        asked = {f"{name}_{i}": value for i, clip in enumerate(clips) for name, value in vars(clip).items()}
        np.savez(Path(folder, "clips.npz"), allow_pickle=False, count=len(clips), **asked)
        with _cache_to_ourselves():
            child = _ask(folder)
            if child.returncode != 0:  # numba can stumble over half a cache: once more, from none
                shutil.rmtree(pysheds_cache(), ignore_errors=True)
                child = _ask(folder)
        if child.returncode != 0:
            said = (child.stderr.strip().splitlines() or ["no message"])[-1]
            raise BasinwrightError(f"the audit's pysheds process failed: {said}")
        answers = json.loads(Path(folder, "opinions.json").read_text(encoding="utf-8"))
    return [Opinion(**answer) for answer in answers]


def _answer(folder: Path) -> None:
    """Do the child's work: read the clips, write the opinions."""
    import numpy as np

    with np.load(folder / "clips.npz") as asked:
        clips = [
            Clip(
                asked[f"elevation_m_{i}"],
                asked[f"directions_{i}"],
                asked[f"cell_area_m2_{i}"],
                tuple(asked[f"cell_m_{i}"].tolist()),
                tuple(asked[f"outlet_{i}"].tolist()),
            )
            for i in range(int(asked["count"]))
        ]
    answers = [asdict(_delineate(clip)) for clip in clips]
    (folder / "opinions.json").write_text(json.dumps(answers), encoding="utf-8")


def _delineate(clip: Clip) -> Opinion:
    """Delineate one basin with pysheds, on our directions and on its own."""
    import numpy as np
    from affine import Affine
    from pyproj import Proj
    from pysheds.grid import Grid
    from pysheds.view import Raster, ViewFinder

    # A ring of void: pysheds treats the outermost cells of a raster differently from the others.
    elevation = np.pad(clip.elevation_m.astype(np.float64), 1, constant_values=np.nan)
    codes = np.array([*_PYSHEDS_CODES] + [0] * (256 - EXIT), dtype=np.int64)[clip.directions]
    codes = np.pad(codes, 1)
    area_km2 = np.pad(clip.cell_area_m2, 1) / 1e6
    width, height = clip.cell_m

    def raster(data: np.ndarray, nodata: Any) -> Any:
        view = ViewFinder(
            affine=Affine(width, 0, 0, 0, -height, 0), shape=data.shape, crs=Proj("EPSG:32614"), nodata=nodata
        )  # any metric system: only the cell size counts
        return Raster(data, viewfinder=view)

    terrain = raster(elevation, np.float64(np.nan))
    grid = Grid(viewfinder=terrain.viewfinder)
    row, col = clip.outlet[0] + 1, clip.outlet[1] + 1

    basin = np.asarray(grid.catchment(x=col, y=row, fdir=raster(codes, np.int64(0)), xytype="index"), dtype=bool)
    same_km2 = float((basin.sum(axis=1) * area_km2).sum())

    filled = grid.fill_depressions(grid.fill_pits(terrain))
    own = grid.flowdir(grid.resolve_flats(filled))
    area = np.broadcast_to(area_km2[:, None], elevation.shape).copy()
    drained_km2 = np.asarray(grid.accumulation(own, weights=raster(area, np.float64(0))))
    around_km2 = drained_km2[row - 1 : row + 2, col - 1 : col + 2].ravel()
    own_km2 = float(around_km2[np.argmin(np.abs(around_km2 - same_km2))])
    ends = (np.asarray(own) < 0) & basin & ~_beside_void(elevation)  # beside a void water may leave
    ends[row, col] = False
    return Opinion(same_km2, own_km2, float(drained_km2[ends].sum()))


def _beside_void(elevation: np.ndarray) -> np.ndarray:
    """Return which cells are void or touch one."""
    import numpy as np
    from scipy.ndimage import binary_dilation

    beside: np.ndarray = binary_dilation(np.isnan(elevation), structure=np.ones((3, 3)))
    return beside


if __name__ == "__main__":
    _answer(Path(sys.argv[1]))
