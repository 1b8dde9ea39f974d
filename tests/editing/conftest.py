import csv
import io
import shutil
from pathlib import Path

import numpy as np
import pytest
from projects import make_project, read_table, v_valley

from basinwright import pipeline

Rows = list[dict[str, str]]


class Run:
    """A finished run whose tables a person edits."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def read(self, name: str, outlet_id: str | None = None) -> Rows:
        return [row for row in read_table(self.folder, name) if outlet_id in (None, row["outlet_id"])]

    def save(self, name: str, rows: Rows) -> None:
        text = io.StringIO(newline="")
        writer = csv.DictWriter(text, list(rows[0]), lineterminator="\r\n")
        writer.writeheader()
        writer.writerows(rows)
        (self.folder / f"{name}.csv").write_text(text.getvalue(), encoding="utf-8", newline="")

    def edit(self, table: str, where: dict[str, str], **cells: str) -> None:
        """Write cells into the one row that has the values of `where`."""
        rows = self.read(table)
        chosen = [row for row in rows if where.items() <= row.items()]
        assert len(chosen) == 1
        assert cells.keys() <= chosen[0].keys()
        chosen[0].update(cells)
        self.save(table, rows)

    def row(self, table: str, **where: str) -> dict[str, str]:
        (row,) = [row for row in self.read(table) if where.items() <= row.items()]
        return row

    def retime(self) -> None:
        pipeline.retime(self.folder)

    def files(self) -> dict[str, bytes]:
        """The bytes of every file but those of the store."""
        paths = (path for path in self.folder.rglob("*") if path.is_file() and ".store" not in path.parts)
        return {path.relative_to(self.folder).as_posix(): path.read_bytes() for path in paths}

    def tables(self) -> dict[str, bytes]:
        return {path.name: path.read_bytes() for path in self.folder.glob("*.csv")}


@pytest.fixture(scope="session")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A valley with three classes of cover: A lies below B, C has a supplied time, D is a single cell."""
    folder = tmp_path_factory.mktemp("editing")
    elevation = v_valley(80, 61, 0.05, 0.02) + np.random.default_rng(1).uniform(0.0, 0.02, (80, 61))
    elevation[10, 5] += 30.0
    cover = np.full(elevation.shape, 71)
    cover[:40], cover[:, 40:] = 41, 82
    file = make_project(
        folder,
        elevation,
        {"A": (79, 30), "B": (45, 30), "C": (78, 20), "007": (10, 5)},
        cover=cover,
        columns={"tc_h": {"C": "1.5"}, "name": {"A": "Mill Lane, lower"}},
        overrides={"outlets": {"name": "name"}},
    )
    return pipeline.run(file).folder


@pytest.fixture
def whole(finished: Path, tmp_path: Path) -> Run:
    """A copy of the whole run."""
    return Run(Path(shutil.copytree(finished, tmp_path / "out")))


@pytest.fixture
def run(finished: Path, tmp_path: Path) -> Run:
    """A copy of its tables alone: all that `retime` needs, and quicker, since no layer is written."""
    folder = tmp_path / "out"
    folder.mkdir()
    for path in [*finished.glob("*.csv"), *finished.glob("*.json")]:
        shutil.copy(path, folder)
    return Run(folder)
