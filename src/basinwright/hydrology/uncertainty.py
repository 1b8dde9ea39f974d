"""The tables of how sure the results are: one input at a time, and a sample over all."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.confidence import band, crossing_years, latin_hypercube
from basinwright.hydrology.frames import Columns, columns_of
from basinwright.hydrology.variation import Draws, Response
from basinwright.project import Project, Uncertainty, peak_rate_factors, rank_correlation
from basinwright.tables import OUTLETS, SWINGS, UNCERTAINTY

if TYPE_CHECKING:
    from numpy.typing import NDArray

_ROWS_AT_ONCE = 16_384
"""Rows of a sample computed together: it bounds the memory and changes no bit."""

APPLIED = {
    "curve_number": "added to the curve number of every patch",
    "roughness": "factor on the roughness all along the path",
    "peak_rate_factor": "peak rate factor of the gamma unit hydrograph",
    "stream_area_factor": "factor on the area at which channels begin",
    "depths": "factor on the storm depth",
    "stage": "depth over the bankfull depth",
}
"""How the ends of a range are applied, by input."""


@dataclass(frozen=True)
class Sample:
    """Bands of the outlets of a run.

    Parameters
    ----------
    tc_h : array, shape (n, 3)
        5, 50 and 95 % [h].
    peak_m3s : array, shape (n, T, 3)
        5, 50 and 95 % [m3/s].
    crossing_yr : array, shape (n, 3)
        Return period that reaches the capacity, 5, 50 and 95 %; infinite beyond the tested ones [yr].
    exceeded_pct : array, shape (n, T)
        Share of the sample whose peak is over the capacity [%].
    """

    tc_h: NDArray[np.float64]
    peak_m3s: NDArray[np.float64]
    crossing_yr: NDArray[np.float64]
    exceeded_pct: NDArray[np.float64]


def draws(response: Response, outlet: NDArray[np.int64], shares: Mapping[str, NDArray[np.float64]]) -> Draws:
    """Turn shares of the inputs' ranges, 0 the lower end and 1 the upper, into their values.

    Parameters
    ----------
    response : Response
    outlet : int array, shape (rows,)
    shares : mapping of str to array, shape (rows,)
        By input; the others do not vary. Of the three channel starts and of the two stages each is as likely.
    """
    project = response.settings.project
    ranges = ranges_of(project)
    values: dict[str, Any] = {}
    for name, share in shares.items():
        if name in ("curve_number", "roughness", "peak_rate_factor"):
            low, high = ends(name, project)
            values[name] = low + (high - low) * share
        elif name == "stream_area_factor":
            values["start"] = np.minimum((share * 3.0).astype(np.int64), 2)
        elif name == "stage":
            values["half"] = share < 0.5
        else:
            limits = np.array([ends(name, project, period) for period in project.storm.periods])
            values["depth"] = limits[:, 0] + (limits[:, 1] - limits[:, 0]) * share[:, None]
    if ranges.peak_rate_factor is not None and "peak_rate_factor" in values:
        values["peak_rate_factor"] = np.round(values["peak_rate_factor"])  # whole ones: few different shapes
    return replace(response.base(outlet), **values)


def ranges_of(project: Project) -> Uncertainty:
    """Return the section of a project that has one."""
    if project.uncertainty is None:
        raise ValueError("the project declares no ranges")
    return project.uncertainty


def ends(name: str, project: Project, period: str = "") -> tuple[float, float]:
    """Return the ends of an input's range as they are applied, see `APPLIED`."""
    ranges = ranges_of(project)
    if name == "stage":
        return 0.5, 1.0
    given = getattr(ranges, name)
    if name == "peak_rate_factor":
        return peak_rate_factors(given, project.unit_hydrograph.peak_rate_factor)
    if name == "depths" and isinstance(given, dict):
        depth_mm = project.storm.depths[period]
        return given[period][0] / depth_mm, given[period][1] / depth_mm
    if name in ("roughness", "depths"):
        return 1.0 + given[0], 1.0 + given[1]
    return float(given[0]), float(given[1])


def swings(response: Response, ids: Sequence[str], live: NDArray[np.int64], recut: NDArray[np.bool_]) -> Columns:
    """Return swings.csv: each input at both ends of its range, ranked by effect.

    Parameters
    ----------
    response : Response
    ids : sequence of str
        Of the outlets.
    live : int array
        The outlets with a time of concentration.
    recut : bool array, shape (n,)
        Whether a path cut at other stream areas is known.
    """
    project = response.settings.project
    sampled = ranges_of(project).sampled
    names = sampled if "stage" in sampled else [*sampled, "stage"]
    periods = project.storm.periods
    shape = (len(names), live.size, len(periods))
    tc, peak = np.full((2, *shape[:2]), np.nan), np.full((2, *shape), np.nan)
    for i, name in enumerate(names):
        varied = np.flatnonzero(recut[live]) if name == "stream_area_factor" else np.arange(live.size)
        for side in (0, 1):
            share = np.full(varied.size, float(side))
            if varied.size:
                tc[side, i, varied], peak[side, i, varied] = response(draws(response, live[varied], {name: share}))
    rows: dict[str, list[Any]] = {column.stem: [] for column in SWINGS.columns}
    tc_rank = _ranks(np.abs(tc[1] - tc[0]))
    peak_rank = _ranks(np.abs(peak[1] - peak[0]))
    for k, outlet in enumerate(live.tolist()):
        for t, period in enumerate(periods):
            for i in np.argsort(peak_rank[:, k, t], kind="stable").tolist():
                if np.isnan(tc[0, i, k]):
                    continue
                low, high = ends(names[i], project, period)
                entry = (
                    ids[outlet], float(period), names[i], low, high, APPLIED[names[i]], tc[0, i, k], tc[1, i, k],
                    peak[0, i, k, t], peak[1, i, k, t], int(peak_rank[i, k, t]), int(tc_rank[i, k]),
                    names[i] in sampled,
                )  # fmt: skip
                for column, value in zip(rows.values(), entry, strict=True):
                    column.append(value)
    values: dict[str, Any] = {**rows, "sampled": np.array(rows["sampled"], dtype=bool)}
    return columns_of(SWINGS, project, values)


def _ranks(effect: NDArray[np.float64]) -> NDArray[np.int64]:
    """Rank along the first axis, 1 the largest; what is unknown comes last."""
    order = np.argsort(-np.nan_to_num(effect, nan=-1.0), axis=0, kind="stable")
    return np.argsort(order, axis=0, kind="stable") + 1


def sample(
    response: Response, ids: Sequence[str], live: NDArray[np.int64], capacity_m3s: NDArray[np.float64] | None = None
) -> Sample:
    """Sample the uncertain inputs of each outlet and return the bands of its time, its peaks and its capacity's year.

    Parameters
    ----------
    response : Response
    ids : sequence of str
        Of the outlets: with the seed they decide the sample, so that no outlet depends on another.
    live : int array
        The outlets with a time of concentration; the others' bands are NaN.
    capacity_m3s : array, shape (n,), optional
        NaN where there is none [m3/s].
    """
    project = response.settings.project
    section, periods = ranges_of(project), project.storm.periods
    names, count, years = section.sampled, len(ids), np.array([float(period) for period in periods])
    correlation = rank_correlation(section)
    capacity = np.full(count, np.nan) if capacity_m3s is None else capacity_m3s
    bands = Sample(
        np.full((count, 3), np.nan),
        np.full((count, years.size, 3), np.nan),
        np.full((count, 3), np.nan),
        np.full((count, years.size), np.nan),
    )
    at_once = max(1, _ROWS_AT_ONCE // section.samples)
    for first in range(0, live.size, at_once):
        some = live[first : first + at_once]
        share = np.concatenate(
            [latin_hypercube(section.seed, ids[i], section.samples, len(names), correlation) for i in some.tolist()]
        )
        outlet = np.repeat(some, section.samples)
        tc, peak = response(draws(response, outlet, dict(zip(names, share.T, strict=True))))
        peak = peak.reshape(some.size, section.samples, years.size)
        bands.tc_h[some] = band(tc.reshape(some.size, section.samples))
        bands.peak_m3s[some] = band(np.moveaxis(peak, 1, 2))
        rated = ~np.isnan(capacity[some])
        if rated.any():
            limit = np.broadcast_to(capacity[some][rated, None], (int(rated.sum()), section.samples))
            bands.crossing_yr[some[rated]] = _middle_of_slices(crossing_years(limit, peak[rated], years))
            bands.exceeded_pct[some[rated]] = (peak[rated] > limit[:, :, None]).sum(axis=1) * 100.0 / section.samples
    return bands


def _middle_of_slices(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the band of values that may be infinite: between two that are not both finite, the lower."""
    with np.errstate(invalid="ignore"):
        between = band(values)
    ordered = np.sort(values, axis=-1)
    count = values.shape[-1]
    at = np.clip(np.floor(np.array([0.05, 0.50, 0.95]) * count - 0.5), 0, count - 1).astype(np.int64)
    return np.where(np.isnan(between), ordered[..., at], between)


def uncertainty(bands: Sample, ids: Sequence[str], live: NDArray[np.int64], project: Project) -> Columns:
    """Return uncertainty.csv."""
    peak = next(entry for entry in OUTLETS.fields(project.project.units, ["T"]) if entry.stem == "peak_Tyr")
    suffix = peak.name.rpartition("_")[2]
    quantities = ["tc_h", *[f"peak_{suffix}"] * len(project.storm.periods)]
    years = [np.nan, *(float(period) for period in project.storm.periods)]
    values = np.concatenate((bands.tc_h[live, None], bands.peak_m3s[live] / peak.factor), axis=1)
    columns: dict[str, Any] = {
        "outlet_id": np.repeat(np.array(ids, dtype=object)[live], len(years)),
        "quantity": np.tile(np.array(quantities, dtype=object), live.size),
        "return_period_yr": np.tile(years, live.size),
        **{name: values[:, :, i].ravel() for i, name in enumerate(("p05", "p50", "p95"))},
    }
    return columns_of(UNCERTAINTY, project, columns)
