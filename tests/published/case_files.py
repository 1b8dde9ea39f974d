"""Published cases: reads the case files of this folder and runs what they say.

A case file is YAML, one published document each. It names a public function, its inputs with the units in
which the document prints them, and the printed answer; the tolerance is half of the last printed digit unless
the case says why it is wider. An input may be a mapping of columns, each converted by its own name, or an object: a
mapping with ``call`` and ``inputs``. ``pick`` walks into what the call returns, by attributes, keys and indices;
``first`` keeps the first numbers of a longer answer. The ledger of all cases follows from `load_all`.
"""

from __future__ import annotations

import ast
import importlib
import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import yaml
from numpy.typing import NDArray

from basinwright.units import KM2_PER_MI2, M3S_PER_CFS, M_PER_FT, M_PER_MI, MM_PER_IN, UNITS

FOLDER = Path(__file__).parent

KINDS = ("worked example", "printed table", "second form", "closed form", "arithmetic")
"""Where the printed number comes from; the last is a hand calculation that no document prints."""

_CASE_UNITS: dict[str, tuple[str, float]] = {
    **{unit: entry for unit, entry in UNITS.items() if entry[0] not in ("area", "share")},
    # Areas in m2 here: cross-sections as well as basins.
    **{unit: ("area", factor * 1e6) for unit, (kind, factor) in UNITS.items() if kind == "area"},
    "%": ("ratio", 0.01),
    "ft/ft": ("ratio", 1.0),
    "m/m": ("ratio", 1.0),
    "ft/mi": ("ratio", M_PER_FT / M_PER_MI),
    "m/km": ("ratio", 0.001),
    "mm/h": ("intensity", 1.0),
    "cm/h": ("intensity", 10.0),
    "in/h": ("intensity", MM_PER_IN),
    "km2*cm/h": ("flow", 1e4 / 3600.0),
    "m3/s/mm": ("unit_flow", 1.0),
    "m3/s/cm": ("unit_flow", 0.1),
    "cfs/in": ("unit_flow", M3S_PER_CFS / MM_PER_IN),
    "m3/s/km2/mm": ("unit_peak", 1.0),
    "cfs/mi2/in": ("unit_peak", M3S_PER_CFS / KM2_PER_MI2 / MM_PER_IN),
}

# Longest suffix first: "_m3s_per_mm" is not a length in mm.
_SUFFIXES: tuple[tuple[str, str, float], ...] = (
    ("_m3s_per_km2_mm", "unit_peak", 1.0),
    ("_m3s_per_mm", "unit_flow", 1.0),
    ("_mm_per_h", "intensity", 1.0),
    ("_m3s", "flow", 1.0),
    ("_mps", "speed", 1.0),
    ("_km2", "area", 1e6),
    ("_pct", "ratio", 0.01),
    ("_m2", "area", 1.0),
    ("_mm", "depth", 1.0),
    ("_h", "time", 1.0),
    ("_m", "length", 1.0),
)

_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?")


@dataclass(frozen=True)
class Quantity:
    """Numbers as printed, with their unit (empty where they have none)."""

    texts: tuple[str, ...]
    unit: str

    @property
    def values(self) -> NDArray[np.float64]:
        """The numbers [printed unit]."""
        return np.array([float(text) for text in self.texts])

    @property
    def half_last_digits(self) -> NDArray[np.float64]:
        """Half of the last printed digit of each number [printed unit]."""
        return np.array([0.5 * 10.0 ** _exponent_of_last_digit(text) for text in self.texts])

    def per_printed(self, name: str) -> float:
        """Return the factor from the printed unit to the one that a name's suffix states."""
        suffix = next(((kind, factor) for ending, kind, factor in _SUFFIXES if name.endswith(ending)), None)
        if not self.unit:
            if suffix is not None:
                raise ValueError(f"{name}: {' '.join(self.texts)!r} needs a unit")
            return 1.0
        if self.unit not in _CASE_UNITS:
            raise ValueError(f"{name}: unknown unit {self.unit!r}")
        kind, factor = _CASE_UNITS[self.unit]
        wanted, inside = suffix or ("ratio", 1.0)
        if kind != wanted:
            raise ValueError(f"{name}: {self.unit!r} is a unit of {kind}, not of {wanted}")
        return factor / inside


def _exponent_of_last_digit(text: str) -> int:
    mantissa, _, exponent = text.lower().partition("e")
    decimals = len(mantissa.partition(".")[2])
    return (int(exponent) if exponent else 0) - decimals


def parse_quantity(text: str) -> Quantity | None:
    """Read numbers followed by at most one unit; None where the text is something else."""
    words = text.split()
    unit = "" if not words or _NUMBER.fullmatch(words[-1]) else words.pop()
    if not words or not all(_NUMBER.fullmatch(word) for word in words):
        return None
    return Quantity(tuple(words), unit)


def _called(call: str, inputs: Mapping[str, Any]) -> Any:
    """Return what a function below ``basinwright`` returns for inputs as printed."""
    room, _, function = call.rpartition(".")
    arguments = {name: _argument(name, value) for name, value in inputs.items()}
    return getattr(importlib.import_module(f"basinwright.{room}"), function)(**arguments)


def _argument(name: str, value: Any) -> Any:
    """Return an input as the function takes it: columns one by one, an object by the call that makes it."""
    if isinstance(value, Mapping):
        if "call" in value:
            return _called(value["call"], value["inputs"])
        columns = {column: _argument(column, entry) for column, entry in value.items()}
        return {column: np.atleast_1d(entry) if type(entry) is float else entry for column, entry in columns.items()}
    if not isinstance(value, str):
        return value
    quantity = parse_quantity(value)
    if quantity is None:
        return value
    values = quantity.values * quantity.per_printed(name)
    return float(values[0]) if values.size == 1 else values


_FUNCTIONS = {"sqrt": math.sqrt, "exp": math.exp, "ln": math.log, "log10": math.log10, "gamma": math.gamma}
_OPERATIONS = {
    ast.Add: lambda a, b: a + b,
    ast.Sub: lambda a, b: a - b,
    ast.Mult: lambda a, b: a * b,
    ast.Div: lambda a, b: a / b,
    ast.Pow: lambda a, b: a**b,
}


def evaluate(arithmetic: str) -> float:
    """Evaluate a hand calculation: numbers, ``+ - * / **``, brackets, sqrt, exp, ln, log10, gamma.

    Raises
    ------
    ValueError
        Where anything else stands in it.
    """

    def value(node: ast.expr) -> float:
        match node:
            case ast.Constant(value=int() | float() as number):
                return float(number)
            case ast.UnaryOp(op=ast.USub(), operand=operand):
                return -value(operand)
            case ast.BinOp(left=left, op=op, right=right) if type(op) in _OPERATIONS:
                return _OPERATIONS[type(op)](value(left), value(right))
            case ast.Call(func=ast.Name(id=name), args=[argument], keywords=[]) if name in _FUNCTIONS:
                return _FUNCTIONS[name](value(argument))
        raise ValueError(f"not arithmetic: {ast.unparse(node)}")

    return value(ast.parse(arithmetic, mode="eval").body)


@dataclass(frozen=True)
class Case:
    """One printed number (or row of numbers) and the call that must reproduce it.

    Parameters
    ----------
    key : str
        File and id, ``neh630_ch15:lag``.
    what : str
        One line for the reader.
    document, edition, page, transcribed, kind : str
        Where the number comes from.
    methods : tuple of str
        Registered methods that it checks, ``timing/kirpich``.
    call : str
        The function, by its path below ``basinwright``.
    inputs : mapping
        Its arguments as printed.
    printed : Quantity
        The answer as printed.
    result : str
        A name whose suffix states the unit of what the function returns.
    pick : tuple of str or int
        What to take from what it returns: attributes, keys and indices, one after another.
    first : int or None
        How many of the numbers are in print, from the first; all where None.
    tolerance : str
        Empty (half of the last printed digit), a number in the printed unit, or a percentage.
    because : str
        Why the tolerance is not half of the last digit.
    arithmetic : str
        The hand calculation behind the printed number, if any.
    """

    key: str
    what: str
    document: str
    edition: str
    page: str
    transcribed: str
    kind: str
    methods: tuple[str, ...]
    call: str
    inputs: Mapping[str, Any]
    printed: Quantity
    result: str
    pick: tuple[str | int, ...]
    first: int | None
    tolerance: str
    because: str
    arithmetic: str

    def run(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Compute the answer; return computed, printed and tolerance [printed unit]."""
        returned = _called(self.call, self.inputs)
        for pick in self.pick:
            if isinstance(pick, str) and not isinstance(returned, Mapping):
                returned = getattr(returned, pick)
            else:
                returned = returned[pick]
        inside = np.ravel(np.asarray(returned, dtype=np.float64))[: self.first]
        return inside / self.printed.per_printed(self.result), self.printed.values, self.tolerances()

    def tolerances(self) -> NDArray[np.float64]:
        """Return the tolerance of each printed number [printed unit]."""
        if not self.tolerance:
            return self.printed.half_last_digits
        if self.tolerance.endswith("%"):
            return np.abs(self.printed.values) * float(self.tolerance[:-1]) / 100.0
        return np.full(len(self.printed.texts), float(self.tolerance))


def misses(
    computed: NDArray[np.float64], printed: NDArray[np.float64], tolerance: NDArray[np.float64]
) -> NDArray[np.bool_]:
    """Say which numbers are not the printed ones; NaN is not, and numbers that are too many or too few are not."""
    if computed.shape != printed.shape:
        return np.ones(printed.shape, dtype=bool)
    # The rounding of a printed 0.5 is a tie: a hair above half of the last digit still is the printed number.
    return ~(np.abs(computed - printed) <= tolerance * (1 + 1e-9))


_SHARED = ("document", "edition", "page", "transcribed", "kind")
_OWN = (
    "id",
    "what",
    "method",
    "call",
    "inputs",
    "result",
    "pick",
    "first",
    "printed",
    "tolerance",
    "because",
    "arithmetic",
    "steps",
)


def _cases(entry: Mapping[str, Any], shared: Mapping[str, str], prefix: str) -> Iterator[Case]:
    """Yield a case and its steps, checking that nothing is missing or misspelt."""
    where = f"{prefix}{entry.get('id', '?')}"
    if unknown := set(entry) - {*_OWN, *_SHARED}:
        raise ValueError(f"{where}: unknown keys {sorted(unknown)}")
    about = {**shared, **{key: str(entry[key]) for key in _SHARED if key in entry}}
    if missing := [key for key in _SHARED if not about.get(key)]:
        raise ValueError(f"{where}: missing {missing}")
    if about["kind"] not in KINDS:
        raise ValueError(f"{where}: kind {about['kind']!r} is none of {KINDS}")
    for step in entry.get("steps", ()):
        yield from _cases(step, about, f"{where}/")
    if not isinstance(entry["printed"], str) or (printed := parse_quantity(entry["printed"])) is None:
        raise ValueError(f"{where}: quote what is printed, numbers then unit: {entry['printed']!r}")
    if ("tolerance" in entry) != ("because" in entry):
        raise ValueError(f"{where}: tolerance and because belong together")
    if about["kind"] in ("second form", "arithmetic") and "arithmetic" not in entry:
        raise ValueError(f"{where}: show the arithmetic")
    methods, pick = _listed(entry.get("method", [])), _listed(entry.get("pick", []))
    names = [part for part in pick if isinstance(part, str)]
    yield Case(
        key=where,
        what=str(entry["what"]),
        **about,
        methods=methods,
        call=str(entry["call"]),
        inputs=dict(entry.get("inputs", {})),
        printed=printed,
        result=str(entry.get("result") or (names[-1] if names else entry["call"])),
        pick=pick,
        first=entry.get("first"),
        tolerance=str(entry.get("tolerance", "")),
        because=str(entry.get("because", "")),
        arithmetic=str(entry.get("arithmetic", "")),
    )


def _listed(value: Any) -> tuple[Any, ...]:
    return tuple(value) if isinstance(value, list) else (value,)


def load(path: Path) -> list[Case]:
    """Read one case file."""
    content = yaml.safe_load(path.read_text(encoding="utf-8"))
    shared = {key: str(content[key]) for key in _SHARED if key in content}
    return [case for entry in content["cases"] for case in _cases(entry, shared, f"{path.stem}:")]


@cache
def load_all() -> tuple[Case, ...]:
    """Read every case file of this folder."""
    return tuple(case for path in sorted(FOLDER.glob("*.yml")) for case in load(path))


def methods_checked() -> set[str]:
    """Return the registered methods that at least one case checks, as ``kind/key``."""
    return {method for case in load_all() for method in case.methods}
