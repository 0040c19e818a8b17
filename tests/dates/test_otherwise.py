"""Dates of other readings: those that fall later, and those that stay."""

from __future__ import annotations

import datetime

import pytest

from mcx.checked.load import checked_request
from mcx.dates.dating import date_contract
from mcx.dates.otherwise import DatedOtherwise, date_otherwise
from mcx.text.documents import parse_documents

TEXT = """\
payoff: note
terms:
  fixings: {type: dates}
  final:   {type: date}
  since:   {type: date, optional: true}
events:
  - at: fixings
    from: since
    pay: 1
  - at: final
    pay: 1
readings:
  - name: other
    about: Said otherwise.
    LATER
---
contract: Trade
currency: EUR
notional: 100
assets: [north]
start: 2026-06-01
settlement: 2 business days
calendar: {holidays: CALENDAR, roll: following}
payoff: note
terms:
  fixings: [2026-12-24, 2027-12-01]
  final: fixings.last
  since: 2026-06-02
"""
VALUATION = datetime.date(2026, 12, 1)


def other(later: str, calendar: str = "none", text: str = TEXT) -> DatedOtherwise:
    text = text.replace("LATER", later).replace("CALENDAR", calendar)
    made, faults = checked_request(*parse_documents(text.encode(), "note.yaml"))
    assert not faults, faults
    dated, faults = date_contract(made.contracts[0], VALUATION)
    assert not faults, faults
    (found,) = date_otherwise(dated)
    return found


def days(found: DatedOtherwise, term: str) -> list[str]:
    return [str(day) for day in found.dated.schedules[term]]


def test_every_date_falls_later_and_what_names_them_with_it():
    found = other("later: {fixings: 1 business day}")
    assert days(found, "fixings") == ["2026-12-25", "2027-12-02"]
    assert days(found, "final") == ["2027-12-02"]


def test_business_days_are_those_of_the_contract():
    """TARGET is closed on 25 December 2026, a Friday; the next good day is Monday."""
    assert days(other("later: {fixings: 1 business day}", "ECB"), "fixings") == ["2026-12-28", "2027-12-02"]


def test_several_days():
    assert days(other("later: {final: 3 business days}"), "final") == ["2027-12-06"]


def test_dates_of_the_past_stay():
    found = other("later: {since: 1 business day, fixings: 1 business day}")
    assert days(found, "since") == ["2026-06-02"] and days(found, "fixings")[0] == "2026-12-25"


@pytest.mark.parametrize(("later", "old", "new", "why"), [
    ("later: {since: 1 business day}", "  since: 2026-06-02\n", "",
     "note.yaml:13:11: 'since' is not stated in this contract"),
    ("later: {fixings: 9 business days}", "2027-12-01]", "2199-12-23]",
     "lies outside 1900 to 2199, the years the calendar covers"),
])
def test_what_cannot_fall_later_says_why(later: str, old: str, new: str, why: str):
    found = other(later, text=TEXT.replace(old, new))
    assert found.dated is None
    assert why in str(found.faults[0])


def test_business_days_need_a_calendar():
    dated_keys = ("start: 2026-06-01\nsettlement: 2 business days\n"
                  "calendar: {holidays: CALENDAR, roll: following}\n")
    text = TEXT.replace(dated_keys, "").replace("[2026-12-24, 2027-12-01]", "[0.5y, 1y]").replace("  since: 2026-06-02\n", "")
    found = other("later: {fixings: 1 business day}", text=text)
    assert "business days need calendar dates" in str(found.faults[0])
