"""The moments of hits: when an event `at: {once: NAME}` of a continuous watch happens, and what is known there.

The watch is cut into stretches that hold no date of the contract and no node of a curve, so that each becomes one step
of the grid; in each the flag may turn, and MOMENT says when. From it follow the calendar day, what falls due on it and
its discount factor, `years`, and the level of the asset, which is the barrier's.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

from mcx.checked.formula import Name
from mcx.checked.payoff import End, Pay
from mcx.dates.dated_contract import DatedContract, DatedHit, Day
from mcx.faults import Fault
from mcx.tape.builder import Builder
from mcx.tape.formulas import Formulas, Scene, Unreadable, Values
from mcx.tape.observations import Observations
from mcx.tape.ops import Op
from mcx.tape.program import Leaf, LeafKind, LevelKey
from mcx.tape.running import Watched
from mcx.tape.thresholds import thresholds_of

YEAR = 365.0  # days, as times are counted
ROUNDING = 1e-6  # days
ONE_LEVEL = ("the moment of a hit is known for one level of one asset; '{}' waits for several: give each a running "
             "value and an event of its own")
FIRST_EXIT = ("'{}' waits for the first exit from between two levels, and the law of its moment is not worked out; pay "
              "on a date whether it came, which is exact ('- {{at: expiry, if: {}, then: [{{pay: 1}}]}}'), or watch it "
              "on dates")
WHICH_FIRST = ("it ends the contract, and so may a hit of '{}' be first in the same stretch of time: which of the two "
               "comes first is not known; watch one of them on dates")


@dataclass(frozen=True, slots=True)
class Span:
    """The time between two days of the contract, within which a hit may come."""

    since: Day
    until: Day

    @property
    def time(self) -> float:
        return self.until.time

    @property
    def date(self) -> datetime.date | None:
        return self.until.date

    def __str__(self) -> str:
        return f"{self.since} to {self.until}"


@dataclass(frozen=True, slots=True)
class Stretch:
    """A part of a hit's watch, one step of the grid; of no length on its first day. `day` is the contract's day, or the
    two days between which it lies."""

    hit: DatedHit
    start: float
    end: float
    day: Day | Span


@dataclass(frozen=True, slots=True)
class Due:
    """When an amount is paid: its discount factor and the time, as values of the tape, the latest day that it can be,
    and times among which there are those of its least and its greatest discount factor."""

    discount: int
    time: int
    latest: Day
    times: tuple[float, ...]


def which_first(dated: DatedContract) -> Iterator[Fault]:
    """Hits that cannot be put in order: one ends the contract while another is waited for."""
    for number, one in enumerate(dated.hits):
        ends = any(isinstance(action, End) for action in (*one.event.then, *one.event.otherwise))
        for other in dated.hits[:number] + dated.hits[number + 1:]:
            apart = one.watch.end.time <= other.watch.start.time or other.watch.end.time <= one.watch.start.time
            if ends and other.watch.running != one.watch.running and not apart:
                yield Fault(one.event.at.place, WHICH_FIRST.format(other.watch.running.name))


class Hits:
    """The stretches of all hits in order of time, and what a formula knows in each."""

    def __init__(self, dated: DatedContract, nodes: Sequence[float], formulas: Formulas,
                 observations: Observations):
        self.dated, self.formulas, self.builder, self.observations = dated, formulas, formulas.builder, observations
        days = [moment.day for moment in dated.moments]
        days += [day for watch in dated.watches for day in (watch.start, watch.end)]
        days += [Day(0.0, dated.valuation)] if any(hit.watch.start.time < 0.0 for hit in dated.hits) else []
        self._days = sorted({day.time: day for day in days}.values(), key=lambda day: day.time)
        cuts = sorted({day.time for day in self._days} | set(nodes))
        self._waiting = [stretch for hit in dated.hits for stretch in self._stretches(hit, cuts)]
        self._waiting.sort(key=lambda stretch: (stretch.end, stretch.start < stretch.end))
        self._turns: dict[tuple[str, float], tuple[int, int]] = {}
        self.moments: dict[int, str] = {}  # values of the tape, and for the flag of which watch they are drawn
        self._levels = _Levels(formulas)

    def _stretches(self, hit: DatedHit, cuts: Sequence[float]) -> Iterator[Stretch]:
        first, last = max(hit.watch.start.time, min(hit.watch.end.time, 0.0)), hit.watch.end.time  # the past is known
        inside = [time for time in cuts if first <= time <= last]
        for start, end in ((first, first), *zip(inside, inside[1:])):
            until = next(day for day in self._days if day.time >= end)
            since = [day for day in self._days if day.time < end]
            yield Stretch(hit, start, end, Span(since[-1], until) if start < end else until)

    def until(self, time: float) -> Iterator[Stretch]:
        """The stretches that end by a time, each once."""
        while self._waiting and self._waiting[0].end <= time:
            yield self._waiting.pop(0)

    def turn(self, stretch: Stretch, state: Watched) -> tuple[int, int]:
        """The flag before a stretch and at its end."""
        key = state.watch.running.name, stretch.end
        if key not in self._turns:
            if stretch.start < stretch.end:
                before = state.at(stretch.start)[0]
            elif stretch.hit.watch.start.time < 0.0:
                before = state.before()[0]
            else:
                before = state.start[0] if state.start else self.builder.constant(0.0)
            self._turns[key] = before, state.at(stretch.end)[0]
        return self._turns[key]

    @property
    def flags(self) -> dict[int, str]:
        """The values of the tape that are flags of watches, before a stretch or at its end."""
        return {flag: name for (name, _), pair in self._turns.items() for flag in pair}

    def scene(self, stretch: Stretch, flag: int) -> Scene:
        """What a formula may read at the moment at which a flag turns in a stretch."""
        assets = range(len(self.dated.contract.assets))
        if stretch.start == stretch.end:
            return Scene(lambda _: self.observations.all(stretch.day), _no_running,
                         moment=lambda: self._years(stretch, None))
        asset, level = self._barrier(stretch, flag)
        key = LevelKey(asset, stretch.end, stretch.start)
        part = self.builder.keyed(Op.MOMENT, (level,), key, stretch.hit.event.place)
        self.moments[part] = stretch.hit.watch.running.name
        level = self.observations.scaled(asset, level)

        def spot(name: Name) -> Values:
            if len(assets) > 1:
                raise Unreadable(name.place, "at the moment of a hit only the level of the watched asset is known; "
                                             f"write 'of(spot, {self.dated.contract.assets[asset]})'")
            return (level,)

        return Scene(spot, _no_running, moment=lambda: self._years(stretch, part), known={asset: level}, part=part)

    def due(self, stretch: Stretch, pay: Pay, part: int | None) -> Due:
        """When an amount is paid that is owed at a moment of a stretch."""
        constant, leaf = self.builder.constant, self.builder.leaf
        if not stretch.hit.days and pay not in stretch.hit.due:  # a textbook contract pays at the moment itself
            last = stretch.end
            if part is None:
                return Due(leaf(Leaf(LeafKind.DISCOUNT, end=last)), constant(last), Day(last), (last,))
            return Due(self._between(stretch, part), self._moment(stretch, part), Day(last), (stretch.start, last))
        days = [stretch.hit.due[pay][number] for number in self._numbers(stretch)]
        factors = [leaf(Leaf(LeafKind.DISCOUNT, end=day.time)) for day in days]
        times = [constant(day.time) for day in days]
        return Due(self._by_day(stretch, part, factors), self._by_day(stretch, part, times),
                   max(days, key=lambda day: day.time), tuple(day.time for day in days))

    def ends(self, stretch: Stretch, part: int | None) -> int:
        """The time to which a contract lives that ends at a moment of a stretch: when the last of what its events up
        to this one owe is paid, else the moment itself."""
        due = [self.due(replace(stretch, hit=hit), pay, part).time
               for hit, pay in paid_at(self.dated.hits, stretch.hit)]
        return self.builder.fold(Op.MAX, due) if due else self.time(stretch, part)

    def time(self, stretch: Stretch, part: int | None) -> int:
        """The time of the hit itself, or that of its day."""
        if not stretch.hit.days:
            return self.builder.constant(stretch.end) if part is None else self._moment(stretch, part)
        times = [self.builder.constant(stretch.hit.days[number].time) for number in self._numbers(stretch)]
        return self._by_day(stretch, part, times)

    def _years(self, stretch: Stretch, part: int | None) -> int:
        start = self.builder.constant(self.dated.start.time)
        return self.builder.emit(Op.SUB, self.time(stretch, part), start)

    def _moment(self, stretch: Stretch, part: int) -> int:
        return self.builder.emit(Op.SUB, self.builder.constant(stretch.end), self._left(stretch, part))

    def _left(self, stretch: Stretch, part: int) -> int:
        """The time from a moment to the end of its stretch: counted from there, a day later only the length is less."""
        emit, one = self.builder.emit, self.builder.constant(1.0)
        length = self.builder.leaf(Leaf(LeafKind.LENGTH, start=stretch.start, end=stretch.end))
        return emit(Op.MUL, emit(Op.SUB, one, part), length)

    def _between(self, stretch: Stretch, part: int) -> int:
        """The discount factor at a moment: log-linear, since no node lies inside. At the very end it is that date's
        own, which matters where levels are given and other factors are none."""
        emit, place = self.builder.emit, stretch.hit.event.place
        first, last = (self.builder.leaf(Leaf(LeafKind.DISCOUNT, end=time)) for time in (stretch.start, stretch.end))
        growth = emit(Op.EXP, emit(Op.MUL, part, emit(Op.LOG, emit(Op.DIV, last, first))))
        inside = emit(Op.LT, part, self.builder.constant(1.0), place=place)
        return emit(Op.SELECT, inside, emit(Op.MUL, first, growth), last)

    def _numbers(self, stretch: Stretch) -> range:
        """The calendar days of a stretch, counted from the watch's first. A day ends with its fixing, so the stretch
        from one date to the next belongs to the days after the first."""
        origin = stretch.hit.days[0].time * YEAR
        if stretch.start == stretch.end:
            return range(round(stretch.end * YEAR - origin), round(stretch.end * YEAR - origin) + 1)
        first = math.floor(stretch.start * YEAR - origin + ROUNDING) + 1
        return range(first, math.ceil(stretch.end * YEAR - origin - ROUNDING) + 1)

    def _by_day(self, stretch: Stretch, part: int | None, entries: Sequence[int]) -> int:
        """The entry of the calendar day on which the hit comes."""
        if len(set(entries)) == 1:
            return entries[0]
        emit, constant = self.builder.emit, self.builder.constant
        last = (stretch.end - stretch.hit.days[0].time) * YEAR - (self._numbers(stretch)[0] - 1)
        left = emit(Op.MUL, self._left(stretch, part), constant(YEAR))
        days = emit(Op.SUB, constant(float(round(last)) if abs(last - round(last)) < ROUNDING else last), left)
        return emit(Op.LOOKUP, days, *entries, place=stretch.hit.event.place)

    def _barrier(self, stretch: Stretch, flag: int) -> tuple[int, int]:
        """The asset and the level whose first passage turns the flag."""
        found = self._levels.of(flag)
        running = stretch.hit.watch.running
        if len({(barrier.key.asset, barrier.op, level) for barrier, level in found}) != 1:
            assets, sides = {barrier.key.asset for barrier, _ in found}, {barrier.op for barrier, _ in found}
            text = FIRST_EXIT if len(assets) == 1 < len(sides) else ONE_LEVEL
            raise Unreadable(stretch.hit.event.at.place, text.format(*[running.name] * 2))
        barrier, level = next(iter(found))
        return barrier.key.asset, level


def paid_at(hits: Sequence[DatedHit], last: DatedHit) -> Iterator[tuple[DatedHit, Pay]]:
    """What events at one hit pay, those up to the last one, with the hit as each has it."""
    same = [hit for hit in hits if hit.watch == last.watch]
    for hit in same[: same.index(last) + 1]:
        yield from ((hit, action) for action in (*hit.event.then, *hit.event.otherwise) if isinstance(action, Pay))


class _Levels:
    """Which levels the flags of a tape under construction wait for."""

    def __init__(self, formulas: Formulas):
        self.builder: Builder = formulas.builder
        self._thresholds = thresholds_of(formulas)

    def of(self, flag: int) -> set[tuple]:
        noted = self._thresholds.extremes
        while len(noted) < len(self.builder.instructions):
            self._thresholds.note(self.builder.instructions[len(noted)])
        step = self.builder.instructions[flag]
        if step.op in (Op.LT, Op.LE):
            found = self._thresholds.comparison(step) or {}
            return {pair for event in found for pair in event}
        if step.op in (Op.NOT, Op.OR, Op.AND):
            return {pair for operand in step.operands for pair in self.of(operand)}
        return set()


def _no_running(name: Name) -> Values:
    raise Unreadable(name.place, f"'{name.name}' is not known at the moment of a hit")
