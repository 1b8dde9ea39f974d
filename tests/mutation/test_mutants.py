"""The mutation check itself: which slips it makes, that each compiles, and that its reasons still name living lines."""

import yaml
from mutation.mutants import Cell, cells_of, mutants_of, other_last_digit
from mutation.mutate import PACKAGE, REASONS, formula_slips, source_of
from mutation.report import reason_of

SOURCE = b'''"""Hours, 3 of them."""
import numpy as np


def time_h(length_m: "float", slope=0.5):
    if length_m > 9:
        raise ValueError(f"{length_m + 1} is over 9")
    a = np.maximum(np.log(length_m / M_PER_FT), 1.0)
    return -a * slope**-0.385 if slope <= 2 else (a + 7)
'''


def changes() -> set[str]:
    return {mutant.change for mutant in mutants_of("room/file.py", SOURCE)}


def test_every_kind_of_slip_is_made() -> None:
    assert {
        "0.5 -> 0.6",
        "0.5 -> (-0.5)",
        "np.maximum -> np.minimum",
        "np.log -> np.log10",
        "/ M_PER_FT -> * M_PER_FT",
        "M_PER_FT -> 1.0",
        "1.0 -> 2.0",
        "-a -> a",
        "* slope**-0.385 -> / slope**-0.385",
        "-0.385 -> 0.385",
        "-0.385 -> -0.386",
        "slope <= 2 -> slope <= 3",
        "<= 2 -> >= 2",
        "+ 7 -> - 7",
    } <= changes()


def test_errors_and_words_are_left_alone() -> None:
    assert not any("9" in change for change in changes())
    assert "+ 1 -> - 1" not in changes()
    assert "3 -> 4" not in changes()


def test_a_slip_changes_its_row_only() -> None:
    for mutant in mutants_of("room/file.py", SOURCE):
        before, after = SOURCE.decode().splitlines(), mutant.applied(SOURCE).decode().splitlines()
        assert [row for row, (old, new) in enumerate(zip(before, after, strict=True), 1) if old != new] == [mutant.row]
        assert mutant.line == before[mutant.row - 1].strip()


def test_last_digit() -> None:
    numbers = ("0.385", "19", "1900.0", "1e-9", "5.0", "100_000", ".059")
    assert [other_last_digit(number) for number in numbers] == [
        "0.386", "18", "1901.0", "2e-9", "6.0", "100_001", ".058"]  # fmt: skip


def test_slips_of_the_rooms_compile() -> None:
    slips = formula_slips()
    assert len(slips) > 1000
    for mutant in slips[::10]:
        compile(mutant.applied(source_of(mutant.file)), mutant.file, "exec")


def test_cells_are_spread_over_columns_of_numbers() -> None:
    rows = [{"key": f"a{row}", "n": f"0.{row}", "m": "" if row % 2 else "7"} for row in range(9)]
    cells = cells_of("t", rows)
    assert [(cell.row, cell.after) for cell in cells if cell.column == "n"] == [
        (0, "1.0"), (2, "0.3"), (4, "0.5"), (6, "0.7"), (8, "0.9")]  # fmt: skip
    assert [cell.row for cell in cells if cell.column == "m"] == [0, 2, 4, 6, 8]
    assert {cell.column for cell in cells} == {"n", "m"}


def test_reasons_name_lines_and_columns_that_exist() -> None:
    from basinwright import published

    reasons = yaml.safe_load(REASONS.read_text(encoding="utf-8"))
    for entry in reasons["formulas"]:
        source = (PACKAGE / entry["file"]).read_bytes()
        slips = [mutant for mutant in mutants_of(entry["file"], source) if mutant.line == entry["line"]]
        assert slips, f"{entry['file']}: no slip in {entry['line']!r}"
        assert set(entry.get("changes", [])) <= {mutant.change for mutant in slips}, entry
        assert all(entry["reason"] for _ in slips)
    for entry in reasons["tables"]:
        assert set(entry.get("columns", [])) <= set(published.table(entry["table"]).columns), entry


def test_a_reason_is_found_by_line_and_by_column() -> None:
    reasons = {
        "formulas": [{"file": "room/file.py", "line": "a = 1", "changes": ["1 -> 2"], "reason": "because"}],
        "tables": [{"table": "t", "columns": ["x"], "reason": "so"}],
    }
    one, minus = mutants_of("room/file.py", b"a = 1\n")
    assert {reason_of(one, reasons), reason_of(minus, reasons)} == {"because", ""}
    assert reason_of(Cell("t", 0, "x", "1", "2"), reasons) == "so"
    assert reason_of(Cell("t", 0, "y", "1", "2"), reasons) == ""
