"""The maps: basins, paths and outlets over the shaded terrain.

A map's own unit is a tenth of a pixel at the width it is made for, so that coordinates are whole numbers. Marks and
letters keep their size while the reader zooms: they stand in groups of class ``k``, which the page scales.
"""

from __future__ import annotations

import base64
import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
from markupsafe import Markup

from basinwright.report import palette, words
from basinwright.report.reading import Outlet, Run, upstream
from basinwright.report.svg import el, join, number, round_step
from basinwright.tables import OUTLETS
from basinwright.units import M_PER_FT, M_PER_MI, System

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from basinwright.grid import Grid

Bounds = tuple[float, float, float, float]
INDEX_WIDTH, PAGE_WIDTH, CLOSE_WIDTH = 8000, 6400, 3600
_UNITS_PER_PIXEL = 10
_SHADE_PIXELS = {INDEX_WIDTH: 1100, PAGE_WIDTH: 560, CLOSE_WIDTH: 200}
"""Rows or columns of the shaded terrain, by width of the map."""
INDEX_POINTS = 160_000
"""Most points of divides and paths on the index map, at about six characters each."""
_TOO_CLOSE = 14 * _UNITS_PER_PIXEL
"""Under this distance the mark of an outlet would cover the point as supplied: the close view shows it."""
_CLOSE_CELLS = 14
_LEAST_CLOSE_M = 100.0


@dataclass(frozen=True)
class Frame:
    """Where a map lies and how large it is drawn.

    Parameters
    ----------
    bounds : tuple of float
        West, south, east, north in map coordinates.
    width, height : int
        Size in the map's own units.
    width_m : float
        What the width stands for [m].
    cell : tuple of float
        Width and height of a terrain cell in the map's own units.
    """

    bounds: Bounds
    width: int
    height: int
    width_m: float
    cell: tuple[float, float]

    def place(self, x: ArrayLike, y: ArrayLike) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Return map coordinates in the map's own units."""
        west, south, east, north = self.bounds
        return (
            (np.asarray(x, dtype=float) - west) / (east - west) * self.width,
            (north - np.asarray(y, dtype=float)) / (north - south) * self.height,
        )

    @property
    def per_unit(self) -> float:
        """Map coordinates for one of the map's own units, east to west."""
        return (self.bounds[2] - self.bounds[0]) / self.width


def grid_of(run: Run) -> Grid:
    """Return the terrain's grid as the manifest describes it."""
    return _grid(*[run.about["grid"][key] for key in ("rows", "columns", "crs")], *run.about["grid"]["transform"])


@lru_cache(maxsize=1)
def _grid(rows: int, columns: int, crs: str, *transform: float) -> Grid:
    from affine import Affine
    from pyproj import CRS

    from basinwright.grid import Grid

    return Grid(rows, columns, Affine(*transform), CRS.from_user_input(crs).to_wkt())


def frame(run: Run, bounds: Bounds, width: int, aspects: tuple[float, float] = (0.55, 1.25)) -> Frame:
    """Return a frame around bounds, widened where it would be too tall or too flat.

    Parameters
    ----------
    run : Run
    bounds : tuple of float
        What it must show.
    width : int
        Width in the map's own units.
    aspects : tuple of float
        Least and greatest height over width.
    """
    grid = grid_of(run)
    west, south, east, north = bounds
    row = int(np.clip(((south + north) / 2 - grid.transform.f) / grid.transform.e, 0, grid.nrows - 1))
    metres_x, metres_y = grid.dx_m[row] / grid.transform.a, -grid.dy_m[row] / grid.transform.e
    span_x, span_y = (east - west) * metres_x, (north - south) * metres_y
    wanted_y = float(np.clip(span_y, aspects[0] * span_x, None))
    wanted_x = max(span_x, wanted_y / aspects[1])
    more_x, more_y = (wanted_x - span_x) / 2 / metres_x, (wanted_y - span_y) / 2 / metres_y
    wide = (west - more_x, south - more_y, east + more_x, north + more_y)
    scale = width / wanted_x
    return Frame(
        wide, width, round(wanted_y * scale), wanted_x, (float(grid.dx_m[row]) * scale, float(grid.dy_m[row]) * scale)
    )


def _padded(bounds: Bounds, share: float) -> Bounds:
    pad = share * max(bounds[2] - bounds[0], bounds[3] - bounds[1])
    return bounds[0] - pad, bounds[1] - pad, bounds[2] + pad, bounds[3] + pad


def shaded(elevation: NDArray[np.float32], cell_m: tuple[float, float]) -> NDArray[np.uint8]:
    """Return terrain as a grey picture lit from the northwest, 45 degrees high, by Lambert's cosine law.

    Parameters
    ----------
    elevation : ndarray, shape (rows, columns)
        Elevations [m], NaN in voids.
    cell_m : tuple of float
        Width and height of its cells [m].

    Returns
    -------
    ndarray of uint8, shape (rows, columns)
        Light enough to draw on; relief is exaggerated where the land is flat. Voids are near white.
    """
    if min(elevation.shape) < 2:
        return np.full(elevation.shape, 235, dtype=np.uint8)
    down, east = np.gradient(elevation.astype(np.float64), cell_m[1], cell_m[0])
    slopes = np.hypot(down, east)
    known = slopes[np.isfinite(slopes)]
    typical = float(np.quantile(known, 0.9)) if known.size else 0.0
    exaggeration = float(np.clip(0.5 / max(typical, 1e-6), 1.0, 10.0))
    # Light from the northwest: direction (-1, -1, sqrt 2) / 2 towards east, south and up.
    p, q = exaggeration * east, exaggeration * down
    light = (p + q + math.sqrt(2.0)) / (2.0 * np.sqrt(1.0 + p * p + q * q))
    grey = 95.0 + 155.0 * np.clip(np.where(np.isfinite(light), light, 1.0), 0.0, 1.0)
    grey[~np.isfinite(elevation)] = 250.0
    return np.rint(grey).astype(np.uint8)


def _hillshade(run: Run, view: Frame) -> Markup:
    """Draw the shaded terrain under a map; nothing where the run keeps no terrain."""
    from basinwright.io.pictures import as_jpeg, read_terrain

    if run.terrain is None:
        return Markup("")
    elevation, read = read_terrain(run.terrain, view.bounds, _SHADE_PIXELS[view.width])
    if elevation.size == 0:
        return Markup("")
    (left, right), (top, bottom) = view.place([read[0], read[2]], [read[3], read[1]])
    metres = view.width_m / view.width
    rows, cols = elevation.shape
    grey = shaded(elevation, ((right - left) * metres / cols, (bottom - top) * metres / rows))
    return el(
        "image", href="data:image/jpeg;base64," + base64.b64encode(as_jpeg(grey)).decode("ascii"),
        x=float(left), y=float(top), width=float(right - left), height=float(bottom - top), preserveAspectRatio="none",
    )  # fmt: skip


def _data(geometry: Any, view: Frame, tolerance: float) -> str:
    """Return a geometry as the data of a path: whole numbers, each point as the step from the one before."""
    import shapely

    if geometry is None or geometry.is_empty:
        return ""
    simple = shapely.simplify(geometry, tolerance * view.per_unit)
    parts = simple.geoms if hasattr(simple, "geoms") else [simple]
    lines = [
        line for part in parts for line in ([part.exterior, *part.interiors] if hasattr(part, "exterior") else [part])
    ]
    return "".join(_line(line, view) for line in lines)


def _line(line: Any, view: Frame) -> str:
    x, y = view.place(*line.coords.xy)
    return _steps(np.rint(np.column_stack([x, y])).astype(np.int64), closed=line.is_ring)


def _steps(points: NDArray[np.int64], *, closed: bool) -> str:
    steps = np.diff(points, axis=0)
    steps = steps[steps.any(axis=1)]
    if closed and len(steps) > 2:
        steps = steps[:-1]
    moves = "".join(f"{'' if x < 0 else ' '}{x}{'' if y < 0 else ' '}{y}" for x, y in steps.tolist())
    return f"M{points[0, 0]} {points[0, 1]}l{moves.lstrip()}{'Z' if closed else ''}" if moves else ""


def _path(data: str, class_: str, **more: object) -> Markup:
    return el("path", d=data, class_=class_, **more) if data else Markup("")


def _at(view: Frame, x: float, y: float, *content: object, tag: str = "g", **attributes: object) -> Markup:
    """Draw what keeps its size at a place."""
    left, top = (float(value) for value in view.place(x, y))
    return el(tag, el("g", *content, class_="k"), transform=f"translate({left:.0f} {top:.0f})", **attributes)


def _canvas(
    run: Run, view: Frame, title: str, description: str, content: Iterable[object], *, key: str, kind: str
) -> Markup:
    """Return a map with its scale bar, north arrow and buttons."""
    svg = el(
        "svg",
        el("title", title, id=f"{key}-t"),
        el("desc", description, id=f"{key}-d"),
        *content,
        viewBox=f"0 0 {view.width} {view.height}",
        class_="map",
        role="group" if kind.startswith("index") else "img",
        aria_labelledby=f"{key}-t {key}-d",
        tabindex=0,
        style=f"--k:{_UNITS_PER_PIXEL}",
        data_metres=f"{view.width_m:.6g}",
        data_system=run.system,
        xmlns="http://www.w3.org/2000/svg",
    )
    length, label = scale_bar(view.width_m, run.system)
    bar = el("div", el("span", label), class_="scalebar", style=f"width:{100 * length / view.width_m:.2f}%")
    north = el(
        "svg",
        el("path", d="M12 3 18 22 12 18 6 22Z", fill=palette.INK),
        el("text", "N", x=12.0, y=35.0, text_anchor="middle"),
        viewBox="0 0 24 38", class_="north", role="img", aria_label="grid north is up",
    )  # fmt: skip
    buttons = join(
        el("button", sign, type="button", data_zoom=name, aria_label=f"{told}: {title}", title=told)
        for sign, name, told in (("+", "in", "zoom in"), ("−", "out", "zoom out"), ("⤢", "all", "show all"))
    )
    return el(
        "div",
        svg,
        bar,
        north,
        el("div", buttons, class_="zoom"),
        class_=f"mapbox {kind}",
        style=f"--ar:{view.width / view.height:.4f}",
    )


def scale_bar(width_m: float, system: System) -> tuple[float, str]:
    """Return the length [m] and the label of a bar of about a quarter of a map's width."""
    small, large = (("ft", M_PER_FT), ("mi", M_PER_MI)) if system == "us" else (("m", 1.0), ("km", 1000.0))
    unit, metres = large if 0.28 * width_m >= large[1] else small
    step = round_step(0.28 * width_m / metres)
    step = step if step * metres <= 0.3 * width_m else step / (2.5 if f"{step:e}"[0] == "5" else 2.0)
    return step * metres, f"{step:,.6g} {unit}"


def index_map(run: Run, link: Callable[[Outlet], str], over: Callable[[Outlet], bool]) -> Markup:
    """Draw every basin, path and outlet; each outlet leads to its page.

    Basins are drawn as the pieces between outlets, which do not overlap; the page joins those upstream when an outlet
    is pointed at.

    Parameters
    ----------
    run : Run
    link : callable
        Where an outlet leads to.
    over : callable
        Whether a peak exceeds the capacity of an outlet, which is then ringed.
    """
    import shapely

    drawn = [outlet for outlet in run.outlets if outlet.basin is not None]
    whole = shapely.total_bounds(np.array([outlet.basin for outlet in drawn], dtype=object))
    west, south, east, north = grid_of(run).bounds
    stray = [
        outlet.supplied
        for outlet in run.outlets
        if outlet.failed
        and outlet.supplied
        and west <= outlet.supplied[0] <= east
        and south <= outlet.supplied[1] <= north
    ]
    corners = np.array([[whole[0], whole[1]], [whole[2], whole[3]], *stray])
    bounds = (*corners.min(axis=0).tolist(), *corners.max(axis=0).tolist())
    view = frame(run, _padded(bounds, 0.03), INDEX_WIDTH)
    many = len(run.outlets) > 25
    tolerance = _tolerance(drawn, view)
    above = upstream(run.outlets)
    basins, paths, marks = [], [], []
    sides = {} if many else _label_sides(run.outlets, view)
    for i, outlet in enumerate(run.outlets):
        if outlet.basin is not None:
            data = _data(outlet.subbasin, view, tolerance)
            basins.append(_path(data, "basin", data_o=i, data_up=" ".join(map(str, above[i])) or None))
            paths.append(_path(_data(outlet.path, view, tolerance), "flow", data_o=i))
        place = outlet.place or outlet.supplied
        if place is not None and (outlet.place is not None or place in stray):
            ring = el("circle", r=10.5, class_="ring") if over(outlet) else Markup("")
            mark = join([ring, el("use", href=f"#mark-{outlet.severity}")])
            name = outlet_label(outlet)
            label = (
                Markup("") if many else el("text", words.short(outlet.id, 20), class_="halo", **sides.get(i, _SIDES[0]))
            )
            marks.append(
                _at(
                    view, *place, mark, label, el("title", name), tag="a", href=link(outlet), class_="outlet", data_o=i,
                    aria_label=name, tabindex=-1 if many else None,
                )
            )  # fmt: skip
    symbols = [el("g", _mark(severity), id=f"mark-{severity}") for severity in palette.MARKS]
    content = [
        el("defs", *symbols),
        _hillshade(run, view),
        el("g", *basins, class_="basins"),
        el("g", *paths, class_="flows"),
        el("g", *marks),
    ]
    description = (
        f"{words.count(len(drawn), 'basin')} with longest flow paths and outlets over the shaded terrain. "
        "The table below lists the same outlets."
    )
    return _canvas(
        run, view, "Map of all outlets", description, content, key="map", kind="index many" if many else "index"
    )


def _tolerance(outlets: Sequence[Outlet], view: Frame) -> float:
    """Return how far lines of the index map may be simplified [its own units]: more where there are many."""
    import shapely

    lines = np.array([line for outlet in outlets for line in (outlet.subbasin, outlet.path)], dtype=object)
    tolerance = 3.0
    while shapely.get_num_coordinates(lines).sum() > INDEX_POINTS and tolerance < view.width:
        tolerance *= 1.5
        lines = shapely.simplify(lines, tolerance * view.per_unit)
    return tolerance


_SIDES: tuple[dict[str, object], ...] = (
    {"x": 12.0, "y": 4.0},
    {"x": -12.0, "y": 4.0, "text_anchor": "end"},
    {"x": 0.0, "y": -13.0, "text_anchor": "middle"},
    {"x": 0.0, "y": 22.0, "text_anchor": "middle"},
)
"""Where a label may stand beside its mark, the usual side first."""


def _label_sides(outlets: Sequence[Outlet], view: Frame) -> dict[int, dict[str, object]]:
    """Choose for each label the side on which it covers least of the marks and labels before it [pixels]."""
    at = {i: np.array(view.place(*outlet.place)) / _UNITS_PER_PIXEL for i, outlet in enumerate(outlets) if outlet.place}
    taken = [(x - 8.0, y - 8.0, x + 8.0, y + 8.0) for x, y in at.values()]
    chosen = {}
    for i, (x, y) in at.items():
        half = 3.6 * len(words.short(outlets[i].id, 20))
        boxes = [
            (x + 12, y - 7, x + 12 + 2 * half, y + 6),
            (x - 12 - 2 * half, y - 7, x - 12, y + 6),
            (x - half, y - 24, x + half, y - 11),
            (x - half, y + 11, x + half, y + 24),
        ]
        best = min(range(len(boxes)), key=lambda k: sum(_overlap(boxes[k], other) for other in taken))
        chosen[i] = _SIDES[best]
        taken.append(boxes[best])
    return chosen


def _overlap(a: Bounds, b: Bounds) -> float:
    return max(0.0, min(a[2], b[2]) - max(a[0], b[0])) * max(0.0, min(a[3], b[3]) - max(a[1], b[1]))


def outlet_label(outlet: Outlet) -> str:
    """Return an outlet's id and name with what its doubts amount to."""
    name = words.short(outlet.row["name"] or "", 60)
    return f"{words.short(outlet.id, 40)}{', ' if name else ''}{name}: {palette.MARKS[outlet.severity].label}"


def _mark(severity: str) -> Markup:
    style = palette.MARKS[severity]
    if severity == "failed":
        return el("path", d=style.shape, fill="none", stroke=style.colour, stroke_width=3)
    return el(
        "path", d=style.shape, fill=style.colour, stroke=palette.INK if severity == "ok" else "#fff", stroke_width=1.4
    )


def legend_mark(severity: str) -> Markup:
    """Draw a severity's mark for a legend."""
    return el("svg", _mark(severity), viewBox="-8 -8 16 16", class_="mark", aria_hidden="true")


def legend_line(regime: str) -> Markup:
    """Draw a regime's line for a legend."""
    style = palette.regime(regime)
    line = el("path", d="M1 5H35", stroke=style.colour, stroke_width=3.4, stroke_dasharray=style.dash or None)
    return el("svg", line, viewBox="0 0 36 10", class_="swatch", aria_hidden="true")


def outlet_view(run: Run, outlet: Outlet) -> Frame | None:
    """Return the frame of an outlet's map; None where there is no basin."""
    if outlet.basin is None or outlet.place is None:
        return None
    x, y = outlet.place
    bounds = outlet.basin.bounds
    around = (min(bounds[0], x), min(bounds[1], y), max(bounds[2], x), max(bounds[3], y))
    return frame(run, _padded(around, 0.06), PAGE_WIDTH)


def outlet_map(run: Run, outlet: Outlet) -> Markup | None:
    """Draw an outlet's basin and its longest flow path by regime; None where there is no basin."""
    view = outlet_view(run, outlet)
    if view is None:
        return None
    ring = _data(outlet.basin, view, 3.0)
    # On a large basin only its larger streams can be told apart.
    least = outlet.row["area"] / 150.0
    streams = "".join(_data(line, view, 4.0) for line, area in outlet.streams if area >= least)
    content = [
        _hillshade(run, view),
        _path(f"M0 0H{view.width}V{view.height}H0Z{ring}", "outside", fill_rule="evenodd"),
        _path(streams, "stream"),
        _path(ring, "casing"),
        _path(ring, "divide"),
        *_regimes(outlet, view, 3.0),
        *(
            _at(
                view,
                nx,
                ny,
                el("circle", r=3.5, class_="other"),
                el("text", words.short(name, 16), x=7.0, y=4.0, class_="halo"),
            )
            for name, nx, ny in (outlet.neighbours if len(outlet.neighbours) <= 12 else [])
        ),
        *_snap(outlet, view),
    ]
    area, length = (words.with_unit(outlet.row[stem], stem, run.system) for stem in ("area", "path_length"))
    description = (
        f"Basin of {area} with the longest flow path, {length}, coloured by flow regime, over the shaded terrain."
    )
    return _canvas(
        run, view, "Basin and longest flow path", description, content, key=f"{outlet.anchor}-map", kind="whole"
    )


def close_up(run: Run, outlet: Outlet) -> Markup | None:
    """Draw the neighbourhood of an outlet: the point as supplied, its cell, and the streams it could lie on."""
    import shapely

    if outlet.basin is None or outlet.place is None:
        return None
    grid = grid_of(run)
    x, y = outlet.place
    from_x, from_y = outlet.supplied or outlet.place
    reach_cells = max(_CLOSE_CELLS, math.ceil(_LEAST_CLOSE_M / grid.cell_size_m))
    half_x = max(reach_cells * grid.transform.a, 1.2 * abs(x - from_x))
    half_y = max(reach_cells * -grid.transform.e, 1.2 * abs(y - from_y))
    mid_x, mid_y = (x + from_x) / 2, (y + from_y) / 2
    view = frame(run, (mid_x - half_x, mid_y - half_y, mid_x + half_x, mid_y + half_y), CLOSE_WIDTH, (0.9, 0.95))
    window = shapely.box(*view.bounds)
    near = [(line.intersection(window), area) for line, area in outlet.streams if line.intersects(window)]
    left, top = (float(value) for value in view.place(x, y))
    cell = el(
        "rect",
        x=left - view.cell[0] / 2,
        y=top - view.cell[1] / 2,
        width=view.cell[0],
        height=view.cell[1],
        class_="cell",
    )
    ring = _data(outlet.basin.intersection(window.buffer(half_x)), view, 1.0)
    content = [
        _hillshade(run, view),
        _path(f"M0 0H{view.width}V{view.height}H0Z{ring}", "outside", fill_rule="evenodd"),
        *(_path(_data(line, view, 1.0), "stream", stroke_width=float(1.5 + min(area, 4.0))) for line, area in near),
        _path(ring, "divide"),
        *_regimes(outlet, view, 1.0),
        cell,
        *_stream_labels(run, near, view, (x, y)),
        *_snap(outlet, view),
    ]
    moved = words.with_unit(outlet.row["snap"], "snap", run.system)
    told = f"was moved {moved} to the outlet's cell" if outlet.row["snap"] > 0 else "lies in the outlet's cell"
    description = f"The outlet's neighbourhood. The point as supplied {told}."
    return _canvas(run, view, "At the outlet", description, content, key=f"{outlet.anchor}-close", kind="close")


def _regimes(outlet: Outlet, view: Frame, tolerance: float) -> list[Markup]:
    """Draw the path by regime over a pale casing; neighbours of one regime as one line."""
    runs: list[tuple[str, list[Any]]] = []
    for row in outlet.segments:
        line = outlet.lines.get(int(row["segment"]))
        if line is None:
            continue
        if runs and runs[-1][0] == row["regime"]:
            runs[-1][1].append(line)
        else:
            runs.append((row["regime"], [line]))
    drawn, casing = [], []
    for regime, lines in runs:
        style = palette.regime(regime)
        data = _data(_joined(lines), view, tolerance)
        casing.append(_path(data, "casing"))
        drawn.append(_path(data, "regime", stroke=style.colour, stroke_dasharray=style.dash or None))
    return [*casing, *drawn]


def _joined(lines: Sequence[Any]) -> Any:
    """Return pieces that follow one another as one line."""
    import shapely

    return shapely.LineString(np.concatenate([np.asarray(line.coords) for line in lines]))


def _snap(outlet: Outlet, view: Frame) -> list[Markup]:
    """Draw the move from the point as supplied to the outlet's cell."""
    if outlet.place is None:
        return []
    mark = el("g", _mark(outlet.severity), el("title", outlet_label(outlet)))
    parts = [_at(view, *outlet.place, mark)]
    if outlet.supplied is not None:
        (x0, x1), (y0, y1) = view.place([outlet.supplied[0], outlet.place[0]], [outlet.supplied[1], outlet.place[1]])
        if view.width != CLOSE_WIDTH and math.hypot(x1 - x0, y1 - y0) < _TOO_CLOSE:
            return parts
        line = f"M{number(float(x0))} {number(float(y0))}L{number(float(x1))} {number(float(y1))}"
        cross = "M-6-6 6 6M-6 6 6-6"
        parts += [
            el("path", d=line, class_="snap"),
            _at(
                view,
                *outlet.supplied,
                el("title", "the point as supplied"),
                el("path", d=cross, class_="supplied under"),
                el("path", d=cross, class_="supplied"),
            ),
        ]
    return parts


def _stream_labels(
    run: Run, near: Sequence[tuple[Any, float]], view: Frame, place: tuple[float, float]
) -> list[Markup]:
    """Label the longer streams of a close view with their contributing area."""
    unit = words.unit_of(OUTLETS.column("area"), run.system)
    least = 0.18 * (view.bounds[2] - view.bounds[0])
    longest = sorted((piece for piece in near if piece[0].length > least), key=lambda piece: -piece[0].length)[:4]
    parts, taken = [], [np.array(view.place(*place))]
    for line, area in longest:
        for share in (0.5, 0.3, 0.7):
            point = (
                line.interpolate(share, normalized=True)
                if line.geom_type == "LineString"
                else line.representative_point()
            )
            here = np.array(view.place(point.x, point.y))
            if all(abs(here - other)[1] > 260 or abs(here - other)[0] > 900 for other in taken):
                taken.append(here)
                anchor = "end" if here[0] > 0.7 * view.width else "start"
                label = el("text", f"{words.figure(area)} {unit}", x=-8.0 if anchor == "end" else 8.0, y=4.0,
                           text_anchor=anchor, class_="halo")  # fmt: skip
                parts.append(_at(view, point.x, point.y, el("circle", r=2.5, fill=palette.WATER), label))
                break
    return parts
