"""Where work on a raster finds hands and room: in this process and in memory, or beyond both."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

import numpy as np


class Workers(Protocol):
    """Whatever calls a function once for each tuple of arguments, here or elsewhere; results in that order."""

    def map(self, function: Callable[..., Any], calls: Sequence[tuple[Any, ...]]) -> list[Any]:
        """Call the function for each."""


class InProcess:
    """Workers that are this very process."""

    def map(self, function: Callable[..., Any], calls: Sequence[tuple[Any, ...]]) -> list[Any]:
        """Call the function for each, one after the other."""
        return [function(*call) for call in calls]


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
    return np.lib.format.open_memmap(folder / f"{name}.npy", mode="w+", shape=shape, dtype=dtype)


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
