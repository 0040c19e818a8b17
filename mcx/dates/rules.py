"""From dates as written to days: single dates, lists and rules, and terms that name other terms.

Steps are counted from a rule's first date, not from the date before (so a rule from the 31st keeps to month
ends), and each date is rolled by itself. Times of textbook contracts are exact fractions until the last
moment, so that two ways of writing one time give one number.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterator
from fractions import Fraction
from itertools import pairwise

from mcx.checked.contract import Contract, DayList, DayRef, DayRule, LevelFixing, Period, Stretch
from mcx.dates.business_days import GoodDays, NotCovered
from mcx.dates.dated_contract import Day
from mcx.dates.day_counts import Regular, last_of_month
from mcx.faults import Fault, Place

MOST_DATES = 10_000  # of one rule: fifty years of weekdays are no rule's intention
MONTHS = {"month": 1, "year": 12}
DAYS = {"day": 1, "week": 7}


class WrongDates(Exception):
    """A date term that gives no days. Never leaves this layer: it becomes a fault, or is one already
    (None)."""

    def __init__(self, place: Place | None = None, text: str = ""):
        self.fault = Fault(place, text) if place else None
        super().__init__(text)


class TermDays:
    """The days of every date term of a contract, each worked out once.

    `base` is the date from which times are counted, None for a textbook contract; `good` its good business
    days, `paying` those of payments, by which the dates of the terms in `payments` roll. `notes` are sentences about
    how dates were understood.
    """

    def __init__(self, contract: Contract, base: datetime.date | None, good: GoodDays | None,
                 paying: GoodDays | None = None, payments: frozenset[str] = frozenset()):
        self.terms, self.base, self.good = contract.terms, base, good
        self.observing, self.paying, self.payments = good, paying or good, payments
        self.faults: list[Fault] = []
        self.notes: list[str] = []
        self._found: dict[str, tuple[Day, ...]] = {}  # no days: being worked out, or faulty
        self._busy: set[str] = set()

    def of_term(self, name: str) -> tuple[Day, ...]:
        """The days of a term in order; none where they are at fault."""
        if name not in self.terms:
            return ()
        if name not in self._found:
            self._found[name] = ()
            self._busy.add(name)
            before, self.good = self.good, self.paying if name in self.payments else self.observing
            try:
                self._found[name] = self._days(self.terms[name])
            except WrongDates as wrong:
                self.faults += [wrong.fault] if wrong.fault else []
            except NotCovered as beyond:
                self.faults.append(Fault(self.terms[name].place, str(beyond)))
            self.good = before
            self._busy.discard(name)
        return self._found[name]

    def single(self, ref: DayRef) -> Day:
        """The day of a single date; raises WrongDates and NotCovered."""
        if ref.term:
            return self.of_part(ref)[-1 if ref.part == "last" else 0]
        if ref.time is not None:
            return Day(ref.time)
        return self.day(self.good.rolled(ref.date))

    def regular(self, name: str) -> tuple[Regular, int] | None:
        """The regular periods of a rule with steps of months that divide a year, and how many of them lie between
        `Regular.date` and the term's first date; None for any other term."""
        value = self.terms.get(name)
        match value:
            case DayList(days=(DayRef(term=term, part=part),)) if term:
                found = self.regular(term)
                if found is None or part in ("first", "last"):
                    return None
                return found[0], found[1] + (part == "but_first")
            case DayRule(start=DayRef() as start, every=Period(unit="month" | "year") as every):
                months = every.count * MONTHS[every.unit]
                return (Regular(self._unrolled(start), months, value.end_of_month), 0) if 12 % months == 0 else None
        return None

    def day(self, date: datetime.date) -> Day:
        """A calendar date with its time, Actual/365 (Fixed)."""
        return Day((date - self.base).days / 365, date)

    def of_part(self, ref: DayRef) -> tuple[Day, ...]:
        """The days of the term that a date names, or the part of them that it says."""
        if ref.term in self._busy:
            raise WrongDates(ref.place, f"the dates of '{ref.term}' are said through themselves")
        days = self.of_term(ref.term)
        if not days:
            raise WrongDates
        found = part_of(days, ref.part)
        if not found:
            raise WrongDates(ref.place, f"'{ref.term}' has one date only, so '{ref.part}' leaves none")
        return found

    def _days(self, value: DayRef | DayList | DayRule | Stretch | LevelFixing) -> tuple[Day, ...]:
        match value:
            case LevelFixing(dates=dates):
                return self._days(dates)
            case DayRef():
                return (self.single(value),)
            case DayList(days=(only,)) if only.term:
                return self.of_part(only)
            case DayList():
                return self._listed(value)
            case DayRule():
                days = tuple(self._ruled(value))
                _check_order(days, value.place)
                return days
            case Stretch():
                start, end = self.single(value.start), self.single(value.end)
                if end.time <= start.time:
                    raise WrongDates(value.place, f"the watch ends on {end}, not after its start on {start}")
                return (start, end)
        raise TypeError(f"no dates: {value!r}")

    def _listed(self, value: DayList) -> tuple[Day, ...]:
        if not value.days:
            raise WrongDates(value.place, "no dates are listed")
        days = [self.single(ref) for ref in value.days]
        for (earlier, before), (ref, day) in pairwise(zip(value.days, days, strict=True)):
            if day.time <= before.time:
                rolls = [f"{said.date} rolls to {found}" for said, found in ((earlier, before), (ref, day))
                         if said.date not in (None, found.date)]
                rolled = f" ({' and '.join(rolls)})" if rolls else ""
                what = "is listed twice" if day.time == before.time else f"is listed after {before}"
                raise WrongDates(ref.place, f"{day} {what}{rolled}; dates are listed in order, each once")
        return tuple(days)

    def _ruled(self, rule: DayRule) -> Iterator[Day]:
        if self.base is None:
            return (Day(float(time)) for time in self._times(rule))
        start = self._unrolled(rule.start)
        until = self._unrolled(rule.until)
        if until < start:
            raise WrongDates(rule.place, f"the rule ends on {until}, before it begins on {start}")
        self._check_month_end(rule, start)
        dates = self._business_steps if rule.every.unit == "business day" else self._steps
        return (self.day(date) for date in dates(rule, start, until))

    def _unrolled(self, ref: DayRef) -> datetime.date:
        return ref.date or self.single(ref).date

    def _steps(self, rule: DayRule, start: datetime.date, until: datetime.date) -> list[datetime.date]:
        """Steps from the start, each rolled, the last on `until` as written or as rolled."""
        dates: list[datetime.date] = []
        for step in _stepped(start, rule.every, rule.end_of_month):
            rolled = self.good.rolled(step)
            dates.append(rolled)
            if until in (step, rolled):
                return dates
            if step > until:
                raise _misses(rule, dates, until)
            _check_count(dates, rule)
        raise _misses(rule, dates, until)

    def _check_month_end(self, rule: DayRule, start: datetime.date) -> None:
        """What 'end_of_month' asks of a rule, and a word where it was left out but may have been meant."""
        last = last_of_month(start)
        if rule.end_of_month and start != last and self.good.rolled(start) != self.good.back(last):
            raise WrongDates(rule.start.place, f"'end_of_month' needs a rule from the last day of a month, not {start}")
        if not rule.end_of_month and rule.every.unit in MONTHS and start == last and start.day < 31:
            count, unit = rule.every.count, rule.every.unit
            note = (f"dates from {start} every {count} {unit}{'s' * (count > 1)} keep to day {start.day} of their "
                    "months; 'end_of_month: true' would take the last days")
            self.notes += [note] if note not in self.notes else []

    def _business_steps(self, rule: DayRule, start: datetime.date,
                        until: datetime.date) -> list[datetime.date]:
        """Every good day, or every few of them, between the two ends, both rolled."""
        dates, last = [self.good.rolled(start)], self.good.rolled(until)
        while dates[-1] < last:
            dates.append(self.good.add(dates[-1], rule.every.count))
            _check_count(dates, rule)
        if dates[-1] != last:
            raise _misses(rule, dates, until)
        return dates

    def _times(self, rule: DayRule) -> list[Fraction]:
        """Equal steps to `until`, or steps of months; a start that is stated is itself the first date."""
        until = _meant(self.single(rule.until))
        start = _meant(self.single(rule.start)) if rule.start else Fraction(0)
        if until <= start:
            text = f"the rule ends at {float(until):g}y, not after its start at {float(start):g}y"
            raise WrongDates(rule.place, text)
        if rule.count is not None:
            steps = [start + (until - start) * k / rule.count for k in range(1, rule.count + 1)]
            return [start, *steps] if rule.start else steps
        step = Fraction(rule.every.count * MONTHS[rule.every.unit], 12)
        times = [start if rule.start else start + step]
        while times[-1] < until:
            times.append(times[-1] + step)
            _check_count(times, rule)
        if times[-1] != until:
            raise _misses(rule, [f"{float(time):g}y" for time in times], f"{float(until):g}y")
        return times


def part_of(days: tuple, part: str) -> tuple:
    """The days that '.first', '.last', '.but_first' or '.but_last' leave of a schedule; all for ''."""
    parts = {"": slice(None), "first": slice(1), "last": slice(-1, None), "but_first": slice(1, None),
             "but_last": slice(-1)}
    return days[parts[part]]


def _meant(day: Day) -> Fraction:
    """A time as the fraction that was meant: a short decimal, or a multiple of a step such as 1/12 or
    1/52."""
    return Fraction(day.time).limit_denominator(10**12)


def _stepped(start: datetime.date, every: Period, month_end: bool) -> Iterator[datetime.date]:
    """The start, and each date a whole number of steps after it; the 31st becomes a shorter month's last
    day, with `month_end` every date its month's."""
    from dateutil.relativedelta import relativedelta

    for k in range(MOST_DATES + 1):
        try:
            if every.unit in MONTHS:
                step = start + relativedelta(months=k * every.count * MONTHS[every.unit])
                yield last_of_month(step) if month_end else step
            else:
                yield start + datetime.timedelta(days=k * every.count * DAYS[every.unit])
        except (OverflowError, ValueError) as error:
            raise NotCovered("the rule goes beyond the year 9999") from error


def _misses(rule: DayRule, dates: list, until: object) -> WrongDates:
    """The fault of a rule whose steps do not end where it says."""
    few = [str(date) for date in dates]
    shown = ", ".join(few if len(few) <= 5 else [few[0], few[1], "...", *few[-2:]])
    return WrongDates(rule.until.place, f"the steps do not end on {until}: they give {shown}")


def _check_count(dates: list, rule: DayRule) -> None:
    if len(dates) > MOST_DATES:
        raise WrongDates(rule.place, f"the rule gives more than {MOST_DATES} dates")


def _check_order(days: tuple[Day, ...], place: Place) -> None:
    for before, day in zip(days, days[1:], strict=False):
        if day.time <= before.time:
            raise WrongDates(place, f"two dates of the rule fall on {day}; for each business day write "
                                    "'every: 1 business day'")
