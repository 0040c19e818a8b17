"""What can be moved to meet a quote: each input alone, all of a kind together, with what the market says of its doubt.

The nodes of one curve move together, by a sum (forwards and spots by a share). A half-width under `uncertainty` is
that of every curve of its kind, independent from one asset to the next; `uncertain` beside a number takes its place
there.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import groupby

from mcx.checked.contract import Contract
from mcx.checked.market import Curve, Market, Quoted
from mcx.leaves.jacobian import Input, inputs

ALL = "all"
SHARES = ("spot", "forward")  # moved by a share of themselves
NAMES = {"vol": "vol", "yield": "yield", "forward": "forwards", "rate": "rates", "funding": "funding",
         "correlation": "correlation", "spot": "spot"}  # as the market's `uncertainty` calls them
REACH = {"yield": 0.10, "forward": 0.25, "rate": 0.05, "funding": 0.05}  # how far a solution is looked for
LEAST_VOL, VOL_REACH, MOST_CORRELATION = 0.01, 0.40, 0.995
WIDTHS = 4.0  # a solution is looked for at least this many half-widths away


@dataclass(frozen=True, slots=True)
class Lever:
    """Numbers of the market that move together. `widths` are their 90 % half-widths in the unit of a move, None where
    the market says nothing; `low` and `high` the moves between which solutions are looked for."""

    kind: str
    subject: str
    numbers: tuple[Input, ...]
    widths: tuple[float | None, ...]
    low: float
    high: float

    @property
    def name(self) -> str:
        return NAMES[self.kind]

    @property
    def width(self) -> float | None:
        """The largest move that is inside the half-width of every number; None where one is not stated."""
        return None if None in self.widths else min(self.widths)

    @property
    def shown(self) -> Input | None:
        """The number whose level stands for the lever's, None where several assets' move."""
        return self.numbers[-1] if len({number.subject for number in self.numbers}) == 1 else None

    def shifts(self, move: float) -> dict[Input, float]:
        """Every number by the same move."""
        return {number: move * _unit(number) for number in self.numbers}

    def doubt(self, share: float) -> dict[Input, float]:
        """Every number by this share of its own half-width."""
        return {number: share * width * _unit(number)
                for number, width in zip(self.numbers, self.widths, strict=True) if width is not None}

    def level(self, move: float) -> float | None:
        """Where the number shown stands after a move: for forwards and spots their level as well."""
        return None if self.shown is None else self.shown.value + move * _unit(self.shown)


def _unit(number: Input) -> float:
    return number.value if number.kind in SHARES else 1.0


def levers(market: Market, contract: Contract) -> tuple[Lever, ...]:
    """Each input of the contract alone, by kind; where several assets or pairs have one, first all of them together."""
    by_curve = groupby(inputs(market, contract), key=lambda each: (each.kind, each.subject))
    found = {key: list(nodes) for key, nodes in by_curve}
    made = []
    for kind in NAMES:
        here = {subject: nodes for (each, subject), nodes in found.items() if each == kind}
        if len(here) > 1 and kind not in ("spot", "rate", "funding"):
            made.append(_lever(market, kind, ALL, [node for nodes in here.values() for node in nodes]))
        made += [_lever(market, kind, subject, nodes) for subject, nodes in here.items()]
    return tuple(made)


def without_lever(market: Market, contract: Contract) -> tuple[Input, ...]:
    """The numbers that no lever moves: dividends and what concerns rates of exchange. They are taken as they stand."""
    return tuple(number for number in inputs(market, contract) if number.kind not in NAMES)


def alone(found: Sequence[Lever]) -> Iterator[Lever]:
    """Those that are independent of one another: what the input band is made of."""
    return (lever for lever in found if lever.subject != ALL)


def _lever(market: Market, kind: str, subject: str, numbers: Sequence[Input]) -> Lever:
    widths = tuple(_width(market, number) for number in numbers)
    values = [number.value for number in numbers]
    if kind == "vol":
        low, high = LEAST_VOL - min(values), VOL_REACH
    elif kind == "correlation":
        low, high = -MOST_CORRELATION - min(values), MOST_CORRELATION - max(values)
    else:
        low, high = -REACH.get(kind, 0.25), REACH.get(kind, 0.25)
        if None not in widths:
            low, high = min(low, -WIDTHS * min(widths)), max(high, WIDTHS * min(widths))
    return Lever(kind, subject, tuple(numbers), widths, min(low, 0.0), max(high, 0.0))


def _width(market: Market, number: Input) -> float | None:
    """The half-width that the market states for a number, in the unit of its lever's moves."""
    quoted, time, form = _stated(market, number)
    if quoted.uncertain is None:
        of_kind = market.uncertainty.get(NAMES[number.kind])
        return None if of_kind is None else of_kind.value
    if form == "discount":  # the number is a factor, what moves is its zero rate
        return math.log1p(quoted.uncertain / quoted.value) / time
    return quoted.uncertain / _unit(number)


def _stated(market: Market, number: Input) -> tuple[Quoted, float, str]:
    """A number as the document states it, its time and the form of its curve."""
    if number.kind == "correlation":
        return market.correlation[tuple(number.subject.split("/"))], 0.0, ""
    if number.kind in ("rate", "funding"):
        return _node({"rate": market.rates, "funding": market.funding}[number.kind][number.subject], number)
    asset = market.assets[number.subject]
    if number.kind == "spot":
        return asset.spot, 0.0, ""
    return _node({"vol": asset.vol, "yield": asset.dividend_yield, "forward": asset.forwards}[number.kind], number)


def _node(curve: Curve, number: Input) -> tuple[Quoted, float, str]:
    node = next(node for node in curve.nodes if node.label == number.tenor)
    return node.quoted, node.time, curve.form
