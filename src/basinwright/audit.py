"""The second opinion: basin areas again with pysheds, an independent library, in a child process.

Each audited basin is clipped with a margin. pysheds delineates it twice: on our flow directions, which checks labels
and sums, and from the unconditioned elevations with its own filling, flats and directions, which checks the terrain as
well. Where the two basins differ, the cells at which they part say why. It runs apart because importing it compiles
for a minute the first time, and its faults shall not be ours.

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
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, NamedTuple

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
    conditioned_m : (rows, cols) array
        Our conditioned elevations [m], infinite in voids.
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
    conditioned_m: np.ndarray
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
    differs_km2 : float
        Area that only one of the two has: ours, and the one by its own conditioning.
    causes_km2 : dict of str to float
        That area by the reason for which directions part where its water leaves or joins the common basin (`CAUSES`).
    """

    same_directions_km2: float
    own_conditioning_km2: float
    lost_km2: float
    differs_km2: float = 0.0
    causes_km2: dict[str, float] = field(default_factory=dict)


CAUSES = {
    "edge": "beside a void or the edge of the window",
    "cut": "conditioning moved the ground differently there",
    "flat": "level ground after conditioning",
    "tie": "two neighbours equally steep",
    "other": "none of these",
}
"""Why two sets of directions part at a cell, in the order in which they are looked for."""
TIE_SLOPE = 1e-6
"""Slopes that differ by less are equal: elevations of 1000 m in single precision hold a tenth of a millimetre."""
_MOVED_M = 1e-3
"""Conditioned elevations that differ by more were conditioned differently, not rounded."""


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
                asked[f"conditioned_m_{i}"],
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
    nearest = int(np.argmin(np.abs(around_km2 - same_km2)))
    own_km2 = float(around_km2[nearest])
    own_row, own_col = row - 1 + nearest // 3, col - 1 + nearest % 3
    ends = (np.asarray(own) < 0) & basin & ~_beside_void(elevation)  # beside a void water may leave
    ends[row, col] = False
    theirs = np.asarray(grid.catchment(x=own_col, y=own_row, fdir=own, xytype="index"), dtype=bool)
    conditioned = np.pad(clip.conditioned_m.astype(np.float64), 1, constant_values=np.inf)
    causes_km2 = _causes(
        Drawn(basin, _downstream(codes, (row, col)), conditioned),
        Drawn(theirs, _downstream(np.asarray(own), (own_row, own_col)), np.asarray(filled, dtype=np.float64)),
        elevation, area, clip.cell_m,
    )  # fmt: skip
    return Opinion(same_km2, own_km2, float(drained_km2[ends].sum()), sum(causes_km2.values(), 0.0), causes_km2)


class Drawn(NamedTuple):
    """A basin as one program draws it: its cells, the next cell down of each (flat index, -1 for none), its ground."""

    basin: np.ndarray
    down: np.ndarray
    surface_m: np.ndarray


def _downstream(codes: np.ndarray, outlet: tuple[int, int]) -> np.ndarray:
    """Return the flat index of the next cell down of every cell, by pysheds' codes; -1 for none and at the outlet."""
    import numpy as np

    ncols = codes.shape[1]
    offset = np.zeros(256, dtype=np.int64)
    offset[list(_PYSHEDS_CODES)] = (-ncols, 1 - ncols, 1, ncols + 1, ncols, ncols - 1, -1, -ncols - 1)
    step = offset[np.maximum(codes, 0)]
    down = np.where(step == 0, -1, np.arange(codes.size).reshape(codes.shape) + step)
    down[outlet] = -1
    return down.ravel()


def _causes(
    ours: Drawn, theirs: Drawn, elevation: np.ndarray, area_km2: np.ndarray, cell_m: tuple[float, float]
) -> dict[str, float]:
    """Share out the area that only one of two basins has among the causes, largest first."""
    import numpy as np

    edge = _beside_void(elevation).ravel()
    total: dict[str, float] = {}
    for one, other in ((ours, theirs), (theirs, ours)):
        alone = (one.basin & ~other.basin).ravel()
        parts = _last_before(one.down, alone)[alone]
        cells, index = np.unique(parts, return_inverse=True)
        km2 = np.bincount(index, weights=area_km2.ravel()[alone], minlength=cells.size)
        causes = _cause_at(cells, one, other, edge, elevation.shape[1], cell_m)
        for name in CAUSES:
            if (causes == name).any():
                total[name] = total.get(name, 0.0) + float(km2[causes == name].sum())
    return dict(sorted(total.items(), key=lambda entry: -entry[1]))


def _last_before(down: np.ndarray, alone: np.ndarray) -> np.ndarray:
    """Return for every cell of a set the last cell on its way down that is still in the set."""
    import numpy as np

    here = np.arange(down.size)
    stays = alone & (down >= 0) & alone[np.maximum(down, 0)]
    last = np.where(stays, down, here)
    while True:  # each pass doubles the way looked ahead
        further = last[last]
        if np.array_equal(further, last):
            return last
        last = further


def _cause_at(
    cells: np.ndarray, one: Drawn, other: Drawn, edge: np.ndarray, ncols: int, cell_m: tuple[float, float]
) -> np.ndarray:
    """Say why the directions of two programs part at each of some cells."""
    import numpy as np

    nexts = [np.where(drawn.down[cells] >= 0, drawn.down[cells], cells) for drawn in (one, other)]
    ends = other.down[cells] < 0
    near = [cells, *nexts]
    surfaces = [drawn.surface_m.ravel() for drawn in (one, other)]

    def slope(surface: np.ndarray, to: np.ndarray) -> np.ndarray:
        rows, cols = np.abs(to // ncols - cells // ncols), np.abs(to % ncols - cells % ncols)
        length_m = np.hypot(rows * cell_m[1], cols * cell_m[0])
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(length_m > 0, (surface[cells] - surface[to]) / length_m, 0.0)

    with np.errstate(invalid="ignore"):
        moved = [np.abs(surfaces[0][place] - surfaces[1][place]) > _MOVED_M for place in near]
    conditions = {
        "edge": np.logical_or.reduce([edge[place] for place in near]),
        "cut": np.logical_or.reduce(moved),
        "flat": ends | (slope(surfaces[0], nexts[0]) <= 0) | (slope(surfaces[1], nexts[1]) <= 0),
        "tie": np.abs(slope(surfaces[0], nexts[0]) - slope(surfaces[0], nexts[1])) <= TIE_SLOPE,
    }
    return np.select(list(conditions.values()), list(conditions), default="other")


def _beside_void(elevation: np.ndarray) -> np.ndarray:
    """Return which cells are void or touch one."""
    import numpy as np
    from scipy.ndimage import binary_dilation

    beside: np.ndarray = binary_dilation(np.isnan(elevation), structure=np.ones((3, 3)))
    return beside


if __name__ == "__main__":
    _answer(Path(sys.argv[1]))
