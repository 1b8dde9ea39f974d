"""The pages in docs/ say what the registers and the case files say now, and every link in docs/ leads somewhere."""

import dataclasses
import re

import pytest
from docs.pages import FOLDER, PAGES, ledger_page, methods_page, transcription
from published.case_files import load_all

from basinwright import tables
from basinwright.flags import FLAGS
from basinwright.registry import methods


@pytest.mark.parametrize("name", PAGES)
def test_page_is_up_to_date(name: str) -> None:
    assert (FOLDER / name).read_text(encoding="utf-8") == PAGES[name](), f"docs/{name} is old: run make docs"


def test_methods_page_has_every_method_with_its_range() -> None:
    text = methods_page()
    for kind in ("timing", "unit_hydrograph", "storm"):
        for entry in methods(kind).values():
            section = text.partition(f"### {entry.key}: {entry.name}\n")[2].partition("\n### ")[0]
            assert str(entry.source) in section
            assert entry.form in section
            assert all(f"`{name}` | {bounds.low:.6g} | " in section or "open" in section
                       for name, bounds in entry.valid_range.items())  # fmt: skip


def test_ledger_counts_every_case_once() -> None:
    text = ledger_page()
    cases = load_all()
    assert f"**{len(cases)} cases" in text
    assert all(f"\n| `{case.key}` | " in text for case in cases)
    counted = text.partition("how the printed numbers reached us")[2].partition("\n\n")[0]
    assert sum(map(int, re.findall(r"\| (\d+) \|$", counted, re.MULTILINE))) == len(cases)
    assert "; 0 differ.**" in text


def test_transcription_must_say_how() -> None:
    case = dataclasses.replace(load_all()[0], transcribed="the basinwright developers, from the print")
    assert transcription(case) == "print"
    with pytest.raises(ValueError, match="names no print"):
        transcription(dataclasses.replace(case, transcribed="the basinwright developers"))


def test_flags_and_columns_are_complete() -> None:
    assert all(f"| `{key}` | {kind.severity} | " in PAGES["flags.md"]() for key, kind in FLAGS.items())
    text = PAGES["columns.md"]()
    assert all(f"`{column.name('us')}`" in text for table in tables.ALL for column in table.columns)


def test_links_lead_somewhere() -> None:
    for page in FOLDER.glob("*.md"):
        for target in re.findall(r"\]\(([^)#:]+)(?:#[^)]*)?\)", page.read_text(encoding="utf-8")):
            assert (page.parent / target).exists(), f"{page.name} links to {target}"
