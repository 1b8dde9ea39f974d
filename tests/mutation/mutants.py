"""Mutants: one-token slips of a formula, made on the text of a module and never written to disk.

The slips are those that people make with published formulas: the wrong logarithm, an exponent or a constant off by
its last digit, a lost sign, plus for minus, times for divided by, a unit factor forgotten, a comparison or a bound the
wrong way round. Branches that end in an error, their conditions, f-strings and annotations are left alone.
"""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

_SWAPPED_CALLS = {
    "log": "log10",
    "log10": "log",
    "exp": "exp2",
    "sqrt": "cbrt",
    "minimum": "maximum",
    "maximum": "minimum",
    "min": "max",
    "max": "min",
    "floor": "ceil",
    "ceil": "floor",
}
_SWAPPED_OPERATORS = {"+": "-", "-": "+", "*": "/", "/": "*", "//": "*"}
_SWAPPED_COMPARISONS = {"<": ">", ">": "<", "<=": ">=", ">=": "<=", "==": "!=", "!=": "=="}
_UNIT_FACTORS = {"M_PER_FT", "M_PER_MI", "MM_PER_IN", "KM2_PER_MI2", "KM2_PER_AC", "M3S_PER_CFS", "SECONDS_PER_H"}

CELLS_PER_COLUMN = 5
"""Numbers changed in a column of a published table."""

_OPERATOR = re.compile(rb"\*\*|//|[-+*/%@]|<<|>>|[&|^]")
_COMPARISON = re.compile(rb"[<>]=?|[=!]=|\bnot\b|\bin\b|\bis\b")


@dataclass(frozen=True)
class Mutant:
    """One slip.

    Parameters
    ----------
    file : str
        Path of the module below the package, ``timing/sheet.py``.
    row : int
        Row of the slip, from 1.
    line : str
        That row as it stands, stripped.
    change : str
        Expression before and after, ``0.8 -> 0.9``; two slips of a row may look alike.
    begin, end : int
        Bytes replaced.
    text : str
        What replaces them.
    """

    file: str
    row: int
    line: str
    change: str
    begin: int
    end: int
    text: str

    def applied(self, source: bytes) -> bytes:
        """Return the module's text with the slip in it."""
        return source[: self.begin] + self.text.encode() + source[self.end :]


@dataclass(frozen=True)
class Cell:
    """A slip in a published table: the last digit of one number."""

    table: str
    row: int
    column: str
    before: str
    after: str


@dataclass(frozen=True)
class Outcome:
    """What became of a slip: who noticed it (``case``, ``test`` or nobody), and which."""

    slip: Mutant | Cell
    noticed_by: str
    which: str


def other_last_digit(number: str) -> str:
    """Return a number with its last digit changed by one; a written ``.0`` is no digit of the print."""
    mantissa, exponent = re.fullmatch(r"([-+\d_.]+?)((?:\.0)?(?:[eE][+-]?\d+)?)", number).groups()  # type: ignore[union-attr]
    last = mantissa[-1]
    return mantissa[:-1] + ("8" if last == "9" else str(int(last) + 1)) + exponent


def mutants_of(file: str, source: bytes) -> list[Mutant]:
    """List every mutant of a module, in the order of its text.

    Parameters
    ----------
    file : str
        See `Mutant`.
    source : bytes
        Its text in UTF-8.
    """
    starts = [0]
    for row in source.splitlines(keepends=True):
        starts.append(starts[-1] + len(row))
    rows = source.decode().splitlines()

    def begin(node: ast.expr) -> int:
        return starts[node.lineno - 1] + node.col_offset

    def end(node: ast.expr) -> int:
        return starts[(node.end_lineno or 0) - 1] + (node.end_col_offset or 0)

    def slips() -> Iterator[tuple[int, int, str, ast.expr]]:
        """Yield the bytes replaced, what replaces them, and the expression up to whose end a reader sees the slip."""
        for node, parent in _formula_nodes(ast.parse(source)):
            match node:
                case ast.Constant(value=int() | float()) if not isinstance(node.value, bool):
                    text = source[begin(node) : end(node)].decode()
                    shown = parent if isinstance(parent, ast.BinOp | ast.UnaryOp | ast.Compare) else node
                    yield begin(node), end(node), other_last_digit(text), shown
                    if node.value and not source[: begin(node)].endswith(b"-"):
                        yield begin(node), end(node), f"(-{text})", shown
                case ast.UnaryOp(op=ast.USub()):
                    yield begin(node), begin(node) + 1, "", node
                case ast.BinOp(left=left, right=right):
                    yield from swapped(_OPERATOR, _SWAPPED_OPERATORS, left, right)
                case ast.Compare(left=left, comparators=others):
                    for first, second in zip([left, *others], others, strict=False):
                        yield from swapped(_COMPARISON, _SWAPPED_COMPARISONS, first, second)
                case ast.Call(func=ast.Name(id=name) | ast.Attribute(attr=name)) if name in _SWAPPED_CALLS:
                    yield end(node.func) - len(name), end(node.func), _SWAPPED_CALLS[name], node.func
                case ast.Name(id=name, ctx=ast.Load()) if name in _UNIT_FACTORS:
                    yield begin(node), end(node), "1.0", node

    def swapped(
        pattern: re.Pattern[bytes], others: dict[str, str], left: ast.expr, right: ast.expr
    ) -> Iterator[tuple[int, int, str, ast.expr]]:
        found = pattern.search(source, end(left), begin(right))
        if found and (sign := found.group().decode()) in others:
            yield found.start(), found.end(), others[sign], right

    listed = []
    for first, last, text, shown in slips():
        start = min(first, begin(shown))
        before = source[start : end(shown)]
        after = before[: first - start] + text.encode() + before[last - start :]
        change = " ".join(f"{before.decode()} -> {after.decode()}".split())
        row = source.count(b"\n", 0, first) + 1
        listed.append(Mutant(file, row, rows[row - 1].strip(), change, first, last, text))
    return sorted(listed, key=lambda mutant: (mutant.begin, mutant.text))


def _formula_nodes(tree: ast.AST) -> Iterator[tuple[ast.AST, ast.AST]]:
    """Walk what computes, each with its parent: no annotations, no f-strings, no branch that ends in an error."""
    for field, value in ast.iter_fields(tree):
        if field in ("annotation", "returns") or isinstance(tree, ast.Raise | ast.JoinedStr):
            continue
        if isinstance(tree, ast.If) and isinstance(tree.body[-1], ast.Raise) and field in ("test", "body"):
            continue
        for child in value if isinstance(value, list) else [value]:
            if isinstance(child, ast.AST):
                yield child, tree
                yield from _formula_nodes(child)


def cells_of(table: str, rows: Sequence[Mapping[str, str]]) -> list[Cell]:
    """List a changed digit in a few rows, evenly spread, of every column of numbers of a published table."""
    cells = []
    for column in rows[0]:
        filled = [row for row, its_cells in enumerate(rows) if its_cells[column]]
        if not all(re.fullmatch(r"[+-]?(\d+\.?\d*|\.\d+)", rows[row][column]) for row in filled):
            continue
        wanted = min(CELLS_PER_COLUMN, len(filled))
        for row in (filled[at * (len(filled) - 1) // max(wanted - 1, 1)] for at in range(wanted)):
            cells.append(Cell(table, row, column, rows[row][column], other_last_digit(rows[row][column])))
    return cells
