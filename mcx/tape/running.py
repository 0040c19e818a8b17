"""Running values while the tape is built: observed on dates, watched continuously, or set by events."""

from __future__ import annotations

import datetime
from bisect import bisect_left
from collections.abc import Iterable
from dataclasses import dataclass

from mcx.checked.contract import Known
from mcx.checked.formula import Name
from mcx.checked.payoff import At, Running
from mcx.dates.dated_contract import Day, Watch
from mcx.tape.formulas import Formulas, Lacking, Unreadable, Values
from mcx.tape.observations import Observations
from mcx.tape.ops import Op
from mcx.tape.program import Barrier, LevelKey
from mcx.tape.watching import HIGHEST, Extremes

FOLDS = {
    "average": Op.ADD,
    "total": Op.ADD,
    "product": Op.MUL,
    "lowest": Op.MIN,
    "highest": Op.MAX,
    "ever": Op.OR,
    "always": Op.AND,
}


@dataclass(slots=True)
class Observed:
    """A running value observed on dates. A `start` enters as one earlier value; `latest` forgets it.

    `trouble` is why it could not be observed; it counts only where somebody reads the value.
    """

    running: Running
    formulas: Formulas
    values: Values | None = None
    count: int = 0
    trouble: Unreadable | None = None

    def update(self, observed: Values) -> None:
        if self.values is None or self.running.how == "latest":
            self.values = observed
        else:
            op = FOLDS[self.running.how]
            self.values = self.formulas.spread(op, self.values, observed, place=self.running.place)
        self.count += 1

    def read(self, asker: Name) -> Values:
        if self.trouble:
            raise self.trouble
        if self.values is None:
            raise Unreadable(asker.place, f"'{self.running.name}' is read before its first date")
        if self.running.how == "average":
            count = (self.formulas.builder.constant(self.count),)
            return self.formulas.spread(Op.DIV, self.values, count, place=self.running.place)
        return self.values


@dataclass(slots=True)
class Extreme:
    """The lowest or highest level of an asset so far, until a time."""

    value: int
    until: float


class Watched:
    """A running value watched continuously: the extremes that decide it so far, and the formula of them.

    The extremes are extended when somebody reads the value, up to that day and never past the end of the watch, so
    that days that nobody asks about cost nothing. `barriers` are the extremes that were asked for. What lies before
    the valuation date is known by fixings, which may decide a flag, or must be stated by the contract.
    """

    def __init__(self, watch: Watch, formulas: Formulas, observations: Observations, start: Values | None):
        self.watch, self.formulas, self.observations, self.start = watch, formulas, observations, start
        self.barriers: dict[Barrier, None] = {}
        self._extremes: dict[tuple[int, Op], Extreme] = {}
        self._asked = False
        self.lacking = False  # whether a level term that it is held against lacks fixings

    def read(self, asker: Name, day: Day) -> Values:
        running, watch = self.watch.running, self.watch
        if day.time < watch.start.time:
            if self.start is None:
                raise Unreadable(asker.place, f"'{running.name}' is read before its first date")
            return self.start
        if day.time >= 0.0:
            return self.at(day.time)
        self._asked = True
        return self._joined([(self._past(min(day, watch.end, key=_time)),)])

    def at(self, time: float) -> Values:
        """The value at a time from the start of the watch on, not before the valuation date."""
        running, watch = self.watch.running, self.watch
        self._asked = True
        found = [self.before()] if watch.start.time < 0.0 else []
        if watch.end.time >= 0.0:
            until = min(time, watch.end.time)
            extremes = Extremes(self.formulas, lambda asset, op: self._extended(asset, op, until))
            try:
                found.append(extremes.read(running.formula, HIGHEST[running.how]))
            except Lacking as trouble:
                self.lacking = True
                return (self._unknown(trouble.levels),)
            if not self._extremes:
                raise Unreadable(running.place, "a continuous watch needs a formula of an asset's level")
        return self._joined(found)

    def before(self) -> Values:
        """The value over the part of a watch that lies before the valuation date, which it begins before."""
        return (self._past(min(Day(0.0, self.observations.history.valuation), self.watch.end, key=_time)),)

    def known(self, day: Day) -> Values:
        """What is known of the watch so far, today's level apart; nothing where it has not begun or is not read."""
        if not self._asked or self.watch.start.time >= 0.0 or day.time < self.watch.start.time:
            return ()
        return (self._past(min(day, self.watch.end, key=_time)),)

    def _joined(self, found: list[Values]) -> Values:
        first, *rest = found if self.start is None else [self.start, *found]
        for values in rest:
            first = self.formulas.spread(FOLDS[self.watch.running.how], first, values, place=self.watch.running.place)
        return first

    def _past(self, day: Day) -> int:
        """What is known of the past; where that is too little, the fault is noted and the walk goes on, so that all
        that is missing is found at once."""
        try:
            return self.formulas.builder.constant(self._known_past(day))
        except Unreadable as trouble:
            self.observations.unstated[self.watch.running.name] = trouble.fault
            return self._unknown((asset, Day(0.0)) for asset in range(len(self.observations.assets)))

    def _unknown(self, levels: Iterable[tuple[int, Day]]) -> int:
        return self.observations.unknown(levels, self.watch.running.formula.kind.is_flag)

    def _known_past(self, day: Day) -> float:
        """The value over the part of the watch that lies before the valuation date, up to a day."""
        history, running = self.observations.history, self.watch.running
        today = Day(0.0, history.valuation)
        day = min(day, today, key=_time)
        stated = self._stated()
        if running.name in history.stated and not stated:
            return 0.0  # what the contract says of it is at fault
        fixed = self._by_fixings(day)
        if running.how in ("ever", "always"):
            turned = float(running.how == "ever")
            by_then = [known.value for date, known in sorted(stated.items()) if date <= day.date]
            if fixed == turned or turned in by_then:
                return turned
            if any(known.value != turned for date, known in stated.items() if date >= self._needed(day)):
                return 1.0 - turned
        else:
            found = [known for date, known in sorted(stated.items()) if self._needed(day) <= date <= day.date]
            if found:
                beyond = fixed is not None and (fixed < found[-1].value if running.how == "lowest" else
                                                fixed > found[-1].value)
                return fixed if beyond else found[-1].value
        what = "false" if running.how == "ever" else "true" if running.how == "always" else "4150.5"
        at = running.at
        ends = (at.name,) if isinstance(at, At) else (at.start.name, at.end.name)
        placed = [self.formulas.contract.terms[name].place for name in ends if name in self.formulas.contract.terms]
        by = " or ".join(dict.fromkeys((str(self._needed(day)), str(day))))
        raise Unreadable(placed[0] if placed else running.place, (
            f"'{running.name}' is watched all the time from {self.watch.start}, which fixings cannot tell; the "
            f"contract must say what had happened by {by}, as 'happened: {{{running.name}: {{{day}: {what}}}}}'"))

    def _stated(self) -> dict[datetime.date, Known]:
        """What the contract states of the watch, by date in order: after its end it stays as it was then."""
        stated, end = self.observations.history.stated.get(self.watch.running.name, {}), self.watch.end.date
        return {min(date, end): known for date, known in sorted(stated.items())}

    def _needed(self, day: Day) -> datetime.date:
        """The earliest date of a statement that holds on a day: the day itself, or before the close of the valuation
        date the good day before it."""
        history = self.observations.history
        return history.eve if day.date == history.valuation and history.eve else day.date

    def turned(self) -> tuple[datetime.date | None, datetime.date] | None:
        """Between which dates a flag turned, as far as statements and fixings up to the valuation date tell: after the
        first (None: since the watch began) and by the second. None where they do not say that it has."""
        history, watch = self.observations.history, self.watch
        stated, turned = self._stated(), float(watch.running.how == "ever")
        if watch.start.date is None or watch.start.time >= 0.0:
            return None
        last = min(watch.end.date, history.valuation)
        dates = sorted(date for date in {*stated, *(date for _, date in history.levels)}
                       if watch.start.date <= date <= last)

        def by_then(date: datetime.date) -> bool:
            said = any(known.value == turned for when, known in stated.items() if when <= date)
            return said or self._by_fixings(Day(-1.0, date)) == turned

        first = bisect_left(dates, True, key=by_then)
        if first == len(dates):
            return None
        before = [date for date, known in stated.items() if date < dates[first] and known.value != turned]
        return max(before, default=None), dates[first]

    def _by_fixings(self, day: Day) -> float | None:
        """The value that the fixings from the start of the watch up to a day give; None without any."""
        history, constant = self.observations.history, self.formulas.builder.constant

        def extreme(asset: int, op: Op) -> int:
            ends = history.extremes(asset, self.watch.start, day)
            if ends is None:
                raise _NoFixings
            return constant(ends[0] if op is Op.LOW else ends[1])

        try:
            running = self.watch.running
            (value,) = Extremes(self.formulas, extreme).read(running.formula, HIGHEST[running.how])
        except (_NoFixings, Lacking):
            return None
        return self.formulas.fixed(value)

    def _extended(self, asset: int, op: Op, time: float) -> int:
        builder, place = self.formulas.builder, self.watch.running.place
        start = max(self.watch.start.time, 0.0)
        extreme = self._extremes.get((asset, op))
        if time == start:  # on its first day: the level itself
            value = builder.input(Op.LEVEL, LevelKey(asset, time), place)
            self._extremes.setdefault((asset, op), Extreme(value, time))
            return self.observations.scaled(asset, value)
        if extreme is None or time > extreme.until:
            key = LevelKey(asset, time, extreme.until if extreme else start)
            self.barriers[Barrier(op, key)] = None
            piece = builder.input(op, key, place)
            joined = Op.MIN if op is Op.LOW else Op.MAX
            value = builder.emit(joined, extreme.value, piece, place=place) if extreme else piece
            extreme = self._extremes[asset, op] = Extreme(value, time)
        return self.observations.scaled(asset, extreme.value)


class _NoFixings(Exception):
    """No fixing of an asset in the part of a watch that is asked for."""


def _time(day: Day) -> float:
    return day.time
