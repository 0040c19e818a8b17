"""An SVG to draw on: scales from numbers to places, axes, lines, bars with their errors, labels that do not meet."""

from __future__ import annotations

import math
import unicodedata
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from xml.etree import ElementTree

from mcx.report.pictures.palette import LINES, attributes

SIZE = 11.0  # of letters
ROW = 13.0  # the least distance of two labels
THREAD = 14.0  # from the end of a line to its label
DASHES = ("", "6 3", "2 3", "8 3 2 3")
DOT = 2.2
NARROW, WIDE = frozenset("ijlftrI.,:;'|!()[]/ -"), frozenset("mwMW%@—…")


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

    def powers(self) -> list[float]:
        """Logarithms along a scale of logarithms to base 10: of powers of ten, and of 2 and 5 between where few fit."""
        steps = (0.0,) if self.high - self.low > 2.5 else (0.0, math.log10(2.0), math.log10(5.0))
        found = [whole + step for whole in range(math.floor(self.low), math.ceil(self.high) + 1) for step in steps]
        return [each for each in found if self.low <= each <= self.high]


def scale(numbers: Iterable[float], start: float, end: float, zero: bool = False) -> Scale:
    """A scale that shows all the numbers with some room around them; with `zero` also 0."""
    numbers = [*numbers, *([0.0] if zero else [])]
    low, high = min(numbers), max(numbers)
    if high - low < 1e-9 * max(abs(low), abs(high)):  # rounding only
        low = high = 0.5 * (low + high)
    room = 0.06 * (high - low) or 0.05 * abs(high) or 1.0
    below, above = (0.0 if zero and edge == 0.0 and low < high else room for edge in (low, high))
    return Scale(low - below, high + above, start, end)


def written(number: float) -> str:
    """A number on an axis."""
    return f"{number or 0.0:,.6g}"  # never '-0'


def width(words: str) -> float:
    """About how wide words are set, rather too wide: which font a reader has is not known."""
    return SIZE * sum(map(_em, words))


def _em(letter: str) -> float:
    if unicodedata.combining(letter):
        return 0.0
    if unicodedata.east_asian_width(letter) in "FW":
        return 1.0
    return 0.37 if letter in NARROW else 0.96 if letter in WIDE else 0.68 if letter.isupper() else 0.62


def fit(words: str, room: float) -> str:
    """Words cut to a room; whole they stand in what a picture says."""
    if width(words) <= room:
        return words
    cut = next(cut for cut in range(len(words) - 1, -1, -1) if cut == 0 or width(words[:cut]) + SIZE <= room)
    return f"{words[:cut].rstrip()}…"


class Canvas:
    """Collects the parts of one picture; `svg` writes it."""

    def __init__(self, width: float, height: float, title: str, said: str):
        self.width, self.height = width, height
        self.root = ElementTree.Element("svg", {
            "xmlns": "http://www.w3.org/2000/svg", "viewBox": f"0 0 {_short(width)} {_short(height)}",
            "width": _short(width), "height": _short(height), "class": "mcx-picture", "role": "img",
            "font-family": "system-ui, sans-serif", "font-size": _short(SIZE),
            "aria-label": _clean(f"{title}. {said}")})
        ElementTree.SubElement(self.root, "title").text = _clean(title)
        ElementTree.SubElement(self.root, "desc").text = _clean(said)

    def svg(self) -> str:
        return ElementTree.tostring(self.root, encoding="unicode")

    def text(self, x: float, y: float, words: str, anchor: str = "start", kind: str = "words") -> None:
        node = self._add("text", kind, x=x, y=y)
        node.set("text-anchor", anchor)
        node.text = _clean(words)

    def plate(self, x: float, y: float, words: str) -> None:
        """Words on paper that hides what would run through them."""
        self._add("rect", "paper", x=x - 1, y=y - 10, width=width(words) + 2, height=12)
        self.text(x, y, words)

    def segment(self, x1: float, y1: float, x2: float, y2: float, kind: str) -> None:
        self._add("line", kind, x1=x1, y1=y1, x2=x2, y2=y2)

    def bar(self, x1: float, x2: float, y: float, thick: float, kind: str = "bar") -> None:
        self._add("rect", kind, x=min(x1, x2), y=y - thick / 2, width=abs(x2 - x1), height=thick)

    def dot(self, x: float, y: float) -> None:
        self._add("circle", "dot", cx=x, cy=y, r=DOT)

    def mark(self, x: float, y: float, number: int) -> None:
        """The mark of a line's points: another shape when the dashes are used up."""
        shape = number // len(DASHES) % len(SHAPES)
        corners = [(x + 1.5 * DOT * dx, y + 1.5 * DOT * dy) for dx, dy in SHAPES[shape]]
        self._add("polygon", f"mark-{_ink(number)}").set("points", _path(corners))

    def line(self, points: Iterable[tuple[float, float]], number: int = 0) -> None:
        """A line of its own dashes and ink."""
        node = self._add("polyline", f"line-{_ink(number)}")
        node.set("points", _path(points))
        node.set("fill", "none")
        node.set("stroke-width", "1.6")
        if DASHES[number % len(DASHES)]:
            node.set("stroke-dasharray", DASHES[number % len(DASHES)])

    def band(self, lower: Sequence[tuple[float, float]], upper: Sequence[tuple[float, float]]) -> None:
        node = self._add("polygon", "band")
        node.set("points", _path([*lower, *reversed(upper)]))
        node.set("fill-opacity", "0.28")

    def whisker(self, x1: float, x2: float, y: float) -> None:
        """The reach of an error, with its ends marked."""
        self.segment(x1, y, x2, y, "error")
        for x in (x1, x2):
            self.segment(x, y - 3.0, x, y + 3.0, "error")

    def across(self, ticks: Iterable[tuple[float, str]], left: float, right: float) -> None:
        """The vertical axis: a line across for each of its round numbers."""
        for place, words in ticks:
            self.segment(left, place, right, place, "grid")
            self.text(left - 5, place + 4, words, "end", "soft")

    def along(self, ticks: Sequence[tuple[float, str]], y: float, left: float, right: float) -> None:
        """The horizontal axis, with labels as far as they do not meet: the first, the last, then those between."""
        self.segment(left, y, right, y, "axis")
        taken: list[tuple[float, float]] = []
        for place, words in [*ticks[:1], *ticks[:0:-1][:1], *ticks[1:-1]]:
            half = width(words) / 2
            middle = min(max(place, half), self.width - half)
            if len(ticks) <= 60:
                self.segment(place, y, place, y + 4, "axis")
            if all(middle + half < low or middle - half > high for low, high in taken):
                self.text(middle, y + 16, words, "middle", "soft")
                taken.append((middle - half - 5, middle + half + 5))

    def labels(self, x: float, wanted: Sequence[tuple[float, str, str]], top: float, bottom: float) -> None:
        """Labels (height, words, kind) beside the ends of lines at x, moved apart where they would meet, each on a
        thread to its line."""
        order = sorted(range(len(wanted)), key=lambda number: wanted[number][0])
        places = [min(max(wanted[number][0], top), bottom) for number in order]
        for number in range(1, len(places)):
            places[number] = max(places[number], places[number - 1] + ROW)
        for number in reversed(range(len(places))):
            limit = bottom if number == len(places) - 1 else places[number + 1] - ROW
            places[number] = min(places[number], limit)
        for number, place in zip(order, places, strict=True):
            height, words, kind = wanted[number]
            self.segment(x + 2, height, x + THREAD - 2, place, "thread")
            self.text(x + THREAD, place + 4, words, kind=kind)

    def _add(self, tag: str, kind: str, **places: float) -> ElementTree.Element:
        found = {name: _short(place) for name, place in places.items()}
        return ElementTree.SubElement(self.root, tag, {**attributes(kind), **found})


SHAPES = (  # corners around a point
    tuple((math.cos(turn * math.pi / 6), math.sin(turn * math.pi / 6)) for turn in range(12)),
    ((-0.9, -0.9), (0.9, -0.9), (0.9, 0.9), (-0.9, 0.9)),
    ((0.0, -1.2), (1.1, 0.8), (-1.1, 0.8)),
    ((0.0, -1.3), (1.3, 0.0), (0.0, 1.3), (-1.3, 0.0)),
)


def _ink(number: int) -> str:
    return LINES[(number + number // len(LINES)) % len(LINES)]


def _short(place: float) -> str:
    return f"{place:.2f}".rstrip("0").rstrip(".")


def _path(points: Iterable[tuple[float, float]]) -> str:
    return " ".join(f"{x:.1f},{y:.1f}" for x, y in points)


def _clean(words: str) -> str:
    """Without the characters that no XML can hold."""
    return "".join(letter if letter.isprintable() or letter == " " else " " for letter in words)
