"""run.json: what was computed from what, and all that `retime` needs besides the tables."""

from __future__ import annotations

import base64
import json
import math
import platform
import time
import zlib
from collections import Counter
from collections.abc import Mapping, Sequence
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.editing import EDITABLE, Cell, Record, as_first
from basinwright.errors import InputRejected
from basinwright.flags import Flag
from basinwright.hydrology import Columns, Results, Settings
from basinwright.outputs.writing import hydrograph_files
from basinwright.pipeline import design_storm, regional
from basinwright.pipeline.inputs import Inputs
from basinwright.pipeline.variants import Ground, ScenarioRun, stage_name
from basinwright.project import Project, parse_project
from basinwright.schemes import Scheme
from basinwright.store import MANIFEST, Store
from basinwright.tables import CELL_SIZES, as_text, texts

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
    "other_starts",
    "regional",
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
    base: Ground,
    first: Results,
    held: set[Cell],
    results: Results,
    scenarios: Sequence[ScenarioRun],
    cell_sizes: Sequence[Mapping[str, Any]],
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
        "stages": store.described(),
        "summary_only": summary_only,
        "hydrographs": hydrograph_files(results.tables),
        **_counts(results, scenarios),
        "scheme": {"name": inputs.scheme.name, "classes": inputs.scheme.to_rows()},
        "storm_tables": inputs.design.tables,
        "terrain_flags": [list(flag) for flag in base.flags],
        "time_area": _packed(base.time_area),
        "other_starts": {name: _packed(frame) for name, frame in base.other_starts.items()},
        "regional": inputs.regional,
        "edits": {
            "supplied": _listed(base.supplied),
            "held": _listed(held),
            "encoding": "numbers: float64, little endian, base64; texts: JSON, zlib, base64",
            "first": {table.name: _packed(first.tables[table.name]) for table in EDITABLE},
            "written": {} if results is first else _changed(results, _first(first)),
        },
        "cell_sizes": {
            "runs": list(cell_sizes),
            "table": _packed(results.tables[CELL_SIZES.name]) if cell_sizes else None,
        },
        "scenarios": [
            {**_scenario(scenario, base, inputs.regional), "stages": store.described(stage_name(scenario.name))}
            for scenario in scenarios
        ],
    }


def _scenario(scenario: ScenarioRun, base: Ground, regional: dict[str, Any] | None) -> dict[str, Any]:
    """Return what the manifest keeps of a scenario: its tables only where the terrain half made others of them."""
    ground = scenario.ground
    scheme = ground.settings.scheme
    other = {name: frame for name, frame in ground.tables.items() if not frame.equals(base.tables[name])}
    return {
        "name": scenario.name,
        "project": ground.settings.project.resolved(),
        "alignment": scenario.alignment,
        "scheme": {"name": scheme.name, "classes": scheme.to_rows()},
        "storm_tables": ground.storm_tables,
        "terrain_flags": [list(flag) for flag in ground.flags],
        "tables": {name: _packed(frame) for name, frame in other.items()},
        "time_area": None if ground.time_area.equals(base.time_area) else _packed(ground.time_area),
        "other_starts": {
            name: _packed(frame)
            for name, frame in ground.other_starts.items()
            if not frame.equals(base.other_starts[name])
        },
        "regional": regional,
        "files": scenario.files,
    }


def _counts(results: Results, scenarios: Sequence[ScenarioRun]) -> dict[str, Any]:
    status = Counter(results.status.values())
    return {
        "counts": {
            "outlets": len(results.status),
            **{name: status[name] for name in ("ok", "flagged", "failed")},
            "flags": dict(sorted(Counter(flag.key for flag in results.flags).items())),
        },
        "exit_status": 1 if status["failed"] or any(scenario.failed for scenario in scenarios) else 0,
    }


def retimed(
    about: Mapping[str, Any], record: Record, held: set[Cell], results: Results, scenarios: Sequence[ScenarioRun]
) -> dict[str, Any]:
    """Return the manifest after `retime`: counts, edits and the scenarios' files are new, the rest stands."""
    files = {scenario.name: scenario.files for scenario in scenarios}
    return {
        **about,
        **_counts(results, scenarios),
        "edits": {**about["edits"], "held": _listed(held), "written": _changed(results, record.first)},
        "scenarios": [{**entry, "files": files[entry["name"]]} for entry in about.get("scenarios", [])],
    }


def _first(results: Results) -> dict[str, pd.DataFrame]:
    return {table.name: as_text(results.tables[table.name]) for table in EDITABLE}


def _changed(results: Results, first: Mapping[str, pd.DataFrame]) -> dict[str, Any]:
    """Return the editable tables where they differ from the first."""
    written = _first(results)
    return {name: _packed(frame) for name, frame in written.items() if not frame.equals(first[name])}


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
    return project, Settings(project, scheme, design.storm, design.ddf, regional.equations(project, about["regional"]))


def ground(about: Mapping[str, Any], record: Record, settings: Settings) -> Ground:
    """Return what the terrain half had handed to the hydrology; its tables only where scenarios need them."""
    tables = as_first(record, settings.project.project.units, settings.scheme) if about.get("scenarios") else {}
    flags = [Flag(*row) for row in about["terrain_flags"]]
    starts = {name: _unpacked(packed) for name, packed in about["other_starts"].items()}
    return Ground(
        tables, _unpacked(about["time_area"]), starts, flags, record.supplied, settings, about["storm_tables"]
    )


def cell_sizes(about: Mapping[str, Any]) -> Columns | None:
    """Return the table of coarser cell sizes, where there is one: no edit changes it."""
    packed = about.get("cell_sizes", {}).get("table")
    frame = None if packed is None else _unpacked(packed)
    return None if frame is None else {str(name): frame[name].to_numpy() for name in frame}


def scenarios(about: Mapping[str, Any]) -> dict[str, Mapping[str, Any]]:
    """Return what the manifest keeps of each scenario, by name."""
    return {entry["name"]: entry for entry in about.get("scenarios", [])}


def scenario_ground(scenario: Mapping[str, Any], base: Ground) -> Ground:
    """Return what the terrain half had handed to the hydrology for a scenario."""
    packed, curves = scenario["tables"], scenario["time_area"]
    return Ground(
        {name: _unpacked(packed[name]) if name in packed else frame for name, frame in base.tables.items()},
        base.time_area if curves is None else _unpacked(curves),
        {
            name: _unpacked(scenario["other_starts"][name]) if name in scenario["other_starts"] else frame
            for name, frame in base.other_starts.items()
        },
        [Flag(*row) for row in scenario["terrain_flags"]],
        base.supplied,
        settings(scenario)[1],
        scenario["storm_tables"],
    )


def _listed(cells: set[Cell]) -> list[list[str]]:
    return sorted(list(cell) for cell in cells)


def record(about: Mapping[str, Any]) -> Record:
    """Return what is needed to tell a person's edits from computed values."""
    edits = about["edits"]
    first = {table.name: _unpacked(edits["first"][table.name]) for table in EDITABLE}
    written = first | {name: _unpacked(packed) for name, packed in edits["written"].items()}
    supplied, held = ({(a, b, c, d) for a, b, c, d in edits[name]} for name in ("supplied", "held"))
    roughness = about["project"]["channel"]["roughness"]
    return Record(first, written, supplied, held, isinstance(roughness, str) and roughness != "jarrett")


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
    return as_text(columns)
