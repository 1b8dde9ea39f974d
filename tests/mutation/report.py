"""The page of the mutation check, ``docs/mutation.md``: figures, survivors and why they survive."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from typing import Any

from mutation.mutants import CELLS_PER_COLUMN, Cell, Mutant, Outcome


def reason_of(slip: Mutant | Cell, reasons: dict[str, list[dict[str, Any]]]) -> str:
    """Return why a slip may survive, empty where ``survivors.yml`` does not say."""
    kind = "formulas" if isinstance(slip, Mutant) else "tables"
    for entry in reasons[kind]:
        if isinstance(slip, Mutant):
            fits = (entry["file"], entry["line"]) == (slip.file, slip.line)
            fits = fits and slip.change in entry.get("changes", [slip.change])
        else:
            fits = entry["table"] == slip.table and slip.column in entry.get("columns", [slip.column])
        if fits:
            return str(entry["reason"])
    return ""


def page(formulas: list[Outcome], cells: list[Outcome], reasons: dict[str, list[dict[str, Any]]], digest: str) -> str:
    """Return the page; `digest` tells which sources were mutated."""
    by_case = sum(outcome.noticed_by == "case" for outcome in formulas)
    by_test = sum(outcome.noticed_by == "test" for outcome in formulas)
    in_ranges = sum(outcome.which.startswith("tests/test_printed_ranges") for outcome in formulas)
    lines = [
        "<!-- Written by `make mutants`, which takes long and is no part of `make test`. -->",
        "# Mutation check",
        "",
        "Do the published cases notice a slip? Every module of `timing/`, `storms/`, `runoff/` and `hydrograph/` is "
        "changed in one place at a time: the other logarithm, the last digit or the sign of a constant or exponent, "
        "plus for minus, times for divided by, a unit factor left out, a comparison or a bound turned round. Branches "
        "that end in an error are left alone, and so are the compiled kernels, which have tests of their own. A slip "
        "that no published case notices meets the tests of its room; what survives both is listed with the reason.",
        "",
        f"**{len(formulas)} slips in formulas: {by_case} noticed by a published case ({by_case / len(formulas):.1%}), "
        f"{by_test} by another test ({in_ranges} in the bounds of calibrated ranges, which a test compares with "
        f"their printed text), {len(formulas) - by_case - by_test} by none.**",
        "",
        *_counts("module", formulas, lambda outcome: outcome.slip.file),
        "",
        "## What survives",
        "",
        *_rows(
            ("where", "line", "slip", "why it survives"),
            (
                (f"{slip.file}, row {slip.row}", f"`{slip.line}`", f"`{slip.change}`", reason_of(slip, reasons) or "?")
                for slip in survivors(formulas)
            ),
        ),
        "",
        "## Published tables",
        "",
        f"The last digit of a number changed in up to {CELLS_PER_COLUMN} rows of every column of numbers.",
        "",
        *_counts("table", cells, lambda outcome: outcome.slip.table),
        "",
        *_rows(
            ("table", "row", "column", "digit", "why it survives"),
            (
                (
                    slip.table,
                    str(slip.row + 1),
                    slip.column,
                    f"{slip.before} -> {slip.after}",
                    reason_of(slip, reasons) or "?",
                )
                for slip in survivors(cells)
            ),
        ),
        "",
        f"Digest of the mutated modules: `{digest}`.",
    ]
    return "\n".join(lines) + "\n"


def survivors(found: list[Outcome]) -> list[Any]:
    """Return the slips that nothing noticed."""
    return [outcome.slip for outcome in found if not outcome.noticed_by]


def _counts(head: str, found: list[Outcome], group: Callable[[Any], str]) -> list[str]:
    groups = list(dict.fromkeys(map(group, found)))
    counts = Counter((group(outcome), outcome.noticed_by) for outcome in found)
    return _rows(
        (head, "slips", "noticed by a published case", "by another test", "by none"),
        (
            (name, *map(str, (sum(each), *each)))
            for name in groups
            if (each := [counts[name, by] for by in ("case", "test", "")])
        ),
    )


def _rows(heads: Sequence[str], rows: Iterable[Sequence[str]]) -> list[str]:
    lines = ["| " + " | ".join(cell.replace("|", r"\|") for cell in row) + " |" for row in (heads, *rows)]
    return [lines[0], "|" + "---|" * len(heads), *lines[1:]]
