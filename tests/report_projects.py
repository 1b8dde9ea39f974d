"""Projects for the tests of the report: a valley with outlets of any name."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from projects import make_project, v_valley

HOSTILE = {
    "<script>window.pwned=1</script>": "<img src=x onerror=window.pwned=1>",
    "\"'><svg onload=window.pwned=1>": "</title></style></script><script>window.pwned=1</script>",
    "=HYPERLINK(A1)": "=cmd|' /C calc'!A0",
    "{{7*7}}{% raw %}": "javascript:window.pwned=1",
    "\u202egnp.exe": "עברית \u202e reversed \u2066 and \u200f marked",
    "../../etc/passwd": "x" * 5000,
}
"""Ids and names that would do harm, or hide something, wherever they are not treated as text."""


def valley_project(folder: Path, ids: dict[str, tuple[int, int]], names: dict[str, str], **overrides: Any) -> Path:
    """Write a project of one valley, with these outlets on its axis or slopes."""
    elevation = v_valley(60, 41, side_slope=0.08, valley_slope=0.02)
    columns = {"name": names, "capacity_m3s": dict.fromkeys(ids, 0.4), "basis": names}
    outlets = {"name": "name", "capacity": "capacity_m3s", "capacity_basis": "basis"}
    return make_project(folder, elevation, ids, columns=columns, overrides={"outlets": outlets, **overrides})
