"""Pictures as SVG text: elements with everything escaped, scales, axes."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from markupsafe import Markup, escape


def number(value: float) -> str:
    """Return a coordinate: two decimals at most, none that say nothing."""
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def el(tag: str, *children: object, **attributes: object) -> Markup:
    """Return an element.

    Parameters
    ----------
    tag : str
        Its name.
    *children : object
        Markup as it is, anything else as escaped text.
    **attributes : object
        ``class_`` for ``class``, underscores for hyphens; None leaves one out.
    """
    parts = [f"<{tag}"]
    for name, value in attributes.items():
        if value is not None:
            text = number(value) if isinstance(value, float) else escape(value)
            parts.append(f' {name.rstrip("_").replace("_", "-")}="{text}"')
    if not children:
        return Markup("".join(parts) + "/>")  # every value above is escaped
    return Markup("".join(parts) + ">") + join(children) + Markup(f"</{tag}>")


def join(parts: Iterable[object]) -> Markup:
    """Return parts one after the other, escaped where they are no markup."""
    return Markup("".join(part if isinstance(part, Markup) else escape(part) for part in parts))  # each is escaped


def picture(
    width: float, height: float, title: str, description: str, *content: object, key: str, class_: str = "chart"
) -> Markup:
    """Return a whole picture with its alternative text.

    Parameters
    ----------
    width, height : float
        Size in its own units.
    title, description : str
        What it is and what it shows, for those who do not see it.
    *content : object
        Elements.
    key : str
        Unique in the page.
    class_ : str
        Class of the picture.
    """
    return el(
        "svg",
        el("title", title, id=f"{key}-t"),
        el("desc", description, id=f"{key}-d"),
        *content,
        viewBox=f"0 0 {number(width)} {number(height)}",
        class_=class_,
        role="img",
        aria_labelledby=f"{key}-t {key}-d",
        style=f"--w:{number(width)}",
        xmlns="http://www.w3.org/2000/svg",
    )


def polyline(points: Iterable[tuple[float, float]], **attributes: object) -> Markup:
    """Return a line through points."""
    return el("path", d=path_data(points), **{"fill": "none", **attributes})


def path_data(points: Iterable[tuple[float, float]]) -> str:
    """Return points as the data of a path."""
    return "M" + "L".join(f"{number(x)} {number(y)}" for x, y in points)


def text(x: float, y: float, content: object, *, anchor: str = "start", class_: str | None = None) -> Markup:
    """Return a line of text; text from input keeps its own direction."""
    return el("text", content, x=x, y=y, text_anchor=None if anchor == "start" else anchor, class_=class_)


@dataclass(frozen=True)
class Scale:
    """From values to places along an axis.

    Parameters
    ----------
    low, high : float
        Values at its ends.
    start, end : float
        Places of its ends.
    log : bool
        Whether equal ratios take equal room.
    """

    low: float
    high: float
    start: float
    end: float
    log: bool = False

    def __call__(self, value: float) -> float:
        """Return the place of a value."""
        if self.log:
            share = math.log(max(value, self.low) / self.low) / math.log(self.high / self.low)
        else:
            share = (value - self.low) / (self.high - self.low)
        return self.start + share * (self.end - self.start)

    def ticks(self, about: int = 5) -> list[float]:
        """Return round values inside, about so many."""
        if self.log:
            return self._log_ticks(about)
        power = 10.0 ** math.floor(math.log10((self.high - self.low) / about))
        candidates = [self._multiples(m * power) for m in (1.0, 2.0, 5.0, 10.0)]
        return min(candidates, key=lambda found: abs(len(found) - about - 0.5))

    def _multiples(self, step: float) -> list[float]:
        first, last = math.ceil(self.low / step - 1e-9), math.floor(self.high / step + 1e-9)
        return [i * step for i in range(first, last + 1)]

    def _log_ticks(self, about: int) -> list[float]:
        powers = range(math.floor(math.log10(self.low)), math.ceil(math.log10(self.high)) + 1)
        for marks in ((1, 2, 5), (1, 3), (1,)):
            found = [m * 10.0**p for p in powers for m in marks if self.low <= m * 10.0**p <= self.high]
            if len(found) <= about + 1:
                break
        return found


def round_step(value: float) -> float:
    """Return 1, 2 or 5 times a power of ten, not under the value."""
    power = 10.0 ** math.floor(math.log10(value))
    return next(m * power for m in (1.0, 2.0, 5.0, 10.0) if m * power >= value * (1 - 1e-9))


def tick_label(value: float) -> str:
    """Return the label of a tick."""
    return f"{value:,.6g}" if abs(value) < 1e6 else f"{value:,.0f}"


def axis_bottom(scale: Scale, y: float, label: str, about: int = 6, top: float | None = None) -> Markup:
    """Return an axis under a picture, with grid lines up to ``top``."""
    parts: list[Markup] = []
    for value in scale.ticks(about):
        x = scale(value)
        if top is not None:
            parts.append(el("path", d=f"M{number(x)} {number(top)}V{number(y)}", class_="grid"))
        parts.append(text(x, y + 15, tick_label(value), anchor="middle"))
    parts.append(el("path", d=f"M{number(scale.start)} {number(y)}H{number(scale.end)}", class_="axis"))
    parts.append(text((scale.start + scale.end) / 2, y + 32, label, anchor="middle", class_="label"))
    return join(parts)


def axis_left(scale: Scale, x: float, label: str, right: float, about: int = 5) -> Markup:
    """Return an axis at the left of a picture, with grid lines to the right and its label above it."""
    parts: list[Markup] = []
    for value in scale.ticks(about):
        y = scale(value)
        parts.append(el("path", d=f"M{number(x)} {number(y)}H{number(right)}", class_="grid"))
        parts.append(text(x - 6, y + 4, tick_label(value), anchor="end"))
    low, high = min(scale.start, scale.end), max(scale.start, scale.end)
    parts.append(el("path", d=f"M{number(x)} {number(low)}V{number(high)}", class_="axis"))
    parts.append(text(x - 6, low - 8, label, class_="label") if label else Markup(""))
    return join(parts)


def spread_labels(wanted: Sequence[float], room: float, low: float, high: float) -> list[float]:
    """Return places near the wanted ones that lie ``room`` apart, in the same order, inside the bounds."""
    order = sorted(range(len(wanted)), key=lambda i: wanted[i])
    placed = [0.0] * len(wanted)
    last = low - room
    for i in order:
        placed[i] = last = max(wanted[i], last + room)
    limit = high
    for i in reversed(order):
        placed[i] = min(placed[i], limit)
        limit = placed[i] - room
    return placed
