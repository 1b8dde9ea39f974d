"""The report's colours: few, apart from each other for colour-blind readers and in grey, and never alone.

Whatever a colour says is said a second time by a shape, a dash or a word.
"""

from __future__ import annotations

from dataclasses import dataclass

INK = "#1d2733"
MUTED = "#55606e"
RULE = "#c4cad1"
PAPER = "#ffffff"
WATER = "#4f93b8"
"""Streams on the maps."""
RAIN = "#a9b6c2"
EXCESS = "#2f5d86"
ADOPTED = "#17408b"
OTHER = "#7b8794"
CAPACITY = "#a3123a"


@dataclass(frozen=True)
class LineStyle:
    """How a flow regime is drawn.

    Parameters
    ----------
    label : str
        Its name in words.
    colour : str
        Of the line.
    dash : str
        SVG dash pattern; empty for a whole line.
    """

    label: str
    colour: str
    dash: str = ""


REGIMES: dict[str, LineStyle] = {
    "sheet": LineStyle("sheet flow", "#efb73e", "1.5 2"),
    "shallow": LineStyle("shallow concentrated flow", "#c8405a", "7 3"),
    "channel": LineStyle("channel", "#17408b"),
    "open_water": LineStyle("open water", "#35a8c6", "12 3 2 3"),
    "pipe": LineStyle("pipe", "#3a3f45", "3 3"),
    "lined_channel": LineStyle("lined channel", "#7b5aa6", "10 3"),
}


def regime(key: str) -> LineStyle:
    """Return the style of a regime, a plain one where it has none of its own."""
    return REGIMES.get(key, LineStyle(key.replace("_", " "), INK))


@dataclass(frozen=True)
class Mark:
    """How a severity is marked.

    Parameters
    ----------
    label : str
        Its name in words.
    colour : str
        Of the mark.
    shape : str
        SVG path around the origin, about 12 units across.
    """

    label: str
    colour: str
    shape: str


MARKS: dict[str, Mark] = {
    "failed": Mark("failed", INK, "M-5-5 5 5M5-5-5 5"),
    "serious": Mark("serious", "#a3123a", "M0-7 7 0 0 7-7 0Z"),
    "warning": Mark("warning", "#b8670a", "M0-6.5 6.5 5H-6.5Z"),
    "note": Mark("note", "#3f6788", "M-4.5-4.5H4.5V4.5H-4.5Z"),
    "ok": Mark("no doubt", "#ffffff", "M-5 0A5 5 0 1 1 5 0A5 5 0 1 1-5 0Z"),
}

SCENARIOS: tuple[LineStyle, ...] = (
    LineStyle("base", INK),
    LineStyle("", "#c8405a", "9 3"),
    LineStyle("", "#2f7fb5", "3 2.5"),
    LineStyle("", "#b8670a", "12 3 2 3"),
    LineStyle("", "#7b5aa6", "6 2 2 2 2 2"),
    LineStyle("", "#3d8a5f", "1.5 2"),
)
"""The base, then the scenarios in their order, over and over."""


def scenario(place: int) -> LineStyle:
    """Return the style of a scenario counted from 1; the base is 0."""
    return SCENARIOS[0] if place == 0 else SCENARIOS[1 + (place - 1) % (len(SCENARIOS) - 1)]


_FIRST, _LAST = (0x5B, 0x97, 0xBD), (0x0D, 0x1B, 0x4C)


def ramp(count: int) -> list[str]:
    """Return colours from light to dark for the return periods, rarest darkest."""
    steps = [i / (count - 1) if count > 1 else 1.0 for i in range(count)]
    return ["#" + "".join(f"{round(a + (b - a) * t):02x}" for a, b in zip(_FIRST, _LAST, strict=True)) for t in steps]
