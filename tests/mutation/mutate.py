"""Mutation check: does a published case fail when a formula slips? Run by ``make mutants``, outside the tests.

Every mutant (`mutants.mutants_of`) of the hydrology half is imported in a forked child in place of its module; the
published cases run there until one fails. What no case notices meets the tests of its room, and what survives those
needs a reason in ``survivors.yml``. Then single digits of the published tables are changed in the same way. Sources and
tables are never written; the result is ``docs/mutation.md``.
"""

from __future__ import annotations

import argparse
import contextlib
import dataclasses
import hashlib
import importlib
import importlib.abc
import importlib.machinery
import io
import os
import signal
import sys
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from functools import cache
from importlib.util import spec_from_file_location
from pathlib import Path
from typing import Any

import yaml
from mutation.mutants import Cell, Mutant, Outcome, cells_of, mutants_of
from mutation.report import page, reason_of, survivors

REPOSITORY = Path(__file__).parents[2]
PACKAGE = REPOSITORY / "src" / "basinwright"
PAGE = REPOSITORY / "docs" / "mutation.md"
REASONS = Path(__file__).with_name("survivors.yml")

ROOMS = ("timing", "storms", "runoff", "hydrograph")
_SECONDS = {"case": 20, "test": 150}
"""A child that takes longer counts as noticed: the slip made a loop endless."""


# --- the slips -------------------------------------------------------------------------------------------------------


def formula_slips() -> list[Mutant]:
    """List the mutants of every module of the rooms."""
    return [mutant for file in files() for mutant in mutants_of(file, source_of(file))]


def files() -> list[str]:
    """List the modules of the rooms, by their paths below the package."""
    return [path.relative_to(PACKAGE).as_posix() for room in ROOMS for path in sorted((PACKAGE / room).rglob("*.py"))]


def table_slips() -> list[Cell]:
    """List the changed digits of every published table."""
    from basinwright import published

    return [cell for name in published.names() for cell in cells_of(name, published.table(name).rows)]


@cache
def source_of(file: str) -> bytes:
    """Return the text of a module as it stood when the run began."""
    return (PACKAGE / file).read_bytes()


# --- putting a slip in place: only in a child ------------------------------------------------------------------------


class _Mutated(importlib.abc.MetaPathFinder, importlib.machinery.SourceFileLoader):
    """Finds one module and compiles other text for it."""

    def __init__(self, module: str, path: Path, text: bytes) -> None:
        importlib.machinery.SourceFileLoader.__init__(self, module, str(path))
        self.text = text

    def find_spec(self, fullname: str, path: Any = None, target: Any = None) -> importlib.machinery.ModuleSpec | None:
        return spec_from_file_location(fullname, self.path, loader=self) if fullname == self.name else None

    def get_code(self, fullname: str) -> Any:
        return compile(self.text, self.path, "exec", dont_inherit=True)


def put_in_place(slip: Mutant | Cell) -> None:
    """Make the slip part of this process; the rooms must not have been imported."""
    if isinstance(slip, Mutant):
        path = PACKAGE / slip.file
        module = "basinwright." + slip.file.removesuffix(".py").removesuffix("/__init__").replace("/", ".")
        sys.meta_path.insert(0, _Mutated(module, path, slip.applied(source_of(slip.file))))
        return
    from basinwright import published

    original = published.table
    right = original(slip.table)
    row = {**right.rows[slip.row], slip.column: slip.after}
    wrong = dataclasses.replace(right, rows=(*right.rows[: slip.row], row, *right.rows[slip.row + 1 :]))
    published.table = lambda name: wrong if name == slip.table else original(name)  # type: ignore[assignment]


# --- noticing it -----------------------------------------------------------------------------------------------------


def failing_case(slip: Mutant | Cell) -> str:
    """Return the first published case that the slip breaks, empty if none does: those of its own room come first."""
    from published.case_files import load_all, misses

    put_in_place(slip)
    room = slip.file.split("/")[0] if isinstance(slip, Mutant) else ""
    for case in sorted(load_all(), key=lambda case: not case.call.startswith(room)):
        try:
            if misses(*case.run()).any():
                return case.key
        except Exception:
            return case.key
    return ""


class _FirstFailure:
    """A pytest plugin that keeps the name of the first test that failed."""

    name = ""

    def pytest_runtest_logreport(self, report: Any) -> None:
        if report.failed and not self.name:
            self.name = report.nodeid

    def pytest_collectreport(self, report: Any) -> None:
        if report.failed and not self.name:
            self.name = report.nodeid


def failing_test(slip: Mutant | Cell | None) -> str:
    """Return the first test that fails with a slip, empty if none does: without one, of all that stand by."""
    import hypothesis
    import pytest

    if slip:
        put_in_place(slip)
    hypothesis.settings.register_profile("mutants", database=None, derandomize=True, deadline=None)
    hypothesis.settings.load_profile("mutants")
    first = _FirstFailure()
    options = ["-x", "-q", "-p", "no:cacheprovider", "-p", "no:xdist", "-W", "ignore"]
    status = pytest.main([*options, *map(str, tests_of(slip))], plugins=[first])
    return "" if status == pytest.ExitCode.OK else first.name or f"pytest: {status}"


def tests_of(slip: Mutant | Cell | None) -> list[Path]:
    """List the tests that may notice: those of a mutant's room, those that name the family of a table."""
    tests = REPOSITORY / "tests"
    first = [tests / "test_printed_ranges.py", tests / "test_schemes.py"]
    if isinstance(slip, Mutant):
        return [first[0], tests / slip.file.split("/")[0]]
    modules = [*first, *(path for room in ROOMS for path in sorted((tests / room).glob("test_*.py")))]
    family = slip.table.split("_")[0] + "_" if slip else ""
    return [path for path in modules if family in path.read_text(encoding="utf-8")]


# --- children --------------------------------------------------------------------------------------------------------


def in_children(work: Callable[[Any], str], items: Sequence[Any], jobs: int, seconds: int) -> Iterator[tuple[Any, str]]:
    """Do the work of each item in a child of its own, `jobs` at a time; yield item and answer as they come."""
    waiting, running = list(reversed(items)), {}
    while waiting or running:
        while waiting and len(running) < jobs:
            item = waiting.pop()
            reader, writer = os.pipe()
            child = os.fork()
            if not child:
                _answer(work, item, writer, seconds)
            os.close(writer)
            running[child] = item, reader
        child, status = os.wait()
        item, reader = running.pop(child)
        with os.fdopen(reader) as answer:
            text = answer.read()
        yield item, text if not status else f"ended by signal {os.WTERMSIG(status)}"


def _answer(work: Callable[[Any], str], item: Any, writer: int, seconds: int) -> None:
    """Write the answer and end, whatever happens: the child must not return into the parent's code."""
    signal.alarm(seconds)
    try:
        with open(os.devnull, "w") as nowhere:
            os.dup2(nowhere.fileno(), 1)
            os.dup2(nowhere.fileno(), 2)
            with contextlib.redirect_stdout(io.StringIO()), contextlib.redirect_stderr(io.StringIO()):
                text = work(item)
    except BaseException as error:
        text = f"{type(error).__name__} on import"
    os.write(writer, text.encode()[:4096])
    os._exit(0)


def outcomes(slips: Iterable[Mutant | Cell], jobs: int) -> list[Outcome]:
    """Run the cases against every slip, then the tests against those that no case noticed."""
    found: dict[Mutant | Cell, Outcome] = {slip: Outcome(slip, "", "") for slip in slips}
    for noticed_by, work in (("case", failing_case), ("test", failing_test)):
        left = [slip for slip, outcome in found.items() if not outcome.noticed_by]
        begun = time.monotonic()
        for count, (slip, which) in enumerate(in_children(work, left, jobs, _SECONDS[noticed_by]), 1):
            if which:
                found[slip] = Outcome(slip, noticed_by, which)
            if count % 50 == 0 or count == len(left):
                elapsed = time.monotonic() - begun
                print(f"  {noticed_by}s: {count} of {len(left)} slips, {elapsed:.0f} s", file=sys.stderr, flush=True)
    return list(found.values())


def warm_up() -> None:
    """Import and compile what the children share, by running every case unharmed; then forget the rooms.

    Raises
    ------
    RuntimeError
        Where a case or a test fails without any slip.
    """
    import hypothesis  # noqa: F401
    import pytest  # noqa: F401
    import scipy.signal  # noqa: F401
    from published.case_files import load_all, misses

    from basinwright import registry

    if wrong := [case.key for case in load_all() if misses(*case.run()).any()]:
        raise RuntimeError(f"cases miss without any slip: {', '.join(wrong)}")
    for room in ROOMS:
        for name in [name for name in sys.modules if f"{name}.".startswith(f"basinwright.{room}.")]:
            del sys.modules[name]
    registry._METHODS.clear()
    if failed := next(in_children(failing_test, [None], 1, _SECONDS["test"]))[1]:
        raise RuntimeError(f"fails without any slip: {failed}")


def digest() -> str:
    """Return a hash of the modules that the last run mutated."""
    return hashlib.sha256(b"".join(map(source_of, files()))).hexdigest()[:16]


def main() -> int:
    """Run the whole check and write the page; 1 where a survivor has no reason."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--jobs", type=int, default=2, help="children at a time")
    jobs = parser.parse_args().jobs
    reasons = yaml.safe_load(REASONS.read_text(encoding="utf-8"))
    warm_up()
    formulas, cells = outcomes(formula_slips(), jobs), outcomes(table_slips(), jobs)
    PAGE.write_text(page(formulas, cells, reasons, digest()), encoding="utf-8")
    print(PAGE)
    unexplained = [slip for slip in survivors(formulas + cells) if not reason_of(slip, reasons)]
    for slip in unexplained:
        print(f"survives without a reason: {slip}", file=sys.stderr)
    return 1 if unexplained else 0


if __name__ == "__main__":
    sys.exit(main())
