"""Reads a run: its tables, layers and manifest, taken apart by outlet.

Numbers stay in the units of the tables (feet or metres, as the project asked), under the stems of the schema: what is
shown is what stands in the CSV files.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from basinwright.errors import InputRejected
from basinwright.flags import FLAGS, SEVERITIES
from basinwright.outputs import hydrographs_nc
from basinwright.report import words
from basinwright.tables import (
    CAPACITY,
    CELL_SIZES,
    COVER_SHARES,
    CROSS_CHECKS,
    FLAGS_TABLE,
    HYDROGRAPHS,
    OUTLETS,
    REGIONAL,
    SCENARIOS,
    SEGMENTS,
    SWINGS,
    TIME_AREA,
    TIMING,
    UNCERTAINTY,
    UNIT_HYDROGRAPHS,
    Table,
)
from basinwright.units import System

if TYPE_CHECKING:
    import pandas as pd

Row = dict[str, Any]
"""One row of a table by stem: numbers (NaN where missing), texts, booleans."""

SUPPLIED = "supplied_points"
"""Where the manifest keeps the outlets as supplied, in the working CRS and in the order of outlets.csv."""


@dataclass(frozen=True)
class Doubt:
    """A flag of one outlet: its kind in `FLAGS` and the words for this case."""

    key: str
    message: str

    @property
    def severity(self) -> str:
        """How much it weighs."""
        return FLAGS[self.key].severity

    @property
    def remedy(self) -> str:
        """What to do about it."""
        return FLAGS[self.key].remedy


@dataclass
class Outlet:
    """All that the report says of one outlet.

    Parameters
    ----------
    number : int
        Its place in outlets.csv, from 1.
    row : Row
        Its row there.
    doubts : list of Doubt
        Its flags, the gravest first.
    segments, timing, shares, cross_checks, scenarios, cell_sizes : list of Row
        Its rows of those tables.
    time_area : dict
        ``travel_time_h`` and ``area``; empty where the run keeps none.
    unit_hydrograph : dict
        ``time_h`` and ``flow``; empty where the run keeps none.
    floods : dict
        By return period as written: ``time_h``, ``rain``, ``excess``, ``flow``.
    scenario_floods : dict
        The floods of each scenario, by its name.
    basin, subbasin, path : geometry or None
        In the working CRS.
    lines : dict
        Geometry by segment number.
    streams : list of (geometry, float)
        Stream reaches in its neighbourhood, with their contributing area.
    neighbours : list of (str, float, float)
        Other outlets in its basin: id and place.
    supplied : tuple of float, or None
        The point as supplied, in the working CRS.
    """

    number: int
    row: Row
    doubts: list[Doubt] = field(default_factory=list)
    segments: list[Row] = field(default_factory=list)
    timing: list[Row] = field(default_factory=list)
    shares: list[Row] = field(default_factory=list)
    cross_checks: list[Row] = field(default_factory=list)
    bands: list[Row] = field(default_factory=list)
    swings: list[Row] = field(default_factory=list)
    regional: list[Row] = field(default_factory=list)
    scenarios: list[Row] = field(default_factory=list)
    cell_sizes: list[Row] = field(default_factory=list)
    time_area: dict[str, Any] = field(default_factory=dict)
    unit_hydrograph: dict[str, Any] = field(default_factory=dict)
    floods: dict[str, dict[str, Any]] = field(default_factory=dict)
    scenario_floods: dict[str, dict[str, dict[str, Any]]] = field(default_factory=dict)
    basin: Any = None
    subbasin: Any = None
    path: Any = None
    lines: dict[int, Any] = field(default_factory=dict)
    streams: list[tuple[Any, float]] = field(default_factory=list)
    neighbours: list[tuple[str, float, float]] = field(default_factory=list)
    supplied: tuple[float, float] | None = None

    @property
    def id(self) -> str:
        """Its id as text, exactly."""
        return str(self.row["outlet_id"])

    @property
    def failed(self) -> bool:
        """Whether it could not be computed."""
        return bool(self.row["status"] == "failed")

    @property
    def severity(self) -> str:
        """The gravest of its doubts: ``failed``, ``serious``, ``warning``, ``note`` or ``ok``."""
        if self.failed:
            return "failed"
        return max((doubt.severity for doubt in self.doubts), key=_SEVERITIES.index, default="ok")

    @property
    def open_ended(self) -> bool:
        """Whether its basin goes on outside the terrain: its area is a lower bound."""
        return any(doubt.key == "EDGE_TOUCH" for doubt in self.doubts)

    @property
    def anchor(self) -> str:
        """Its name inside a page."""
        return f"outlet-{self.number}"

    @property
    def file(self) -> str:
        """The file of its own page: safe whatever its id holds."""
        stem = words.file_stem(self.id)
        return f"{self.number:04d}{'-' if stem else ''}{stem}.html"

    @property
    def place(self) -> tuple[float, float] | None:
        """Where it is in the working CRS, None where it has no cell."""
        x, y = self.row["x"], self.row["y"]
        return None if x != x else (float(x), float(y))


_SEVERITIES = ("ok", *SEVERITIES, "failed")


@dataclass
class Run:
    """A run as the report sees it.

    Parameters
    ----------
    folder : Path
        The run's folder.
    about : mapping
        The manifest.
    system : {"us", "si"}
        Unit system of the tables.
    periods : list of str
        Return periods as written.
    outlets : list of Outlet
        In the order of outlets.csv.
    columns : set of str
        Stems of the columns that outlets.csv has.
    capacity : list of Row
        The crossings by what fails first, scenario by scenario.
    """

    folder: Path
    about: Mapping[str, Any]
    system: System
    periods: list[str]
    outlets: list[Outlet]
    columns: set[str]
    capacity: list[Row] = field(default_factory=list)

    @property
    def terrain(self) -> Path | None:
        """The conditioned terrain, None where the run keeps none."""
        path = self.folder / "terrain" / "conditioned.tif"
        return path if path.is_file() else None

    @property
    def with_maps(self) -> bool:
        """Whether there are basins to draw."""
        return any(outlet.basin is not None for outlet in self.outlets)

    def outlet(self, outlet_id: str) -> Outlet:
        """Return one outlet.

        Raises
        ------
        InputRejected
            Where there is none of this id.
        """
        for outlet in self.outlets:
            if outlet.id == outlet_id:
                return outlet
        from difflib import get_close_matches

        near = get_close_matches(outlet_id, [outlet.id for outlet in self.outlets], n=1)
        fix = f"did you mean {near[0]!r}?" if near else "outlets.csv lists them"
        raise InputRejected.one(str(self.folder / "outlets.csv"), "outlet_id", f"has no {outlet_id!r}", fix)


def read_run(folder: Path, about: Mapping[str, Any], *, rows_only: bool = False) -> Run:
    """Read a run's folder.

    Parameters
    ----------
    folder : Path
        Where the tables lie; layers and terrain are used where they are there.
    about : mapping
        The manifest.
    rows_only : bool
        Whether the rows and doubts of the outlets are enough: `read_layers` then gives one its geometries.

    Raises
    ------
    InputRejected
        Where outlets.csv is missing.
    """
    project = about["project"]
    system: System = project["project"]["units"]
    storm = project["storm"]
    periods = sorted(storm.get("depths") or storm.get("depth_rasters"), key=float)

    def read(table: Table) -> pd.DataFrame:
        return _read(folder / f"{table.name}.csv", table, system, periods)

    table = read(OUTLETS)
    if table.empty:
        raise InputRejected.one(str(folder / "outlets.csv"), "file", "does not exist or is empty", "run again")
    rows = _rows(table)
    outlets = [Outlet(number, row) for number, row in enumerate(rows, start=1)]
    by_id = {outlet.id: outlet for outlet in outlets}
    for outlet, point in zip(outlets, about.get(SUPPLIED, [None] * len(outlets)), strict=True):
        outlet.supplied = (float(point[0]), float(point[1])) if point else None

    for row in _rows(read(FLAGS_TABLE)):
        by_id[row["outlet_id"]].doubts.append(Doubt(row["flag"], row["message"]))
    order = list(FLAGS)
    for outlet in outlets:
        outlet.doubts.sort(key=lambda doubt: (-_SEVERITIES.index(doubt.severity), order.index(doubt.key)))
    run = Run(folder, about, system, periods, outlets, set(table.columns), _rows(read(CAPACITY)))
    if rows_only:
        return run
    lists = {
        "segments": SEGMENTS,
        "timing": TIMING,
        "shares": COVER_SHARES,
        "cross_checks": CROSS_CHECKS,
        "bands": UNCERTAINTY,
        "swings": SWINGS,
        "regional": REGIONAL,
    }
    lists |= {"scenarios": SCENARIOS, "cell_sizes": CELL_SIZES}
    for name, source in lists.items():
        for row in _rows(read(source)):
            getattr(by_id[row["outlet_id"]], name).append(row)
    for outlet_id, _, part in _series(read(TIME_AREA), ("travel_time_h", "area")):
        by_id[outlet_id].time_area = part
    for outlet_id, _, part in _series(read(UNIT_HYDROGRAPHS), ("time_h", "flow")):
        by_id[outlet_id].unit_hydrograph = part
    for outlet_id, period, part in _floods(folder, system, periods):
        by_id[outlet_id].floods[period] = part
    for scenario in about.get("scenarios", []):
        for outlet_id, period, part in _floods(folder / "scenarios" / scenario["name"], system, periods):
            by_id[outlet_id].scenario_floods.setdefault(scenario["name"], {})[period] = part
    read_layers(run)
    return run


def _floods(folder: Path, system: System, periods: Sequence[str]) -> Iterator[tuple[str, str, dict[str, Any]]]:
    """Yield outlet, return period as written and columns of each hydrograph in a folder."""
    written = {float(period): period for period in periods}
    netcdf, table = folder / hydrographs_nc.FILE, folder / f"{HYDROGRAPHS.name}.csv"
    if netcdf.is_file() and not table.is_file():
        hydrographs = hydrographs_nc.read_hydrographs(netcdf)
    else:
        hydrographs = _read(table, HYDROGRAPHS, system, periods)
    for outlet_id, period, part in _series(hydrographs, ("time_h", "rain", "excess", "flow")):
        yield outlet_id, written[period], part


def _read(path: Path, table: Table, system: System, periods: Sequence[str]) -> pd.DataFrame:
    """Read a table of the run with its columns under their stems; empty where there is none."""
    import pandas as pd

    optional = [column.stem for column in table.columns if column.optional]
    fields = {entry.name: entry for entry in table.fields(system, periods, optional)}
    if not path.is_file():
        return pd.DataFrame({entry.stem: [] for entry in fields.values()})
    numeric = [name for name, entry in fields.items() if entry.column.type in ("number", "integer")]
    frame = pd.read_csv(
        path,
        dtype={name: "float64" if name in numeric else "str" for name in fields},
        keep_default_na=False,
        na_values={name: [""] for name in numeric},
        encoding="utf-8-sig",
    )
    frame = frame[[name for name in frame.columns if name in fields]]
    for name in frame.columns:
        if fields[name].column.type == "boolean":
            frame[name] = frame[name] == "true"
    return frame.rename(columns={name: entry.stem for name, entry in fields.items()})


def _rows(frame: pd.DataFrame) -> list[Row]:
    return [{str(name): value for name, value in row.items()} for row in frame.to_dict("records")]


def _series(frame: pd.DataFrame, columns: Sequence[str]) -> Iterator[tuple[str, float, dict[str, Any]]]:
    """Yield outlet, return period (0 where there is none) and columns of each series; its rows stand together."""
    import numpy as np

    if frame.empty:
        return
    ids = frame["outlet_id"].to_numpy()
    periods = frame["return_period_yr"].to_numpy() if "return_period_yr" in frame else np.zeros(len(ids))
    begins = np.flatnonzero(np.r_[True, (ids[1:] != ids[:-1]) | (periods[1:] != periods[:-1])])
    arrays = {name: frame[name].to_numpy() for name in columns}
    for a, b in itertools.pairwise([*begins.tolist(), len(ids)]):
        yield str(ids[a]), float(periods[a]), {name: values[a:b] for name, values in arrays.items()}


def read_layers(run: Run, only: str | None = None) -> None:
    """Give each outlet, or only the one of an id, its geometries, and the streams and outlets in its neighbourhood."""
    import numpy as np
    import shapely

    from basinwright.io.pictures import read_layer

    path = run.folder / "basins.gpkg"
    if not path.is_file():
        return
    by_id = {outlet.id: outlet for outlet in run.outlets}
    for layer, name in (("basins", "basin"), ("subbasins", "subbasin"), ("flow_paths", "path")):
        frame = read_layer(path, layer, ["outlet_id"], outlet_id=only)
        for outlet_id, geometry in zip(frame["outlet_id"], frame.geometry, strict=True):
            setattr(by_id[outlet_id], name, geometry)
    frame = read_layer(path, "segments", ["outlet_id", "segment"], outlet_id=only)
    for outlet_id, segment, geometry in zip(frame["outlet_id"], frame["segment"], frame.geometry, strict=True):
        by_id[outlet_id].lines[int(segment)] = geometry

    drawn = [
        outlet
        for outlet in run.outlets
        if outlet.basin is not None and outlet.place is not None and only in (None, outlet.id)
    ]
    windows = [shapely.box(*outlet.basin.bounds).buffer(0.1 * max(_spans(outlet.basin.bounds))) for outlet in drawn]
    area = OUTLETS.column("area").name(run.system)
    streams = read_layer(path, "streams", [area], bounds=windows[0].bounds if only and windows else None)
    lines, areas = streams.geometry.to_numpy(), streams[area].to_numpy(dtype=float)
    tree = shapely.STRtree(lines)
    placed = [outlet for outlet in run.outlets if outlet.place]
    among = shapely.STRtree([shapely.Point(outlet.place) for outlet in placed if outlet.place])
    for outlet, window in zip(drawn, windows, strict=True):
        near = np.sort(tree.query(window))
        outlet.streams = [(lines[i], float(areas[i])) for i in near.tolist()]
        inside = np.sort(among.query(outlet.basin, predicate="contains"))
        others = [placed[i] for i in inside.tolist() if placed[i] is not outlet]
        outlet.neighbours = [
            (other.id, *other.place) for other in others if other.place and other.place != outlet.place
        ]


def _spans(bounds: tuple[float, float, float, float]) -> tuple[float, float]:
    return bounds[2] - bounds[0], bounds[3] - bounds[1]


def upstream(outlets: Sequence[Outlet]) -> dict[int, list[int]]:
    """Return, by position, the positions of the outlets next upstream of each."""
    position = {outlet.id: i for i, outlet in enumerate(outlets)}
    above: dict[int, list[int]] = {i: [] for i in range(len(outlets))}
    for i, outlet in enumerate(outlets):
        below = position.get(outlet.row["downstream_outlet_id"])
        if below is not None and below != i:
            above[below].append(i)
    return above


def profile_points(segments: Sequence[Row]) -> list[tuple[float, float]]:
    """Return distance from the divide and elevation along the path."""
    if not segments:
        return []
    first = segments[0]
    tail = ((row["to"], row["bottom_elevation"]) for row in segments)
    return list(itertools.chain([(first["from"], first["top_elevation"])], tail))
