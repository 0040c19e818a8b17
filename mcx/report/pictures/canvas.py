"""An SVG to draw on: scales from numbers to places, axes, lines, bars with their errors, labels that do not meet."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from xml.etree import ElementTree

STYLE = """
.mcx-picture{--ink:#1a1a1a;--soft:#6b6b6b;--grid:#dcdcdc;--fill:#7f93a8;--a:#0b5394;--b:#9c4a00;--c:#2d6a4f;--d:#6a3d8f;
font:11px system-ui,sans-serif;max-width:100%;height:auto}
@media screen and (prefers-color-scheme:dark){.mcx-picture{--ink:#ececec;--soft:#a8a8a8;--grid:#3d3d3d;--fill:#5d7186;
--a:#7db7f0;--b:#f0a35e;--c:#7fd1ae;--d:#c9a3ea}}
.mcx-picture text{fill:var(--ink)}.mcx-picture .soft{fill:var(--soft)}
.mcx-picture .grid{stroke:var(--grid)}.mcx-picture .axis,.mcx-picture .error{stroke:var(--ink)}
.mcx-picture .bar{fill:var(--fill)}.mcx-picture .band{fill:var(--fill);fill-opacity:.28}
.mcx-picture .line{fill:none;stroke-width:1.6}.mcx-picture .s0{stroke:var(--a)}.mcx-picture .s1{stroke:var(--b)}
.mcx-picture .s2{stroke:var(--c)}.mcx-picture .s3{stroke:var(--d)}.mcx-picture .dot{fill:var(--ink)}
""".replace("\n", "")
DASHES = ("", "6 3", "2 3", "8 3 2 3")
LETTER = 5.8  # the usual width of a letter, for what must fit
ROW = 13.0  # the least distance of two labels


@dataclass(frozen=True, slots=True)
class Scale:
    """From numbers between `low` and `high` to places between `start` and `end`."""

    low: float
    high: float
    start: float
    end: float

    def __call__(self, number: float) -> float:
        return self.start + (number - self.low) / (self.high - self.low) * (self.end - self.start)

    def ticks(self, most: int = 5) -> list[float]:
        """Round numbers along the scale."""
        rough = (self.high - self.low) / most
        power = 10.0 ** math.floor(math.log10(rough))
        step = next(step for step in (power, 2 * power, 5 * power, 10 * power) if step >= rough * (1 - 1e-9))
        first = math.ceil(self.low / step - 1e-9)
        return [number * step for number in range(first, math.floor(self.high / step + 1e-9) + 1)]


def scale(numbers: Iterable[float], start: float, end: float, zero: bool = False) -> Scale:
    """A scale that shows all the numbers with some room around them; with `zero` also 0."""
    numbers = [*numbers, *([0.0] if zero else [])]
    low, high = min(numbers), max(numbers)
    room = 0.06 * (high - low) or 0.05 * abs(high) or 1.0
    below, above = (0.0 if zero and edge == 0.0 and low < high else room for edge in (low, high))
    return Scale(low - below, high + above, start, end)


def written(number: float) -> str:
    """A number on an axis."""
    return f"{number or 0.0:,.6g}"  # never '-0'


class Canvas:
    """Collects the parts of one picture; `svg` writes it."""

    def __init__(self, width: int, height: int, title: str, said: str):
        self.width, self.height = width, height
        self.root = ElementTree.Element("svg", {
            "xmlns": "http://www.w3.org/2000/svg", "viewBox": f"0 0 {width} {height}", "width": str(width),
            "height": str(height), "class": "mcx-picture", "role": "img", "aria-label": f"{title}. {said}"})
        ElementTree.SubElement(self.root, "title").text = title
        ElementTree.SubElement(self.root, "desc").text = said
        ElementTree.SubElement(self.root, "style").text = STYLE

    def svg(self) -> str:
        return ElementTree.tostring(self.root, encoding="unicode")

    def text(self, x: float, y: float, words: str, anchor: str = "start", kind: str = "") -> None:
        node = self._add("text", kind, x=x, y=y)
        node.set("text-anchor", anchor)
        node.text = words

    def segment(self, x1: float, y1: float, x2: float, y2: float, kind: str) -> None:
        self._add("line", kind, x1=x1, y1=y1, x2=x2, y2=y2)

    def bar(self, x1: float, x2: float, y: float, thick: float) -> None:
        self._add("rect", "bar", x=min(x1, x2), y=y - thick / 2, width=abs(x2 - x1), height=thick)

    def dot(self, x: float, y: float) -> None:
        self._add("circle", "dot", cx=x, cy=y, r=2.2)

    def line(self, points: Iterable[tuple[float, float]], number: int = 0) -> None:
        """A line of its own dashes and ink."""
        node = self._add("polyline", f"line s{number % len(DASHES)}")
        node.set("points", _path(points))
        if DASHES[number % len(DASHES)]:
            node.set("stroke-dasharray", DASHES[number % len(DASHES)])

    def band(self, lower: Sequence[tuple[float, float]], upper: Sequence[tuple[float, float]]) -> None:
        self._add("polygon", "band").set("points", _path([*lower, *reversed(upper)]))

    def whisker(self, x1: float, x2: float, y1: float, y2: float) -> None:
        """The reach of an error, along either axis, with its ends marked."""
        self.segment(x1, y1, x2, y2, "error")
        dx, dy = (0.0, 3.0) if y1 == y2 else (3.0, 0.0)
        for x, y in ((x1, y1), (x2, y2)):
            self.segment(x - dx, y - dy, x + dx, y + dy, "error")

    def across(self, y: Scale, left: float, right: float) -> None:
        """The vertical axis: a line across for each of its round numbers."""
        for tick in y.ticks():
            self.segment(left, y(tick), right, y(tick), "grid")
            self.text(left - 5, y(tick) + 4, written(tick), "end", "soft")

    def along(self, ticks: Iterable[tuple[float, str]], y: float, left: float, right: float) -> None:
        """The horizontal axis, with labels as far as they do not meet."""
        self.segment(left, y, right, y, "axis")
        reached = -math.inf
        for place, words in ticks:
            half = len(words) * LETTER / 2
            middle = min(max(place, half), self.width - half)
            self.segment(place, y, place, y + 4, "axis")
            if middle - half > reached:
                self.text(middle, y + 16, words, "middle", "soft")
                reached = middle + half + 4

    def labels(self, x: float, wanted: Sequence[tuple[float, str]], top: float, bottom: float) -> None:
        """Labels beside the ends of lines, moved apart where they would meet."""
        order = sorted(range(len(wanted)), key=lambda number: wanted[number][0])
        places = [min(max(wanted[number][0], top), bottom) for number in order]
        for number in range(1, len(places)):
            places[number] = max(places[number], places[number - 1] + ROW)
        for number in reversed(range(len(places))):
            limit = bottom if number == len(places) - 1 else places[number + 1] - ROW
            places[number] = min(places[number], limit)
        for number, place in zip(order, places, strict=True):
            self.text(x, place + 4, wanted[number][1])

    def _add(self, tag: str, kind: str, **places: float) -> ElementTree.Element:
        found = {name: f"{place:.2f}".rstrip("0").rstrip(".") for name, place in places.items()}
        return ElementTree.SubElement(self.root, tag, {**({"class": kind} if kind else {}), **found})


def _path(points: Iterable[tuple[float, float]]) -> str:
    return " ".join(f"{x:.1f},{y:.1f}" for x, y in points)
