"""The generated pages of ``docs/``: methods, ledger, flags, columns, conformance. ``make docs`` writes them.

Each page is a function that returns its text; nothing is listed here that a register or a case file already says.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Iterable, Iterator
from pathlib import Path

import numpy as np
from conformance import scores
from conformance.kit import SIDES
from published.case_files import Case, load_all, misses

from basinwright import catalogue, published, tables
from basinwright.flags import FLAGS, SEVERITIES
from basinwright.registry import Kind, Method, methods

FOLDER = Path(__file__).parents[2] / "docs"

_GENERATED = "<!-- Written by `make docs`; a test fails when it is not up to date. -->"
_ONE_TRANSCRIBER = "the basinwright developers, "


def _table(heads: Iterable[str], rows: Iterable[Iterable[str]]) -> Iterator[str]:
    heads = list(heads)
    yield "| " + " | ".join(heads) + " |"
    yield "|" + "---|" * len(heads)
    for row in rows:
        yield "| " + " | ".join(" ".join(cell.replace("|", r"\|").split()) for cell in row) + " |"


def _page(title: str, intro: str, body: Iterable[str]) -> str:
    return "\n".join([_GENERATED, f"# {title}", "", intro, "", *body]).rstrip() + "\n"


# --- methods ---------------------------------------------------------------------------------------------------------


def methods_page() -> str:
    """Every registered method and published table."""
    return _page(
        "Methods and published tables",
        "What `basinwright methods` prints, with each range as data. The names of inputs end with their units. The "
        "cases that check a method are in the [ledger](ledger.md).",
        _methods(),
    )


def _methods() -> Iterator[str]:
    for kind, heading in catalogue.HEADINGS.items():
        yield from (f"## {heading}", "")
        for entry in methods(kind).values():
            yield from _method(kind, entry)
    yield from ("## Published tables", "")
    yield "One CSV each in `src/basinwright/published/`, rows as printed, beside a file with its source."
    yield ""
    for name in published.names():
        table = published.table(name)
        yield from (f"### {name}", "", f"{table.title}; {len(table.rows)} rows.", "")
        yield f"- source: {table.source}"
        yield f"- transcribed: {table.source.note}"
        yield from (f"- checked: {table.checked}", "")
        yield from _table(("column", "meaning"), ((f"`{column}`", text) for column, text in table.columns.items()))
        yield ""


def _method(kind: Kind, entry: Method) -> Iterator[str]:
    yield from (f"### {entry.key}: {entry.name}", "")
    for name, text in catalogue.facts(entry):
        if name != "range":
            yield f"- {name}: {text}"
    keys = [f"`{case.key}`" for case in load_all() if f"{kind}/{entry.key}" in case.methods]
    yield f"- cases: {', '.join(keys)}"
    yield ""
    if entry.valid_range:
        yield from _table(
            ("calibrated range of", "from", "to", "as printed"),
            (
                (f"`{name}`", _bound(bounds.low), _bound(bounds.high), bounds.printed)
                for name, bounds in entry.valid_range.items()
            ),
        )
    else:
        yield "No calibrated range is published."
    yield ""


def _bound(value: float) -> str:
    return f"{value:.6g}" if math.isfinite(value) else "open"


# --- ledger ----------------------------------------------------------------------------------------------------------


def transcription(case: Case) -> str:
    """Say in a word or two how the printed number of a case reached us.

    Raises
    ------
    ValueError
        Where its ``transcribed`` does not say.
    """
    text = case.transcribed
    ways = [
        way
        for way, words in (
            ("memory", ("memory",)),
            ("copy", ("copy",)),
            ("derivation", ("derived", "hand calculation")),
        )
        if any(word in text for word in words)
    ]
    if not ways and "the print" in text:
        ways = ["print"]
    if not ways:
        raise ValueError(f"{case.key}: 'transcribed' names no print, copy, memory or derivation: {text}")
    return " and ".join(ways)


_WAYS = {
    "print": "from the print",
    "copy": "from a secondary or stored copy",
    "memory and copy": "partly from memory, partly from a copy",
    "memory": "from memory of the print or of reprints",
    "derivation": "derived or computed by hand from the published form",
}


def ledger_page() -> str:
    """Every published case: what the document prints and what the package computes."""
    return _page(
        "Ledger of published cases",
        "Every printed number that a public function must reproduce: `tests/published/` holds them as data and "
        "`make test` runs them. The tolerance is half of the last printed digit unless the case says why it is "
        "wider. Of a row of numbers, tolerance and difference (computed less printed) are those of the number nearest "
        "to its limit.",
        _ledger(),
    )


def _ledger() -> Iterator[str]:
    cases = load_all()
    documents: dict[tuple[str, str], list[Case]] = {}
    for case in cases:
        documents.setdefault((case.document, case.edition), []).append(case)
    differing = sum(bool(misses(*case.run()).any()) for case in cases)
    numbers = sum(len(case.printed.texts) for case in cases)
    yield f"**{len(cases)} cases ({numbers} numbers) from {len(documents)} documents; {differing} differ.**"
    yield ""
    ways = Counter(transcription(case) for case in cases)
    yield from _table(("how the printed numbers reached us", "cases"),
                      ((text, str(ways[way])) for way, text in _WAYS.items()))  # fmt: skip
    yield ""
    kinds = Counter(case.kind for case in cases)
    yield from _table(("kind", "cases"), ((kind, str(count)) for kind, count in sorted(kinds.items())))
    yield from (
        "",
        "Kinds: a *second form* is the same law as another document prints it, in other units; *arithmetic*",
    )
    yield "is the published form computed by hand, which checks our digits and not the method."
    yield ""
    for (document, edition), group in sorted(documents.items()):
        yield from (f"## {document} ({edition})", "")
        yield from _table(
            ("case", "place", "what", "printed", "computed", "tolerance", "difference", "verdict", "transcribed"),
            map(_ledger_row, group),
        )
        yield ""
    yield from ("## Where sources differ, and other tolerances wider than the print", "")
    yield from _table(
        ("case", "tolerance", "why"),
        ((f"`{case.key}`", _with_unit(case.tolerance, case), case.because) for case in cases if case.because),
    )


def _ledger_row(case: Case) -> Iterator[str]:
    computed, printed, tolerance = case.run()
    decimals = [max(round(-math.log10(2 * half)) + 2, 0) for half in case.printed.half_last_digits]
    # Rounded, so that the noise of a platform's last bits moves neither the choice nor the sign of a zero.
    worst = int(np.argmax(np.round(np.abs(computed - printed) / tolerance, 6)))
    difference = round(float(computed[worst] - printed[worst]), decimals[worst]) + 0.0
    yield f"`{case.key}`"
    yield f"{case.page} ({case.kind})" if case.page != "-" else case.kind
    yield case.what + (f"; `{case.arithmetic}`" if case.arithmetic else "")
    yield _with_unit(" ".join(case.printed.texts), case)
    yield " ".join(f"{round(value, places) + 0.0:.{places}f}" for value, places in zip(computed, decimals, strict=True))
    yield case.tolerance if case.tolerance.endswith("%") else f"{tolerance[worst]:g}"
    yield f"{difference:+.{decimals[worst]}f}"
    yield "**differs**" if misses(computed, printed, tolerance).any() else "agrees"
    yield case.transcribed.removeprefix(_ONE_TRANSCRIBER)


def _with_unit(text: str, case: Case) -> str:
    return text if text.endswith("%") else f"{text} {case.printed.unit}".strip()


# --- flags and columns -----------------------------------------------------------------------------------------------


def flags_page() -> str:
    """Every flag."""
    kinds = sorted(FLAGS.values(), key=lambda kind: -SEVERITIES.index(kind.severity))
    return _page(
        "Flags",
        "A flag is a doubt about one outlet. `flags.csv` says in words what raised it; `status` in `outlets.csv` is "
        "`ok` where there is none.",
        _table(
            ("flag", "severity", "raised when", "what to do"),
            ((f"`{kind.key}`", kind.severity, kind.trigger, kind.remedy) for kind in kinds),
        ),
    )


def columns_page() -> str:
    """Every column of every table."""
    return _page(
        "Tables and their columns",
        "CSV in UTF-8, one header row, empty = missing. `tables.json` of a run says the same for its own columns. "
        "`{T}` is the return period in years as the project writes it: the column is repeated for each.",
        _columns(),
    )


def _columns() -> Iterator[str]:
    for table in tables.ALL:
        yield from (f"## {table.name}.csv", "", f"A row is {table.meaning}.", "")
        yield from _table(
            ("column, US units", "column, SI units", "unit", "type", "meaning", "may be edited"),
            map(_column, table.columns),
        )
        yield ""


def _column(column: tables.Column) -> Iterator[str]:
    units = [column.unit_in("us"), column.unit_in("si")]
    yield f"`{column.name('us')}`"
    yield f"`{column.name('si')}`"
    yield ", ".join(dict.fromkeys(filter(None, units)))
    yield column.type
    choices = f" (one of {', '.join(column.choices)})" if column.choices else ""
    yield column.meaning + choices + ("; only where the project asks for it" if column.optional else "")
    yield "yes" if column.editable else ""


# --- conformance -----------------------------------------------------------------------------------------------------


def conformance_page() -> str:
    """The score table of terrains with exact answers, and what is left of the grid's staircase in lengths."""
    return _page(
        "Terrains with exact answers",
        "Closed-form terrains with answers known on paper, and what this package (with its default conditioning), "
        "pysheds and pyflwdir make of each, asked in the same way. `tests/conformance/kit.py` holds terrains, answers "
        "and the questions; any program that gives every cell a next one can be asked: "
        "`answers(router)`. `make docs` asks all three again. A wrong answer is in **bold**.",
        _conformance(),
    )


def _conformance() -> Iterator[str]:
    kept = scores.kept()
    names = [f"{side} {kept[side]['version']}".strip() for side in SIDES]
    yield from _table(("", *names), scores.totals())
    yield from (
        "",
        "What lies behind the differences: pyflwdir's `from_dem` lets water follow the order of its flood, which "
        "drains every cell but is not the steepest way; it takes the earth for a sphere. pysheds takes slopes in "
        "degrees as they are and has no cell areas there; the increments that drain its flats do not always survive in "
        "floats of this size. Both fill and neither cuts, so that an embankment with a sag is crossed at the sag. "
        "Stepping to the steepest neighbour is a choice; theirs may suit other ends better.",
        "",
    )
    yield from _table(("terrain", "question", "exact", *SIDES), scores.score_table())
    yield from (
        "",
        "## What is left of the grid's staircase in lengths",
        "",
        "Error in percent of the length of a flow path, for valleys and planes that fall to different azimuths. Steps "
        "to eight neighbours overstate a straight line by up to 8.2 %. Weights for the two kinds of steps (Borgefors "
        '1986) centre that error but shorten paths along the axes and diagonals; `length_correction = "straight"` '
        "gives every stretch that could be a straight line the length of that line, whatever its angle. Reaches of "
        "the `streams` layer, drainage density and time-area curves stay with the steps.",
        "",
        "On an even plane water goes the same way at every step and drifts off the fall line: the path is straight, "
        "and too long by 1 / cos of the angle between. No correction of the path's length can know that, and none is "
        "made. Real hillsides gather water within a few cells, and the path then follows a valley.",
        "",
    )
    yield from _table(
        (
            "azimuth",
            "valley, steps (`path_length_raw`)",
            "valley, weighted steps",
            "valley, `straight`",
            "plane, `straight`",
        ),
        scores.length_table(),
    )


PAGES: dict[str, Callable[[], str]] = {
    "methods.md": methods_page,
    "ledger.md": ledger_page,
    "flags.md": flags_page,
    "columns.md": columns_page,
    "conformance.md": conformance_page,
}

if __name__ == "__main__":
    from docs import pictures

    scores.collect()
    pictures.draw_all()
    for name, page in PAGES.items():
        (FOLDER / name).write_text(page(), encoding="utf-8")
        print(FOLDER / name)
