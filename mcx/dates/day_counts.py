"""Year fractions by day count: 2006 ISDA Definitions, section 4.16, keyed by the names that it writes.

The names that a contract may use stand in `checked/read_contract.py`, which turns each into the one used
here.
"""

from __future__ import annotations

import datetime
from collections.abc import Callable
from types import MappingProxyType

Date = datetime.date


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


YEAR_FRACTIONS: MappingProxyType[str, Callable[[Date, Date], float]] = MappingProxyType({
    "Actual/Actual (ISDA)": actual_actual,
    "Actual/365 (Fixed)": actual_365_fixed,
    "Actual/360": actual_360,
    "30/360": thirty_360,
    "30E/360": thirty_e_360,
})
