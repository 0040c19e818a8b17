"""Year fractions by day count: 2006 ISDA Definitions, section 4.16, keyed by the names that it writes.

`year_fraction` is the door; two of the rules need to know more than two dates. The names that documents may use stand
in `checked/day_count_names.py`, which turns each into the one used here.
"""

from __future__ import annotations

import calendar
import datetime
from collections.abc import Callable
from dataclasses import dataclass
from types import MappingProxyType

Date = datetime.date


@dataclass(frozen=True, slots=True)
class Regular:
    """The regular periods that Actual/Actual (ICMA) measures by: one of them begins or ends on `date`, and each lasts
    a whole number of months. With `end_of_month` they end on the last days of months."""

    date: Date
    months: int
    end_of_month: bool = False

    def step(self, count: int) -> Date:
        """The end of the period that lies `count` periods after `date`."""
        from dateutil.relativedelta import relativedelta

        moved = self.date + relativedelta(months=count * self.months)
        return last_of_month(moved) if self.end_of_month else moved


def last_of_month(date: Date) -> Date:
    """The last calendar day of the date's month."""
    return date.replace(day=calendar.monthrange(date.year, date.month)[1])


def year_fraction(
    day_count: str, start: Date, end: Date, *, final: bool = False, regular: Regular | None = None
) -> float:
    """The year fraction of a calculation period from `start` to `end`.

    `final`: it ends on the termination date, which 30E/360 (ISDA) asks for; `regular`: the regular periods, which
    Actual/Actual (ICMA) needs. Raises KeyError for an unknown day count, ValueError where `regular` is missing.
    """
    if day_count == ICMA:
        if regular is None:
            raise ValueError(f"{ICMA} needs the regular periods")
        return actual_actual_icma(start, end, regular)
    if day_count == "30E/360 (ISDA)":
        return thirty_e_360_isda(start, end, final)
    return YEAR_FRACTIONS[day_count](start, end)


def actual_365_fixed(start: Date, end: Date) -> float:
    """Section 4.16(d): days over 365."""
    return (end - start).days / 365


def actual_360(start: Date, end: Date) -> float:
    """Section 4.16(e): days over 360."""
    return (end - start).days / 360


def thirty_360(start: Date, end: Date) -> float:
    """Section 4.16(f): months of 30 days; the 31st counts as the 30th, at the end only if the start is at
    its 30th."""
    first = min(start.day, 30)
    return _thirty(start, first, end, 30 if end.day == 31 and first == 30 else end.day)


def thirty_e_360(start: Date, end: Date) -> float:
    """Section 4.16(g): months of 30 days; the 31st counts as the 30th at both ends."""
    return _thirty(start, min(start.day, 30), end, min(end.day, 30))


def thirty_e_360_isda(start: Date, end: Date, final: bool = False) -> float:
    """Section 4.16(h): as 30E/360, and the end of February counts as the 30th too, but not at the end of the period
    that ends on the termination date (`final`)."""
    first = 30 if start == last_of_month(start) else start.day
    last = 30 if end.day == 31 or (end == last_of_month(end) and not (final and end.month == 2)) else end.day
    return _thirty(start, first, end, last)


def actual_actual_icma(start: Date, end: Date, regular: Regular) -> float:
    """Section 4.16(c), Rule 251 of the International Capital Market Association: the days in each regular period over
    the days of that period times the number of periods in a year. A regular period is always the same part of a
    year; a short or long one is cut at the regular dates."""
    count = 12 * (start.year - regular.date.year) + start.month - regular.date.month
    count = count // regular.months - 1
    while regular.step(count + 1) <= start:
        count += 1
    total = 0.0
    while (opens := regular.step(count)) < end:
        closes = regular.step(count + 1)
        total += (min(end, closes) - max(start, opens)).days / (closes - opens).days
        count += 1
    return total * regular.months / 12


def actual_actual(start: Date, end: Date) -> float:
    """Section 4.16(b): days in leap years over 366, other days over 365; the first day counts, the last
    does not."""
    total = 0.0
    for year in range(start.year, end.year + 1):
        opens, closes = Date(year, 1, 1), Date(year + 1, 1, 1)
        total += (min(end, closes) - max(start, opens)).days / (closes - opens).days
    return total


def _thirty(start: Date, first: int, end: Date, last: int) -> float:
    return (360 * (end.year - start.year) + 30 * (end.month - start.month) + last - first) / 360


ICMA = "Actual/Actual (ICMA)"
YEAR_FRACTIONS: MappingProxyType[str, Callable[[Date, Date], float]] = MappingProxyType({
    "Actual/Actual (ISDA)": actual_actual,
    "Actual/365 (Fixed)": actual_365_fixed,
    "Actual/360": actual_360,
    "30/360": thirty_360,
    "30E/360": thirty_e_360,
    "30E/360 (ISDA)": thirty_e_360_isda,
})
