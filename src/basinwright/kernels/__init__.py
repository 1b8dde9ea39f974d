"""Compiled kernels on flat padded arrays: the vocabulary they share, and where their machine code is kept.

Layout. A raster of ``nrows`` x ``ncols`` cells lies in a flat array of ``(nrows + 2) * (ncols + 2)`` cells
with one cell of halo on every side. Cell (row, col) has the index ``(row + 1) * (ncols + 2) + col + 1``.
Elevations are float32 with +inf in voids and in the halo, cell indices int32, directions uint8.

Directions are the numbers 0 to 7 clockwise from grid north, azimuth / 45, or one of the names below.
Rows run from north to south.

Importing this package does not import numba; its modules do.
"""

from __future__ import annotations

import atexit
import hashlib
import os
import shutil
import sys
import tempfile
from pathlib import Path

N, NE, E, SE, S, SW, W, NW = range(8)
EXIT = 8
"""Water leaves the raster here: at the rim or beside a void, with no lower neighbour."""
VOID = 9
"""No elevation here, or halo."""
FLAT = 10
"""A cell without a lower neighbour that is not resolved yet; absent from finished directions."""
SINK = 11
"""Water stays here: a declared sink."""

FREE = 255
"""Where a prescribed direction is expected: none."""

NO_CELL = -1
"""Where a cell index or a label is expected: none."""


def source_hash() -> str:
    """Hash of the kernels' source: numba's own check misses a change in a function called across files."""
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.name.encode())
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def _user_cache_folder() -> Path:
    """Per-user folder for caches by the platform's convention."""
    if sys.platform == "win32":
        return Path(os.environ.get("LOCALAPPDATA", Path.home() / "AppData" / "Local"))
    if sys.platform == "darwin":
        return Path.home() / "Library" / "Caches"
    return Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")


def _writable(folder: Path) -> bool:
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            return True
    except OSError:
        return False


def _choose_cache_folder() -> None:
    """Point numba at a cache folder of its own for this source, unless the user has named one.

    Where no per-user folder can be written the machine code goes to a temporary folder and is compiled again
    by the next process.
    """
    if os.environ.get("NUMBA_CACHE_DIR"):
        return
    try:
        folder = _user_cache_folder() / "basinwright" / f"kernels-{source_hash()}"
    except RuntimeError:  # no home folder
        folder = Path(os.devnull)
    if not _writable(folder):
        folder = Path(tempfile.mkdtemp(prefix="basinwright-kernels-"))
        atexit.register(shutil.rmtree, folder, ignore_errors=True)
    os.environ["NUMBA_CACHE_DIR"] = str(folder)
    if "numba" in sys.modules:  # it has read its environment already
        sys.modules["numba"].config.CACHE_DIR = str(folder)


def cache_is_cold() -> bool:
    """Whether the first call of the kernels will have to compile them: their cache folder is empty."""
    folder = Path(os.environ["NUMBA_CACHE_DIR"])
    return not any(folder.glob("kernels*/*.nbi"))


_choose_cache_folder()
