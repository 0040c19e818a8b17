"""Running values while the tape is built: observed on dates, watched continuously, or set by events."""

from __future__ import annotations

from dataclasses import dataclass

from mcx.checked.formula import Name
from mcx.checked.payoff import Running
from mcx.dates.dated_contract import Watch
from mcx.tape.formulas import Formulas, Scene, Unreadable, Values
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
    that nobody asks about cost nothing.
    """

    watch: Watch
    formulas: Formulas
    start: Values | None
    side: Side | None = None
    extreme: int | None = None
    until: float = 0.0

    def read(self, asker: Name, time: float) -> Values:
        running = self.watch.running
        if time < self.watch.start.time:
            if self.start is None:
                raise Unreadable(asker.place, f"'{running.name}' is read before its first date")
            return self.start
        if self.side is None:
            self.side = watched_side(running, self.formulas)
        self._extend(min(time, self.watch.end.time))
        scene = Scene(spot=lambda _: (self.extreme,) * len(self.formulas.contract.assets), running=_unreadable)
        values = self.formulas.read(running.formula, scene)
        if self.start is not None:
            values = self.formulas.spread(FOLDS[running.how], self.start, values, place=running.place)
        return values

    def _extend(self, time: float) -> None:
        builder, place = self.formulas.builder, self.watch.running.place
        if self.extreme is None:
            self.until = self.watch.start.time
            if time == self.until:  # on its first day: the level itself
                self.extreme = builder.input(Op.LEVEL, LevelKey(self.side.asset, time), place)
                return
        elif time <= self.until:
            return
        piece = builder.input(self.side.level_op, LevelKey(self.side.asset, time, self.until), place)
        op = Op.MIN if self.side.level_op is Op.LOW else Op.MAX
        self.extreme = piece if self.extreme is None else builder.emit(op, self.extreme, piece, place=place)
        self.until = time


def _unreadable(name: Name) -> Values:
    raise Unreadable(name.place, f"'{name.name}' is not fixed while it is watched continuously")
