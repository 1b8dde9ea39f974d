"""A mosaic with a tile that cannot be read: it is named, and what does not need it is computed all the same."""

import json

import numpy as np
import pytest
from projects import make_project, read_table, transform_of, write_raster

from basinwright import pipeline
from basinwright.errors import InputRejected

CRS = "EPSG:32614"


@pytest.fixture(scope="module")
def project(tmp_path_factory):
    """Ground that falls to the south in two valleys, each in a tile of its own; the eastern tile is cut short."""
    folder = tmp_path_factory.mktemp("mosaic")
    row, col = np.mgrid[:120, :240]
    z = 500.0 + 0.5 * (119 - row) + 0.3 * np.abs(col % 120 - 60.0) + np.random.default_rng(1).normal(0, 0.01, row.shape)
    tiles = {"dem": ["west.tif", "east.tif"], "fill_voids": "0 m2"}
    outlets = {"west": (100, 60), "east": (100, 180)}
    file = make_project(folder, z, outlets, overrides={"terrain": tiles})
    for name, part in (("west", z[:, :120]), ("east", z[:, 120:])):
        x = transform_of().c + (0 if name == "west" else 1200.0)
        write_raster(folder / f"{name}.tif", part, transform_of(10.0, (x, transform_of().f)), CRS)
    whole = (folder / "east.tif").read_bytes()
    (folder / "east.tif").write_bytes(whole[: len(whole) // 2])
    return file


def test_the_tile_is_named_and_the_rest_computed(project):
    said = []
    outcome = pipeline.run(project, say=said.append)
    assert any("east.tif: cells: its cells cannot be read (" in line for line in said)
    rows = {row["outlet_id"]: row for row in read_table(outcome.folder, "outlets")}
    assert rows["west"]["status"] in ("ok", "flagged")
    assert float(rows["west"]["area_km2"]) > 0.5
    assert rows["east"]["status"] == "failed" or "EDGE_TOUCH" in rows["east"]["flags"]
    aligned = json.loads((outcome.folder / "run.json").read_text())["alignment"]
    assert [entry["path"] for entry in aligned if "damaged" in entry] == ["east.tif"]


def test_check_lists_it(project):
    with pytest.raises(InputRejected, match=r"east\.tif: cells: its cells cannot be read"):
        pipeline.check(project)
