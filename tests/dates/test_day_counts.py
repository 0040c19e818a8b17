"""Year fractions against the examples of the bodies that wrote the rules."""

from __future__ import annotations

from datetime import date

import pytest

from mcx.checked.read_contract import DAY_COUNTS
from mcx.dates.day_counts import YEAR_FRACTIONS

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
# Start, end, days by 30/360, days by 30E/360.
THIRTY = [
    ("2007-01-15", "2007-01-30", 15, 15),
    ("2007-01-15", "2007-02-15", 30, 30),
    ("2007-01-15", "2007-07-15", 180, 180),
    ("2007-09-30", "2008-03-31", 180, 180),
    ("2007-09-30", "2007-10-31", 30, 30),
    ("2007-09-30", "2008-09-30", 360, 360),
    ("2007-01-15", "2007-01-31", 16, 15),
    ("2007-01-31", "2007-02-28", 28, 28),
    ("2007-02-28", "2007-03-31", 33, 32),
    ("2006-08-31", "2007-02-28", 178, 178),
    ("2007-02-28", "2007-08-31", 183, 182),
    ("2007-02-14", "2007-02-28", 14, 14),
    ("2007-02-26", "2008-02-29", 363, 363),
    ("2008-02-29", "2009-02-28", 359, 359),
    ("2008-02-29", "2008-03-30", 31, 31),
    ("2008-02-29", "2008-03-31", 32, 31),
    ("2007-02-28", "2007-03-05", 7, 7),
    ("2007-10-31", "2007-11-28", 28, 28),
    ("2007-08-31", "2008-02-29", 179, 179),
    ("2008-02-29", "2008-08-31", 182, 181),
    ("2008-08-31", "2009-02-28", 178, 178),
    ("2009-02-28", "2009-08-31", 183, 182),
]


def fraction(name: str, start: str, end: str) -> float:
    return YEAR_FRACTIONS[name](date.fromisoformat(start), date.fromisoformat(end))


@pytest.mark.parametrize(("start", "end", "value"), ACTUAL_ACTUAL)
def test_actual_actual(start: str, end: str, value: float):
    """Actual/Actual (ISDA) weighs the days in leap years by 366 and the others by 365."""
    assert fraction("Actual/Actual (ISDA)", start, end) == pytest.approx(value, abs=1e-15)


@pytest.mark.parametrize(("name", "start", "end", "value"), ACTUAL_FIXED)
def test_actual_over_a_fixed_year(name: str, start: str, end: str, value: float):
    """Actual/360 and Actual/365 (Fixed) divide the days by their year."""
    assert fraction(name, start, end) == pytest.approx(value, abs=5e-13)


@pytest.mark.parametrize(("start", "end", "bond", "euro"), THIRTY)
def test_thirty_days_a_month(start: str, end: str, bond: int, euro: int):
    """30/360 and 30E/360 differ in when the 31st at the end becomes the 30th."""
    assert round(360 * fraction("30/360", start, end), 9) == bond
    assert round(360 * fraction("30E/360", start, end), 9) == euro


def test_every_name_a_contract_may_use_has_its_rule():
    """The names that the reader of contracts knows and the rules are the same."""
    assert set(DAY_COUNTS.values()) == set(YEAR_FRACTIONS)
