"""From terrain to design flood hydrographs for ungauged outlets, with the evidence for every number.

`run` does the whole job of a project file, `retime` computes times and flows again from a run's edited tables, `check`
validates a project without computing. The halves serve alone as well: `basinwright.timing`, `storms`, `runoff` and
`hydrograph` are pure functions on numbers and need no raster library.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from basinwright.errors import BasinwrightError, InputRejected, PublishError

if TYPE_CHECKING:
    from basinwright.pipeline import Outcome, check, retime, run, start

__all__ = ["BasinwrightError", "InputRejected", "Outcome", "PublishError", "check", "retime", "run", "start"]


def __getattr__(name: str) -> Any:
    """Import the pipeline, and the heavy libraries behind it, only where it is asked for."""
    if name in ("Outcome", "check", "retime", "run", "start"):
        return getattr(importlib.import_module("basinwright.pipeline"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
