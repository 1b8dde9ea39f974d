"""The child process that makes a share of the outlet pages: ``python -m basinwright.report.worker SHARE``.

A program of its own, because a forked process would inherit the threads of the libraries that drew the maps, and a
spawned one would run the caller's script again.
"""

from __future__ import annotations

import pickle
import sys
from pathlib import Path

from basinwright.report.pages import _write, outlet_page


def main(share: Path) -> None:
    """Write the pages of a share that the parent process left, a line on standard output for each."""
    run, tasks, target = pickle.loads(share.read_bytes())  # written by the parent a moment ago
    for outlet, neighbours in tasks:
        _write(target / outlet.file, outlet_page(run, outlet, neighbours))
        print(outlet.number, flush=True)


if __name__ == "__main__":
    main(Path(sys.argv[1]))
