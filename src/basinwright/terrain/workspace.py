"""Where work on a raster finds hands and room: in this process and in memory, or beyond both."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from basinwright.progress import tell
from basinwright.terrain.tiling import Tile, Tiling


class Workers(Protocol):
    """Whatever calls a function once for each tuple of arguments, here or elsewhere; results in that order."""

    def map(self, function: Callable[..., Any], calls: Sequence[tuple[Any, ...]]) -> list[Any]:
        """Call the function for each."""


class InProcess:
    """Workers that are this very process."""

    def map(self, function: Callable[..., Any], calls: Sequence[tuple[Any, ...]]) -> list[Any]:
        """Call the function for each, one after the other."""
        results = []
        for call in calls:
            results.append(function(*call))
            tell(len(results), len(calls), "tiles")
        return results


@dataclass(frozen=True)
class Workspace:
    """Room for arrays, and workers for tiles.

    Parameters
    ----------
    results : Path or None
        Folder for arrays that last, as ``.npy`` files; None keeps all arrays in memory.
    scratch : Path or None
        Folder for what only lasts as long as the work does; workers see both folders under the same path.
    workers : Workers
        Results do not depend on who they are.
    """

    results: Path | None = None
    scratch: Path | None = None
    workers: Workers = field(default_factory=InProcess)

    def result(self, name: str, shape: tuple[int, ...], dtype: Any) -> np.ndarray:
        """Make an array that lasts; its values are unset."""
        return _array(self.results, name, shape, dtype)

    def temporary(self, name: str, shape: tuple[int, ...], dtype: Any) -> np.ndarray:
        """Make an array that does not last, of zeros."""
        return np.zeros(shape, dtype) if self.scratch is None else _array(self.scratch, name, shape, dtype)

    def discard(self, *names: str) -> None:
        """Give back the room of temporary arrays."""
        for name in names:
            if self.scratch is not None:
                (self.scratch / f"{name}.npy").unlink()


IN_MEMORY = Workspace()


def _array(folder: Path | None, name: str, shape: tuple[int, ...], dtype: Any) -> np.ndarray:
    if folder is None:
        return np.empty(shape, dtype)
    file = folder / f"{name}.npy"
    array = np.lib.format.open_memmap(file, mode="w+", shape=shape, dtype=dtype)
    if hasattr(os, "posix_fallocate"):  # a full disk is an error now, not the death of whoever writes a page later
        with file.open("r+b") as stream:
            os.posix_fallocate(stream.fileno(), 0, file.stat().st_size)
    return array


def file_of(array: np.ndarray) -> str:
    """Return the ``.npy`` file that an array is mapped from.

    Raises
    ------
    ValueError
        Where it is not.
    """
    here: Any = array
    while here is not None:
        if isinstance(here, np.memmap) and here.filename is not None:
            return str(here.filename)
        here = getattr(here, "base", None)
    raise ValueError("the array lies in memory, not in a file")


@dataclass(frozen=True)
class Scratch:
    """What the steps hand each other, tile by tile.

    Parameters
    ----------
    tiling : Tiling
    scratch : str
        Folder.
    """

    tiling: Tiling
    scratch: str

    def keep(self, tile: Tile, name: str, **arrays: np.ndarray) -> None:
        """Keep arrays of a tile for a later step."""
        for part, array in arrays.items():
            np.save(self._scratch(tile, name, part), array, allow_pickle=False)

    def kept(self, tile: Tile, name: str, part: str) -> np.ndarray:
        """Read what was kept."""
        return np.load(self._scratch(tile, name, part), allow_pickle=False)

    def drop(self, name: str) -> None:
        """Remove what all tiles kept under a name."""
        for path in Path(self.scratch).glob(f"{name}-*.npy"):
            path.unlink()

    def _scratch(self, tile: Tile, name: str, part: str) -> str:
        return str(Path(self.scratch, f"{name}-{part}-{tile.index}.npy"))


def padded_raster(file: str, tiling: Tiling, *, write: bool = False) -> np.ndarray:
    """Map a flat padded array, as a raster of shape (nrows + 2, ncols + 2)."""
    mapped = np.load(file, mmap_mode="r+" if write else "r")
    return mapped.reshape(tiling.nrows + 2, tiling.stride)
