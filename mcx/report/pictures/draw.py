"""The pictures of results. Each function takes numbers as they are to be read and gives an SVG."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from mcx.report.pictures.canvas import LETTER, Canvas, Scale, scale, written

WIDTH, HEIGHT = 520, 230
LEFT, RIGHT, TOP, BOTTOM = 58, 16, 14, 30
Z95 = 1.96  # half-widths of 95 % intervals in standard errors


@dataclass(frozen=True, slots=True)
class Bar:
    """A number with its error and how it is written."""

    name: str
    value: float
    error: float
    shown: str


@dataclass(frozen=True, slots=True)
class Series:
    """Numbers along time: (years, number) in order."""

    name: str
    points: tuple[tuple[float, float], ...]


@dataclass(frozen=True, slots=True)
class Fan:
    """Quantiles of a level at times in years, as `quantiles[share][time]`, with levels that the contract looks at."""

    name: str
    times: tuple[float, ...]
    quantiles: dict[float, tuple[float, ...]]
    barriers: tuple[Series, ...]


Ticks = Sequence[tuple[float, str]]


def bars(title: str, said: str, rows: Sequence[Bar]) -> str:
    """Bars from 0 with their 95 % intervals, the numbers beside them."""
    left = 18 + LETTER * max(len(row.name) for row in rows)
    right = 12 + LETTER * max(len(row.shown) for row in rows)
    step = 22
    canvas = Canvas(WIDTH, 16 + step * len(rows), title, said)
    reach = [row.value + sign * Z95 * row.error for row in rows for sign in (-1, 1)]
    x = scale(reach, left, WIDTH - right, zero=True)
    for number, row in enumerate(rows):
        y = 8 + step * (number + 0.5)
        canvas.text(left - 8, y + 4, row.name, "end")
        canvas.bar(x(0.0), x(row.value), y, 12)
        canvas.whisker(x(row.value - Z95 * row.error), x(row.value + Z95 * row.error), y, y)
        canvas.text(WIDTH - 4, y + 4, row.shown, "end")
    canvas.segment(x(0.0), 4, x(0.0), canvas.height - 4, "axis")
    return canvas.svg()


def lines(title: str, said: str, series: Sequence[Series], ticks: Ticks) -> str:
    """Lines along time, each with a dot on its dates and its name at its end."""
    right = RIGHT + LETTER * max(len(each.name) for each in series)
    canvas, x, y = _frame(title, said, [time for each in series for time, _ in each.points],
                          [number for each in series for _, number in each.points], ticks, right, zero=True)
    for number, each in enumerate(series):
        places = [(x(time), y(value)) for time, value in each.points]
        canvas.line(places, number)
        for place in places if len(places) <= 40 else ():
            canvas.dot(*place)
    canvas.labels(WIDTH - right + 6, [(y(each.points[-1][1]), each.name) for each in series], TOP, HEIGHT - BOTTOM)
    return canvas.svg()


def fan(title: str, said: str, what: Fan, ticks: Ticks) -> str:
    """Quantiles of a level as bands around the median, with the contract's barriers and their names."""
    shares = sorted(what.quantiles)
    named = [(f"{100 * share:g} %", what.quantiles[share][-1]) for share in shares]
    labels = [*named, *((each.name, each.points[-1][1]) for each in what.barriers)]
    right = RIGHT + LETTER * max(len(name) for name, _ in labels)
    numbers = [number for share in shares for number in what.quantiles[share]]
    numbers += [number for each in what.barriers for _, number in each.points]
    canvas, x, y = _frame(title, said, what.times, numbers, ticks, right)

    def places(share: float) -> list[tuple[float, float]]:
        return [(x(time), y(number)) for time, number in zip(what.times, what.quantiles[share], strict=True)]

    for lower, upper in zip(shares[:len(shares) // 2], reversed(shares), strict=False):
        canvas.band(places(lower), places(upper))
    canvas.line(places(0.5))
    for number, each in enumerate(what.barriers, start=1):
        canvas.line([(x(time), y(value)) for time, value in each.points], number)
    canvas.labels(WIDTH - right + 6, [(y(number), name) for name, number in labels], TOP, HEIGHT - BOTTOM)
    return canvas.svg()


def curve(title: str, said: str, points: Sequence[tuple[float, float]], across: str, up: str) -> str:
    """One line over a scale of numbers, both axes named."""
    x = Scale(min(place for place, _ in points), max(place for place, _ in points), LEFT, WIDTH - RIGHT)
    y = scale([number for _, number in points], HEIGHT - BOTTOM - 14, TOP + 14)
    canvas = Canvas(WIDTH, HEIGHT, title, said)
    canvas.across(y, LEFT, WIDTH - RIGHT)
    canvas.along([(x(tick), written(tick)) for tick in x.ticks(8)], HEIGHT - BOTTOM - 14, LEFT, WIDTH - RIGHT)
    canvas.line([(x(place), y(number)) for place, number in points])
    canvas.text(LEFT, TOP, up, kind="soft")
    canvas.text(WIDTH - RIGHT, HEIGHT - 6, across, "end", "soft")
    return canvas.svg()


def intervals(title: str, said: str, rows: Sequence[Bar]) -> str:
    """Estimates of one number, each with its 95 % interval, one below the other."""
    left = 18 + LETTER * max(len(row.name) for row in rows)
    step = 24
    canvas = Canvas(WIDTH, 34 + step * len(rows), title, said)
    x = scale([row.value + sign * Z95 * row.error for row in rows for sign in (-1, 1)], left, WIDTH - RIGHT)
    foot = canvas.height - BOTTOM + 4
    for number, row in enumerate(rows):
        y = 4 + step * (number + 0.5)
        canvas.text(left - 8, y + 4, row.name, "end")
        canvas.whisker(x(row.value - Z95 * row.error), x(row.value + Z95 * row.error), y, y)
        canvas.dot(x(row.value), y)
    canvas.segment(x(rows[-1].value), 4, x(rows[-1].value), foot, "grid")
    canvas.along([(x(tick), written(tick)) for tick in x.ticks(6)], foot, left, WIDTH - RIGHT)
    return canvas.svg()


def _frame(title: str, said: str, times: Sequence[float], numbers: Sequence[float], ticks: Ticks, right: float,
           zero: bool = False) -> tuple[Canvas, Scale, Scale]:
    """Axes of time and of numbers."""
    first, last = min(times), max(times)
    x = Scale(first, last if last > first else first + 1.0, LEFT, WIDTH - right)
    y = scale(numbers, HEIGHT - BOTTOM, TOP, zero)
    canvas = Canvas(WIDTH, HEIGHT, title, said)
    canvas.across(y, LEFT, WIDTH - right)
    canvas.along([(x(time), words) for time, words in ticks if first <= time <= last], HEIGHT - BOTTOM, LEFT,
                 WIDTH - right)
    return canvas, x, y


def gap_ladder(title: str, said: str, gap: Bar, bands: Sequence[tuple[str, float, str]]) -> str:
    """A gap as a bar from 0 with its error, its end drawn down through bands around 0 (name, half-width, holds it)."""
    rows = 1 + len(bands)
    left = 18 + LETTER * max(len(name) for name in (gap.name, *(band[0] for band in bands)))
    right = 18 + LETTER * max(len(words) for words in (gap.shown, *(band[2] for band in bands)))
    step = 24
    canvas = Canvas(WIDTH, 34 + step * rows, title, said)
    ends = [gap.value - Z95 * gap.error, gap.value + Z95 * gap.error]
    x = scale([*ends, *(sign * half for _, half, _ in bands for sign in (-1, 1))], left, WIDTH - right, zero=True)
    foot = canvas.height - BOTTOM + 4
    for number, (name, half, holds) in enumerate(bands, start=1):
        y = 4 + step * (number + 0.5)
        canvas.text(left - 8, y + 4, name, "end")
        canvas.whisker(x(-half), x(half), y, y)
        canvas.text(WIDTH - 4, y + 4, holds, "end")
    y = 4 + step * 0.5
    canvas.text(left - 8, y + 4, gap.name, "end")
    canvas.bar(x(0.0), x(gap.value), y, 12)
    canvas.whisker(x(ends[0]), x(ends[1]), y, y)
    canvas.text(WIDTH - 4, y + 4, gap.shown, "end")
    canvas.segment(x(0.0), 4, x(0.0), foot, "axis")
    canvas.line([(x(gap.value), y), (x(gap.value), foot)], 1)
    canvas.along([(x(tick), written(tick)) for tick in x.ticks(6)], foot, left, WIDTH - right)
    return canvas.svg()
