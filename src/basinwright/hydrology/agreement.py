"""The tables that set the results against a region's equations and against capacities."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.confidence import (
    Equation,
    Parameter,
    crossing_years,
    first_exceeded,
    regional_band,
    regional_estimate,
)
from basinwright.hydrology.doubts import Doubts
from basinwright.hydrology.frames import Columns, Frame, columns_of
from basinwright.hydrology.uncertainty import Sample
from basinwright.project import Project
from basinwright.tables import CAPACITY, REGIONAL

if TYPE_CHECKING:
    from numpy.typing import NDArray

BASE = "base"
"""What the project itself is called among its scenarios."""


def regional(
    equations: Sequence[Equation],
    known: Mapping[str, NDArray[np.float64]],
    ids: Sequence[str],
    peak_m3s: NDArray[np.float64],
    flags: Doubts,
    project: Project,
) -> Columns:
    """Return regional.csv, and raise REGRESSION_DIFFERS where a peak lies outside the band of its equation.

    Parameters
    ----------
    equations : sequence of Equation
    known : mapping of str to array, shape (n,)
        Columns of outlets.csv by stem, in the units used inside.
    ids : sequence of str
    peak_m3s : array, shape (n, T)
        NaN where an outlet was not computed [m3/s].
    flags : Doubts
    project : Project
    """
    periods = project.storm.periods
    rows: dict[str, list[Any]] = {column.stem: [] for column in REGIONAL.columns}
    outside: dict[int, list[str]] = {}
    open_ended = flags.raised("EDGE_TOUCH")
    for i, outlet_id in enumerate(ids):
        for equation in equations:
            peak = float(peak_m3s[i, periods.index(equation.period)])
            if np.isnan(peak):
                continue
            values = {entry: float(known[entry.stem][i]) / entry.factor for entry in equation.exponents}
            reason = _not_applicable(equation, values)
            if open_ended[i]:
                reason = "; ".join(filter(None, ["the basin goes on beyond the terrain", reason]))
            usable = all(value > 0 for value in values.values())
            estimate = low = high = np.nan
            if usable:
                exponents = {entry.name: exponent for entry, exponent in equation.exponents.items()}
                given = {entry.name: value for entry, value in values.items()}
                estimate = float(regional_estimate(equation.constant, exponents, given)) * equation.unit_m3s
                low, high = map(float, regional_band(estimate, equation.standard_error_log10))
            entry_row = (
                outlet_id, float(equation.period), peak, estimate, low, high, peak / estimate, not reason, reason,
                equation.source,
            )  # fmt: skip
            for column, value in zip(rows.values(), entry_row, strict=True):
                column.append(value)
            if not reason and not low <= peak <= high:
                outside.setdefault(i, []).append(f"{equation.period} years {peak / estimate:.2g} x")
    for i, told in outside.items():
        flags.add(i, "REGRESSION_DIFFERS", f"peak over the regional one: {', '.join(told)}")
    values_of: dict[str, Any] = {**rows, "applicable": np.array(rows["applicable"], dtype=bool)}
    return columns_of(REGIONAL, project, values_of)


def _not_applicable(equation: Equation, values: Mapping[Parameter, float]) -> str:
    """Say why an equation does not hold for these parameters; empty where it does."""
    reasons = []
    for entry, value in values.items():
        low, high = equation.bounds[entry]
        if not value > 0:
            reasons.append(f"{entry.name} is {'missing' if np.isnan(value) else f'{value:g}'}: it has no power")
        elif not low <= value <= high:
            reasons.append(f"{entry.name} {value:.3g} outside {_between(low, high)}")
    return "; ".join(reasons)


def _between(low: float, high: float) -> str:
    return f"{low:g} and over" if np.isinf(high) else f"up to {high:g}" if np.isinf(low) else f"{low:g} to {high:g}"


def flag_falling(peak_m3s: NDArray[np.float64], flags: Doubts, periods: Sequence[str]) -> None:
    """Raise PEAKS_FALL where a rarer storm gives a smaller peak."""
    falls = np.diff(peak_m3s, axis=1) < 0
    for i in np.flatnonzero(falls.any(axis=1)).tolist():
        t = int(falls[i].argmax())
        flags.add(i, "PEAKS_FALL", f"from {periods[t]} to {periods[t + 1]} years")


def capacity(
    scenario: str, every: Frame, live: Sequence[str], peak_m3s: NDArray[np.float64], bands: Sample | None, flags: Doubts
) -> Columns:
    """Return capacity.csv of one scenario: the crossings with a capacity, the first to fail on top.

    Parameters
    ----------
    scenario : str
        `BASE`, or the scenario's name.
    every : Frame
        outlets.csv with its capacities.
    live : sequence of str
        Ids of the n outlets that the terrain half could serve.
    peak_m3s : array, shape (n, T)
        NaN where an outlet was not computed [m3/s].
    bands : Sample or None
        Of the same n outlets, where the project declares uncertain inputs.
    flags : Doubts
        An outlet at the terrain's edge, or whose peaks fall, gets no verdict.
    """
    periods = every.project.storm.periods
    ids, names = every.text("outlet_id").tolist(), every.text("name").tolist()
    basis = every.text("capacity_basis").tolist() if every.has("capacity_basis") else [""] * len(ids)
    limits = dict(zip(ids, every.number("capacity").tolist(), strict=True))
    place, unknown = {outlet_id: k for k, outlet_id in enumerate(live)}, _unknown(flags, peak_m3s)
    crossings = [
        _Crossing(
            outlet_id,
            name,
            told,
            limits[outlet_id],
            unknown[place[outlet_id]] if outlet_id in place else _FAILED,
            peak_m3s[place[outlet_id]] if outlet_id in place else np.full(len(periods), np.nan),
            place.get(outlet_id, -1),
            periods,
        )
        for outlet_id, name, told in zip(ids, names, basis, strict=True)
        if limits[outlet_id] == limits[outlet_id]
    ]
    crossings.sort(key=_Crossing.order)
    judged = sum(not crossing.unknown for crossing in crossings)
    rows = [
        {"scenario": scenario, "rank": rank if rank <= judged else None, **crossing.cells(bands)}
        for rank, crossing in enumerate(crossings, start=1)
    ]
    stems = [entry.stem for entry in CAPACITY.fields("si", periods)]
    numbers = {"capacity"} | {stem for stem in stems if stem.endswith("_pct") or stem.startswith("peak_over")}
    columns: dict[str, Any] = {stem: [row[stem] for row in rows] for stem in stems}
    columns |= {stem: np.array(columns[stem], dtype=np.float64) for stem in numbers}
    return columns_of(CAPACITY, every.project, columns)


_FAILED = "not computed"


def _unknown(flags: Doubts, peak_m3s: NDArray[np.float64]) -> list[str]:
    """Say for each outlet why it gets no verdict; empty where it gets one."""
    reasons: dict[str, NDArray[np.bool_]] = {
        _FAILED: np.asarray(np.isnan(peak_m3s).any(axis=1)),
        "the basin reaches the terrain's edge or a void": flags.raised("EDGE_TOUCH"),
        "peaks fall with the return period": flags.raised("PEAKS_FALL"),
    }
    return [next((why for why, holds in reasons.items() if holds[i]), "") for i in range(len(peak_m3s))]


@dataclass(frozen=True)
class _Crossing:
    """One crossing with its capacity [m3/s] and its peaks [m3/s]; ``place`` is its row in the sample."""

    outlet_id: str
    name: str
    basis: str
    capacity_m3s: float
    unknown: str
    peak_m3s: NDArray[np.float64]
    place: int
    periods: Sequence[str]

    @property
    def years(self) -> float:
        """The return period that reaches the capacity, infinite beyond the tested ones; NaN without a verdict."""
        if self.unknown:
            return np.nan
        return float(crossing_years(self.capacity_m3s, self.peak_m3s, [float(period) for period in self.periods]))

    def order(self) -> tuple[bool, float, float]:
        """Return what sorts the first to fail to the top; beyond the tested periods the most overloaded leads."""
        load = -float(self.peak_m3s[-1]) / self.capacity_m3s
        return bool(self.unknown), 0.0 if self.unknown else self.years, 0.0 if np.isnan(load) else load

    def cells(self, bands: Sample | None) -> dict[str, Any]:
        """Return its cells by stem, without scenario and rank."""
        periods, known = self.periods, not self.unknown
        first = int(first_exceeded(self.capacity_m3s, self.peak_m3s)) if known else 0
        ends = bands.crossing_yr[self.place, [0, 2]] if bands is not None and known else np.full(2, np.nan)
        cells: dict[str, Any] = {
            "outlet_id": self.outlet_id,
            "name": self.name,
            "verdict": _verdict(first, periods) if known else f"unknown: {self.unknown}",
            "exceeded_at_yr": [*periods, ""][first] if known else "unknown",
            "exceeded_at_interp_yr": _finite(self.years),
            "exceeded_at_p05_yr": _finite(ends[0]),
            "exceeded_at_p95_yr": _finite(ends[1]),
            "band": "" if np.isnan(ends).any() else _band(ends[0], ends[1], periods),
            "capacity": self.capacity_m3s,
            "capacity_basis": self.basis,
        }
        for t, period in enumerate(periods):
            cells[f"peak_over_capacity_{period}yr"] = self.peak_m3s[t] / self.capacity_m3s if known else np.nan
            cells[f"exceeded_{period}yr_pct"] = (
                bands.exceeded_pct[self.place, t] if bands is not None and known else np.nan
            )
        return cells


def _verdict(first: int, periods: Sequence[str]) -> str:
    if first == 0:
        return f"exceeded at {periods[0]} years already"
    if first == len(periods):
        return f"not exceeded at {periods[-1]} years"
    return f"exceeded between {periods[first - 1]} and {periods[first]} years"


def _finite(years: float) -> float:
    return float(years) if np.isfinite(years) else np.nan


def _band(low: float, high: float, periods: Sequence[str]) -> str:
    """Return a band of years in words, infinite ends as beyond the tested periods."""
    if np.isinf(low) and low == high:
        return f"{_years(low, periods)} years"
    return f"{_years(low, periods)} to {_years(high, periods)} years"


def _years(years: float, periods: Sequence[str]) -> str:
    if np.isfinite(years):
        return f"{years:.2g}" if years < 10 else f"{years:.0f}"
    return f"over {periods[-1]}" if years > 0 else f"under {periods[0]}"


def capacities_table(of_scenarios: Sequence[Columns]) -> Columns:
    """Put the capacities of the base and of its scenarios into one table, one after another."""
    return {name: [value for columns in of_scenarios for value in columns[name]] for name in of_scenarios[0]}
