"""What the screen says at the end of a run."""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

from basinwright.flags import FLAGS, SEVERITIES, Flag
from basinwright.hydrology import Columns
from basinwright.numbers import three_figures
from basinwright.project import Project
from basinwright.tables import OUTLETS

_MOST_ROWS = 30
_STEMS = ("area", "path_length", "curve_number", "tc_h")
_STYLE = {"serious": "bold red", "warning": "yellow", "note": "dim"}


@dataclass(frozen=True)
class Outcome:
    """What a finished command tells its caller.

    Parameters
    ----------
    folder : Path
        The run's folder.
    project : Project
        The resolved project.
    outlets : columns
        outlets.csv as written.
    flags : list of Flag
        All flags.
    scenarios : dict of str to columns
        outlets.csv of each scenario, by name.

    Examples
    --------
    >>> from basinwright.project import Project
    >>> columns = {"outlet_id": ["A", "B"], "status": ["ok", "failed"]}
    >>> Outcome(Path("out"), Project.model_construct(), columns, []).failed
    1
    """

    folder: Path
    project: Project
    outlets: Columns
    flags: list[Flag]
    scenarios: dict[str, Columns] = field(default_factory=dict)

    @property
    def failed(self) -> int:
        """Number of outlets that could not be computed, in the base and in every scenario."""
        every = (self.outlets, *self.scenarios.values())
        return sum(status == "failed" for outlets in every for status in outlets["status"])


def show(outcome: Outcome) -> None:
    """Print the outlet table, the flags by kind, and where the outputs lie."""
    from rich import box
    from rich.console import Console
    from rich.markup import escape
    from rich.table import Table

    console = Console(width=None if Console().is_terminal else 150)
    system, columns = outcome.project.project.units, outcome.outlets
    stems = [(OUTLETS.column(stem).name(system), stem) for stem in _STEMS]
    peak = OUTLETS.column("peak_{T}yr")
    names = [name for name, _ in stems] + [peak.name(system, period) for period in outcome.project.storm.periods]
    if "exceeded_at_yr" in columns:
        names.append("exceeded_at_yr")
    ids = list(columns["outlet_id"])
    grid = Table(box=box.SIMPLE_HEAD, title=escape(outcome.project.project.name), title_justify="left")
    grid.add_column("outlet_id")
    for name in names:
        grid.add_column(name.replace("_", " "), justify="right")
    for i, outlet_id in enumerate(ids[:_MOST_ROWS]):
        grid.add_row(escape(str(outlet_id)), *(_cell(name, columns[name][i]) for name in names))
    console.print(grid)
    if len(ids) > _MOST_ROWS:
        console.print(f"... and {len(ids) - _MOST_ROWS} more outlets in outlets.csv")
    for severity in reversed(SEVERITIES):
        for key, kind in FLAGS.items():
            flagged = [flag.outlet_id for flag in outcome.flags if flag.key == key]
            if kind.severity == severity and flagged:
                console.print(f"[{_STYLE[severity]}]{severity}[/] {key} ({escape(_some(flagged))}): {kind.trigger}")
                if severity != "note":
                    console.print(f"    {kind.remedy}", style="dim", highlight=False)
    for name, outlets in outcome.scenarios.items():
        console.print(f"scenario {escape(name)}: {_against(columns, outlets, names[len(_STEMS) :])}", highlight=False)
        pairs = zip(ids, columns["status"], outlets["status"], strict=True)
        lost = [str(outlet_id) for outlet_id, before, after in pairs if after == "failed" and before != "failed"]
        if lost:
            where = f"scenarios/{name}/flags.csv says why"
            console.print(f"    not computed: {escape(_some(lost))} ({escape(where)})", style="red", highlight=False)
    status: Counter[str] = Counter(columns["status"])
    console.print(
        f"\n{len(ids)} outlets: {status['ok']} ok, {status['flagged']} flagged, {status['failed']} failed.\n"
        f"The run is in {escape(str(outcome.folder))}",
        highlight=False,
    )
    console.print(
        "These results support, and do not replace, the judgement of a licensed engineer and local drainage criteria.",
        style="dim",
    )


def _against(base: Columns, scenario: Columns, names: list[str]) -> str:
    """Say how the peaks of a scenario differ from the base's, from the least to the most, by return period."""
    told = []
    for name in names:
        if not name.startswith("peak_"):
            continue
        pairs = [(_number(a), _number(b)) for a, b in zip(base[name], scenario[name], strict=True)]
        changes = sorted(100.0 * (after / before - 1.0) for before, after in pairs if before > 0 and after >= 0)
        if changes:
            told.append(f"{name.split('_')[1]} {changes[0]:+.0f} to {changes[-1]:+.0f} %")
    return f"peaks {', '.join(told)}" if told else "no peak to compare"


def _number(value: object) -> float:
    return math.nan if value is None or value == "" else float(str(value))


def _some(names: list[str]) -> str:
    return ", ".join(names[:8]) + (f" and {len(names) - 8} more" if len(names) > 8 else "")


def _cell(name: str, value: object) -> str:
    """Return a cell of the screen's table: a return period as it was written, other numbers by three figures."""
    return str(value or "") if name == "exceeded_at_yr" else _figure(value)


def _figure(value: object) -> str:
    """Return a number with three significant figures, anything else as it stands, nothing where it is missing."""
    if value is None or value == "":
        return ""
    try:
        number = float(str(value))
    except ValueError:
        return str(value)
    return "" if math.isnan(number) else three_figures(number)
