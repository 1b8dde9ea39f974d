"""The register of published methods: timing methods, unit hydrographs, storms.

A method is one function with the `method` decorator. The command line, the documentation, the range checks
and the registry-wide tests follow from what is written there; nothing is listed a second time.
"""

from __future__ import annotations

import difflib
import importlib
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Literal, TypeVar

Kind = Literal["timing", "unit_hydrograph", "storm"]

_ROOMS: dict[Kind, str] = {
    "timing": "basinwright.timing",
    "unit_hydrograph": "basinwright.hydrograph",
    "storm": "basinwright.storms",
}
"""Where the methods of a kind register themselves: importing the room fills the register."""


@dataclass(frozen=True)
class Source:
    """Where a method or a number was published.

    Parameters
    ----------
    document : str
        Author, title, publisher.
    edition : str
        Year or edition.
    place : str
        Chapter, equation, table or page.
    note : str
        How it reached us: seen in print, through a named copy, or from memory; where our constants differ.
    """

    document: str
    edition: str
    place: str
    note: str = ""

    def __str__(self) -> str:
        return f"{self.document}, {self.edition}, {self.place}"


@dataclass(frozen=True)
class Range:
    """The range over which a method was calibrated or is recommended, in one of its inputs.

    Parameters
    ----------
    low, high : float
        Bounds in the unit named by the input (``area_km2``); infinite where open.
    printed : str
        The range as the source prints it, in its own units.
    """

    low: float = -math.inf
    high: float = math.inf
    printed: str = ""

    def holds(self, value: float) -> bool:
        """Say whether a value lies inside (bounds included)."""
        return self.low <= value <= self.high


F = TypeVar("F", bound=Callable[..., Any])


@dataclass(frozen=True)
class Method:
    """One registered method.

    Parameters
    ----------
    key : str
        What the project file writes.
    kind : str
        ``timing``, ``unit_hydrograph`` or ``storm``.
    name : str
        The usual name, with author and year.
    form : str
        The published form with its units, as printed.
    inputs : tuple of str
        Names of the function's arguments, units in the names: columns of the tables or keys of the project.
    source : Source
        Where it was published.
    valid_range : mapping
        `Range` by input.
    limits : str
        In words: region, land use, what it was fitted on, what it leaves out.
    function : callable
        The function itself, on floats or arrays.
    """

    key: str
    kind: Kind
    name: str
    form: str
    inputs: tuple[str, ...]
    source: Source
    valid_range: Mapping[str, Range]
    limits: str
    function: Callable[..., Any]

    def out_of_range(self, inputs: Mapping[str, float]) -> list[str]:
        """List the inputs that lie outside the published range, each as a sentence part.

        Parameters
        ----------
        inputs : mapping
            Values by input name; those that the range does not mention are ignored.

        Returns
        -------
        list of str
            Empty where the method is applicable.
        """
        return [
            f"{name} {inputs[name]:.4g} is outside {bounds.printed or f'{bounds.low:g} to {bounds.high:g}'}"
            for name, bounds in self.valid_range.items()
            if name in inputs and not bounds.holds(inputs[name])
        ]


_METHODS: dict[tuple[Kind, str], Method] = {}


def method(
    kind: Kind,
    key: str,
    *,
    name: str,
    form: str,
    inputs: tuple[str, ...],
    source: Source,
    valid_range: Mapping[str, Range] | None = None,
    limits: str = "",
) -> Callable[[F], F]:
    """Register the decorated function as a method (the parameters are those of `Method`)."""

    def register(function: F) -> F:
        if (kind, key) in _METHODS:
            raise ValueError(f"the {kind} method {key!r} is registered twice")
        _METHODS[kind, key] = Method(key, kind, name, form, inputs, source, dict(valid_range or {}), limits, function)
        return function

    return register


def methods(kind: Kind) -> dict[str, Method]:
    """Return the methods of a kind by key, in order of registration."""
    importlib.import_module(_ROOMS[kind])
    return {key: entry for (its_kind, key), entry in _METHODS.items() if its_kind == kind}


def find(kind: Kind, key: str) -> Method:
    """Return one method.

    Raises
    ------
    KeyError
        Naming the nearest known key and all of them.
    """
    known = methods(kind)
    if key not in known:
        near = difflib.get_close_matches(key, known, n=1)
        hint = f" (nearest: {near[0]})" if near else ""
        raise KeyError(f"unknown {kind} method {key!r}{hint}; known: {', '.join(known)}")
    return known[key]
