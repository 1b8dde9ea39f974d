"""The project file: what the user wrote, validated, with every problem listed at once.

The model below is the one list of options: defaults, kinds and limits are read off it by the messages, the
manifest and the documentation. Quantities are kept in the units used inside and written back with them.
"""

from __future__ import annotations

import difflib
import itertools
import math
import re
import tomllib
import types
import typing
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Annotated, Any, Literal, Union

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    PlainSerializer,
    ValidationError,
    model_validator,
)
from pydantic_core import ErrorDetails, PydanticCustomError

from basinwright.confidence import score_correlation
from basinwright.errors import InputRejected, Problem, RangeError
from basinwright.units import INSIDE, QuantityError, parse_quantity, unit_of_suffix


def _reject(what: str, fix: str) -> PydanticCustomError:
    return PydanticCustomError("rejected", "{what}: {fix}", {"what": what, "fix": fix})


def _parse(value: object, dimension: str) -> float:
    try:
        return parse_quantity(value, dimension)
    except QuantityError as error:
        raise _reject(error.what, error.fix) from None


def _read(dimension: str, *words: str) -> BeforeValidator:
    """Return the reader of a quantity with a unit, or of one of some words such as ``auto``."""

    def read(value: object) -> float | str:
        return value if isinstance(value, str) and value in words else _parse(value, dimension)

    return BeforeValidator(read)


def _write(dimension: str) -> PlainSerializer:
    """Return the writer that gives a quantity its unit back."""

    def write(value: float | str) -> str:
        if isinstance(value, str):
            return value
        return f"{value * 100!r} %" if dimension == "share" else f"{value!r} {INSIDE[dimension]}"

    return PlainSerializer(write)


def _check_positive(value: Any) -> Any:
    if not isinstance(value, str) and not value > 0:
        raise _reject("is not over zero", "give a positive quantity")
    return value


_PERIOD = re.compile(r"[0-9]+(\.[0-9]+)?")


def _check_period(text: str) -> str:
    if not (_PERIOD.fullmatch(text) and float(text) > 0):
        raise _reject("not a return period", "write a number of years, such as 10 or 2.5")
    return text


_positive = AfterValidator(_check_positive)
Period = Annotated[str, AfterValidator(_check_period)]
"""A return period in years, as text that can stand in the name of a column."""
Length = Annotated[float, _read("length"), _positive, _write("length")]
LengthOrNone = Annotated[float, _read("length"), Field(ge=0), _write("length")]
LengthOrAuto = Annotated[float | str, _read("length", "auto"), _positive, _write("length")]
StreamArea = Annotated[float | str, _read("area", "auto", "mapped"), _positive, _write("area")]
AreaOrNone = Annotated[float, _read("area"), Field(ge=0), _write("area")]
Depth = Annotated[float, _read("depth"), _positive, _write("depth")]
Time = Annotated[float, _read("time"), _positive, _write("time")]
TimeOrNone = Annotated[float, _read("time"), Field(ge=0), _write("time")]
TimeOrAuto = Annotated[float | str, _read("time", "auto"), _positive, _write("time")]
Share = Annotated[float, _read("share"), Field(ge=0, le=1), _write("share")]
MemoryOrAuto = Annotated[float | str, _read("memory", "auto"), _positive, _write("memory")]
Plain = Annotated[float, Field(allow_inf_nan=False, strict=True)]


def _check_code(text: str) -> str:
    try:
        float(text)
    except ValueError:
        raise _reject(f"{text!r} is no code of a raster", "write the numbers that stand in the raster") from None
    return text


def _check_meaning(value: int | str) -> int | str:
    if value in ("exit", "sink") or (isinstance(value, int) and value in range(0, 360, 45)):
        return value
    raise _reject(f"{value!r} is no direction", 'use an azimuth of 0, 45, ... 315 degrees, "exit" or "sink"')


Code = Annotated[str, AfterValidator(_check_code)]
"""A number of a raster, as text: keys of a table in the project file are texts."""
Meaning = Annotated[int | str, AfterValidator(_check_meaning)]


def _one_of(*values: float) -> AfterValidator:
    def check(value: float) -> float:
        if value not in values:
            raise _reject(f"{value!r} is not one of its values", f"use {' or '.join(map(str, values))}")
        return value

    return AfterValidator(check)


def _default(text: str) -> Any:
    """Give an option its default as a person would write it."""
    return Field(default=text, validate_default=True)


def _pair(value: Any, one: Callable[[Any], float], example: str) -> tuple[float, float]:
    """Read a range: its two ends, or what it reaches to either side of the value in use."""
    if isinstance(value, list | tuple):
        if len(value) != 2:
            raise _reject(f"{list(value)!r} is no range", f"give its two ends, such as {example}")
        low, high = map(one, value)
    else:
        high = one(value)
        low = -high
    if not low < high:
        raise _reject(f"{value!r} is an empty or reversed range", f"give the lower end first, such as {example}")
    return low, high


def _plain_number(value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        raise _reject(f"{value!r} is not a plain number", "give a number without unit")
    return float(value)


def _read_shift(value: Any) -> tuple[float, float]:
    return _pair(value, _plain_number, "[-5, 5]")


def _read_shares(value: Any) -> tuple[float, float]:
    low, high = _pair(value, lambda end: _parse(end, "share"), '["-30 %", "30 %"]')
    if low <= -1.0:
        raise _reject(f"{value!r} reaches down to nothing", "let it begin above -100 %")
    return low, high


def _read_factors(value: Any) -> tuple[float, float]:
    """Read a factor that divides and multiplies, or the two factors themselves."""
    if not isinstance(value, list | tuple):
        factor = _plain_number(value)
        if factor <= 1.0:
            raise _reject(f"{value!r} makes an empty or reversed range", "give a factor over 1, such as 2")
        value = [1.0 / factor, factor]
    low, high = _pair(value, _plain_number, "[0.5, 2]")
    if not 0.0 < low < 1.0 < high:
        raise _reject(f"{value!r} does not lie on both sides of 1", "give factors such as [0.5, 2]")
    return low, high


def _read_factor_range(value: Any) -> float | tuple[float, float]:
    if isinstance(value, list | tuple):
        return _pair(value, _plain_number, "[300, 600]")
    half = _plain_number(value)
    if half <= 0:
        raise _reject(f"{value!r} makes an empty or reversed range", "give a number over zero, or a pair")
    return half


def _read_depths(value: Any) -> tuple[float, float] | dict[str, tuple[float, float]]:
    """Read a range of depths: shares of the depths in use, or limits of the depth of each return period."""
    if not isinstance(value, dict):
        return _read_shares(value)
    limits = {}
    for period, ends in value.items():
        _check_period(str(period))
        limits[str(period)] = _pair(ends, lambda end: _parse(end, "depth"), '["4.1 in", "5.2 in"]')
        if not isinstance(ends, list | tuple) or limits[str(period)][0] <= 0:
            raise _reject(f"{ends!r} is no pair of depths", 'give both limits, such as ["4.1 in", "5.2 in"]')
    return limits


def _write_shares(ends: tuple[float, float]) -> list[str]:
    return [_percent(end) for end in ends]


def _percent(share: float) -> str:
    """Return a share as text that reads back exactly."""
    texts = [f"{share * 100:.{digits}g} %" for digits in (15, 16, 17)]
    return next((text for text in texts if parse_quantity(text, "share") == share), texts[-1])


def _write_depths(value: tuple[float, float] | dict[str, tuple[float, float]]) -> Any:
    if not isinstance(value, dict):
        return _write_shares(value)
    return {period: [f"{end!r} mm" for end in ends] for period, ends in value.items()}


Shift = Annotated[tuple[float, float], BeforeValidator(_read_shift)]
ShareRange = Annotated[tuple[float, float], BeforeValidator(_read_shares), PlainSerializer(_write_shares)]
FactorPair = Annotated[tuple[float, float], BeforeValidator(_read_factors)]
FactorRange = Annotated[float | tuple[float, float], BeforeValidator(_read_factor_range)]
DepthRange = Annotated[
    tuple[float, float] | dict[str, tuple[float, float]], BeforeValidator(_read_depths), PlainSerializer(_write_depths)
]


class Section(BaseModel):
    """One table of the project file: unknown keys are errors."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class ProjectSection(Section):
    """[project]."""

    name: str = "untitled"
    units: Literal["us", "si"] = "us"
    allow_remote: bool = False


class Terrain(Section):
    """[terrain]."""

    dem: list[str] = Field(min_length=1)
    vertical_unit: Literal["m", "ft", "us-ft"] | None = None
    crs: str = "auto"
    fill_voids: AreaOrNone = _default("500 m2")
    conditioning: Literal["fill", "breach"] = "breach"
    breach_depth: Length = _default("5 m")
    breach_length: Length = _default("100 m")
    stream_lines: str | None = None
    barriers: str | None = None
    sinks: str | None = None
    flow_direction: str | None = None
    flow_direction_codes: dict[Code, Meaning] | None = None
    stream_area: StreamArea = _default("0.25 km2")
    length_correction: Literal["none", "straight"] = "none"

    @model_validator(mode="before")
    @classmethod
    def _one_or_many(cls, data: Any) -> Any:
        if isinstance(data, dict) and isinstance(data.get("dem"), str):
            return {**data, "dem": [data["dem"]]}
        return data


class Outlets(Section):
    """[outlets]."""

    source: str
    layer: str | None = None
    crs: str | None = None
    id: str | None = None
    name: str | None = None
    snap_within: LengthOrAuto = "auto"
    expected_area: str | None = None
    capacity: str | None = None
    capacity_basis: str | None = None


class Cover(Section):
    """[cover]."""

    raster: str | None = None
    vector: str | None = None
    field: str | None = None
    scheme: str
    impervious: str | None = None
    connected_fraction: Annotated[Plain, Field(ge=0, le=1)] = 1.0
    gap_limit: Share = _default("2 %")


Group = Literal["A", "B", "C", "D"]
SoilCode = Literal["A", "B", "C", "D", "A/D", "B/D", "C/D"]


class Soils(Section):
    """[soils]."""

    raster: str | None = None
    vector: str | None = None
    field: str | None = None
    group: Group | None = None
    groups: dict[str, SoilCode] = Field(
        default={str(code): group for code, group in enumerate(typing.get_args(SoilCode), start=1)}
    )
    dual_groups: Literal["undrained", "drained"] = "undrained"
    missing: Group | None = None


class FlowPath(Section):
    """[flow_path]."""

    farthest: Literal["length", "time"] = "length"
    sheet_limit: Length = _default("100 ft")
    min_segment: LengthOrNone = _default("50 ft")
    slope_floor: Annotated[Plain, Field(gt=0, lt=1)] = 0.0005


class PowerLaw(Section):
    """A relation of drainage area in km2 to a dimension in m."""

    coefficient: Annotated[Plain, Field(gt=0)]
    exponent: Annotated[Plain, Field(ge=0)]


class Channel(Section):
    """[channel]."""

    roughness: Annotated[Plain, Field(gt=0)] | str = 0.045
    bankfull_region: str = "usa"
    bankfull_width: PowerLaw | None = None
    bankfull_depth: PowerLaw | None = None
    stage: Literal["bankfull", "half"] = "bankfull"
    open_water_depth: Length = _default("2 m")


class StormSection(Section):
    """[storm]."""

    duration: Time = _default("24 h")
    distribution: str
    table: str | None = None
    ddf: str | None = None
    depths: dict[Period, Depth] = Field(default_factory=dict)
    depth_rasters: dict[Period, str] = Field(default_factory=dict)
    depth_raster_unit: Literal["in", "mm", "cm"] = "in"
    two_year_depth: Depth | None = None
    depth_factor: Annotated[Plain, Field(gt=0, le=10)] = 1.0
    areal_reduction: Literal["none", "leclerc_schaake"] = "none"
    critical_duration: bool = False

    def _two_year(self) -> float | None:
        return next((depth for text, depth in self.depths.items() if float(text) == 2.0), None)

    @property
    def periods(self) -> list[str]:
        """Return periods as written, in rising order."""
        return sorted(self.depths or self.depth_rasters, key=float)

    @property
    def has_two_year_depth(self) -> bool:
        """Whether the 2-year 24-hour depth is given or stands among the depths."""
        return self.two_year_depth is not None or self._two_year() is not None

    @property
    def two_year_depth_mm(self) -> float:
        """The 2-year 24-hour depth [mm]."""
        depth = self.two_year_depth if self.two_year_depth is not None else self._two_year()
        if depth is None:
            raise ValueError("no 2-year depth: the model guarantees one")
        return depth


class Runoff(Section):
    """[runoff]."""

    initial_abstraction_ratio: Annotated[Plain, _one_of(0.2, 0.05)] = 0.2
    moisture: Literal["I", "II", "III"] = "II"
    weighting: Literal["runoff", "curve_number"] = "runoff"


class Timing(Section):
    """[timing]."""

    adopt: str = "velocity"
    minimum: TimeOrNone = _default("6 min")


PEAK_RATE_FACTORS = (100, 600)
"""Peak rate factors that may be given."""


class UnitHydrograph(Section):
    """[unit_hydrograph]."""

    shape: str = "curvilinear"
    peak_rate_factor: Annotated[Plain, Field(ge=PEAK_RATE_FACTORS[0], le=PEAK_RATE_FACTORS[1])] = 484
    time_step: TimeOrAuto = "auto"
    ct: Annotated[Plain, Field(gt=0)] = 2.0
    cp: Annotated[Plain, Field(gt=0)] = 0.6
    storage_ratio: Annotated[Plain, Field(gt=0, lt=1)] = 0.5


class Correlated(Section):
    """Two uncertain inputs that go together, by Spearman's rank correlation."""

    inputs: tuple[str, str]
    rank: Annotated[Plain, Field(gt=-1, lt=1)]


class Uncertainty(Section):
    """[uncertainty]: an input varies where it has a range; every value in it is as likely as any other.

    Parameters
    ----------
    samples, seed : int
        Size and seed of the sample.
    curve_number : (low, high)
        Added to the curve number of every patch.
    roughness : (low, high)
        Shares by which the roughness all along the path differs.
    peak_rate_factor : half-range or (low, high)
        By the gamma unit hydrograph.
    stream_area_factor : (low, high)
        Factors on the area at which channels begin.
    depths : (low, high), or mapping of return period to (low, high)
        Shares by which all storm depths differ, or limits of each [mm]; they move together.
    stage : {"swing", "sample"}
        Whether the stage of the channels, bankfull or half of it, only swings or is in the sample too.
    correlated : list of Correlated
        Inputs that go together in the sample; all others are independent.
    """

    samples: Annotated[int, Field(ge=20, le=100_000, strict=True)] = 500
    seed: Annotated[int, Field(ge=0, strict=True)] = 1
    curve_number: Shift | None = None
    roughness: ShareRange | None = None
    peak_rate_factor: FactorRange | None = None
    stream_area_factor: FactorPair | None = None
    depths: DepthRange | None = None
    stage: Literal["swing", "sample"] = "swing"
    correlated: list[Correlated] = Field(default_factory=list)

    @property
    def sampled(self) -> list[str]:
        """The inputs in the sample, in a fixed order."""
        names = [name for name in UNCERTAIN if name != "stage" and getattr(self, name) is not None]
        return [*names, "stage"] if self.stage == "sample" else names


UNCERTAIN = ("curve_number", "roughness", "peak_rate_factor", "stream_area_factor", "depths", "stage")
"""Inputs that may have a range."""


class Check(Section):
    """[check]."""

    regression: str | None = None


class Audit(Section):
    """[audit]."""

    second_opinion: Literal["all", "sample", "none"] = "none"


class Compute(Section):
    """[compute]."""

    jobs: Annotated[int, Field(ge=1, strict=True)] = 2
    scheduler: str = ""
    memory: MemoryOrAuto = "auto"


_SCENARIO_NAME = re.compile(r"\w([\w .+-]{0,58}\w)?")


def _check_scenario_name(name: str) -> str:
    if not _SCENARIO_NAME.fullmatch(name) or name.lower() == "base":
        fix = "use up to 60 letters, digits, spaces, hyphens and dots, a letter or digit at both ends, and not base"
        raise _reject(f"{name!r} cannot name a folder of results", fix)
    return name


class Scenario(Section):
    """[[scenario]]: the keys of four sections that take the place of the base's.

    The sections are kept as they were written: each is validated as part of the whole project that it makes
    (`Reading.scenarios`).
    """

    name: Annotated[str, AfterValidator(_check_scenario_name)]
    cover: dict[str, Any] | None = None
    soils: dict[str, Any] | None = None
    storm: dict[str, Any] | None = None
    runoff: dict[str, Any] | None = None


SCENARIO_SECTIONS = ("cover", "soils", "storm", "runoff")
"""What a scenario may replace: nothing of terrain, outlets or paths."""


class Project(Section):
    """A whole project file."""

    project: ProjectSection = ProjectSection()
    terrain: Terrain
    outlets: Outlets
    cover: Cover
    soils: Soils
    flow_path: FlowPath = FlowPath()
    channel: Channel = Channel()
    storm: StormSection
    runoff: Runoff = Runoff()
    timing: Timing = Timing()
    unit_hydrograph: UnitHydrograph = UnitHydrograph()
    uncertainty: Uncertainty | None = None
    check: Check | None = None
    scenario: list[Scenario] = Field(default_factory=list)
    audit: Audit = Audit()
    compute: Compute = Compute()

    def resolved(self) -> dict[str, Any]:
        """Return every option with its value, quantities with units: itself the content of a project file."""
        return self.model_dump(mode="json", exclude_none=True)


@dataclass(frozen=True)
class Reading:
    """What could be read of a project file.

    Parameters
    ----------
    project : Project
        Whole where there are no problems. Else it stands in for looking at the inputs: keys that are wrong have their
        defaults, and a section that is missing, or wrong in a key without default, is None.
    problems : list of Problem
        Everything that is wrong in the file itself; the files it names are not opened.
    scenarios : list of Project
        The whole project that each scenario makes, in the order of the file.
    """

    project: Project
    problems: list[Problem]
    scenarios: list[Project] = field(default_factory=list)


def read_project(path: Path) -> Reading:
    """Read and validate a project file.

    Parameters
    ----------
    path : Path
        The TOML file.

    Returns
    -------
    Reading

    Raises
    ------
    InputRejected
        Where there is no such file, or it is no TOML.
    """
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        fix = "check the path, or make one with: basinwright start DIR"
        raise InputRejected.one(str(path), "file", "does not exist", fix) from None
    except (OSError, ValueError) as error:
        fix = "give a readable UTF-8 TOML file"
        raise InputRejected.one(str(path), "file", f"cannot be read ({error})", fix) from None
    try:
        data = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputRejected.one(str(path), "file", f"is not valid TOML ({error})", "mend the line it names") from None
    return read_content(data, path.name)


def parse_project(data: dict[str, Any], file: str = "project") -> Project:
    """Validate the content of a project file.

    Raises
    ------
    InputRejected
        With every problem found in the content itself.
    """
    reading = read_content(data, file)
    if reading.problems:
        raise InputRejected(reading.problems)
    return reading.project


def read_content(data: dict[str, Any], file: str) -> Reading:
    """Validate the content of a project file, keeping what is sound (see `read_project`)."""
    problems: dict[str, Problem] = {}
    try:
        project = Project.model_validate(data)
    except ValidationError as error:
        entries = error.errors()
        for entry in entries:
            problem = _problem(entry, file)
            problems.setdefault(problem.field, problem)
        project = _sound_part(data, entries)
    for key, what, fix in _conflicts(data):
        problems.setdefault(key, Problem(file, key, what, fix))
    base = list(problems.values())
    scenarios = [_read_scenario(data, entry, number, file, base) for number, entry in enumerate(_scenarios(data), 1)]
    found = [problem for scenario in scenarios for problem in scenario.problems]
    return Reading(project, [*base, *found], [scenario.project for scenario in scenarios])


def scenario_field(number: int, field: str) -> str:
    """Return how a key of a scenario, counted from 1, is named in a message."""
    return f"scenario[{number}].{field}"


def _scenarios(data: dict[str, Any]) -> list[dict[str, Any]]:
    """Return the scenarios of a project file as they stand there."""
    found = data.get("scenario")
    return [entry for entry in found if isinstance(entry, dict)] if isinstance(found, list) else []


def _read_scenario(data: dict[str, Any], entry: dict[str, Any], number: int, file: str, base: list[Problem]) -> Reading:
    """Validate the project that a scenario makes; problems of the base are not told again."""
    merged = scenario_content(data, entry)
    reading = read_content(merged, file)
    known = {(problem.field, problem.what) for problem in base}
    sections = tuple(f"{name}." for name in SCENARIO_SECTIONS if name in entry)
    found = [
        replace(problem, field=scenario_field(number, problem.field))
        for problem in reading.problems
        if f"{problem.field}.".startswith(sections) and (problem.field, problem.what) not in known
    ]
    return Reading(reading.project, found)


_SOURCES_OF = {
    "cover": (("raster", "vector"), ("raster", "vector", "field")),
    "soils": (("raster", "vector", "group"), ("raster", "vector", "field", "group")),
    "storm": (("depths", "depth_rasters", "ddf"), ("depths", "depth_rasters")),
}
"""By section: where one of the first keys is given anew, the base's second keys no longer count."""


def scenario_content(data: dict[str, Any], entry: dict[str, Any]) -> dict[str, Any]:
    """Return the content of the project that a scenario makes of the base's.

    A key that the scenario gives takes the place of the base's, and a new source that of every other source of its
    section. ``cover.impervious = "none"`` leaves the base's raster out. The base's 2-year depth stands unless the
    scenario names another: it times the flow, it is no storm.
    """
    merged = {name: section for name, section in data.items() if name != "scenario"}
    for name in SCENARIO_SECTIONS:
        given = entry.get(name)
        if not isinstance(given, dict):
            continue  # the model names it
        before = data.get(name)
        if not isinstance(before, dict):
            merged[name] = given
            continue
        sources, dropped = _SOURCES_OF.get(name, ((), ()))
        replaced = any(key in given for key in sources)
        merged[name] = {key: value for key, value in before.items() if not (replaced and key in dropped)} | given
    cover, storm = merged.get("cover"), merged.get("storm")
    if isinstance(cover, dict) and cover.get("impervious") == "none":
        merged["cover"] = {
            key: value for key, value in cover.items() if key not in ("impervious", "connected_fraction")
        }
    if isinstance(storm, dict) and "two_year_depth" not in storm and (depth := _two_year_text(data)) is not None:
        merged["storm"] = {**storm, "two_year_depth": depth}
    return merged


def _two_year_text(data: dict[str, Any]) -> Any:
    """Return the 2-year depth of the base as it stands among its depths."""
    storm = data.get("storm")
    depths = storm.get("depths") if isinstance(storm, dict) else None
    found = depths.items() if isinstance(depths, dict) else ()
    return next((depth for text, depth in found if _PERIOD.fullmatch(str(text)) and float(text) == 2.0), None)


def _sound_part(data: dict[str, Any], entries: list[ErrorDetails]) -> Project:
    """Return a project without the keys that are wrong; sections that cannot do without them are None."""
    sections: dict[str, Any] = {}
    for name, info in Project.model_fields.items():
        model = _section_of(info.annotation)
        if model is None:
            sections[name] = info.get_default(call_default_factory=True)
            continue
        raw = data.get(name, {})
        wrong = {entry["loc"][1] for entry in entries if entry["loc"][0] == name and len(entry["loc"]) > 1}
        kept = {key: value for key, value in raw.items() if key not in wrong} if isinstance(raw, dict) else {}
        try:
            sections[name] = model.model_validate(kept)
        except ValidationError:
            sections[name] = None
    return Project.model_construct(**sections)


def _conflicts(data: dict[str, Any]) -> Iterator[tuple[str, str, str]]:
    """Yield what is wrong between keys, read off the raw file so that no other problem hides it."""

    def section(name: str) -> dict[str, Any]:
        found = data.get(name)
        return found if isinstance(found, dict) else {}

    for key, dimension, example in (
        ("expected_area", "area", "_mi2 or _km2"),
        ("capacity", "flow", "_cfs or _m3s"),
    ):
        column = section("outlets").get(key)
        if isinstance(column, str) and unit_of_suffix(column, dimension) is None:
            yield (
                f"outlets.{key}",
                f"the column name {column!r} does not end in its unit",
                f"rename it to end in {example}",
            )
    for name, sources in (("cover", ("raster", "vector")), ("soils", ("raster", "vector", "group"))):
        entry = section(name)
        given = [source for source in sources if source in entry]
        if len(given) != 1 and name in data:
            yield (
                f"{name}.raster",
                f"{' and '.join(given) or 'no source'} given",
                f"give one of {', '.join(sources)}",
            )
        if "vector" in entry and "field" not in entry:
            yield f"{name}.field", "missing", "name the column of the vector layer that holds the class"
    if section("cover").get("connected_fraction", 1.0) != 1.0 and "impervious" not in section("cover"):
        yield "cover.connected_fraction", "needs a raster of percent impervious", "give cover.impervious"
    channel = section("channel")
    if channel.get("bankfull_region") == "own":
        for key in ("bankfull_width", "bankfull_depth"):
            if key not in channel:
                yield (
                    f"channel.{key}",
                    'missing, and bankfull_region is "own"',
                    "give { coefficient = ..., exponent = ... }",
                )
    yield from _hydrography_conflicts(section("terrain"), channel)
    shape = section("unit_hydrograph")
    if shape.get("peak_rate_factor", 484) != 484 and shape.get("shape", "curvilinear") != "gamma":
        yield (
            "unit_hydrograph.peak_rate_factor",
            "values other than 484 need another shape",
            'set shape = "gamma"',
        )
    yield from _storm_conflicts(section("storm"))
    yield from _scenario_conflicts(_scenarios(data), section("cover"), section("uncertainty"))
    if "check" in data and not section("check").get("regression"):
        yield "check.regression", "missing", 'name the table of equations, such as "regional.csv"'
    if "uncertainty" in data:
        if section("terrain").get("stream_area") == "mapped" and "stream_area_factor" in section("uncertainty"):
            what, fix = 'has no area to vary: terrain.stream_area is "mapped"', "leave it out"
            yield "uncertainty.stream_area_factor", what, fix
        yield from _uncertainty_conflicts(section("uncertainty"), section("unit_hydrograph"), section("storm"))


def _scenario_conflicts(
    scenarios: list[dict[str, Any]], cover: dict[str, Any], uncertainty: dict[str, Any]
) -> Iterator[tuple[str, str, str]]:
    names: dict[str, int] = {}
    for number, entry in enumerate(scenarios, start=1):
        name = entry.get("name")
        if isinstance(name, str) and (before := names.setdefault(name.lower(), number)) != number:
            what = f"{name!r} is also the name of scenario {before}"
            yield scenario_field(number, "name"), what, "give each its own: they name folders"
        if not any(section for key, section in entry.items() if key != "name"):
            what = "replaces nothing"
            yield scenario_field(number, "cover"), what, f"give one of {', '.join(SCENARIO_SECTIONS)}"
        own = entry.get("cover")
        new_cover = isinstance(own, dict) and ("raster" in own or "vector" in own)
        if isinstance(own, dict) and new_cover and "impervious" in cover and "impervious" not in own:
            yield (
                scenario_field(number, "cover.impervious"),
                "missing, and the base's raster belongs to the base's cover",
                'name the raster that goes with this cover, or "none"',
            )
        limits = isinstance(uncertainty.get("depths"), dict)
        if limits and isinstance(entry.get("storm"), dict) and "depths" in entry["storm"]:
            what = "uncertainty.depths gives limits, and they belong to the base's depths"
            yield scenario_field(number, "storm.depths"), what, 'give uncertainty.depths as a share, such as "10 %"'


def _uncertainty_conflicts(
    given: dict[str, Any], unit: dict[str, Any], storm: dict[str, Any]
) -> Iterator[tuple[str, str, str]]:
    try:
        ranges = Uncertainty.model_validate(given)
    except ValidationError:
        return  # the model names it
    if not ranges.sampled:
        fix = f"give at least one of {', '.join(UNCERTAIN[:-1])}"
        yield "uncertainty", "no input has a range", fix
    if ranges.peak_rate_factor is not None:
        used, shape = unit.get("peak_rate_factor", 484), unit.get("shape", "curvilinear")
        if shape not in ("curvilinear", "gamma"):
            what = f"the {shape} unit hydrograph has no peak rate factor that could vary"
            yield "uncertainty.peak_rate_factor", what, 'leave it out, or set unit_hydrograph.shape = "gamma"'
        elif isinstance(used, int | float):
            low, high = peak_rate_factors(ranges.peak_rate_factor, used)
            if not PEAK_RATE_FACTORS[0] <= low <= used <= high <= PEAK_RATE_FACTORS[1]:
                what = f"{low:g} to {high:g} does not hold {used:g}, the factor in use, or leaves 100 to 600"
                yield "uncertainty.peak_rate_factor", what, "give a range such as [300, 600]"
    for key in ("curve_number", "roughness"):
        ends = getattr(ranges, key)
        if ends is not None and not ends[0] <= 0.0 <= ends[1]:
            what = "the range does not hold the value in use, a difference of 0"
            yield f"uncertainty.{key}", what, "give differences to both sides of it"
    yield from _depth_range_conflicts(ranges, storm)
    yield from _correlation_conflicts(ranges)


def peak_rate_factors(given: float | tuple[float, float], used: float) -> tuple[float, float]:
    """Return the ends of a range of peak rate factors, given as such or as what it reaches to either side."""
    return given if isinstance(given, tuple) else (used - given, used + given)


def _depth_range_conflicts(ranges: Uncertainty, storm: dict[str, Any]) -> Iterator[tuple[str, str, str]]:
    key = "uncertainty.depths"
    if isinstance(ranges.depths, tuple) and not ranges.depths[0] <= 0.0 <= ranges.depths[1]:
        yield key, "the range does not hold the depths in use, a difference of 0", "give shares to both sides"
    if not isinstance(ranges.depths, dict):
        return
    depths = storm.get("depths")
    if not isinstance(depths, dict):
        fix = 'give storm.depths, or a share such as "10 %"'
        yield key, "limits need the depths that they belong to", fix
        return
    if missing := [period for period in depths if period not in ranges.depths]:
        yield key, f"lacks {', '.join(missing)} years", "give limits for every return period of storm.depths"
    for period, (low, high) in ranges.depths.items():
        if period not in depths:
            yield f"{key}.{period}", "is no return period of storm.depths", f"use {', '.join(depths)}"
            continue
        try:
            used = parse_quantity(depths[period], "depth")
        except QuantityError:
            continue  # the model names it
        if not low <= used <= high:
            yield f"{key}.{period}", f"the limits do not hold the depth in use, {depths[period]}", "check both"
    limits = sorted((float(period), *ends) for period, ends in ranges.depths.items() if period in depths)
    for (_, *common), (years, *rarer) in itertools.pairwise(limits):
        if rarer[0] < common[0] or rarer[1] < common[1]:
            what = "a limit is below that of a shorter return period"
            yield f"{key}.{years:g}", what, "let both limits rise with the return period"


def _correlation_conflicts(ranges: Uncertainty) -> Iterator[tuple[str, str, str]]:
    declared, pairs = ranges.sampled, set[frozenset[str]]()
    for i, entry in enumerate(ranges.correlated):
        field, pair = f"uncertainty.correlated.{i}.inputs", frozenset(entry.inputs)
        for name in entry.inputs:
            if name not in declared:
                near = difflib.get_close_matches(name, declared, n=1)
                fix = f"did you mean {near[0]!r}?" if near else f"give {name!r} a range, or leave the pair out"
                yield field, f"{name!r} is not declared: it has no range in the sample", fix
        if len(pair) < 2 or pair in pairs:
            yield field, "an input with itself, or a pair that stands more than once", "name each pair once"
        pairs.add(pair)
    if pairs and all(len(pair) == 2 and pair <= set(declared) for pair in pairs):
        try:
            score_correlation(len(declared), rank_correlation(ranges))
        except RangeError as error:
            yield "uncertainty.correlated", str(error), "bring the ranks closer to 0"


def rank_correlation(ranges: Uncertainty) -> dict[tuple[int, int], float]:
    """Return the rank correlations by the places of the two inputs in the sample."""
    places = {name: i for i, name in enumerate(ranges.sampled)}
    return {(places[entry.inputs[0]], places[entry.inputs[1]]): entry.rank for entry in ranges.correlated}


def _hydrography_conflicts(terrain: dict[str, Any], channel: dict[str, Any]) -> Iterator[tuple[str, str, str]]:
    roughness = channel.get("roughness")
    by_column = isinstance(roughness, str) and roughness != "jarrett"
    if by_column and "stream_lines" not in terrain:
        what = f"{roughness!r} is taken for a column of terrain.stream_lines, which is missing"
        yield "channel.roughness", what, 'give terrain.stream_lines, or Manning\'s n as a number, or "jarrett"'
    by_map = terrain.get("stream_area") == "mapped"
    if by_map and "stream_lines" not in terrain:
        yield "terrain.stream_area", 'is "mapped", and terrain.stream_lines is missing', "give terrain.stream_lines"
    if "flow_direction_codes" in terrain and "flow_direction" not in terrain:
        yield "terrain.flow_direction_codes", "given without flow_direction", "name the raster of directions"
    if "flow_direction" not in terrain:
        return
    if "flow_direction_codes" not in terrain:
        fix = 'say what each code means, such as { 1 = 0, 2 = 45, 0 = "exit" }'
        yield "terrain.flow_direction_codes", "missing, and flow_direction is given", fix
    for key in ("barriers", "sinks", *(() if by_column or by_map else ("stream_lines",))):
        if key in terrain:
            yield f"terrain.{key}", "given beside flow_direction, which it cannot change", "leave one of the two out"


def _storm_conflicts(storm: dict[str, Any]) -> Iterator[tuple[str, str, str]]:
    depths: dict[str, Any] = storm["depths"] if isinstance(storm.get("depths"), dict) else {}
    if not depths and not storm.get("depth_rasters") and "ddf" not in storm:
        yield (
            "storm.depths",
            "missing or empty",
            'give the depth of each return period, such as { "10" = "4.6 in" }',
        )
    if storm.get("distribution") == "table" and "table" not in storm:
        yield "storm.table", 'missing, and distribution is "table"', "name the CSV of hour and fraction"
    years: dict[str, float] = {}
    rasters = storm["depth_rasters"] if isinstance(storm.get("depth_rasters"), dict) else {}
    for texts in (depths, rasters):
        for text in texts:
            years[text] = float(text) if _PERIOD.fullmatch(text) else math.nan  # the model names it
    rising: list[tuple[float, float, str]] = []
    for text, quantity in depths.items():
        try:
            rising.append((years[text], parse_quantity(quantity, "depth"), text))
        except QuantityError:
            continue  # the model names it
    rising = sorted(entry for entry in rising if not math.isnan(entry[0]))
    for (before, shallow, a), (after, deep, b) in itertools.pairwise(rising):
        if before == after:
            yield f"storm.depths.{b}", f'the same return period as "{a}"', "keep one of them"
        elif not deep > shallow:
            yield (
                f"storm.depths.{b}",
                f"not over the depth of the {a}-year storm",
                "depths must rise with the return period",
            )
    if depths and storm.get("depth_rasters"):
        yield "storm.depth_rasters", "given beside depths", "give one of the two"
    built = storm.get("distribution") in ("balanced", "nested")
    if built and "ddf" not in storm:
        yield (
            "storm.ddf",
            f"missing, and distribution is {storm['distribution']!r}",
            "name the table of depths by duration",
        )
    if storm.get("critical_duration") is True and not built:
        what = "needs a storm that can be built for any duration"
        yield "storm.critical_duration", what, 'set distribution = "balanced" or "nested"'
    if storm.get("critical_duration") is True and storm.get("depth_rasters"):
        yield "storm.critical_duration", "given beside rasters of one duration", "leave depths to storm.ddf"
    try:
        day_long = parse_quantity(storm.get("duration", "24 h"), "time") == 24.0
    except QuantityError:
        day_long = True  # the model names it
    from_depths = day_long and bool(depths) and 2.0 in years.values()
    if "two_year_depth" not in storm and "ddf" not in storm and not from_depths:
        yield "storm.two_year_depth", "missing", "sheet flow needs the 2-year 24-hour depth: give it"


_TYPE_PARTS = {"[key]", "float", "str", "int", "constrained-str", "constrained-float"}


def _problem(entry: ErrorDetails, file: str) -> Problem:
    """Turn one validation error into a line that says which key, what is wrong and how to mend it."""
    place = [part for part in entry["loc"] if part not in _TYPE_PARTS and not str(part).startswith("function-")]
    field = ".".join(str(part) for part in place) or "project"
    if place[:1] == ["scenario"] and len(place) > 2:
        field = scenario_field(int(place[1]) + 1, ".".join(map(str, place[2:])))
    kind, context = entry["type"], entry.get("ctx", {})
    if kind == "extra_forbidden" and place[:1] == ["scenario"] and len(place) == 3:
        fix = f"give it a project file of its own; a scenario replaces {', '.join(SCENARIO_SECTIONS)}"
        if place[2] in Project.model_fields:
            return Problem(file, field, "a scenario cannot change this: that is another project", fix)
        near = difflib.get_close_matches(str(place[2]), Scenario.model_fields, n=1, cutoff=0.5)
        return Problem(file, field, "unknown key", f"did you mean {near[0]!r}?" if near else fix)
    if kind == "extra_forbidden":
        known = _keys_at(place[:-1])
        near = difflib.get_close_matches(str(place[-1]), known, n=1, cutoff=0.5)
        return Problem(
            file,
            field,
            "unknown key",
            f"did you mean {near[0]!r}?" if near else f"known here: {', '.join(known)}",
        )
    if kind == "missing":
        return Problem(file, field, "missing", "add it: it has no default")
    if kind == "literal_error":
        return Problem(file, field, f"{entry['input']!r} is not one of its values", f"use {context['expected']}")
    if kind == "rejected":
        return Problem(file, field, context["what"], context["fix"])
    return Problem(file, field, f"{entry['input']!r} is not valid", entry["msg"].replace("Input should", "it should"))


def _keys_at(place: list[Any]) -> list[str]:
    """List the known keys of the table at a place in the file."""
    model: type[BaseModel] = Project
    for part in place:
        if part not in model.model_fields:
            return []
        inner = _section_of(model.model_fields[part].annotation)
        if inner is None:
            return []
        model = inner
    return list(model.model_fields)


def _section_of(annotation: Any) -> type[BaseModel] | None:
    if typing.get_origin(annotation) in (Union, types.UnionType):
        return next((found for arg in typing.get_args(annotation) if (found := _section_of(arg))), None)
    return annotation if isinstance(annotation, type) and issubclass(annotation, BaseModel) else None
