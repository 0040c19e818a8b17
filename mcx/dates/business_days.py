"""Good business days: which days are, and where the others roll.

The lists of holidays are those of the `holidays` package, by the names it gives to central banks and
exchanges (`ECB`, `XNYS`, ...); `none` means that only weekends are bad.
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
class GoodDays:
    """Which days are good, and how others roll. `version` names the holiday package, its version and the
    list."""

    roll: str
    first_year: int = 1900
    last_year: int = 2199
    listed: HolidayList | None = None
    version: str = ""

    def is_good(self, date: datetime.date) -> bool:
        """Whether the date is a good business day; raises NotCovered."""
        if not self.first_year <= date.year <= self.last_year:
            name = self.version.split()[-1] if self.version else "the calendar"
            years = f"{self.first_year} to {self.last_year}"
            raise NotCovered(f"{date} lies outside {years}, the years {name} covers")
        if self.listed is None:
            return date.weekday() < SATURDAY
        return self.listed.is_working_day(date)

    def rolled(self, date: datetime.date) -> datetime.date:
        """The date itself where it is good, else the good day that the roll convention (2006 ISDA
        Definitions, section 4.12) says; raises NotCovered."""
        if self.roll == "preceding":
            return self._next(date, -ONE_DAY)
        following = self._next(date, ONE_DAY)
        if self.roll == "modified following" and following.month != date.month:
            return self._next(date, -ONE_DAY)
        return following

    def add(self, date: datetime.date, count: int) -> datetime.date:
        """The good day `count` good days after the date; for a count of 0 the date, rolled. Raises
        NotCovered."""
        date = self.rolled(date)
        for _ in range(count):
            date = self._next(date + ONE_DAY, ONE_DAY)
        return date

    def _next(self, date: datetime.date, step: datetime.timedelta) -> datetime.date:
        while not self.is_good(date):
            date += step
        return date


def good_days(stated: BusinessDays) -> tuple[GoodDays | None, list[Fault]]:
    """The good days that a contract's `calendar` names."""
    if stated.holidays == WEEKENDS_ONLY:
        return GoodDays(stated.roll), []
    import holidays

    known = holidays.list_supported_financial()
    if stated.holidays not in known:
        hint = did_you_mean(stated.holidays, [*known, WEEKENDS_ONLY]) or (
            f"; expected 'none' (weekends only) or a name that the package 'holidays' {holidays.__version__} "
            "has for a central bank or exchange, as ECB or XNYS")
        text = f"there are no holidays '{stated.holidays}'{hint}"
        return None, [Fault(stated.place, text)]
    listed = holidays.financial_holidays(stated.holidays)
    version = f"holidays {holidays.__version__} {stated.holidays}"
    return GoodDays(stated.roll, listed.start_year, listed.end_year, listed, version), []
