"""Running values while the tape is built: observed on dates, watched continuously, or set by events."""

from __future__ import annotations

from dataclasses import dataclass

from mcx.checked.formula import Name
from mcx.checked.payoff import Running
from mcx.dates.dated_contract import Watch
from mcx.tape.formulas import Formulas, Unreadable, Values
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
    that days that nobody asks about cost nothing. `barriers` are the extremes that were asked for.
    """

    def __init__(self, watch: Watch, formulas: Formulas, start: Values | None):
        self.watch, self.formulas, self.start = watch, formulas, start
        self.barriers: dict[Barrier, None] = {}
        self._extremes: dict[tuple[int, Op], Extreme] = {}

    def read(self, asker: Name, time: float) -> Values:
        running = self.watch.running
        if time < self.watch.start.time:
            if self.start is None:
                raise Unreadable(asker.place, f"'{running.name}' is read before its first date")
            return self.start
        return self.at(time)

    def at(self, time: float) -> Values:
        """The value at a time from the start of the watch on."""
        running, time = self.watch.running, min(time, self.watch.end.time)
        extremes = Extremes(self.formulas, lambda asset, op: self._extended(asset, op, time))
        values = extremes.read(running.formula, HIGHEST[running.how])
        if not self._extremes:
            raise Unreadable(running.place, "a continuous watch needs a formula of an asset's level")
        if self.start is not None:
            values = self.formulas.spread(FOLDS[running.how], self.start, values, place=running.place)
        return values

    def _extended(self, asset: int, op: Op, time: float) -> int:
        builder, place, start = self.formulas.builder, self.watch.running.place, self.watch.start.time
        extreme = self._extremes.get((asset, op))
        if time == start:  # on its first day: the level itself
            value = builder.input(Op.LEVEL, LevelKey(asset, time), place)
            self._extremes.setdefault((asset, op), Extreme(value, time))
            return value
        if extreme is None or time > extreme.until:
            key = LevelKey(asset, time, extreme.until if extreme else start)
            self.barriers[Barrier(op, key)] = None
            piece = builder.input(op, key, place)
            joined = Op.MIN if op is Op.LOW else Op.MAX
            value = builder.emit(joined, extreme.value, piece, place=place) if extreme else piece
            extreme = self._extremes[asset, op] = Extreme(value, time)
        return extreme.value
