"""The score table: every side of the kit in a process of its own, kept as JSON, and the page that shows it.

``python -m conformance.scores`` asks all sides again and writes ``scores.json``; the page is made from that, so that
whoever reads it needs none of the peers.
"""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
from collections.abc import Iterator
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
from conformance.kit import CELL_M, GROUNDS, SIDES, Ground, Question, oblique_valley, plane, wkt

SCORES = Path(__file__).with_name("scores.json")


def ask(side: str) -> dict[str, dict[str, float | str | None]]:
    """Answers of one side, from a child process."""
    from basinwright.audit import pysheds_cache

    environment = dict(os.environ)
    if side == "pysheds":  # its compiled code is kept apart from ours
        environment["NUMBA_CACHE_DIR"] = str(pysheds_cache().with_name("pysheds-in-tests"))
    child = subprocess.run(
        [sys.executable, "-m", "conformance.kit", side], capture_output=True, text=True, check=False, env=environment
    )
    if child.returncode != 0:
        said = (child.stderr.strip().splitlines() or ["no message"])[-1]
        return {g.name: {q.text: f"failed: {said}" for q in g.questions} for g in GROUNDS}
    answered: dict[str, dict[str, float | str | None]] = json.loads(child.stdout)
    return answered


def collect() -> None:
    """Ask all sides and keep what they say."""
    sides = {side: {"version": "" if side == "basinwright" else version(side), "answers": ask(side)} for side in SIDES}
    SCORES.write_text(json.dumps(sides, indent=1) + "\n", encoding="utf-8")


def kept() -> dict[str, Any]:
    """Scores as last collected."""
    scores: dict[str, Any] = json.loads(SCORES.read_text(encoding="utf-8"))
    return scores


# --- the page --------------------------------------------------------------------------------------------------------


def score_table() -> Iterator[tuple[str, ...]]:
    """Rows of the table: ground, question, exact answer, and what each side says."""
    scores = kept()
    for ground in GROUNDS:
        for i, question in enumerate(ground.questions):
            yield (
                f"**{ground.name}**: {ground.what}" if i == 0 else "",
                question.text,
                _figure(question.exact),
                *(_verdict(question, scores[side]["answers"][ground.name][question.text]) for side in SIDES),
            )


def totals() -> Iterator[tuple[str, ...]]:
    """Right answers of every side, on grounds that need no map and on those that do."""
    scores = kept()
    for words, mapped in (("right on terrain alone", False), ("right with mapped streams and sinks", True)):
        asked = [(g, q) for g in GROUNDS if g.mapped == mapped for q in g.questions]
        cells = []
        for side in SIDES:
            given = [(q, scores[side]["answers"][g.name][q.text]) for g, q in asked]
            offered = [(q, a) for q, a in given if a is not None]
            right = sum(q.right(a) for q, a in offered)
            cells.append(f"{right} of {len(offered)}" if offered else "no such input")
        yield (words, *cells)


def _figure(value: float) -> str:
    return f"{value:.6g}" if math.isfinite(value) else "never"


def _verdict(question: Question, answer: float | str | None) -> str:
    if answer is None:
        return "not offered"
    if isinstance(answer, str):
        return "failed"
    return f"{_figure(answer)}" if question.right(answer) else f"**{_figure(answer)}**"


# --- what is left of the staircase -----------------------------------------------------------------------------------

AZIMUTHS = (90.0, 95.0, 100.0, 105.0, 110.0, 112.0, 113.0, 115.0, 120.0, 125.0, 130.0, 135.0)
CHAMFER = (0.95509, 1.36930)
"""Optimal weights of straight and diagonal steps (Borgefors 1986, Computer Vision, Graphics, and Image Processing 34,
344-371; from memory)."""


def length_errors(ground: Ground, azimuth_deg: float, start: tuple[int, int]) -> tuple[float, float, float]:
    """Error of the length of a path against the fall line it stands for [%]: steps, weighted steps, corrected.

    The true length is how far the path's last cell lies from its first along the fall line.
    """
    from basinwright.grid import Grid
    from basinwright.kernels.trace import trace_paths
    from basinwright.paths.tracing import along
    from basinwright.terrain import condition_and_route

    rows, cols = ground.elevation_m.shape
    grid = Grid(rows, cols, ground.transform, wkt("EPSG:32614"))
    terrain = condition_and_route(ground.elevation_m, grid.dx_m, grid.dy_m, grid.cell_area_m2)
    first = terrain.cells_at(np.array([start[0]]), np.array([start[1]]))
    _, cells = trace_paths(terrain.directions, cols, first, np.array([-1], np.int32))
    at_row, at_col = terrain.rows_cols(cells)
    inside = (at_row > 2) & (at_row < rows - 3) & (at_col > 2) & (at_col < cols - 3)  # the rim turns paths aside
    last = int(np.argmin(inside)) if not inside.all() else cells.size
    cells, at_row, at_col = cells[:last], at_row[:last], at_col[:last]
    distance_m, raw_m, _, _ = along(terrain, np.array([0, last]), cells, "straight")
    a = math.radians(azimuth_deg)
    true_m = CELL_M * ((at_col[-1] - at_col[0]) * math.sin(a) - (at_row[-1] - at_row[0]) * math.cos(a))
    diagonal = (np.diff(at_row) != 0) & (np.diff(at_col) != 0)
    weighted_m = CELL_M * (CHAMFER[0] * (~diagonal).sum() + CHAMFER[1] * diagonal.sum())
    errors = [100.0 * (length / true_m - 1.0) for length in (raw_m[-1], weighted_m, distance_m[-1])]
    return errors[0], errors[1], errors[2]


def length_table() -> Iterator[tuple[str, ...]]:
    """Rows: azimuth; the three errors along a valley; that along a plane, which no correction of the path mends."""
    for azimuth in AZIMUTHS:
        valley = length_errors(oblique_valley(azimuth), azimuth, (60, 60))
        drift = length_errors(plane(azimuth), azimuth, (20, 8))
        yield (f"{azimuth:g}", *(f"{error + 0.0:+.1f}" for error in (*valley, drift[2])))


if __name__ == "__main__":
    collect()
