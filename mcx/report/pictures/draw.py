"""The pictures of results. Each function takes numbers as they are to be read and gives an SVG."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from mcx.report.pictures.canvas import ROW, THREAD, Canvas, Scale, fit, scale, width, written

WIDTH, HEIGHT = 400, 168
WIDE = 820  # of a picture across a whole page: letters come out as large as in the others
LEFT, RIGHT, TOP, BOTTOM = 46, 14, 20, 24
Z95 = 1.96  # half-widths of 95 % intervals in standard errors
NAME = 130.0  # the most room for a name


@dataclass(frozen=True, slots=True)
class Bar:
    """A number with its error and how it is written."""

    name: str
    value: float
    error: float
    shown: str


@dataclass(frozen=True, slots=True)
class Series:
    """A line: (place, number) in order; along time places are years."""

    name: str
    points: tuple[tuple[float, float], ...]


@dataclass(frozen=True, slots=True)
class Fan:
    """Quantiles of a level at times in years, as `quantiles[share][time]`, with levels that the contract looks at."""

    name: str
    times: tuple[float, ...]
    quantiles: dict[float, tuple[float, ...]]
    barriers: tuple[Series, ...]


@dataclass(frozen=True, slots=True)
class Rung:
    """A band about 0, not always evenly, and what is said of it."""

    name: str
    low: float
    high: float
    said: str


Ticks = Sequence[tuple[float, str]]


def bars(title: str, said: str, rows: Sequence[Bar]) -> str:
    """Bars from 0 with their 95 % intervals, the numbers beside them."""
    left, right = _sides([row.name for row in rows], [row.shown for row in rows])
    step = 20
    canvas = Canvas(WIDTH, 10 + step * len(rows), title, said)
    reach = [row.value + sign * Z95 * row.error for row in rows for sign in (-1, 1)]
    x = scale(reach, left, WIDTH - right, zero=True)
    for number, row in enumerate(rows):
        y = 5 + step * (number + 0.5)
        canvas.text(left - 8, y + 4, fit(row.name, NAME), "end")
        canvas.bar(x(0.0), x(row.value), y, 11)
        canvas.whisker(x(row.value - Z95 * row.error), x(row.value + Z95 * row.error), y)
        canvas.text(WIDTH - 2, y + 4, row.shown, "end")
    canvas.segment(x(0.0), 3, x(0.0), canvas.height - 3, "axis")
    return canvas.svg()


def lines(title: str, said: str, series: Sequence[Series], ticks: Ticks, up: str) -> str:
    """Lines along time, each with a mark on its dates and its name at its end."""
    right = RIGHT + THREAD + min(NAME, max(width(each.name) for each in series))
    canvas, x, y = _frame(title, said, [time for each in series for time, _ in each.points],
                          [number for each in series for _, number in each.points], ticks, right, up, zero=True)
    _drawn(canvas, x, y, series)
    canvas.labels(WIDTH - right, [(y(each.points[-1][1]), fit(each.name, NAME), "words") for each in series], TOP,
                  HEIGHT - BOTTOM)
    return canvas.svg()


def fan(title: str, said: str, what: Fan, ticks: Ticks, up: str) -> str:
    """Quantiles of a level as bands around the median, with the contract's barriers and their names."""
    shares = sorted(what.quantiles)
    labels = [(what.quantiles[share][-1], f"{100 * share:g} %", "soft") for share in shares]
    for each in what.barriers:
        level = each.points[-1][1]
        labels.append((level, f"{fit(each.name, NAME - 35)} {level:.4g}", "words"))
    right = RIGHT + THREAD + max(width(words) for _, words, _ in labels)
    numbers = [number for share in shares for number in what.quantiles[share]]
    numbers += [number for each in what.barriers for _, number in each.points]
    canvas, x, y = _frame(title, said, what.times, numbers, ticks, right, up)

    def places(share: float) -> list[tuple[float, float]]:
        return [(x(time), y(number)) for time, number in zip(what.times, what.quantiles[share], strict=True)]

    for lower, upper in zip(shares[:len(shares) // 2], reversed(shares), strict=False):
        canvas.band(places(lower), places(upper))
    canvas.line(places(0.5))
    for number, each in enumerate(what.barriers, start=1):
        canvas.line([(x(time), y(value)) for time, value in each.points], number)
    canvas.labels(WIDTH - right, [(y(number), words, kind) for number, words, kind in labels], TOP, HEIGHT - BOTTOM)
    return canvas.svg()


def curve(title: str, said: str, points: Sequence[tuple[float, float]], across: str, up: str,
          marked: Sequence[tuple[str, float]] = ()) -> str:
    """One line over a scale of numbers, both axes named; places that matter are marked with their names."""
    numbers = [number for _, number in points]
    left = _left(scale(numbers, 1.0, 0.0))
    x = Scale(min(place for place, _ in points), max(place for place, _ in points), left, WIDTH - RIGHT)
    shown = sorted((x(place), fit(name, NAME)) for name, place in marked if x.low <= place <= x.high)
    lefts = [_beside(place, name) for place, name in shown]
    rows = _rows([(place, left - 1, left + width(name) + 3) for (place, name), left in zip(shown, lefts, strict=True)])
    top = TOP + ROW * (1 + max(rows, default=-1)) + 4
    foot = top + HEIGHT - TOP - BOTTOM
    canvas = Canvas(WIDTH, foot + BOTTOM + 14, title, said)
    y = scale(numbers, foot, top)
    canvas.across([(y(tick), written(tick)) for tick in y.ticks()], left, WIDTH - RIGHT)
    canvas.along([(x(tick), written(tick)) for tick in x.ticks(8)], foot, left, WIDTH - RIGHT)
    for (place, _), row in zip(shown, rows, strict=True):
        canvas.segment(place, TOP - 6 + ROW * row, place, foot, "thread")
    for (_, name), left, row in zip(shown, lefts, rows, strict=True):
        canvas.plate(left, TOP + 4 + ROW * row, name)
    canvas.line([(x(place), y(number)) for place, number in points])
    canvas.text(0, 10, up, kind="soft")
    canvas.text(WIDTH - RIGHT, canvas.height - 4, across, "end", "soft")
    return canvas.svg()


def intervals(title: str, said: str, rows: Sequence[Bar], across: str) -> str:
    """Estimates of one number, each with its 95 % interval, one below the other."""
    left, _ = _sides([row.name for row in rows], [])
    step = 20
    foot = 4 + step * len(rows)
    canvas = Canvas(WIDTH, foot + BOTTOM + 12, title, said)
    x = scale([row.value + sign * Z95 * row.error for row in rows for sign in (-1, 1)], left, WIDTH - RIGHT)
    canvas.segment(x(rows[-1].value), 4, x(rows[-1].value), foot, "grid")
    for number, row in enumerate(rows):
        y = 4 + step * (number + 0.5)
        canvas.text(left - 8, y + 4, fit(row.name, NAME), "end")
        canvas.whisker(x(row.value - Z95 * row.error), x(row.value + Z95 * row.error), y)
        canvas.dot(x(row.value), y)
    canvas.along([(x(tick), written(tick)) for tick in x.ticks(6)], foot, left, WIDTH - RIGHT)
    canvas.text(WIDTH - RIGHT, canvas.height - 3, across, "end", "soft")
    return canvas.svg()


def gap_ladder(title: str, said: str, gap: Bar, bands: Sequence[Rung], across: str) -> str:
    """A gap as a bar from 0 with its error, its end drawn down through bands around 0."""
    left, right = _sides([gap.name, *(band.name for band in bands)], [gap.shown, *(band.said for band in bands)])
    step = 22
    foot = 4 + step * (1 + len(bands))
    canvas = Canvas(WIDTH, foot + BOTTOM + 12, title, said)
    ends = [gap.value - Z95 * gap.error, gap.value + Z95 * gap.error]
    x = scale([*ends, *(end for band in bands for end in (band.low, band.high))], left, WIDTH - right, zero=True)
    for number, band in enumerate(bands, start=1):
        y = 4 + step * (number + 0.5)
        canvas.text(left - 8, y + 4, fit(band.name, NAME), "end")
        canvas.bar(x(band.low), x(band.high), y, 9)
        canvas.text(WIDTH - 2, y + 4, band.said, "end")
    y = 4 + step * 0.5
    canvas.text(left - 8, y + 4, gap.name, "end")
    canvas.line([(x(0.0), y), (x(gap.value), y)])
    canvas.whisker(x(ends[0]), x(ends[1]), y)
    canvas.dot(x(gap.value), y)
    canvas.text(WIDTH - 2, y + 4, gap.shown, "end")
    canvas.segment(x(0.0), 4, x(0.0), foot, "axis")
    canvas.line([(x(gap.value), y), (x(gap.value), foot)], 1)
    canvas.along([(x(tick), written(tick)) for tick in x.ticks(6)], foot, left, WIDTH - right)
    canvas.text(WIDTH - right, canvas.height - 3, across, "end", "soft")
    return canvas.svg()


def moves(title: str, said: str, rows: Sequence[Bar], across: str) -> str:
    """Moves in half-widths of their bands: the band from -1 to 1 behind all of them, a dot for each."""
    left, right = _sides([row.name for row in rows], [row.shown for row in rows])
    step = 20
    foot = 4 + step * len(rows)
    canvas = Canvas(WIDTH, foot + BOTTOM + 12, title, said)
    x = scale([-1.0, 1.0, *(row.value for row in rows)], left, WIDTH - right)
    canvas.band([(x(-1.0), 4), (x(1.0), 4)], [(x(-1.0), foot), (x(1.0), foot)])
    canvas.segment(x(0.0), 4, x(0.0), foot, "grid")
    for number, row in enumerate(rows):
        y = 4 + step * (number + 0.5)
        canvas.text(left - 8, y + 4, fit(row.name, NAME), "end")
        canvas.whisker(x(row.value - Z95 * row.error), x(row.value + Z95 * row.error), y)
        canvas.dot(x(row.value), y)
        canvas.text(WIDTH - 2, y + 4, row.shown, "end")
    canvas.along([(x(tick), written(tick)) for tick in x.ticks(6)], foot, left, WIDTH - right)
    canvas.text(WIDTH - right, canvas.height - 3, across, "end", "soft")
    return canvas.svg()


def errors(title: str, said: str, series: Sequence[Series], across: str, up: str) -> str:
    """Lines on logarithmic axes across a whole page, each named at its end; all numbers above 0."""
    right = RIGHT + THREAD + max(width(each.name) for each in series)
    height = max(260.0, TOP + BOTTOM + 14 + ROW * len(series))
    foot = height - BOTTOM - 14
    logs = [Series(each.name, tuple((math.log10(place), math.log10(number)) for place, number in each.points))
            for each in series]
    canvas = Canvas(WIDE, height, title, said)
    x = scale([place for each in logs for place, _ in each.points], LEFT + 14, WIDE - right)
    y = scale([number for each in logs for _, number in each.points], foot, TOP)
    canvas.across([(y(tick), written(10.0**tick)) for tick in y.powers()], LEFT + 14, WIDE - right)
    canvas.along([(x(tick), written(10.0**tick)) for tick in x.powers()], foot, LEFT + 14, WIDE - right)
    for each in logs:  # to the edge, where the names are
        last = each.points[-1]
        canvas.segment(x(last[0]), y(last[1]), WIDE - right, y(last[1]), "grid")
    _drawn(canvas, x, y, logs)
    canvas.labels(WIDE - right, [(y(each.points[-1][1]), each.name, "words") for each in logs], TOP, foot)
    canvas.text(0, 10, fit(up, WIDE), kind="soft")
    canvas.text(WIDE - right, height - 4, across, "end", "soft")
    return canvas.svg()


def _frame(title: str, said: str, times: Sequence[float], numbers: Sequence[float], ticks: Ticks, right: float,
           up: str, zero: bool = False) -> tuple[Canvas, Scale, Scale]:
    """Axes of time and of numbers."""
    first, last = min(times), max(times)
    y = scale(numbers, HEIGHT - BOTTOM, TOP, zero)
    left = _left(y)
    x = Scale(first, last if last > first else first + 1.0, left, WIDTH - right)
    canvas = Canvas(WIDTH, HEIGHT, title, said)
    canvas.across([(y(tick), written(tick)) for tick in y.ticks()], left, WIDTH - right)
    canvas.along([(x(time), words) for time, words in ticks if first <= time <= last], HEIGHT - BOTTOM, left,
                 WIDTH - right)
    canvas.text(0, 10, up, kind="soft")
    return canvas, x, y


def _drawn(canvas: Canvas, x: Scale, y: Scale, series: Sequence[Series]) -> None:
    """Each line, with its marks where they do not run into one another."""
    for number, each in enumerate(series):
        places = [(x(place), y(value)) for place, value in each.points]
        canvas.line(places, number)
        for place in places if len(places) <= 40 else ():
            canvas.mark(*place, number)


def _left(y: Scale) -> float:
    """The room for the numbers of a vertical axis."""
    return max(LEFT, 7 + max(width(written(tick)) for tick in y.ticks()))


def _sides(names: Sequence[str], shown: Sequence[str]) -> tuple[float, float]:
    """The room for names on the left and for numbers on the right."""
    left = 12 + min(NAME, max(width(name) for name in names))
    return left, (14 + max(width(words) for words in shown)) if shown else RIGHT


def _beside(place: float, name: str) -> float:
    """Where a name begins that stands behind a place, or before it where the picture ends."""
    return place + 3 if place + 3 + width(name) <= WIDTH else place - 3 - width(name)


def _rows(labels: Sequence[tuple[float, float, float]]) -> list[int]:
    """For labels (place, left, right) from left to right, each with a line down from its place: the first row below the
    labels that the line would cross, on which there is room."""
    rows: list[int] = []
    for place, left, right in labels:
        before = list(zip(rows, labels, strict=False))
        row = 1 + max((other for other, (_, start, end) in before if start < place < end), default=-1)
        while any(other == row and start < right and left < end for other, (_, start, end) in before):
            row += 1
        rows.append(row)
    return rows
