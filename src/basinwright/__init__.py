"""From terrain to design flood hydrographs for ungauged outlets, with the evidence for every number.

`Project` is a project file, `Run` a finished run: tables as data frames, rasters as xarray with their CRS. The halves
serve alone as well: `route` on a terrain in memory; `time_segments`, `time_of_concentration` and `design_floods` on
numbers measured by hand. Nothing heavy is imported before it is used.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from basinwright.errors import BasinwrightError, InputRejected, PublishError

if TYPE_CHECKING:
    from basinwright.api import Project, Run, check, explain, retime, route, run, start, storm
    from basinwright.hydrograph import design_floods
    from basinwright.outputs.summary import Outcome
    from basinwright.runoff import Patches
    from basinwright.timing import time_of_concentration, time_segments

__all__ = [
    "BasinwrightError",
    "InputRejected",
    "Outcome",
    "Patches",
    "Project",
    "PublishError",
    "Run",
    "check",
    "design_floods",
    "explain",
    "retime",
    "route",
    "run",
    "start",
    "storm",
    "time_of_concentration",
    "time_segments",
]

_HOMES = {
    **dict.fromkeys(
        ("Project", "Run", "check", "explain", "retime", "route", "run", "start", "storm"), "basinwright.api"
    ),
    "Outcome": "basinwright.outputs.summary",
    "Patches": "basinwright.runoff",
    "design_floods": "basinwright.hydrograph",
    "time_of_concentration": "basinwright.timing",
    "time_segments": "basinwright.timing",
}
"""Where the names live that are imported when they are first asked for."""


def __getattr__(name: str) -> Any:
    """Import a public name, and the libraries behind it, where it is asked for."""
    if name in _HOMES:
        return getattr(importlib.import_module(_HOMES[name]), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
