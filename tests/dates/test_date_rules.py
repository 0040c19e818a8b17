"""Date rules: steps from the first date, month ends, leap days, rolling, and rules that do not end where
they say."""

from __future__ import annotations

from datetime import date

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mcx.checked.contract import BusinessDays, Contract, DayList, DayRef, DayRule, Period, Stretch, TermValue
from mcx.dates.business_days import good_days
from mcx.dates.rules import TermDays
from mcx.faults import Place

PLACE, UNTIL = Place("note.yaml", 12, 17), Place("note.yaml", 12, 43)


def days_of(value: TermValue, holidays: str = "none", roll: str = "modified following",
            textbook: bool = False,
            **others: TermValue) -> list[str]:
    """The days of a term, as text, or the faults."""
    contract = Contract("test", "EUR", ("harbour",), None, {"days": value, **others}, PLACE,
                        textbook=textbook)
    good, _ = good_days(BusinessDays((holidays,), roll, PLACE, (PLACE,)))
    terms = TermDays(contract, None if textbook else date(2026, 12, 1), None if textbook else good)
    days = terms.of_term("days")
    return [str(fault) for fault in terms.faults] or [str(day) for day in days]


def day(text: str, place: Place = PLACE) -> DayRef:
    if text.endswith("y"):
        return DayRef(place, time=float(text[:-1]))
    return DayRef(place, date=date.fromisoformat(text))


def rule(start: str, until: str, count: int, unit: str) -> DayRule:
    return DayRule(PLACE, day(until, UNTIL), day(start), Period(count, unit))


def test_month_ends_are_counted_from_the_first_date():
    """From the 31st, each date is the 31st or its month's last day: February does not pull the later ones
    down."""
    assert days_of(rule("2027-01-31", "2027-05-31", 1, "month"), roll="preceding") == [
        "2027-01-29", "2027-02-26", "2027-03-31", "2027-04-30", "2027-05-31"]


def test_leap_day():
    """From 29 February yearly: 28 February in common years, 29 February again in the next leap year."""
    assert days_of(rule("2028-02-29", "2032-02-29", 1, "year"), roll="preceding") == [
        "2028-02-29", "2029-02-28", "2030-02-28", "2031-02-28", "2032-02-27"]


def test_dates_roll_one_by_one():
    """A rolled date does not move those after it; 2027-08-16 is a Monday, 2027-05-16 a Sunday."""
    assert days_of(rule("2027-02-16", "2027-11-16", 3, "month"), "ECB") == [
        "2027-02-16", "2027-05-17", "2027-08-16", "2027-11-16"]


def test_good_friday_rolls_over_easter():
    """2027-03-26 is Good Friday, so the date becomes the Tuesday after Easter; `none` keeps it."""
    assert days_of(rule("2027-02-26", "2027-03-26", 1, "month"), "ECB") == ["2027-02-26", "2027-03-30"]
    assert days_of(rule("2027-02-26", "2027-03-26", 1, "month"), "none") == ["2027-02-26", "2027-03-26"]


@pytest.mark.parametrize("until", ["2027-05-16", "2027-05-17"])
def test_until_rolled_or_not(until: str):
    """The rule may say its last date as it falls (a Sunday) or as it is rolled (the Monday)."""
    assert days_of(rule("2027-02-16", until, 3, "month")) == ["2027-02-16", "2027-05-17"]


def test_rule_that_misses_its_end_prints_its_dates():
    """A rule that steps over its `until` is a fault at `until` that shows the first and last dates it
    gives."""
    assert days_of(rule("2027-02-16", "2029-11-15", 3, "month")) == [
        "note.yaml:12:43: the steps do not end on 2029-11-15: they give 2027-02-16, 2027-05-17, ..., "
        "2029-08-16, 2029-11-16"]


def test_each_business_day():
    """`1 business day` gives every good day between the two, both included if good: Easter 2027 leaves out
    four."""
    assert days_of(rule("2027-03-25", "2027-04-01", 1, "business day"), "ECB") == [
        "2027-03-25", "2027-03-30", "2027-03-31", "2027-04-01"]


def test_every_few_business_days_must_end():
    """Steps of several business days end on `until` or are at fault."""
    assert days_of(rule("2027-03-01", "2027-03-11", 4, "business day")) == ["2027-03-01", "2027-03-05",
                                                                            "2027-03-11"]
    assert "do not end on 2027-03-10" in days_of(rule("2027-03-01", "2027-03-10", 4, "business day"))[0]


def test_weeks():
    """Weeks are seven days."""
    assert days_of(rule("2027-02-01", "2027-02-15", 1, "week")) == ["2027-02-01", "2027-02-08", "2027-02-15"]


def test_days_that_roll_together_are_refused():
    """`every: 1 day` puts a weekend on its Monday, twice: the fault says what was meant."""
    assert days_of(rule("2027-02-05", "2027-02-09", 1, "day")) == [
        "note.yaml:12:17: two dates of the rule fall on 2027-02-08; for each business day write 'every: 1 "
        "business day'"]


def test_end_before_start():
    """A rule whose `until` lies before its `from` gives no dates."""
    assert days_of(rule("2027-02-05", "2027-01-05", 1, "month")) == [
        "note.yaml:12:17: the rule ends on 2027-01-05, before it begins on 2027-02-05"]


@pytest.mark.parametrize(
    ("start", "until", "count", "unit", "said"),
    [
        ("2027-02-05", "2199-02-05", 1, "day", "more than 10000 dates"),
        ("2027-02-05", "9000-02-05", 1, "month", "lies outside 1900 to 2199"),
        ("2027-02-05", "2027-02-12", 99999, "year", "the rule goes beyond the year 9999"),
        ("2027-02-01", "2190-02-05", 1, "business day", "more than 10000 dates"),
    ],
)
def test_rules_without_end_are_bounded(start: str, until: str, count: int, unit: str, said: str):
    """A rule of too many dates, or beyond what the calendar covers, is a fault and ends."""
    (fault,) = days_of(rule(start, until, count, unit))
    assert said in fault


def test_lists_keep_order():
    """Listed dates are rolled; the same day twice, or an earlier one after a later one, is a fault at that
    date."""
    second = Place("note.yaml", 12, 30)
    assert days_of(DayList(PLACE, (day("2027-02-06"), day("2027-02-10")))) == ["2027-02-08", "2027-02-10"]
    assert days_of(DayList(PLACE, (day("2027-02-06"), day("2027-02-08", second)))) == [
        "note.yaml:12:30: 2027-02-08 is listed twice (2027-02-06 rolls to 2027-02-08); dates are listed in order, each once"]
    assert days_of(DayList(PLACE, (day("2027-02-12"), day("2027-02-08", second)))) == [
        "note.yaml:12:30: 2027-02-08 is listed after 2027-02-12; dates are listed in order, each once"]


def test_names_of_other_terms():
    """A date may be the first or last date of another term, and dates may be all or some of another's."""
    months = rule("2027-02-01", "2027-04-01", 1, "month")
    for part, expected in [("", ["2027-02-01", "2027-03-01", "2027-04-01"]), ("last", ["2027-04-01"]),
                           ("but_first", ["2027-03-01", "2027-04-01"]),
                           ("but_last", ["2027-02-01", "2027-03-01"])]:
        assert days_of(DayList(PLACE, (DayRef(PLACE, term="months", part=part),)), months=months) == expected
    assert days_of(DayRef(PLACE, term="months", part="last"), months=months) == ["2027-04-01"]
    daily = DayRule(PLACE, DayRef(UNTIL, term="months", part="last"), day("2027-03-30"),
                    Period(1, "business day"))
    assert days_of(daily, months=months) == ["2027-03-30", "2027-03-31", "2027-04-01"]


def test_dates_said_through_themselves():
    """Two terms that name each other are a fault, once."""
    other = DayRef(UNTIL, term="days")
    assert days_of(DayRef(PLACE, term="other"), other=other) == [
        "note.yaml:12:43: the dates of 'days' are said through themselves"]


def test_stretch():
    """A continuous watch has two ends in order."""
    assert days_of(Stretch(PLACE, day("2026-12-01"), day("2027-02-06"))) == ["2026-12-01", "2027-02-08"]
    assert "not after its start" in days_of(Stretch(PLACE, day("2027-02-06"), day("2027-02-08")))[0]


def textbook(until: str, start: str = "", count: int | None = None, months: int = 0) -> list[str]:
    every = Period(months, "month") if months else None
    return days_of(DayRule(PLACE, day(until, UNTIL), day(start) if start else None, every, count),
                   textbook=True)


def test_equal_steps():
    """Equal steps end at `until` and leave out the start unless it is stated; times of one value are one
    number."""
    assert textbook("1y", count=4) == ["0.25y", "0.5y", "0.75y", "1y"]
    assert textbook("1y", "0y", count=2) == ["0y", "0.5y", "1y"]
    weeks = Contract("test", "EUR", ("harbour",), None, {
        "weeks": DayRule(PLACE, day("1y"), count=52), "months": DayRule(PLACE, day("1y"), count=12)}, PLACE)
    terms = TermDays(weeks, None, None)
    assert terms.of_term("weeks")[12] == terms.of_term("months")[2]


def test_steps_of_months_in_years():
    """Steps of months count twelfths of a year and must end at `until`."""
    assert textbook("1y", "0.25y", months=3) == ["0.25y", "0.5y", "0.75y", "1y"]
    assert textbook("0.5y", months=2) == ["0.1666666667y", "0.3333333333y", "0.5y"]
    assert textbook("0.4y", months=3) == [
        "note.yaml:12:43: the steps do not end on 0.4y: they give 0.25y, 0.5y"]


def test_times_need_room():
    """Equal steps to their own start are a fault."""
    assert textbook("0y", count=3) == ["note.yaml:12:17: the rule ends at 0y, not after its start at 0y"]


@given(st.dates(date(2026, 1, 1), date(2060, 1, 1)), st.integers(1, 40), st.integers(1, 12),
       st.sampled_from(["following", "modified following", "preceding"]))
def test_every_rule_of_months_ends(start: date, count: int, step: int, roll: str):
    """A rule of months whose `until` is counted by hand gives its number of dates, each within a week of
    its day."""
    total = start.month - 1 + (count - 1) * step
    last = next(date(start.year + total // 12, total % 12 + 1, number) for number in range(start.day, 27, -1)
                if _exists(start.year + total // 12, total % 12 + 1, number)) if start.day > 28 else \
        date(start.year + total // 12, total % 12 + 1, start.day)
    found = days_of(rule(str(start), str(last), step, "month"), "ECB", roll)
    assert len(found) == count
    assert abs((date.fromisoformat(found[-1]) - last).days) < 7


def _exists(year: int, month: int, number: int) -> bool:
    try:
        return bool(date(year, month, number))
    except ValueError:
        return False
