"""What a contract observes, while the tape is built: fixings are constants and fold, all else is a level to simulate.

A level that should be fixed and is not stays an input of the tape with a negative time: what is left of these once dead
code is gone is what is missing.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterable, Sequence

from mcx.dates.dated_contract import DatedContract, Day
from mcx.faults import Fault
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.program import LevelKey, Tape

MOST_NAMED = 400  # dates in one message


class Observations:
    """The levels of one contract as values of its tape."""

    def __init__(self, dated: DatedContract, builder: Builder):
        self.history, self.builder, self.title = dated.history, builder, dated.contract.title
        self.place = dated.history.place or dated.contract.place
        self.assets = dated.contract.assets
        self.used: dict[tuple[Day, int], float] = {}  # fixings, by the day they are read for
        self.unstated: dict[str, Fault] = {}  # watches whose past is not known, each with the last day it is read on
        self.asked: dict[LevelKey, datetime.date] = {}  # the past levels that no fixing gives
        self.sought: set[LevelKey] = set()  # those of which only a number would do, and levels stand in for it

    def level(self, asset: int, day: Day) -> int:
        """The level of an asset on a day, as it counts in the contract."""
        asked, day = day, self.history.observed(asset, day)
        known = self.history.level(asset, day)
        if known is not None:
            self.used[asked, asset] = known
            return self.builder.constant(known)
        key = LevelKey(asset, day.time)
        if day.time < 0.0:
            self.asked[key] = day.date
        return self.scaled(asset, self.builder.input(Op.LEVEL, key))

    def all(self, day: Day) -> tuple[int, ...]:
        """The levels of all assets on a day."""
        return tuple(self.level(asset, day) for asset in range(len(self.assets)))

    def scaled(self, asset: int, level: int) -> int:
        """A simulated level, which starts from today's spot, as it counts: times the adjustments so far."""
        scale = self.history.scale
        return self.builder.emit(Op.MUL, level, self.builder.constant(scale[asset])) if scale else level

    def unknown(self, levels: Iterable[tuple[int, Day]], flag: bool) -> int:
        """What stands for a value that cannot be made without the number of levels, by asset and day, so that the walk
        goes on and finds all else that is missing: it reads them, and nothing folds that hangs on it."""
        levels = tuple(levels)
        for asset, day in levels:
            fixed = self.history.observed(asset, day)
            if fixed.date:  # today's level is not missing elsewhere: there it is the spot
                self.asked[key := LevelKey(asset, fixed.time)] = fixed.date
                self.sought.add(key)
        found = self.builder.fold(Op.ADD, [self.level(asset, day) for asset, day in levels])
        return self.builder.emit(Op.LT, found, self.builder.constant(0.0)) if flag else found

    def missing(self, tape: Tape, given: bool = False) -> list[Fault]:
        """One fault for each asset or rate of exchange that lacks fixings, with every date; where levels will be
        `given`, with those alone of which only a number would do."""
        asked = {key: date for key, date in self.asked.items() if not given or key in self.sought}
        lacking: dict[str, set[datetime.date]] = {}
        for step in tape.instructions:
            if step.op is Op.LEVEL and step.payload in asked:
                date = asked[step.payload]
                for name in self.history.missing(step.payload.asset, date) or [self.assets[step.payload.asset]]:
                    lacking.setdefault(name, set()).add(date)
        return [Fault(self.place, f"'{self.title}' needs a fixing of '{name}' on {_listed(sorted(dates))}")
                for name, dates in lacking.items()]


def _listed(dates: Sequence[datetime.date]) -> str:
    shown = [str(date) for date in dates[:MOST_NAMED]]
    more = f" and {len(dates) - MOST_NAMED} more dates" if len(dates) > MOST_NAMED else ""
    return (f"{', '.join(shown[:-1])} and {shown[-1]}" if len(shown) > 1 and not more else ", ".join(shown)) + more
