"""The benchmark: our work against general-purpose libraries, each side in its own child process.

    python tests/bench/bench.py --out bench.json [--only NAME ...] [--cells N]

Rows come from the modules ``rows_*.py`` beside this file; `harness` says how to add one.
"""

from __future__ import annotations

import argparse
import importlib
import json
import sys
from pathlib import Path

from harness import HERE, Row, measure, shared_folder


def main() -> int:
    """Run the rows asked for and write them."""
    if sys.argv[1:2] == ["--side"]:
        module, function, cells, *args = sys.argv[2:]
        print(json.dumps(getattr(importlib.import_module(module), function)(int(cells), *args)))
        return 0

    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--out", type=Path, default=Path("bench.json"))
    parser.add_argument("--only", nargs="+", metavar="NAME", help="rows whose name begins so")
    parser.add_argument("--cells", type=int, help="size of every input, for a quick look")
    options = parser.parse_args()

    results = []
    with shared_folder():
        for module, row in all_rows():
            if options.only and not row.name.startswith(tuple(options.only)):
                continue
            result = measure(row, module, options.cells)
            results.append(result)
            print(describe(result), flush=True)
    options.out.write_text(json.dumps(results, indent=1) + "\n")
    print(f"{options.out}: {len(results)} rows")
    return 0


def all_rows() -> list[tuple[str, Row]]:
    """Every row with the name of its module."""
    modules = sorted(path.stem for path in HERE.glob("rows_*.py"))
    return [(module, row) for module in modules for row in importlib.import_module(module).ROWS]


def describe(result: dict[str, object]) -> str:
    """One line for the screen."""
    verdict = {True: "met", False: "MISSED", None: "for information"}[result["met"]]  # type: ignore[index]
    numbers = f"{result['ours']:.4g} {result['unit']}"
    if result["peer"] is not None:
        numbers += f", {result['peer_name']} {result['peer']:.4g}, ratio {result['ratio']:.1f}"
    return f"{result['name']}: {numbers} (target {result['target']}, {verdict}): {result['work']}"


if __name__ == "__main__":
    raise SystemExit(main())
