"""Variants: one project with some inputs replaced, run over the one store.

A scenario has other land cover, soils or storms on the same terrain, paths and outlets. Its stages are those of the
base under other keys: where nothing that a stage depends on differs, the key is the same and nothing runs again.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from basinwright.carrying import carry
from basinwright.editing import EDITABLE, Cell, Edited, Record
from basinwright.errors import InputRejected
from basinwright.flags import Flag
from basinwright.hydrology import OTHER_STARTS, Columns, Results, Settings, capacities_table, compute, scenarios_table
from basinwright.hydrology.agreement import BASE
from basinwright.outputs import writing
from basinwright.pipeline import regional
from basinwright.store import Store, file_sha256
from basinwright.tables import as_text

if TYPE_CHECKING:
    import pandas as pd

    from basinwright.pipeline.inputs import Inputs
    from basinwright.pipeline.terrain_half import TerrainHalf
    from basinwright.project import Project

SCENARIOS = "scenarios"
"""The folder of their tables, and the name of the table that compares them."""


@dataclass(frozen=True)
class Ground:
    """What the terrain half hands to the hydrology, and the settings to compute it with.

    Parameters
    ----------
    tables : dict of str to DataFrame
        ``outlets``, ``segments`` and ``cover_shares``, as text or as numbers.
    time_area : DataFrame
    other_starts : dict of str to DataFrame
        Segments where channels begin at other areas, where the project asks for them.
    flags : list of Flag
        What the terrain half flagged.
    supplied : set of Cell
        Dependent cells that the outlet layer supplied.
    settings : Settings
    storm_tables : dict
        The user's tables of the storm as plain values.
    """

    tables: dict[str, pd.DataFrame]
    time_area: pd.DataFrame
    other_starts: dict[str, pd.DataFrame]
    flags: list[Flag]
    supplied: set[Cell]
    settings: Settings
    storm_tables: dict[str, Any]

    def compute(self, edits: Edited | None = None, *, series: bool, scenario: str = BASE) -> Results:
        """Compute times, runoff and hydrographs, of the tables with a person's edits where there are any."""
        edits = edits or Edited(self.tables, self.supplied)
        return compute(
            {**edits.tables, **self.other_starts, "time_area": self.time_area},
            self.settings,
            terrain_flags=self.flags,
            held=edits.held,
            edited=edits.segments,
            series=series,
            scenario=scenario,
        )

    def with_edits(self, edits: Edited, record: Record) -> tuple[Ground, Edited]:
        """Return this with flags for what cannot be laid onto it, and its tables with the edits of a run's base."""
        text = {name: as_text(frame) for name, frame in self.tables.items()}
        carried = carry(edits, record, text, self.supplied, self.settings.project.project.units)
        left_out = [Flag(outlet_id, "EDIT_LEFT_OUT", told) for outlet_id, told in carried.left_out.items()]
        return replace(self, flags=[*self.flags, *left_out]), carried.edited


def ground_of(inputs: Inputs, half: TerrainHalf, flags: Sequence[Flag]) -> Ground:
    """Return what the terrain half made of a project."""
    frames = half.frames(inputs.project)
    time_area = frames.pop("time_area")
    starts = {name: frames.pop(name) for name in OTHER_STARTS if name in frames}
    equations = regional.equations(inputs.project, inputs.regional)
    return Ground(
        frames,
        time_area,
        starts,
        list(flags),
        {(table, outlet_id, row, stem) for table, outlet_id, row, stem in half.tables.values("held")},
        Settings(inputs.project, inputs.scheme, inputs.design.storm, inputs.design.ddf, equations),
        inputs.design.tables,
    )


@dataclass(frozen=True)
class ScenarioRun:
    """A scenario that was run.

    Parameters
    ----------
    name : str
    ground : Ground
    alignment : list of dict
        How each of its inputs came onto the grid.
    outlets : columns
        Its outlets.csv.
    capacity : columns or None
        Its capacity.csv, where there are capacities.
    failed : int
        Outlets that could not be computed.
    files : dict of str to str
        SHA-256 of its tables that look as if they could be edited.
    """

    name: str
    ground: Ground
    alignment: list[dict[str, Any]]
    outlets: Columns
    capacity: Columns | None
    failed: int
    files: dict[str, str]


def stage_name(scenario: str) -> str:
    """Return what the stages of a scenario are recorded under."""
    return f"scenario {scenario}"


def run_scenarios(
    inputs: Inputs, store: Store, folder: Path, edits: tuple[Edited, Record] | None, *, series: bool
) -> list[ScenarioRun]:
    """Run every scenario of a project over the store of its base, and write its tables into the run's folder."""
    from basinwright.pipeline import terrain_half

    runs = []
    for name, changed in inputs.scenarios.items():
        with store.running(stage_name(name)):
            half = terrain_half.run(changed, store)
            ground = ground_of(changed, half, half.flags())
            depends_on = {
                "tables": half.keys(),
                "options": changed.project.model_dump(mode="json", exclude={"audit", "compute"}),
                "storm": changed.design.tables,
                "regional": changed.regional,
                "series": series,
            }
            with store.watched("hydrology", "Timing, runoff and hydrographs", depends_on):
                runs.append(compute_scenario(name, ground, half.alignment, folder, edits, series=series))
    return runs


def compute_scenario(
    name: str,
    ground: Ground,
    alignment: list[dict[str, Any]],
    folder: Path,
    edits: tuple[Edited, Record] | None,
    *,
    series: bool,
) -> ScenarioRun:
    """Compute a scenario with a person's edits of the base, and write its tables into the run's folder."""
    with_flags, own = (ground, None) if edits is None else ground.with_edits(*edits)
    results = with_flags.compute(own, series=series, scenario=name)
    place = folder / SCENARIOS / name
    place.mkdir(parents=True, exist_ok=True)
    writing.write_tables(place, results.tables, ground.settings.project)
    failed = sum(status == "failed" for status in results.status.values())
    outlets, capacity = results.tables["outlets"], results.tables.get("capacity")
    return ScenarioRun(name, ground, alignment, outlets, capacity, failed, _hashes(place))


def _hashes(place: Path) -> dict[str, str]:
    names = [f"{table.name}.csv" for table in EDITABLE]
    return {name: file_sha256(place / name) for name in names if (place / name).is_file()}


def refuse_edited(folder: Path, files: Mapping[str, Mapping[str, str]]) -> None:
    """Refuse scenarios' tables that somebody changed: edits belong into the base's.

    Raises
    ------
    InputRejected
    """
    for name, hashes in files.items():
        for file, digest in _hashes(folder / SCENARIOS / name).items():
            if digest != hashes.get(file):
                what = "was edited, and edits of a scenario's tables are not read"
                fix = f"put the old file back and edit {file} of the run itself: that reaches every scenario"
                raise InputRejected.one(f"{SCENARIOS}/{name}/{file}", "file", what, fix)


def compare(results: Results, scenarios: Sequence[ScenarioRun], held: set[Cell], project: Project) -> None:
    """Put the table that compares the scenarios with the base among the base's, and their capacities below it."""
    if scenarios:
        outlets = {scenario.name: scenario.outlets for scenario in scenarios}
        results.tables[SCENARIOS] = scenarios_table(results.tables["outlets"], outlets, held, project)
        capacities = [results.tables.get("capacity"), *(scenario.capacity for scenario in scenarios)]
        if known := [columns for columns in capacities if columns is not None]:
            results.tables["capacity"] = capacities_table(known)


def told(scenarios: Sequence[ScenarioRun]) -> dict[str, Columns]:
    """Return outlets.csv of each scenario by name, for the screen."""
    return {scenario.name: scenario.outlets for scenario in scenarios}
