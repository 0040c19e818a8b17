"""Running values while the tape is built: observed on dates, watched continuously, or set by events."""

from __future__ import annotations

import datetime
from dataclasses import dataclass

from mcx.checked.formula import Name
from mcx.checked.payoff import At, Running
from mcx.dates.dated_contract import Day, Watch
from mcx.tape.formulas import Formulas, Scene, Unreadable, Values
from mcx.tape.observations import Observations
from mcx.tape.ops import Op
from mcx.tape.program import LevelKey
from mcx.tape.watching import Side, watched_side

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
class Watched:
    """A running value watched continuously: the extreme of one asset's level so far, and the formula of it.

    The extreme is extended when somebody reads it, up to that day and never past the end of the watch, so that days
    that nobody asks about cost nothing. What lies before the valuation date is known by fixings, which may decide a
    flag, or must be stated by the contract.
    """

    watch: Watch
    formulas: Formulas
    observations: Observations
    start: Values | None
    side: Side | None = None
    extreme: int | None = None
    until: float = 0.0

    def read(self, asker: Name, day: Day) -> Values:
        running, watch = self.watch.running, self.watch
        if day.time < watch.start.time:
            if self.start is None:
                raise Unreadable(asker.place, f"'{running.name}' is read before its first date")
            return self.start
        if self.side is None:
            self.side = watched_side(running, self.formulas)
        found = [self.start] if self.start is not None else []
        if watch.start.time < 0.0:
            found.append((self.formulas.builder.constant(self._past_or_fault(min(day, watch.end, key=_time))),))
        if day.time >= 0.0 and watch.end.time >= 0.0:
            self._extend(min(day.time, watch.end.time))
            found.append(self._formula_at(self.observations.scaled(self.side.asset, self.extreme)))
        first, *rest = found
        for values in rest:
            first = self.formulas.spread(FOLDS[running.how], first, values, place=running.place)
        return first

    def known(self, day: Day) -> Values:
        """What is known of the watch so far, today's level apart; nothing where it has not begun."""
        if self.side is None or self.watch.start.time >= 0.0 or day.time < self.watch.start.time:
            return ()
        return (self.formulas.builder.constant(self._past(min(day, self.watch.end, key=_time))),)

    def _formula_at(self, level: int) -> Values:
        scene = Scene(spot=lambda _: (level,) * len(self.formulas.contract.assets), running=_unreadable)
        return self.formulas.read(self.watch.running.formula, scene)

    def _past_or_fault(self, day: Day) -> float:
        """What is known of the past; where that is too little, the fault is noted and the walk goes on, so that all
        that is missing is found at once."""
        try:
            return self._past(day)
        except Unreadable as trouble:
            self.observations.unstated[self.watch.running.name] = trouble.fault
            return 0.0

    def _past(self, day: Day) -> float:
        """The value over the part of the watch that lies before the valuation date, up to a day."""
        history, running = self.observations.history, self.watch.running
        today = Day(0.0, history.valuation)
        day = min(day, today, key=_time)
        stated = history.stated.get(running.name, {})
        if running.name in history.stated and not stated:
            return 0.0  # what the contract says of it is at fault
        fixed = self._by_fixings(day)
        if running.how in ("ever", "always"):
            turned = float(running.how == "ever")
            for date, known in sorted(stated.items()):
                seen = self._by_fixings(Day(-1.0, date)) if known.value != turned else None
                if seen == turned:
                    text = f"'{running.name}' is stated as {bool(known.value)} on {date}, which fixings contradict"
                    raise Unreadable(known.place, text.replace("True", "true").replace("False", "false"))
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
                if beyond and found[-1] is stated.get(day.date):
                    raise Unreadable(found[-1].place, f"'{running.name}' is stated as {found[-1].value:.12g} on "
                                                      f"{day.date}; fixings reach {fixed:.12g}")
                return fixed if beyond else found[-1].value
        what = "false" if running.how == "ever" else "true" if running.how == "always" else "4150.5"
        at = running.at
        ends = (at.name,) if isinstance(at, At) else (at.start.name, at.end.name)
        placed = [self.formulas.contract.terms[name].place for name in ends if name in self.formulas.contract.terms]
        raise Unreadable(placed[0] if placed else running.place, (
            f"'{running.name}' is watched all the time from {self.watch.start}, which fixings cannot tell; the "
            f"contract must say what had happened by {self._needed(day)} or {day}, as 'happened: "
            f"{{{running.name}: {{{day}: {what}}}}}'"))

    def _needed(self, day: Day) -> datetime.date:
        """The earliest date of a statement that holds on a day: the day itself, or before the close of the valuation
        date the good day before it."""
        history = self.observations.history
        return history.eve if day.date == history.valuation and history.eve else day.date

    def _by_fixings(self, day: Day) -> float | None:
        """The value that the fixings from the start of the watch up to a day give; None without any."""
        ends = self.observations.history.extremes(self.side.asset, self.watch.start, day)
        if ends is None:
            return None
        level = ends[0] if self.side.level_op is Op.LOW else ends[1]
        (value,) = self._formula_at(self.formulas.builder.constant(level))
        return self.formulas.fixed(value)

    def _extend(self, time: float) -> None:
        builder, place = self.formulas.builder, self.watch.running.place
        if self.extreme is None:
            self.until = max(self.watch.start.time, 0.0)
            if time == self.until:  # on its first day: the level itself
                self.extreme = builder.input(Op.LEVEL, LevelKey(self.side.asset, time), place)
                return
        elif time <= self.until:
            return
        piece = builder.input(self.side.level_op, LevelKey(self.side.asset, time, self.until), place)
        op = Op.MIN if self.side.level_op is Op.LOW else Op.MAX
        self.extreme = piece if self.extreme is None else builder.emit(op, self.extreme, piece, place=place)
        self.until = time


def _time(day: Day) -> float:
    return day.time


def _unreadable(name: Name) -> Values:
    raise Unreadable(name.place, f"'{name.name}' is not fixed while it is watched continuously")
