"""A contract with every date known: what happens on each date, in order, and when each amount is paid.

This is the form that the tape is unrolled from, the readback is written from, and the plain second implementation in
the tests walks along. `DatedContract` knows nothing of the market but the valuation date.
"""

from __future__ import annotations

import datetime
from collections.abc import Mapping
from dataclasses import dataclass, field

from mcx.checked.contract import Contract, LevelFixing
from mcx.checked.payoff import Deliver, Event, Pay, Running
from mcx.dates.day import Day
from mcx.dates.day_counts import Regular
from mcx.dates.history import NO_HISTORY, History

__all__ = ["Day", "DatedContract", "DatedEvent", "Moment", "Occasion", "Update", "Watch"]


@dataclass(frozen=True, slots=True)
class Occasion:
    """What a formula may ask about its date.

    `schedule` names the dates term the date belongs to ('' for a single date); `nth` counts from 1 in the parent
    schedule; `n_dates` is that schedule's length; `period` is the year fraction since the previous date of it (from
    `start` on the first), by the contract's day count, nan where the contract has no start; `years` from the start.
    `dates` maps every dates term that has this day among its dates to the position (from 0), for per-date terms.
    `earlier` is the day of the previous occasion of the same running value or event, None on its first.
    """

    day: Day
    schedule: str
    nth: int
    n_dates: int
    period: float
    years: float
    dates: dict[str, int]
    earlier: Day | None = None


@dataclass(frozen=True, slots=True)
class Update:
    """A running value observed on a date. `first` on its first date. Continuous stretches are `Watch`es instead."""

    running: Running
    occasion: Occasion
    first: bool


@dataclass(frozen=True, slots=True)
class Watch:
    """A running value observed continuously from `start` to `end`; both ends belong to it."""

    running: Running
    start: Day
    end: Day


@dataclass(frozen=True, slots=True)
class DatedEvent:
    """An event on a date. `due` holds, for each Pay action inside it, when that amount is paid."""

    event: Event
    occasion: Occasion
    due: dict[Pay, Day]


@dataclass(frozen=True, slots=True)
class DatedHit:
    """An event at the moment at which a continuously watched flag first holds.

    `days` are the calendar days of the watch, its first one included; `due` gives for each Pay action, for a hit on
    each of them, when the amount is paid. A textbook contract has no days: there `due` holds the fixed dates only (one
    entry), and what has none is paid at the moment itself.
    """

    event: Event
    watch: Watch
    days: tuple[Day, ...]
    due: dict[Pay, tuple[Day, ...]]


@dataclass(frozen=True, slots=True)
class Moment:
    """All that happens on one day: first the running values, then the events, both in file order."""

    day: Day
    updates: tuple[Update, ...]
    events: tuple[DatedEvent, ...]


@dataclass(frozen=True, slots=True)
class DatedContract:
    """Moments in order of time, and the continuous watches and what happens at their hits beside them.

    `schedules` gives the days of every date, dates and (dated) watch term. `calendar_version` names the holiday
    package and its version, '' where no holidays were asked for. `assumptions` are sentences to print with any value,
    `warnings` are about what looks like a slip. `history` is what is known of its past. `regular` gives the regular
    periods of schedules by a rule, as `TermDays.regular`, where the contract counts days by them.
    """

    contract: Contract
    valuation: datetime.date | None
    start: Day | None
    schedules: dict[str, tuple[Day, ...]]
    moments: tuple[Moment, ...]
    watches: tuple[Watch, ...]
    calendar_version: str = ""
    assumptions: tuple[str, ...] = ()
    hits: tuple[DatedHit, ...] = ()
    warnings: tuple[str, ...] = ()
    history: History = NO_HISTORY
    regular: Mapping[str, tuple[Regular, int]] = field(default_factory=dict)

    @property
    def levels_fixed(self) -> tuple[tuple[str, Day], ...]:
        """The days on which level terms that are observed are fixed, with their names."""
        return tuple((name, day) for name, days in self.schedules.items() for day in days
                     if isinstance(self.contract.terms.get(name), LevelFixing))

    @property
    def begun(self) -> bool:
        """Whether some of its days lie before the valuation date."""
        return any(days and days[0].time < 0.0 for days in self.schedules.values())

    @property
    def last(self) -> Day:
        """The last day on which anything is observed."""
        days = [moment.day for moment in self.moments] + [watch.end for watch in self.watches]
        days += [due for moment in self.moments for event in moment.events for pay, due in event.due.items()
                 if isinstance(pay, Deliver)]
        return max(days, key=lambda day: day.time)

    @property
    def last_paid(self) -> Day:
        """The last day on which anything is observed or paid."""
        due = [day for moment in self.moments for event in moment.events for day in event.due.values()]
        due += [day for hit in self.hits for days in hit.due.values() for day in days]
        return max([self.last, *due], key=lambda day: day.time)
