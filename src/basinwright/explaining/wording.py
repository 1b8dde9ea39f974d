"""An explanation as plain text, and as plain values for JSON."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from basinwright.explaining.records import figure
from basinwright.explaining.walk import Explanation, Input

_INDENT = "  "


def as_text(explanation: Explanation) -> str:
    """Return an explanation as lines of text, its inputs' indented under it."""
    return "\n".join(_lines(explanation, 0)) + "\n"


def as_values(explanation: Explanation) -> dict[str, Any]:
    """Return an explanation as plain values: what ``--json`` prints."""
    return asdict(explanation)


def _lines(e: Explanation, level: int) -> list[str]:
    row = ", ".join(f"{key} {value}" for key, value in e.row.items())
    where = f"{e.table}.csv, outlet {e.outlet_id}" + (f", {row}" if row else "")
    unit = "" if e.unit in ("", "1") else f" {e.unit}"
    lines = [f"{e.column} = {_shown(e.value)}{unit}    [{where}]"]
    facts: list[tuple[str, str]] = [("is", e.meaning), ("how", e.words)]
    facts += (
        [
            ("formula", f"{e.column} = {e.formula}" + (f"  [{e.formula_unit}]" if e.formula_unit else "")),
            ("filled", e.filled),
        ]
        if e.formula
        else []
    )
    if e.recomputed is not None:
        verdict = "the table's figure" if e.agrees else f"NOT the table's {e.value}"
        facts.append(("gives", f"{figure(e.recomputed)}{unit}: {verdict}"))
    facts += [("source", e.source)] if e.source else []
    facts += [("from", place) for place in e.places]
    facts += _published(e.published)
    facts += [("edited", e.edited)] if e.edited else []
    lines += [f"{_INDENT}{label:<8}{text}" for label, text in facts]
    for entry in e.inputs:
        lines += _input_lines(entry, level)
    if e.flags:
        lines.append(f"{_INDENT}flags of the outlet")
        lines += [f"{_INDENT * 2}{f['severity']} {f['flag']}: {f['message']}; {f['remedy']}" for f in e.flags]
    return [_INDENT * (2 * level) + line for line in lines]


def _published(rows: tuple[dict[str, Any], ...]) -> list[tuple[str, str]]:
    facts = []
    for entry in rows:
        cells = ", ".join(f"{key} {value}" for key, value in entry["row"].items() if value)
        facts += [("table", f"{entry['table']}: {cells}"), ("", entry["source"])]
    return facts


def _input_lines(entry: Input, level: int) -> list[str]:
    unit = "" if entry.unit in ("", "1") or not entry.figure else f" {entry.unit}"
    number = f" = {entry.figure}{unit}" if entry.figure else ""
    where = f"    [{'; '.join(entry.cells)}]" if entry.cells and not entry.explained else ""
    lines = [f"{_INDENT}{entry.symbol}{number}: {entry.about}{where}"]
    lines += [f"{_INDENT * 2}{label:<8}{text}" for label, text in _published(entry.published)]
    for inner in entry.explained:
        lines += [line.removeprefix(_INDENT * (2 * level)) for line in _lines(inner, level + 1)]
    return lines


def _shown(text: str) -> str:
    try:
        return f"{float(text):.6g}" if any(mark in text for mark in ".eE") else text
    except ValueError:
        return text or "(empty)"
