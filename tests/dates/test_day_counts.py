"""Year fractions against the examples of the bodies that wrote the rules."""

from __future__ import annotations

from datetime import date

import pytest

from mcx.checked.day_count_names import DAY_COUNTS
from mcx.dates.day_counts import ICMA, YEAR_FRACTIONS, Regular, year_fraction

# ISDA (1998), EMU and Market Conventions: Recent Developments, actual/actual examples, ISDA method; from
# memory.
ACTUAL_ACTUAL = [
    ("2003-11-01", "2004-05-01", 61 / 365 + 121 / 366),
    ("1999-02-01", "1999-07-01", 150 / 365),
    ("1999-07-01", "2000-07-01", 184 / 365 + 182 / 366),
    ("2002-08-15", "2003-07-15", 334 / 365),
    ("2003-07-15", "2004-01-15", 170 / 365 + 14 / 366),
    ("1999-07-30", "2000-01-30", 155 / 365 + 29 / 366),
    ("2000-01-30", "2000-06-30", 152 / 366),
    ("1999-11-30", "2000-04-30", 32 / 365 + 120 / 366),
]
# ISDA (2006) Definitions, section 4.16(d) and (e), applied by hand.
ACTUAL_FIXED = [
    ("Actual/360", "2003-11-01", "2004-05-01", 0.505555555556),
    ("Actual/365 (Fixed)", "2003-11-01", "2004-05-01", 0.498630136986),
    ("Actual/360", "1999-07-01", "2000-07-01", 1.016666666667),
    ("Actual/365 (Fixed)", "1999-07-01", "2000-07-01", 1.002739726027),
    ("Actual/360", "2008-02-29", "2009-02-28", 1.013888888889),
    ("Actual/365 (Fixed)", "2008-02-29", "2009-02-28", 1.0),
]
# ISDA, 30/360 worked-examples spreadsheet for the 2006 Definitions, section 4.16(f) and (g); from memory.
# Start, end, days by 30/360, by 30E/360, and by 30E/360 (ISDA) where the end is not the termination date.
THIRTY = [
    ("2007-01-15", "2007-01-30", 15, 15, 15),
    ("2007-01-15", "2007-02-15", 30, 30, 30),
    ("2007-01-15", "2007-07-15", 180, 180, 180),
    ("2007-09-30", "2008-03-31", 180, 180, 180),
    ("2007-09-30", "2007-10-31", 30, 30, 30),
    ("2007-09-30", "2008-09-30", 360, 360, 360),
    ("2007-01-15", "2007-01-31", 16, 15, 15),
    ("2007-01-31", "2007-02-28", 28, 28, 30),
    ("2007-02-28", "2007-03-31", 33, 32, 30),
    ("2006-08-31", "2007-02-28", 178, 178, 180),
    ("2007-02-28", "2007-08-31", 183, 182, 180),
    ("2007-02-14", "2007-02-28", 14, 14, 16),
    ("2007-02-26", "2008-02-29", 363, 363, 364),
    ("2008-02-29", "2009-02-28", 359, 359, 360),
    ("2008-02-29", "2008-03-30", 31, 31, 30),
    ("2008-02-29", "2008-03-31", 32, 31, 30),
    ("2007-02-28", "2007-03-05", 7, 7, 5),
    ("2007-10-31", "2007-11-28", 28, 28, 28),
    ("2007-08-31", "2008-02-29", 179, 179, 180),
    ("2008-02-29", "2008-08-31", 182, 181, 180),
    ("2008-08-31", "2009-02-28", 178, 178, 180),
    ("2009-02-28", "2009-08-31", 183, 182, 180),
]

# ISDA (1998), EMU and Market Conventions: Recent Developments, the same examples by the ICMA (then ISMA) method; from
# memory, the parts recomputed by hand.
ICMA_EXAMPLES = [
    ("2003-11-01", "2004-05-01", Regular(date(2004, 5, 1), 6), 182 / 364),
    ("1999-02-01", "1999-07-01", Regular(date(1999, 7, 1), 12), 150 / 365),
    ("1999-07-01", "2000-07-01", Regular(date(1999, 7, 1), 12), 1.0),
    ("2002-08-15", "2003-07-15", Regular(date(2003, 7, 15), 6), 181 / 362 + 153 / 368),
    ("2003-07-15", "2004-01-15", Regular(date(2003, 7, 15), 6), 184 / 368),
    ("1999-07-30", "2000-01-30", Regular(date(1999, 7, 30), 6), 0.5),
    ("2000-01-30", "2000-06-30", Regular(date(2000, 1, 30), 6), 152 / 364),
    ("1999-11-30", "2000-04-30", Regular(date(1999, 11, 30), 3, end_of_month=True), 91 / 364 + 61 / 368),
    ("2002-08-10", "2003-02-15", Regular(date(2003, 8, 15), 6), 5 / 362 + 0.5),  # by hand
]


def fraction(name: str, start: str, end: str) -> float:
    return year_fraction(name, date.fromisoformat(start), date.fromisoformat(end))


@pytest.mark.parametrize(("start", "end", "value"), ACTUAL_ACTUAL)
def test_actual_actual(start: str, end: str, value: float):
    """Actual/Actual (ISDA) weighs the days in leap years by 366 and the others by 365."""
    assert fraction("Actual/Actual (ISDA)", start, end) == pytest.approx(value, abs=1e-15)


@pytest.mark.parametrize(("name", "start", "end", "value"), ACTUAL_FIXED)
def test_actual_over_a_fixed_year(name: str, start: str, end: str, value: float):
    """Actual/360 and Actual/365 (Fixed) divide the days by their year."""
    assert fraction(name, start, end) == pytest.approx(value, abs=5e-13)


@pytest.mark.parametrize(("start", "end", "bond", "euro", "isda"), THIRTY)
def test_thirty_days_a_month(start: str, end: str, bond: int, euro: int, isda: int):
    """30/360 and 30E/360 differ in when the 31st at the end becomes the 30th; 30E/360 (ISDA) takes the end of February
    for the 30th too."""
    assert round(360 * fraction("30/360", start, end), 9) == bond
    assert round(360 * fraction("30E/360", start, end), 9) == euro
    assert round(360 * fraction("30E/360 (ISDA)", start, end), 9) == isda


def test_the_termination_date_keeps_its_february():
    """30E/360 (ISDA) leaves the end of February alone where the contract ends there (the same spreadsheet)."""
    start, end = date(2006, 8, 31), date(2007, 2, 28)
    assert round(360 * year_fraction("30E/360 (ISDA)", start, end, final=True), 9) == 178
    assert round(360 * year_fraction("30E/360 (ISDA)", start, end), 9) == 180


@pytest.mark.parametrize(("start", "end", "regular", "value"), ICMA_EXAMPLES)
def test_actual_actual_by_regular_periods(start: str, end: str, regular: Regular, value: float):
    """Actual/Actual (ICMA) gives a regular period the same part of a year whatever its days, and cuts a short or long
    one at the regular dates."""
    found = year_fraction(ICMA, date.fromisoformat(start), date.fromisoformat(end), regular=regular)
    assert found == pytest.approx(value, abs=1e-15)


def test_regular_periods_may_lie_on_either_side():
    """It does not matter which of the regular dates is named."""
    named = [year_fraction(ICMA, date(2002, 8, 15), date(2003, 7, 15), regular=Regular(day, 6))
             for day in (date(1990, 1, 15), date(2003, 7, 15), date(2040, 7, 15))]
    assert named == [181 / 362 + 153 / 368] * 3


def test_every_name_a_contract_may_use_has_its_rule():
    """The names that the reader of contracts knows and the rules are the same."""
    assert set(DAY_COUNTS.values()) == {*YEAR_FRACTIONS, ICMA}
