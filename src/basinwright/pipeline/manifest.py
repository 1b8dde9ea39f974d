"""run.json: what was computed from what, and all that `retime` needs besides the tables."""

from __future__ import annotations

import base64
import json
import math
import platform
import time
import zlib
from collections import Counter
from collections.abc import Mapping
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.editing import EDITABLE, Cell, Record
from basinwright.errors import InputRejected
from basinwright.flags import Flag
from basinwright.hydrology import Results, Settings
from basinwright.outputs.writing import hydrograph_files
from basinwright.pipeline import design_storm
from basinwright.pipeline.inputs import Inputs
from basinwright.project import Project, parse_project
from basinwright.schemes import Scheme
from basinwright.store import MANIFEST, Store
from basinwright.tables import texts

if TYPE_CHECKING:
    import pandas as pd

    from basinwright.pipeline.terrain_half import TerrainHalf

FORMAT = 1
_NEEDED = (
    "project",
    "scheme",
    "storm_tables",
    "terrain_flags",
    "time_area",
    "edits",
    "stages",
    "summary_only",
    "files",
)
"""What `retime` reads."""
LIBRARIES = ("numpy", "numba", "pandas", "rasterio", "fiona", "pyogrio", "geopandas", "shapely", "pyproj", "pysheds")


def describe(
    inputs: Inputs,
    half: TerrainHalf,
    store: Store,
    held: set[Cell],
    time_area: pd.DataFrame,
    terrain_flags: list[Flag],
    results: Results,
    summary_only: bool,
) -> dict[str, Any]:
    """Return the manifest of a run as plain values."""
    project = inputs.project
    return {
        "format": FORMAT,
        "name": project.project.name,
        "basinwright": version("basinwright"),
        "python": platform.python_version(),
        "libraries": {name: version(name) for name in LIBRARIES},
        "finished": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime()),
        "host": {"system": platform.platform(), "machine": platform.machine()},
        "project_file": inputs.describe(inputs.file),
        "inputs": [inputs.describe(source) for source in inputs.sources()],
        "project": project.resolved(),
        "grid": half.grid.describe(),
        "alignment": [*half.alignment, *inputs.alignment()],
        "terrain": half.facts(),
        "supplied_points": [
            [x, y] if math.isfinite(x) and math.isfinite(y) else None
            for x, y in zip(inputs.x.tolist(), inputs.y.tolist(), strict=True)
        ],  # in the working CRS, in the order of outlets.csv
        "stages": [stage.describe() for stage in store.records],
        "summary_only": summary_only,
        "hydrographs": [] if summary_only else hydrograph_files(len(results.status)),
        **_counts(results),
        "scheme": {"name": inputs.scheme.name, "classes": inputs.scheme.to_rows()},
        "storm_tables": inputs.design.tables,
        "terrain_flags": [list(flag) for flag in terrain_flags],
        "time_area": _packed(time_area),
        "edits": {
            "supplied": _listed(held),
            "held": _listed(held),
            "encoding": "numbers: float64, little endian, base64; texts: JSON, zlib, base64",
            "first": {table.name: _packed(results.tables[table.name]) for table in EDITABLE},
            "written": {},  # where it differs from the first
        },
    }


def _counts(results: Results) -> dict[str, Any]:
    status = Counter(results.status.values())
    return {
        "counts": {
            "outlets": len(results.status),
            **{name: status[name] for name in ("ok", "flagged", "failed")},
            "flags": dict(sorted(Counter(flag.key for flag in results.flags).items())),
        },
        "exit_status": 1 if status["failed"] else 0,
    }


def retimed(about: Mapping[str, Any], record: Record, held: set[Cell], results: Results) -> dict[str, Any]:
    """Return the manifest after `retime`: counts and edits are new, the rest stands."""
    written = {table.name: _as_text(results.tables[table.name]) for table in EDITABLE}
    changed = {name: _packed(frame) for name, frame in written.items() if not frame.equals(record.first[name])}
    return {**about, **_counts(results), "edits": {**about["edits"], "held": _listed(held), "written": changed}}


def write(folder: Path, about: Mapping[str, Any]) -> None:
    """Write the manifest: the last file of a run."""
    names = sorted({entry.name for entry in folder.iterdir()} | {MANIFEST})
    # One line for each part: with an indent the encoder written in C would not be used.
    parts = (f"{json.dumps(k)}: {json.dumps(v, ensure_ascii=False)}" for k, v in {**about, "files": names}.items())
    text = "{\n" + ",\n".join(parts) + "\n}"
    (folder / MANIFEST).unlink(missing_ok=True)
    (folder / MANIFEST).write_text(text + "\n", encoding="utf-8")


def read(folder: Path) -> dict[str, Any]:
    """Read the manifest of a run.

    Raises
    ------
    InputRejected
        Where the folder holds no run of this version.
    """
    path = folder / MANIFEST
    try:
        about: dict[str, Any] = json.loads(path.read_text(encoding="utf-8"))
    except OSError:
        raise InputRejected.one(str(folder), MANIFEST, "does not exist", "name the folder of a finished run") from None
    except ValueError as error:
        raise InputRejected.one(str(path), "file", f"is not valid JSON ({error})", "restore it or run again") from None
    if not isinstance(about, dict) or about.get("format") != FORMAT:
        raise InputRejected.one(str(path), "format", "is of another version of basinwright", "run the project again")
    if missing := [key for key in _NEEDED if key not in about]:
        raise InputRejected.one(str(path), "file", f"lacks {', '.join(missing)}", "restore it or run again")
    return about


def settings(about: Mapping[str, Any]) -> tuple[Project, Settings]:
    """Return the project and the settings of the hydrology as the run had them."""
    project = parse_project(about["project"], MANIFEST)
    scheme = Scheme.from_rows(about["scheme"]["name"], about["scheme"]["classes"])
    design = design_storm.from_tables(project, about["storm_tables"])
    return project, Settings(project, scheme, design.storm, design.ddf)


def terrain_flags(about: Mapping[str, Any]) -> list[Flag]:
    """Return what the terrain half had flagged."""
    return [Flag(*row) for row in about["terrain_flags"]]


def time_area(about: Mapping[str, Any]) -> pd.DataFrame:
    """Return the time-area curves, which no person edits."""
    return _unpacked(about["time_area"])


def _listed(cells: set[Cell]) -> list[list[str]]:
    return sorted(list(cell) for cell in cells)


def record(about: Mapping[str, Any]) -> Record:
    """Return what is needed to tell a person's edits from computed values."""
    edits = about["edits"]
    first = {table.name: _unpacked(edits["first"][table.name]) for table in EDITABLE}
    written = first | {name: _unpacked(packed) for name, packed in edits["written"].items()}
    supplied, held = ({(a, b, c, d) for a, b, c, d in edits[name]} for name in ("supplied", "held"))
    return Record(first, written, supplied, held)


def _as_text(columns: Mapping[str, Any]) -> pd.DataFrame:
    import pandas as pd

    return pd.DataFrame({name: texts(values) for name, values in columns.items()}, dtype=object)


def _packed(columns: Mapping[Any, Any] | pd.DataFrame) -> dict[str, dict[str, str]]:
    """Return a table as text that JSON holds, column by column: `_unpacked` gives back the text of its cells."""
    packed = {}
    for name in columns:
        values = np.asarray(columns[name])
        if values.dtype.kind == "f":
            packed[str(name)] = {"numbers": _base64(values.astype("<f8").tobytes())}
        else:
            listed = json.dumps(texts(values), ensure_ascii=False).encode("utf-8")
            packed[str(name)] = {"texts": _base64(zlib.compress(listed, 1))}
    return packed


def _base64(data: bytes) -> str:
    return base64.b64encode(data).decode("ascii")


def _unpacked(packed: Mapping[str, Mapping[str, str]]) -> pd.DataFrame:
    columns: dict[str, Any] = {}
    for name, column in packed.items():
        if "numbers" in column:
            columns[name] = np.frombuffer(base64.b64decode(column["numbers"]), "<f8")
        else:
            columns[name] = json.loads(zlib.decompress(base64.b64decode(column["texts"])))
    return _as_text(columns)
