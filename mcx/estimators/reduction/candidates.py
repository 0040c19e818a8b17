"""Candidate controls of a contract: what its tape reads and where it turns, with exact means.

Levels over their forwards, which are martingales; where the tape compares a product of levels (one level, a level over
an earlier one) with a number, a call and a digital there; where it compares a sum of products (an average, a basket),
the sum itself and the same options on the geometric average beside it (A. Kemna, A. Vorst, "A pricing method for
options based on average asset values", J. Banking & Finance 14 (1990)), its strike moved by the difference of the
means (T. Vorst, "Prices and hedge ratios of average exchange rate options", 1992); where it compares two products or
sums, an exchange of lognormals. `watched.py` adds what is watched over many dates.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

from mcx.estimators.ready import Ready
from mcx.estimators.reduction.laws import Law, Lognormal, above_mean, call_mean, exchange_mean
from mcx.estimators.reduction.scheme import Control
from mcx.estimators.reduction.turning import Day, Product, Terms, Turn, turns
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import LevelKey
from mcx.tape.registers import uniform_values

MOST_DATES = 32  # of one shape, evenly spread, the last one among them
MOST_CANDIDATES = 200


@dataclass(frozen=True, slots=True)
class Candidate:
    """A control and its value on the builder's tape."""

    control: Control
    value: int


class Market:
    """A contract's turns, the law of its levels, and a tape that controls are added to."""

    def __init__(self, ready: Ready):
        tape = ready.unrolled.observed
        names = ready.dated.contract.assets
        makeup = ready.market.makeup()
        known = uniform_values(tape, ready.market.values(tape.leaves))
        keys = [step.payload for step in tape.instructions if step.op is Op.LEVEL and step.payload.time > 0.0
                and not (step.payload.asset in makeup.cash and step.payload.asset in makeup.rates)]
        self.ready = ready
        self.names = names
        self.makeup = makeup
        self.builder = Builder.of(tape)
        self.days: list[Day] = sorted({(key.asset, key.time) for key in keys})
        self.turns = turns(tape, known, self._made_of)
        self.law = Law(ready.market, self.days, self.forward) if self.days else None

    def escrow(self, day: Day) -> float:
        """What the cash dividends to come after a day are worth then: not part of what is lognormal."""
        asset, time = day
        if asset not in self.makeup.cash:
            return 0.0
        return float(self.ready.market.escrowed(asset, time, self.ready.unrolled.grid.times[-1]))

    def forward(self, day: Day) -> float:
        """Of the level without cash dividends to come."""
        return self.ready.market.forward(self.names[day[0]], day[1]) - self.escrow(day)

    def spot(self, asset: int) -> float:
        return self.forward((asset, 0.0))

    def level(self, day: Day) -> int:
        """The level without cash dividends to come."""
        level, escrow = self.builder.input(Op.LEVEL, LevelKey(*day)), self.escrow(day)
        return self.builder.emit(Op.SUB, level, self.builder.constant(escrow)) if escrow else level

    def _made_of(self, key: LevelKey) -> Terms | None:
        day = key.asset, key.time
        if key.time <= 0.0:
            return Terms({(): self.ready.market.forward(self.names[key.asset], 0.0)})
        if key.asset in self.makeup.cash and key.asset in self.makeup.rates:
            return None  # a lognormal times the sum of another and a number
        escrow = self.escrow(day)
        return Terms({((day, 1.0),): 1.0, **({(): escrow} if escrow else {})})

    def log(self, day: Day) -> int:
        return self.builder.emit(Op.LOG, self.level(day))

    def scaled(self, value: int, factor: float) -> int:
        return self.builder.emit(Op.MUL, value, self.builder.constant(factor))

    def value(self, variable: Lognormal) -> int:
        """A product of powers of levels, times its factor."""
        emit, powers = self.builder.emit, variable.powers
        if len(powers) <= 2 and all(abs(power) == 1.0 for _, power in powers):
            tops = [self.level(day) for day, power in powers if power > 0.0]
            value = self.builder.fold(Op.MUL, tops) if tops else self.builder.constant(1.0)
            for day, power in powers:
                value = emit(Op.DIV, value, self.level(day)) if power < 0.0 else value
            return self.scaled(value, math.exp(variable.shift))
        logs = (self.scaled(self.log(day), power) for day, power in powers)
        return emit(Op.EXP, emit(Op.ADD, self.builder.fold(Op.ADD, logs), self.builder.constant(variable.shift)))

    def call(self, value: int, strike: float) -> int:
        emit, constant = self.builder.emit, self.builder.constant
        return emit(Op.MAX, emit(Op.SUB, value, constant(strike)), constant(0.0))

    def above(self, value: int, strike: float) -> int:
        return self.builder.emit(Op.LT, self.builder.constant(strike), value)

    def called(self, powers: Product) -> str:
        """A product of levels in words."""
        parts = [f"{self.names[asset]} {time:.4g}y" + ("" if power == 1.0 else f"^{power:.3g}")
                 for (asset, time), power in powers]
        if len(parts) == 2 and [power for _, power in powers] in ([-1.0, 1.0], [1.0, -1.0]):
            over = sorted(powers, key=lambda part: -part[1])
            return " / ".join(f"{self.names[asset]} {time:.4g}y" for (asset, time), _ in over)
        return " ".join(parts) if len(parts) <= 2 else f"{len(parts)} levels"


def candidates(market: Market) -> list[Candidate]:
    """Every candidate but those of `watched.py`, each once."""
    found = [*_levels(market)]
    for turn in _spread_over_dates(market.turns):
        found += _averages(market, turn) if len(turn.above) > 1 or len(turn.below) > 1 else _products(market, turn)
    return list({candidate.value: candidate for candidate in found}.values())[:MOST_CANDIDATES]


def _levels(market: Market) -> Iterator[Candidate]:
    """Levels over their forwards."""
    for asset in sorted({asset for asset, _ in market.days}):
        for day in evenly([day for day in market.days if day[0] == asset], MOST_DATES // 2):
            forward = math.exp(market.law.log_forward(day))
            name = f"{market.names[asset]} over its forward, {day[1]:.4g}y"
            yield Candidate(Control(name, 1.0), market.scaled(market.level(day), 1.0 / forward))


def _spread_over_dates(found: Iterable[Turn]) -> list[Turn]:
    """Of turns that differ only in their dates at most so many."""
    shapes: dict[tuple, list[Turn]] = {}
    for turn in found:
        sides = (tuple((day[0], round(power, 9)) for product, _ in side[:2] for day, power in product)
                 for side in (turn.above, turn.below))
        alike = round(turn.strike, 9), turn.jumps, len(turn.above), len(turn.below), *sides
        shapes.setdefault(alike, []).append(turn)
    kept = [turn for group in shapes.values() for turn in evenly(group, MOST_DATES)]
    return sorted(kept, key=lambda turn: len(turn.above) + len(turn.below), reverse=True)


def evenly(values: Sequence, most: int) -> list:
    """At most so many of the values, evenly spread, the last one among them."""
    step = max(len(values) / most, 1.0)
    return [values[len(values) - 1 - int(k * step)] for k in range(min(most, len(values)))][::-1]


def _products(market: Market, turn: Turn) -> Iterator[Candidate]:
    """Options on one product of levels, or to exchange one for another."""
    ((above, factor),) = turn.above
    one = market.law.lognormal(above, factor)
    if not turn.below:
        yield from _options(market, one, turn.strike, turn.jumps, market.called(above))
        return
    ((below, factor),) = turn.below
    yield from _exchange(market, one, market.law.lognormal(below, factor), turn.jumps,
                         f"{market.called(above)} against {market.called(below)}")


def _options(market: Market, variable: Lognormal, strike: float, jumps: bool, name: str) -> Iterator[Candidate]:
    value, mean = market.value(variable), variable.mean
    yield Candidate(Control(f"{name}", 1.0), market.scaled(value, 1.0 / mean))
    yield Candidate(Control(f"call on {name} at {strike:.6g}", call_mean(variable, strike) / mean),
                    market.scaled(market.call(value, strike), 1.0 / mean))
    if jumps:
        yield Candidate(Control(f"digital on {name} at {strike:.6g}", above_mean(variable, strike)),
                        market.above(value, strike))


def _exchange(market: Market, one: Lognormal, other: Lognormal, jumps: bool, name: str) -> Iterator[Candidate]:
    a, b, scale = market.value(one), market.value(other), one.mean
    emit, zero = market.builder.emit, market.builder.constant(0.0)
    yield Candidate(Control(f"{name}, first", 1.0), market.scaled(a, 1.0 / scale))
    yield Candidate(Control(f"{name}, second", other.mean / scale), market.scaled(b, 1.0 / scale))
    gain = emit(Op.MAX, emit(Op.SUB, a, b), zero)
    yield Candidate(Control(f"exchange of {name}", exchange_mean(one, other) / scale), market.scaled(gain, 1.0 / scale))
    if jumps:
        ratio = Lognormal((), 0.0, one.mu - other.mu, one.weights - other.weights, one.along - other.along)
        yield Candidate(Control(f"digital on {name}", above_mean(ratio, 1.0)), emit(Op.LT, b, a))


def _averages(market: Market, turn: Turn) -> Iterator[Candidate]:
    """A sum of products, and options on the geometric averages beside it."""
    sides = [_geometric(market, side) for side in (turn.above, turn.below) if side]
    for mean, sum_value, _, name in sides:
        if sum_value is not None:
            yield Candidate(Control(f"average of {name}", 1.0), market.scaled(sum_value, 1.0 / mean))
    mean, _, geometric, name = sides[0]
    if len(sides) == 2:
        yield from _exchange(market, geometric, sides[1][2], turn.jumps, f"geometric average of {name} against "
                                                                        f"{sides[1][3]}")
        return
    moved = turn.strike - (mean - geometric.mean)
    if moved > 0.0:
        yield from _options(market, geometric, moved, turn.jumps, f"geometric average of {name}")


def _geometric(market: Market, side: Sequence[tuple[Product, float]]) -> tuple[float, int | None, Lognormal, str]:
    """The mean of a sum of products; its value (None for a single product); the product of the same products, each to
    the power of its share of that mean, which has the sum's mean where nothing is random; and a name."""
    single = [market.law.lognormal(product, factor) for product, factor in side]
    mean = sum(each.mean for each in single)
    if len(single) == 1:
        return mean, None, single[0], market.called(side[0][0])
    powers: dict[Day, float] = {}
    shift = math.log(mean)
    for each in single:
        share = each.mean / mean
        shift += share * (each.shift - math.log(each.mean))
        for day, power in each.powers:
            powers[day] = powers.get(day, 0.0) + share * power
    product = tuple(sorted((day, power) for day, power in powers.items() if abs(power) > 1e-12))
    value = market.builder.fold(Op.ADD, [market.value(each) for each in single])
    return mean, value, market.law.lognormal(product, math.exp(shift)), f"{len(side)} levels"
