"""The pieces that pictures are made of, against geometry and published colour science."""

from __future__ import annotations

import itertools
import json
import math
import re
import types
from xml.etree import ElementTree

import numpy as np
import pytest
import shapely
from affine import Affine
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod

from basinwright.numbers import three_figures
from basinwright.report import maps, palette, svg, words
from basinwright.report.reading import Outlet, upstream
from basinwright.units import M_PER_FT, M_PER_MI


@given(st.floats(1e-6, 1e9), st.booleans())
@settings(max_examples=200, deadline=None)
def test_three_figures_stay_within_half_a_unit_of_the_third(value: float, negative: bool) -> None:
    value = -value if negative else value
    text = three_figures(value)
    assert "e" not in text
    assert abs(float(text.replace(",", "")) / value - 1.0) <= 0.00501


@given(st.floats(-1e3, 1e3), st.floats(0.1, 1e6), st.integers(2, 8))
@settings(max_examples=200, deadline=None)
def test_ticks_are_round_and_inside(low: float, span: float, about: int) -> None:
    scale = svg.Scale(low, low + span, 0.0, 100.0)
    ticks = scale.ticks(about)
    assert 1 <= len(ticks) <= 2.5 * about + 2
    assert all(-1e-6 <= scale(value) <= 100 + 1e-6 for value in ticks)
    if len(ticks) > 1:
        assert float(f"{ticks[1] - ticks[0]:.3e}".partition("e")[0]) in (1, 2, 5)


def test_a_log_scale_gives_equal_room_to_equal_ratios() -> None:
    scale = svg.Scale(0.1, 10.0, 0.0, 200.0, log=True)
    assert scale(1.0) == pytest.approx(100.0)
    assert scale.ticks(5) == pytest.approx([0.1, 0.3, 1.0, 3.0, 10.0])


@given(st.lists(st.floats(0, 300), min_size=1, max_size=10))
@settings(max_examples=100, deadline=None)
def test_labels_are_spread(wanted: list[float]) -> None:
    placed = svg.spread_labels(wanted, 20.0, 0.0, 300.0)
    ranked = sorted(placed)
    assert all(b - a >= 20.0 - 1e-9 for a, b in itertools.pairwise(ranked))
    assert sorted(range(len(wanted)), key=lambda i: (wanted[i], placed[i])) == sorted(
        range(len(wanted)), key=placed.__getitem__
    )


def test_elements_escape_text_and_attributes() -> None:
    drawn = svg.el("text", "<b>&\"'", title='"><script>')
    assert ElementTree.fromstring(drawn).text == "<b>&\"'"
    assert ElementTree.fromstring(drawn).get("title") == '"><script>'
    assert svg.el("g", svg.el("path", d="M0 0")) == '<g><path d="M0 0"/></g>'


# ---- colours ----

# From memory of G. M. Machado, M. M. Oliveira and L. A. F. Fernandes, A Physiologically-based Model for Simulation of
# Color Vision Deficiency, IEEE Trans. Vis. Comput. Graph. 15(6), 2009, severity 1.0, on linear RGB. Rows sum to 1.
BLINDNESS = {
    "none": np.eye(3),
    "protan": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "deutan": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
    "tritan": np.array(
        [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]]
    ),
}
# sRGB (IEC 61966-2-1) to XYZ, D65.
XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])


def linear(colour: str) -> np.ndarray:
    srgb = np.array([int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)])
    return np.where(srgb <= 0.04045, srgb / 12.92, ((srgb + 0.055) / 1.055) ** 2.4)


def lab(rgb: np.ndarray) -> np.ndarray:
    """CIE 1976 L*a*b* of linear RGB."""
    t = XYZ @ np.clip(rgb, 0, 1) / (XYZ @ np.ones(3))
    f = np.where(t > (6 / 29) ** 3, np.cbrt(t), t * (29 / 6) ** 2 / 3 + 4 / 29)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def contrast(one: str, other: str) -> float:
    """Contrast ratio of WCAG 2.1."""
    light, dark = sorted(((XYZ @ linear(colour))[1] for colour in (one, other)), reverse=True)
    return float((light + 0.05) / (dark + 0.05))


@pytest.mark.parametrize("kind", BLINDNESS)
def test_regimes_are_told_apart_by_every_eye(kind: str) -> None:
    main = [palette.REGIMES[key].colour for key in ("sheet", "shallow", "channel", "open_water")]
    seen = [lab(BLINDNESS[kind] @ linear(colour)) for colour in main]
    assert min(float(np.linalg.norm(a - b)) for a, b in itertools.combinations(seen, 2)) > 20.0


def test_regimes_are_told_apart_in_grey() -> None:
    main = [palette.REGIMES[key] for key in ("sheet", "shallow", "channel", "open_water")]
    lightness = sorted(lab(linear(style.colour))[0] for style in main)
    assert min(b - a for a, b in itertools.pairwise(lightness)) > 10.0
    assert len({style.dash for style in palette.REGIMES.values()}) == len(palette.REGIMES)


def test_severities_differ_in_shape_as_well() -> None:
    assert len({mark.shape for mark in palette.MARKS.values()}) == len(palette.MARKS)


def test_lines_of_floods_show_on_white_and_darken() -> None:
    for count in (1, 2, 4, 7):
        ramp = palette.ramp(count)
        assert all(contrast(colour, "#ffffff") >= 3.0 for colour in ramp)  # WCAG 2.1, 1.4.11
        lightness = [lab(linear(colour))[0] for colour in ramp]
        assert lightness == sorted(lightness, reverse=True)
    assert contrast(palette.MUTED, "#ffffff") >= 4.5


# ---- shading ----


def test_shading_follows_the_cosine_law() -> None:
    """A plane's shade is the cosine between its normal and the light from the northwest, 45 degrees high."""
    row, col = np.mgrid[:20, :30]
    for east, south in ((0.5, 0.5), (-0.5, -0.5), (0.5, -0.5), (0.0, 0.0)):
        plane = (east * col * 10 + south * row * 10).astype(np.float32)
        normal = np.array([-east, -south, 1.0]) / math.sqrt(1 + east**2 + south**2)
        light = np.array([-0.5, -0.5, math.sqrt(0.5)])
        wanted = 95 + 155 * max(float(normal @ light), 0.0)
        assert maps.shaded(plane, (10.0, 10.0))[5, 5] == pytest.approx(wanted, abs=1.0)


def test_voids_are_pale_and_flat_ground_is_even() -> None:
    flat = np.full((8, 8), 100.0, dtype=np.float32)
    flat[3, 3] = np.nan
    grey = maps.shaded(flat, (10.0, 10.0))
    assert grey[3, 3] == 250
    assert len(np.unique(grey[:, 6:])) == 1


# ---- maps ----


def run_on(grid: dict[str, object]) -> types.SimpleNamespace:
    return types.SimpleNamespace(about={"grid": grid}, system="si")


METRIC = {"rows": 900, "columns": 740, "crs": "EPSG:32614", "transform": [10.0, 0, 700000.0, 0, -10.0, 4289000.0]}
DEGREES = {"rows": 1200, "columns": 1200, "crs": "EPSG:4326", "transform": [1 / 1200, 0, 7.0, 0, -1 / 1200, 61.0]}


def test_a_metric_frame_shows_what_was_asked_at_one_scale() -> None:
    view = maps.frame(run_on(METRIC), (701000.0, 4282000.0, 703000.0, 4284500.0), maps.PAGE_WIDTH)
    (left, right), (top, bottom) = view.place([701000, 703000], [4284500, 4282000])
    assert (right - left) / 2000 == pytest.approx((bottom - top) / 2500, rel=1e-3)
    assert left >= -1
    assert top >= -1
    assert view.width_m / view.width == pytest.approx(2000 / (right - left))


def test_a_frame_in_degrees_is_true_to_scale_at_its_middle() -> None:
    """At 60.5 degrees north a degree of longitude is half as long as one of latitude: the geodesic says how long."""
    view = maps.frame(run_on(DEGREES), (7.3, 60.4, 7.6, 60.6), maps.PAGE_WIDTH)
    geod = Geod(ellps="WGS84")
    east = geod.line_length([7.4, 7.5], [60.5, 60.5])
    north = geod.line_length([7.45, 7.45], [60.45, 60.55])
    (x0, x1), _ = view.place([7.4, 7.5], [60.5, 60.5])
    _, (y0, y1) = view.place([7.45, 7.45], [60.45, 60.55])
    per_unit = view.width_m / view.width
    assert (x1 - x0) * per_unit == pytest.approx(east, rel=2e-3)
    assert (y0 - y1) * per_unit == pytest.approx(north, rel=2e-3)


@given(st.floats(50.0, 3e5), st.sampled_from(["us", "si"]))
@settings(max_examples=150, deadline=None)
def test_the_scale_bar_is_round_and_as_long_as_it_says(width_m: float, system: str) -> None:
    length_m, label = maps.scale_bar(width_m, system)
    number, unit = label.split(" ")
    metres = {"ft": M_PER_FT, "mi": M_PER_MI, "m": 1.0, "km": 1000.0}[unit]
    assert float(number.replace(",", "")) * metres == pytest.approx(length_m, rel=1e-5)
    assert number.replace(",", "").replace(".", "").strip("0") in {"1", "2", "5"}
    assert 0.09 * width_m < length_m <= 0.31 * width_m


def decode(data: str) -> list[np.ndarray]:
    """Read the data of a path back as lines of points."""
    lines = []
    for part in re.findall(r"M(-?\d+) (-?\d+)l([-\d ]+)", data):
        steps = [int(text) for text in re.findall(r"-?\d+", part[2])]
        points = np.array([[int(part[0]), int(part[1])], *zip(steps[::2], steps[1::2], strict=True)])
        lines.append(points.cumsum(axis=0))
    return lines


@given(st.integers(0, 2**31), st.integers(5, 60))
@settings(max_examples=50, deadline=None)
def test_a_drawn_polygon_keeps_its_area(seed: int, corners: int) -> None:
    rng = np.random.default_rng(seed)
    angle = np.sort(rng.uniform(0, 2 * np.pi, corners))
    radius = rng.uniform(500, 900, corners)
    ring = shapely.Polygon(np.column_stack([702000 + radius * np.cos(angle), 4284000 + radius * np.sin(angle)]))
    view = maps.frame(run_on(METRIC), ring.bounds, maps.PAGE_WIDTH)
    drawn = decode(maps._data(ring, view, 3.0))
    assert len(drawn) == 1
    area_m2 = shapely.Polygon(drawn[0]).area * (view.width_m / view.width) ** 2
    assert area_m2 == pytest.approx(ring.area, rel=0.01)


def test_upstream_leads_through_the_forest() -> None:
    below = {"a": "c", "b": "c", "c": "e", "d": "", "e": ""}
    outlets = [Outlet(i, {"outlet_id": key, "downstream_outlet_id": to}) for i, (key, to) in enumerate(below.items())]
    assert upstream(outlets) == {0: [], 1: [], 2: [0, 1], 3: [], 4: [2]}


def test_text_from_input_hides_nothing() -> None:
    assert words.plain("a\u202eb\x00c\u2066d") == "a\ufffdb\ufffdc\ufffdd"
    assert words.plain("Straße, 橋, جسر \u200f") == "Straße, 橋, جسر \u200f".strip()
    assert len(words.short("x" * 5000)) == 60
    assert words.file_stem("../../Étang <b>") == "etang-b"
    assert words.file_stem("橋") == ""


def test_affine_of_the_manifest_is_the_grid(tmp_path) -> None:
    grid = maps.grid_of(run_on(json.loads(json.dumps(METRIC))))
    assert grid.transform == Affine(*METRIC["transform"])
    assert grid.shape == (900, 740)
