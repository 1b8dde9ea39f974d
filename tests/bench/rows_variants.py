"""What scenarios cost over the run of their base."""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

from harness import Row

ROWS = [
    Row(
        name="scenarios-3",
        work="the sample's whole run with three scenarios (a grown town, more rain, wet soils), report included, "
        "without the second opinion: time over that of the run without scenarios, the shortest of five each",
        unit="ratio",
        ours="extra_cost",
        target=0.5,
        goal="at_most",
        cells=670_000,
    ),
]

THIRD = """
[[scenario]]
name = "wet soils"
runoff = { moisture = "III" }
"""


def extra_cost(cells: int) -> float:
    """Time that three scenarios add, over that of the base run."""
    del cells  # the sample is as large as it is
    from basinwright import pipeline

    with tempfile.TemporaryDirectory(prefix="basinwright-bench-") as folder:
        base = pipeline.copy_sample(Path(folder) / "county")
        text = base.read_text(encoding="utf-8").replace('second_opinion = "all"', 'second_opinion = "none"')
        scenarios = base.with_name("scenarios.toml")
        scenarios.write_text(text + THIRD, encoding="utf-8")
        base.write_text(text[: text.index("[[scenario]]")], encoding="utf-8")

        def seconds(file: Path) -> float:
            start = time.perf_counter()
            pipeline.run(file, out=Path(folder) / "out", overwrite=True)
            return time.perf_counter() - start

        seconds(scenarios)
        pairs = [(seconds(base), seconds(scenarios)) for _ in range(5)]
        alone, with_three = (min(times) for times in zip(*pairs, strict=True))
        return with_three / alone - 1.0
