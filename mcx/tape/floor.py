"""What a contract pays whatever happens: the certain minimum of its payments, and the maximum where there is one.

A contract goes one of several ways: it ends early on one of its days, or it runs to the end. Along each, every event
either happens, or it does not, or it is not reached; the intervals of what is paid then follow from the tape. The least
that the whole can be worth is the smallest over the ways of the sum over the events of the smallest outcome, so that a
note that is called early is not thought to lose the redemption that it no longer owes.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from itertools import groupby

from mcx.dates.dated_contract import DatedContract, Day
from mcx.tape.builder import Builder
from mcx.tape.hits import Span
from mcx.tape.intervals import NO, YES, Case, Intervals, Interval
from mcx.tape.ledger import Payment
from mcx.tape.unroll import walked

Discount = Callable[[float], float]  # of a time in years


@dataclass(frozen=True, slots=True)
class Owed:
    """An amount that is paid for certain in one outcome of an event, and the interval in which it lies; in the unit of
    the payoff, not discounted."""

    payment: Payment
    amount: Interval


Outcome = tuple[Owed, ...]
Choice = tuple[Outcome, ...]  # the outcomes that one event of a day can have, at least one


@dataclass(frozen=True, slots=True)
class Stage:
    """The events of one day on the paths on which the contract has lived until then: if it goes on after it, and if it
    ends with it. None where no path does."""

    day: Day | Span
    goes_on: tuple[Choice, ...] | None
    ends: tuple[Choice, ...] | None = None


@dataclass(frozen=True, slots=True)
class Extreme:
    """The least or the most that all payments together are worth, and the day on which a contract that pays so little
    or so much ends early, None where it runs to the end."""

    value: float
    ends: Day | Span | None


@dataclass(frozen=True, slots=True)
class PaymentRange:
    """A payment with the least and the most that it can be on any path, not discounted; 0 where it may not be owed.
    `due` is the last day on which it may fall due."""

    leg: str
    part: str
    decided: Day | Span
    due: Day
    least: float
    most: float


@dataclass(frozen=True, slots=True)
class Certain:
    """What is certain of a contract's payments, day by day."""

    stages: tuple[Stage, ...]

    def least(self, discount: Discount) -> Extreme:
        """The certain minimum of the present value, in the unit of the payoff: the bond floor on the issuer's curve.
        Minus infinity where the holder may owe without limit."""
        return _extreme(self._ways(discount, 0, min), min)

    def most(self, discount: Discount) -> Extreme:
        """The certain maximum of the present value; infinite where there is none."""
        return _extreme(self._ways(discount, 1, max), max)

    def _ways(self, discount: Discount, end: int, pick: Callable) -> Iterator[Extreme]:
        """The extreme of each way that the contract can go; `end` is 0 for the lower ends of amounts, else 1."""

        def of(choices: Iterable[Choice]) -> float:
            return math.fsum(pick(sum(pick(owed.amount[end] * discount(time) for time in owed.payment.due.times) for owed in outcome)
                                  for outcome in choice) for choice in choices)

        total = 0.0
        for stage in self.stages:
            if stage.ends is not None:
                yield Extreme(total + of(stage.ends), stage.day)
            if stage.goes_on is None:
                return
            total += of(stage.goes_on)
        yield Extreme(total, None)

    def payments(self) -> tuple[PaymentRange, ...]:
        """Every payment that may be owed, in the order in which they are decided."""
        found: dict[Payment, list[Interval]] = {}
        sure = True  # whether every path gets here
        for stage in self.stages:
            ways = [way for way in (stage.goes_on, stage.ends) if way is not None]
            here: dict[Payment, list[Interval]] = {}
            for owed in (owed for way in ways for choice in way for outcome in choice for owed in outcome):
                here.setdefault(owed.payment, []).append(owed.amount)
            for payment, amounts in here.items():
                always = all(any(all(payment in (owed.payment for owed in outcome) for outcome in choice)
                                 for choice in way) for way in ways)
                found[payment] = amounts if sure and always else [*amounts, NO]
            sure = sure and stage.ends is None
        return tuple(PaymentRange(one.leg, one.part, one.decided, one.due.latest, min(low for low, _ in amounts),
                                  max(high for _, high in amounts)) for one, amounts in found.items())


def _extreme(ways: Iterable[Extreme], pick: Callable) -> Extreme:
    return pick(ways, key=lambda way: way.value)


def certain(dated: DatedContract, nodes: Sequence[float]) -> Certain:
    """What is certain of the payments of a contract that can be unrolled, by interval analysis of its tape; `nodes` as
    for `unroll`. The bounds are sure; they may be wider than what paths reach."""
    builder = Builder()
    walk = walked(dated, builder, nodes)
    assert not walk.faults, "the contract can be unrolled"
    case: Case | None = Case(Intervals(builder.tape(()), dated.contract))
    decided = {day: list(owed) for day, owed in groupby(walk.payments, key=lambda payment: payment.decided)}
    stages = []
    for day in sorted({*decided, *walk.ends}, key=lambda day: (day.time, isinstance(day, Day))):  # hits come before
        payments = decided.get(day, [])
        if day not in walk.ends:
            stages.append(Stage(day, _choices(payments, case)))
            continue
        flag = walk.ends[day]
        ends, case = case.given({flag: YES}, max(flag, _last(payments))), case.given({flag: NO})
        stages.append(Stage(day, None if case is None else _choices(payments, case),
                            None if ends is None else _choices(payments, ends, flag)))
        if case is None:
            break
    return Certain(tuple(stages))


def _choices(payments: Iterable[Payment], case: Case, decided: int = 0) -> tuple[Choice, ...]:
    """The outcomes of each event of a day; `decided` is a value of the tape that the case knows and that says more of
    them: whether any of several hits of one span came."""
    events = groupby(payments, key=lambda payment: payment.event)
    found = (tuple(_outcomes(list(owed), case, decided)) for _, owed in events)
    return tuple(choice for choice in found if any(choice))


def _outcomes(payments: list[Payment], case: Case, decided: int) -> Iterator[Outcome]:
    """What an event may owe: the payments of one of its sides, or nothing."""
    flags, until = dict.fromkeys(payment.flag for payment in payments), max(_last(payments), decided)
    for flag in flags:
        there = case.given({flag: YES}, until)
        if there is not None:
            yield tuple(Owed(payment, there[payment.amount]) for payment in payments if payment.flag == flag)
    if case.given(dict.fromkeys(flags, NO), until) is not None:
        yield ()


def _last(payments: Iterable[Payment]) -> int:
    """The value of the tape after which nothing says anything of these payments."""
    return max((value for payment in payments for value in (payment.flag, payment.amount)), default=0)
