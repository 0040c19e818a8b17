"""A checked contract: a payoff with its terms filled in, dates still as rules."""

from __future__ import annotations

import datetime
from dataclasses import dataclass, field
from typing import TypeAlias

from mcx.checked.payoff import OtherReading, Payoff
from mcx.faults import Fault, Place


@dataclass(frozen=True, slots=True)
class DayRef:
    """A single date as written: a calendar date, a time in years (`0.25y`), or the name of another date term
    (with a part such as 'last')."""

    place: Place
    date: datetime.date | None = None
    time: float | None = None
    term: str = ""
    part: str = ""


@dataclass(frozen=True, slots=True)
class Period:
    """A step of a date rule: `3 months`, `1 business day`, `2 weeks`. `unit`: business day, day, week, month, year."""

    count: int
    unit: str


@dataclass(frozen=True, slots=True)
class DayRule:
    """`{from:, until:, every:}` for calendar dates, `{count:, until:}` (and `from: 0y`) for times."""

    place: Place
    until: DayRef
    start: DayRef | None = None
    every: Period | None = None
    count: int | None = None
    end_of_month: bool = False  # every step is the last day of its month


@dataclass(frozen=True, slots=True)
class DayList:
    """Dates listed one by one, or all dates of another `dates` term (a single DayRef with a name)."""

    place: Place
    days: tuple[DayRef, ...]


@dataclass(frozen=True, slots=True)
class Stretch:
    """`{continuous: [from, until]}` as a value of a `watch` term."""

    place: Place
    start: DayRef
    end: DayRef


@dataclass(frozen=True, slots=True)
class Figures:
    """The value of a number, percent or level term: `rows[date][asset]`.

    `per_date`: one row for each date of the term's schedule (else one row); `per_asset`: one entry for each asset of
    the contract (else one entry).
    """

    rows: tuple[tuple[float, ...], ...]
    place: Place
    per_date: bool = False
    per_asset: bool = False


@dataclass(frozen=True, slots=True)
class Word:
    """The value of a `choice` or `asset` term, or of a flag ('true', 'false')."""

    text: str
    place: Place


@dataclass(frozen=True, slots=True)
class LevelFixing:
    """The value of a `level` term that is observed rather than stated, for each asset: its level on a date (`how` is
    'fixing'), or the 'average', 'lowest' or 'highest' of its levels on several."""

    how: str
    dates: DayRef | DayList | DayRule
    place: Place


TermValue: TypeAlias = DayRef | DayRule | DayList | Stretch | Figures | Word | LevelFixing


def place_of(value: TermValue, position: int) -> Place:
    """Where one of a term's dates is written: in its place of a list, at an end of a stretch, else the whole value."""
    if isinstance(value, Stretch):
        return (value.start, value.end)[position].place
    return value.days[position].place if isinstance(value, DayList) and len(value.days) > 1 else value.place


@dataclass(frozen=True, slots=True)
class BusinessDays:
    """Which days are good and how others roll ('following', 'modified following', 'preceding').

    `holidays` are names of financial calendars, or 'none' alone for weekends only, each with its place in `places`; a
    day is good if all of them are open, or any with `in_any`. `extra` are holidays that the contract lists itself.
    """

    holidays: tuple[str, ...]
    roll: str
    place: Place
    places: tuple[Place, ...]
    in_any: bool = False
    extra: tuple[datetime.date, ...] = ()


@dataclass(frozen=True, slots=True)
class Known:
    """What a contract states about a date of its past: a value (flags as 1.0 and 0.0), a level, a factor, or another
    date."""

    value: float | datetime.date
    place: Place


@dataclass(frozen=True, slots=True)
class ContractOtherwise:
    """A contract in another reading of its payoff, None where it cannot be read so, and why. The dates that fall later
    in that reading are not moved yet."""

    reading: OtherReading
    contract: Contract | None
    faults: tuple[Fault, ...] = ()


@dataclass(frozen=True, slots=True)
class Contract:
    """One trade. Exactly one of `notional` and `units` is given. `textbook` contracts use times, others dates.

    A contract at fault is handed on as far as it could be read, so that dates and market can be checked in the same
    round: `at_fault` are the terms without a value that should have one, `framed` is whether assets, start, day count,
    settlement and calendar are all sound. Where its definition is at fault, `payoff` holds no more than the terms.
    """

    title: str
    currency: str
    assets: tuple[str, ...]
    payoff: Payoff
    terms: dict[str, TermValue]  # optional terms that were not stated are absent; defaults are filled in
    place: Place  # of the title
    notional: float | None = None
    units: float | None = None
    denomination: float | None = None  # of one note, where shares are delivered: only whole shares of it are
    start: DayRef | None = None
    day_count: str = ""
    settlement: Period | None = None
    calendar: BusinessDays | None = None
    payment_calendar: BusinessDays | None = None  # None: payments go by `calendar`
    textbook: bool = False
    conversion: dict[str, str] = field(default_factory=dict)  # 'quanto' or 'composite', by asset
    happened: dict[str, dict[datetime.date, Known]] = field(default_factory=dict)  # by running value, as of the close
    disruption: dict[str, dict[datetime.date, Known]] = field(default_factory=dict)  # by asset and scheduled date
    adjustments: dict[str, dict[datetime.date, Known]] = field(default_factory=dict)  # by asset, from the date on
    text: str = ""
    assumptions: tuple[str, ...] = ()
    at_fault: frozenset[str] = frozenset()
    framed: bool = True
    terms_place: Place | None = None  # where a term that is missing would stand
    otherwise: tuple[ContractOtherwise, ...] = ()  # in the other readings of its payoff

    @property
    def lot(self) -> float:
        """What one note is of the notional, or one unit."""
        return self.denomination or 1.0

    @property
    def size(self) -> float:
        """Currency amount for one unit of payoff: the notional, or the number of units."""
        return self.notional if self.notional is not None else self.units
