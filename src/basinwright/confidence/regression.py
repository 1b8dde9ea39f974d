"""Regional regression equations of a user: what gauged basins of a region say of an ungauged one."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import InputRejected, Problem
from basinwright.numbers import Floats, not_negative, positive
from basinwright.tables import OUTLETS
from basinwright.units import SHOWN, System, unit_of_suffix

NORMAL_95 = 1.645
"""Standard errors from the middle of a normal distribution to 5 and 95 %: a band of 90 %."""

_PERIOD, _SOURCE = "return_period_yr", "source"
_CONSTANTS = ("constant_cfs", "constant_m3s")
_ERRORS = ("standard_error_log10", "standard_error_pct")
_BOUNDS = {"_low": 0, "_high": 1}


def standard_error_log10(standard_error_pct: ArrayLike) -> Floats:
    """Standard error in log10 units from one in percent: the inverse of `standard_error_pct`.

    Parameters
    ----------
    standard_error_pct : float or array
        Standard error [%].

    Returns
    -------
    float or array
        Standard error of the common logarithm [-].

    Raises
    ------
    RangeError
        Where it is negative or not finite.

    Examples
    --------
    >>> round(float(standard_error_log10(48.6)), 3)
    0.2
    """
    share = not_negative("standard_error_pct", standard_error_pct) / 100.0
    return np.sqrt(np.log1p(share**2)) / math.log(10.0)


def standard_error_pct(standard_error_log10: ArrayLike) -> Floats:
    """Standard error in percent from one in log10 units.

    Parameters
    ----------
    standard_error_log10 : float or array
        Standard error of the common logarithm [-].

    Returns
    -------
    float or array
        Standard error [%].

    Raises
    ------
    RangeError
        Where it is negative or not finite.

    Notes
    -----
    ``SE% = 100 sqrt(exp(5.302 SE^2) - 1)``, as the U.S. Geological Survey's reports on flood frequency print it (G. D.
    Tasker, Relation between standard errors in log units and standard errors in percent, WRD Bulletin, 1978; from
    memory). 5.302 is the square of the natural logarithm of 10, used here in full: the coefficient of variation of a
    lognormal variable. Reports that print a pair such as -35 and +54 percent use another form, 100 (10^SE - 1).

    Examples
    --------
    >>> round(float(standard_error_pct(0.2)), 1)
    48.6
    """
    error = not_negative("standard_error_log10", standard_error_log10) * math.log(10.0)
    return 100.0 * np.sqrt(np.expm1(error**2))


def regional_estimate(constant: float, exponents: Mapping[str, float], parameters: Mapping[str, ArrayLike]) -> Floats:
    """Peak by a regression equation: a constant times powers of a basin's parameters.

    Parameters
    ----------
    constant : float
        In the unit of the estimate.
    exponents : mapping of str to float
        By parameter.
    parameters : mapping of str to array, shape (n,)
        In the units that the equation was fitted with, above zero.

    Returns
    -------
    array, shape (n,)
        Estimates, in the unit of the constant.

    Raises
    ------
    RangeError
        Where the constant or a parameter is not finite and above zero.

    Examples
    --------
    Colorado, northwest region, 100 years: 104.7 A^0.624 (cfs, mi2); 10 mi2.

    >>> round(float(regional_estimate(104.7, {"area_mi2": 0.624}, {"area_mi2": 10.0})), 1)
    440.5
    """
    logarithm = np.log(positive("constant", constant))
    for name, exponent in exponents.items():
        logarithm = logarithm + exponent * np.log(positive(name, parameters[name]))
    return np.exp(logarithm)


def regional_band(estimate: ArrayLike, standard_error_log10: float) -> tuple[Floats, Floats]:
    """Band that holds 90 % of what a regression equation leaves unexplained.

    Parameters
    ----------
    estimate : float or array
        Estimates.
    standard_error_log10 : float
        Standard error of the common logarithm [-].

    Returns
    -------
    low, high : float or array
        5 and 95 %, in the unit of the estimate: 1.645 standard errors either way in the logarithm.

    Examples
    --------
    >>> [round(float(end), 1) for end in regional_band(100.0, 0.2)]
    [46.9, 213.3]
    """
    middle = positive("estimate", estimate)
    factor = 10.0 ** (NORMAL_95 * float(not_negative("standard_error_log10", standard_error_log10)))
    return middle / factor, middle * factor


@dataclass(frozen=True)
class Parameter:
    """A column of outlets.csv in the unit that an equation takes it in.

    Parameters
    ----------
    name : str
        As the equation names it, unit included.
    stem : str
        The column's stem in the schema, the return period put in.
    factor : float
        From the equation's unit to the one used inside.
    """

    name: str
    stem: str
    factor: float


@dataclass(frozen=True)
class Equation:
    """A regression equation of one return period.

    Parameters
    ----------
    period : str
        Return period as the project writes it [yr].
    constant : float
    unit_m3s : float
        The unit of the constant and the estimate [m3/s].
    exponents : mapping of Parameter to float
    bounds : mapping of Parameter to (low, high)
        Range of the data that it was fitted on, in the equation's units; infinite where open.
    standard_error_log10 : float
        [-].
    source : str
        Where it was published, as the user says.
    """

    period: str
    constant: float
    unit_m3s: float
    exponents: Mapping[Parameter, float]
    bounds: Mapping[Parameter, tuple[float, float]]
    standard_error_log10: float
    source: str


def read_equations(
    names: Sequence[str], rows: Sequence[Mapping[str, str]], periods: Sequence[str], file: str
) -> list[Equation]:
    """Read a user's table of regression equations, one row for each return period.

    Parameters
    ----------
    names : sequence of str
        Its columns: ``return_period_yr``; ``constant_cfs`` or ``constant_m3s``; ``standard_error_log10`` or
        ``standard_error_pct``; an exponent for each parameter under the name of a column of outlets.csv, in its own
        unit (``area_mi2`` or ``area_km2`` in any project); optionally the parameter's range under that name with
        ``_low`` and ``_high``; optionally ``source``.
    rows : sequence of mapping
        Its rows as text.
    periods : sequence of str
        Return periods of the project. Rows of others are left aside.
    file : str
        For the messages.

    Returns
    -------
    list of Equation
        By rising return period.

    Raises
    ------
    InputRejected
        With every fault.
    """
    problems = list(_header_faults(names, periods, file))
    if problems:
        raise InputRejected(problems)
    parameters = {name: found for name in names if (found := _parameter(name, periods)) is not None}
    by_years = {float(period): period for period in periods}
    equations: dict[float, Equation] = {}
    for number, row in enumerate(rows, start=2):
        reader = _Row(row, number, file)
        years = reader.number(_PERIOD, 0.0)
        constant = next(name for name in _CONSTANTS if name in names)
        error = next(name for name in _ERRORS if name in names)
        exponents = {parameter: reader.exponent(name) for name, parameter in parameters.items()}
        bounds = {parameter: reader.bounds(name, names) for name, parameter in parameters.items()}
        value, deviation = reader.number(constant, 0.0), reader.number(error, 0.0)
        if years in equations:
            reader.wrong(_PERIOD, "stands more than once", "keep one row for each return period")
        problems += reader.problems
        if reader.problems or years not in by_years:
            continue
        unit = unit_of_suffix(constant, "flow")
        equations[years] = Equation(
            by_years[years],
            value,
            1.0 if unit is None else unit[1],
            {parameter: exponent for parameter, exponent in exponents.items() if exponent != 0.0},
            {parameter: bounds[parameter] for parameter, exponent in exponents.items() if exponent != 0.0},
            float(standard_error_log10(deviation)) if error.endswith("pct") else deviation,
            (row.get(_SOURCE) or "").strip(),
        )
    if not equations and not problems:
        fix = f"give a row for one of {', '.join(periods)}"
        problems.append(Problem(file, _PERIOD, "none of the project's return periods is there", fix))
    if problems:
        raise InputRejected(problems)
    return [equations[years] for years in sorted(equations)]


def _header_faults(names: Sequence[str], periods: Sequence[str], file: str) -> Iterator[Problem]:
    if _PERIOD not in names:
        yield Problem(file, "header", f"lacks {_PERIOD}", "give the return period of each row in years")
    for kind, choice in (("constant", _CONSTANTS), ("standard error", _ERRORS)):
        given = [name for name in choice if name in names]
        if len(given) != 1:
            fix = f"give one column {' or '.join(choice)}: its name says the unit"
            yield Problem(file, "header", f"has {' and '.join(given) or f'no {kind}'}", fix)
    for name in {name for name in names if names.count(name) > 1}:
        yield Problem(file, name, "stands more than once in the header", "keep one column of the name")
    for name in names:
        if name in (_PERIOD, _SOURCE, *_CONSTANTS, *_ERRORS) or _parameter(name, periods) is not None:
            continue
        base = _bounded(name)
        known = sorted(_known(periods))
        if base is not None and _parameter(base, periods) is not None:
            if base not in names:
                yield Problem(file, name, f"bounds {base}, which has no column", f"add the exponents of {base}")
            continue
        near = difflib.get_close_matches(base or name, known, n=1, cutoff=0.0)[0]
        fix = f"did you mean {near!r}? Parameters are named as the number columns of outlets.csv"
        yield Problem(file, name, "is no column of outlets.csv", fix)


def _bounded(name: str) -> str | None:
    return next((name.removesuffix(ending) for ending in _BOUNDS if name.endswith(ending)), None)


def _known(periods: Sequence[str]) -> set[str]:
    """List the number columns of outlets.csv by their names in both systems of units."""
    systems: tuple[System, ...] = ("us", "si")
    return {
        column.name(system, period)
        for column in OUTLETS.columns
        if column.type == "number" and not column.optional
        for system in systems
        for period in (periods if column.per_return_period else ("",))
    }


def _parameter(name: str, periods: Sequence[str]) -> Parameter | None:
    """Return the parameter that a name means; None where it means none."""
    for column in OUTLETS.columns:
        if column.type != "number" or column.optional:
            continue
        for period in periods if column.per_return_period else ("",):
            stem = column.stem.replace("{T}", period)
            if not column.quantity and name == stem:
                return Parameter(name, stem, 1.0)
            if column.quantity in SHOWN and name in (column.name("us", period), column.name("si", period)):
                factor = 1.0 if name == column.name("si", period) else SHOWN[column.quantity].inside_per_us
                return Parameter(name, stem, factor)
            unit = unit_of_suffix(name, column.quantity)
            if unit is not None and name.rpartition("_")[0] == stem:
                return Parameter(name, stem, unit[1])
    return None


class _Row:
    """One row of the table while it is read; collects what is wrong with it."""

    def __init__(self, row: Mapping[str, str], number: int, file: str) -> None:
        self.row, self.place, self.file = row, number, file
        self.problems: list[Problem] = []

    def wrong(self, column: str, what: str, fix: str) -> None:
        """Note a problem."""
        self.problems.append(Problem(self.file, f"row {self.place}, {column}", what, fix))

    def text(self, column: str) -> str:
        """Return a cell without blanks round it."""
        return (self.row.get(column) or "").strip()

    def number(self, column: str, over: float = -math.inf) -> float:
        """Return a cell as a number over a bound; 1 where it is none."""
        text = self.text(column)
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        if math.isfinite(value) and value > over:
            return value
        bound = f" over {over:g}" if over > -math.inf else ""
        self.wrong(column, f"{text!r} is not a number{bound}", f"write a plain number{bound}")
        return 1.0

    def exponent(self, column: str) -> float:
        """Return an exponent; 0 where the cell is empty."""
        return self.number(column) if self.text(column) else 0.0

    def bounds(self, column: str, names: Sequence[str]) -> tuple[float, float]:
        """Return the range of a parameter, open where nothing is given."""
        ends = [-math.inf, math.inf]
        for ending, side in _BOUNDS.items():
            if column + ending in names and self.text(column + ending):
                ends[side] = self.number(column + ending)
        if ends[0] > ends[1]:
            self.wrong(f"{column}_low", f"{ends[0]:g} is over {column}_high {ends[1]:g}", "give the smaller one first")
        return ends[0], ends[1]
