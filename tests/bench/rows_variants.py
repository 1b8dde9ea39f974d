"""What scenarios cost over the run of their base."""

from __future__ import annotations

import tempfile
import time
from pathlib import Path

import numpy as np
from harness import Row

ROWS = [
    Row(
        name="scenarios-3",
        work="the sample's whole run with three scenarios (other land cover, more rain, wet soils), report included, "
        "without the second opinion: CPU time over that of the run without scenarios, both after one to warm up",
        unit="ratio",
        ours="extra_cost",
        target=0.5,
        goal="at_most",
        cells=670_000,
    ),
]

SCENARIOS = """
[[scenario]]
name = "built out"
cover = { raster = "built.tif" }

[[scenario]]
name = "wetter"
storm = { depth_factor = 1.15 }

[[scenario]]
name = "wet soils"
runoff = { moisture = "III" }
"""


def extra_cost(cells: int) -> float:
    """CPU time that three scenarios add, over that of the base run."""
    del cells  # the sample is as large as it is
    from basinwright import pipeline

    with tempfile.TemporaryDirectory(prefix="basinwright-bench-") as folder:
        base = pipeline.copy_sample(Path(folder) / "county")
        text = base.read_text(encoding="utf-8").replace('second_opinion = "all"', 'second_opinion = "none"')
        base.write_text(text, encoding="utf-8")
        _build_out(base.parent)
        scenarios = base.with_name("scenarios.toml")
        scenarios.write_text(text + SCENARIOS, encoding="utf-8")

        def seconds(file: Path) -> float:
            start = time.process_time()
            pipeline.run(file, out=Path(folder) / "out", overwrite=True)
            return time.process_time() - start

        seconds(scenarios)
        pairs = [(seconds(base), seconds(scenarios)) for _ in range(5)]
        alone, with_three = (min(times) for times in zip(*pairs, strict=True))
        return with_three / alone - 1.0


def _build_out(folder: Path) -> None:
    """Turn the fields of the eastern half into a town."""
    import rasterio

    with rasterio.open(folder / "landcover.tif") as source:
        cover, profile = source.read(1), source.profile
    east = np.arange(cover.shape[1]) > cover.shape[1] // 2
    cover[np.isin(cover, (71, 81, 82)) & east] = 23
    with rasterio.open(folder / "built.tif", "w", **profile) as target:
        target.write(cover, 1)
