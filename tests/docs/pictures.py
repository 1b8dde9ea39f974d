"""The pictures of docs/conditioning.md: terrain before and after, drawn by `make docs`. The same input, the same bytes.

Every picture shows the same seeded valley with one thing in it: hillshade, the channels that the routing draws with
their contributing area, and the path from the head of the valley.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from conformance.kit import CELL_M, Routed

FOLDER = Path(__file__).parents[2] / "docs" / "pictures"
ROWS, COLS = 90, 120
AXIS = 45
HEAD = (AXIS + 14, 12)
"""From where the path to look at starts: on the southern side, near the valley's head."""
CHANNEL_CELLS = 60
_WATER, _PATH, _MARK = "#2166ac", "#b2182b", "#1a1a1a"


@dataclass(frozen=True, eq=False)
class Panel:
    """One side of a picture.

    Parameters
    ----------
    title : str
    elevation_m : (rows, cols) array
    down : (rows, cols) array
        Flat index of the next cell, -1 for none.
    marks : list of (x, y, style)
        What was mapped, in columns and rows.
    """

    title: str
    elevation_m: np.ndarray
    down: np.ndarray
    marks: tuple[tuple[np.ndarray, np.ndarray, str], ...] = ()


def ground(seed: int = 4) -> np.ndarray:
    """A valley that falls to the east, with side valleys and a little roughness."""
    rng = np.random.default_rng(seed)
    wave = np.hypot(np.fft.fftfreq(ROWS)[:, None], np.fft.rfftfreq(COLS)[None, :])
    wave[0, 0] = np.inf
    rough = np.fft.irfft2(np.fft.rfft2(rng.standard_normal((ROWS, COLS))) * wave**-2.6, s=(ROWS, COLS))
    row, col = np.mgrid[:ROWS, :COLS]
    axis = AXIS + 4 * np.sin(col / 17.0)
    return 205.0 + 1.6 * rough / rough.std() + 0.5 * np.abs(row - axis) - 0.25 * col


def route(z: np.ndarray, mode: str = "breach", **mapped: object) -> np.ndarray:
    """Next cell of every cell by this package."""
    from basinwright.terrain import Conditioning, condition_and_route
    from basinwright.terrain.hydrography import prescribe

    size = np.full(z.shape[0], CELL_M)
    constraints = prescribe(z, size, size, size**2, **mapped).constraints if mapped else None  # type: ignore[arg-type]
    terrain = condition_and_route(z, size, size, size**2, Conditioning(mode), constraints)  # type: ignore[arg-type]
    codes = terrain.directions_grid.astype(np.int64)
    south, east = np.array([-1, -1, 0, 1, 1, 1, 0, -1, 0]), np.array([0, 1, 1, 1, 0, -1, -1, -1, 0])
    at = np.minimum(codes, 8)
    down = np.arange(z.size).reshape(z.shape) + south[at] * z.shape[1] + east[at]
    return np.where(codes < 8, down, -1)


def untreated(z: np.ndarray) -> np.ndarray:
    """Next cell by the steepest descent on the terrain as it is: water stops in every pit and on every flat."""
    from basinwright.kernels import directions

    padded = np.pad(z.astype(np.float32), 1, constant_values=np.inf).ravel()
    codes = np.empty(padded.size, np.uint8)
    size = np.full(z.shape[0], CELL_M)
    directions.steepest_descent(padded, *z.shape, size, size, codes)
    grid = codes.reshape(z.shape[0] + 2, -1)[1:-1, 1:-1].astype(np.int64)
    south, east = np.array([-1, -1, 0, 1, 1, 1, 0, -1, 0]), np.array([0, 1, 1, 1, 0, -1, -1, -1, 0])
    at = np.minimum(grid, 8)
    down = np.arange(z.size).reshape(z.shape) + south[at] * z.shape[1] + east[at]
    return np.where(grid < 8, down, -1)


def embankment() -> list[Panel]:
    """A road across the valley with a sag off the axis: filled, breached."""
    z = ground()
    floor = z[:, 68:71].min()
    crest = np.full(ROWS, floor + 4.0)
    crest[AXIS - 16 : AXIS - 11] -= 1.0
    z[:, 68:71] = np.maximum(z[:, 68:71], crest[:, None])
    road = (np.full(2, 69.0), np.array([AXIS - 22.0, AXIS + 22.0]), "road")
    return [
        Panel('filled: over the sag (conditioning = "fill")', z, route(z, "fill"), (road,)),
        Panel('breached: through, on the axis ("breach")', z, route(z), (road,)),
    ]


def lake() -> list[Panel]:
    """A lake whose surface is level in the terrain: untreated, conditioned."""
    z = ground()
    row, col = np.mgrid[:ROWS, :COLS]
    lowest = AXIS - 10 + np.argmin(z[AXIS - 10 : AXIS + 11], axis=0)
    wet = ((row - lowest) / 7.0) ** 2 + ((col - 55) / 14.0) ** 2 < 1
    z[wet] = z[lowest[69], 69] + 0.05
    shore = _outline(wet)
    return [
        Panel("as it is: water ends in the lake", z, untreated(z), shore),
        Panel("conditioned: gathered, across to the outlet", z, route(z), shore),
    ]


def stream() -> list[Panel]:
    """A mapped line two cells off its valley: without, with it."""
    from basinwright.terrain.hydrography import Lines

    z = ground()
    down = route(z)
    path = Routed(down, None).path(HEAD)
    rows, cols = path[6:, 0] - 2.0, path[6:, 1] + 0.0
    line = Lines(cols + 0.5, rows + 0.5, np.array([0, rows.size]))
    drawn = ((cols, rows, "line"),)
    return [
        Panel("terrain alone: the channel keeps to its valley", z, down, drawn),
        Panel("stream_lines: one channel, on the map's line", z, route(z, streams=line), drawn),
    ]


def sink() -> list[Panel]:
    """A quarry: drained, declared a sink."""
    z = ground()
    row, col = np.mgrid[:ROWS, :COLS]
    quarry = np.hypot(row - 36, col - 58) < 7
    z[quarry] = z[quarry].min() - 6.0
    edge = _outline(quarry)
    return [
        Panel("not declared: the quarry passes its water on", z, route(z), edge),
        Panel("sinks: the quarry keeps its water", z, route(z, sinks=quarry), edge),
    ]


def _outline(mask: np.ndarray) -> tuple[tuple[np.ndarray, np.ndarray, str], ...]:
    """Edges of the cells of a mask as one broken line."""
    xs: list[float] = []
    ys: list[float] = []
    for row, col in np.argwhere(mask):
        for south, east in ((-1, 0), (0, 1), (1, 0), (0, -1)):
            if not mask[row + south, col + east]:
                x, y = col + east / 2, row + south / 2
                xs += [x - south / 2, x + south / 2, np.nan]
                ys += [y - east / 2, y + east / 2, np.nan]
    return ((np.array(xs), np.array(ys), "line"),)


def draw(name: str, panels: list[Panel]) -> None:
    """Draw the panels side by side."""
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot as plt
    from matplotlib.colors import LightSource

    figure, axes = plt.subplots(1, len(panels), figsize=(9.6, 4.1), dpi=100, layout="constrained")
    for axis, panel in zip(axes, panels, strict=True):
        shade = LightSource(315, 45).hillshade(panel.elevation_m, vert_exag=4, dx=CELL_M, dy=CELL_M)
        height = (panel.elevation_m - 180.0) / 50.0
        tint = plt.get_cmap("YlGn_r")(np.clip(0.45 + 0.5 * height, 0, 1))[..., :3]
        axis.imshow((0.5 + 0.5 * tint) * (0.6 + 0.4 * shade[..., None]), interpolation="nearest")
        _channels(axis, panel.down)
        for x, y, style in panel.marks:
            width, dash = (3.0, "-") if style == "road" else (1.2, (0, (4, 2)))
            axis.plot(x, y, color=_MARK, lw=width, ls=dash, alpha=0.8 if style == "line" else 0.45)
        path = Routed(panel.down, None).path(HEAD)
        axis.plot(path[:, 1], path[:, 0], color=_PATH, lw=1.6)
        axis.plot(path[-1, 1], path[-1, 0], "o", color=_PATH, ms=5)
        axis.set(title=panel.title, xticks=[], yticks=[], xlim=(-0.5, COLS - 0.5), ylim=(ROWS - 0.5, -0.5))
        axis.title.set_fontsize(9.5)
    FOLDER.mkdir(exist_ok=True)
    figure.savefig(FOLDER / f"{name}.png", metadata={"Software": None})
    plt.close(figure)


def _channels(axis: object, down: np.ndarray) -> None:
    """Channels as lines, wider with more area."""
    from matplotlib.collections import LineCollection

    ncols = down.shape[1]
    order = np.argsort(-_steps_to_end(down), kind="stable")
    cells = np.ones(down.size)
    for cell in order:
        if (below := down.flat[cell]) >= 0:
            cells[below] += cells[cell]
    here = np.flatnonzero((cells >= CHANNEL_CELLS) & (down.ravel() >= 0))
    ends = down.ravel()[here]
    lines = np.stack([np.column_stack([c % ncols, c // ncols]) for c in (here, ends)], axis=1)
    width = 0.5 + 0.9 * np.log10(cells[here] / CHANNEL_CELLS)
    axis.add_collection(LineCollection(lines, linewidths=width, colors=_WATER, capstyle="round"))  # type: ignore[attr-defined]


def _steps_to_end(down: np.ndarray) -> np.ndarray:
    """Steps from every cell to where its water ends."""
    below = down.ravel()
    at = np.where(below >= 0, below, np.arange(below.size))
    steps = (below >= 0).astype(np.int64)
    for _ in range(int(below.size).bit_length()):
        steps, at = steps + np.where(at != np.arange(below.size), steps[at], 0), at[at]
    return steps


PICTURES = {"embankment": embankment, "lake": lake, "stream": stream, "sink": sink}


def draw_all() -> None:
    """Draw every picture."""
    for name, panels in PICTURES.items():
        draw(name, panels())


if __name__ == "__main__":
    draw_all()
