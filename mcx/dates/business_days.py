"""Good business days: which days are, and where the others roll.

The lists of holidays are those of the `holidays` package, by the names it gives to central banks and
exchanges (`ECB`, `XNYS`, ...); `none` means that only weekends are bad. Several lists may be joined, and a contract may
add holidays of its own.
"""

from __future__ import annotations

import datetime
from dataclasses import dataclass
from typing import Protocol

from mcx.checked.contract import BusinessDays
from mcx.faults import Fault, did_you_mean

WEEKENDS_ONLY = "none"
SATURDAY = 5
ONE_DAY = datetime.timedelta(days=1)


class HolidayList(Protocol):
    """What is asked of the package's lists."""

    def is_working_day(self, key: datetime.date) -> bool: ...


class NotCovered(Exception):
    """A date lies in a year that the list of holidays does not cover. Never leaves this layer: it becomes
    a fault."""


@dataclass(frozen=True, slots=True)
class OneList:
    """A list of holidays with the years it covers; without `listed` only weekends are bad."""

    name: str = "the calendar"
    first_year: int = 1900
    last_year: int = 2199
    listed: HolidayList | None = None

    def is_good(self, date: datetime.date) -> bool:
        """Whether the date is a good business day; raises NotCovered."""
        if not self.first_year <= date.year <= self.last_year:
            years = f"{self.first_year} to {self.last_year}"
            raise NotCovered(f"{date} lies outside {years}, the years {self.name} covers")
        return date.weekday() < SATURDAY if self.listed is None else self.listed.is_working_day(date)


@dataclass(frozen=True, slots=True)
class GoodDays:
    """Which days are good, and how others roll.

    A day is good if it is on every one of the lists (or on any, with `in_any`) and not among the `extra` holidays.
    `version` names the holiday package, its version and the lists.
    """

    roll: str
    lists: tuple[OneList, ...] = (OneList(),)
    in_any: bool = False
    extra: frozenset[datetime.date] = frozenset()
    version: str = ""

    def is_good(self, date: datetime.date) -> bool:
        """Whether the date is a good business day; raises NotCovered."""
        good = [each.is_good(date) for each in self.lists]  # all of them, so that none goes beyond its years unseen
        return (any(good) if self.in_any else all(good)) and date not in self.extra

    def rolled(self, date: datetime.date) -> datetime.date:
        """The date itself where it is good, else the good day that the roll convention (2006 ISDA
        Definitions, section 4.12) says; raises NotCovered."""
        if self.roll == "preceding":
            return self.back(date)
        following = self._next(date, ONE_DAY)
        if self.roll == "modified following" and following.month != date.month:
            return self.back(date)
        return following

    def back(self, date: datetime.date) -> datetime.date:
        """The date itself where it is good, else the good day before it; raises NotCovered."""
        return self._next(date, -ONE_DAY)

    def add(self, date: datetime.date, count: int) -> datetime.date:
        """The good day `count` good days after the date; for a count of 0 the date, rolled. Raises
        NotCovered."""
        if count == 0:
            return self.rolled(date)
        for _ in range(count):
            date = self._next(date + ONE_DAY, ONE_DAY)
        return date

    def _next(self, date: datetime.date, step: datetime.timedelta) -> datetime.date:
        while not self.is_good(date):
            date += step
        return date


def good_days(stated: BusinessDays) -> tuple[GoodDays | None, list[Fault]]:
    """The good days that a contract's `calendar` or `payment_calendar` names."""
    extra = frozenset(stated.extra)
    if stated.holidays == (WEEKENDS_ONLY,):
        return GoodDays(stated.roll, extra=extra), []
    import holidays

    known = holidays.list_supported_financial()
    faults = []
    for name, place in zip(stated.holidays, stated.places, strict=True):
        if name not in known:
            hint = did_you_mean(name, [*known, WEEKENDS_ONLY]) or (
                f"; expected 'none' (weekends only) or a name that the package 'holidays' {holidays.__version__} "
                "has for a central bank or exchange, as ECB or XNYS")
            faults.append(Fault(place, f"there are no holidays '{name}'{hint}"))
    if faults:
        return None, faults
    lists = []
    for name in stated.holidays:
        listed = holidays.financial_holidays(name)
        lists.append(OneList(name, listed.start_year, listed.end_year, listed))
    version = f"holidays {holidays.__version__} {' and '.join(stated.holidays)}"
    return GoodDays(stated.roll, tuple(lists), stated.in_any, extra, version), []
