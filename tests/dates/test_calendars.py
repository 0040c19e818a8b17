"""Calendars of a contract: several lists joined, holidays of its own, payments apart, month ends, regular periods."""

from __future__ import annotations

from datetime import date

import holidays
import pytest
from dates.test_dating import CONTRACT, PAY, dated, events_of

from mcx.checked.load import checked_request
from mcx.dates.dated_contract import DatedContract
from mcx.text.documents import parse_documents

CALENDAR = "calendar: {holidays: ECB, roll: modified following}"
RULE = "{from: 2027-02-16, until: 2027-11-16, every: 3 months}"
PERIOD = "  - at: observations\n    pay: period\n"


def with_calendar(calendar: str, rule: str, events: str = PAY) -> tuple[DatedContract | None, list[str]]:
    """The contract with other calendars and another rule."""
    return dated(contract=CONTRACT.replace(CALENDAR, calendar).replace(RULE, rule), events=events)


def days(calendar: str, rule: str) -> list[tuple[str, str]]:
    """Every observation with its payment."""
    found, faults = with_calendar(calendar, rule)
    assert faults == []
    return [(str(event.occasion.day), str(*event.due.values())) for event in events_of(found)]


# Memorial Day 2027-05-31 closes XNYS and not ECB, Labour Day 2028-05-01 ECB and not XNYS; Christmas Day closes both.
@pytest.mark.parametrize(("opened", "written", "rolled"), [
    ("in all", "2027-05-31", "2027-06-01"),
    ("in any", "2027-05-31", "2027-05-31"),
    ("in all", "2028-05-01", "2028-05-02"),
    ("in any", "2028-05-01", "2028-05-01"),
    ("in all", "2028-12-25", "2028-12-27"),
    ("in any", "2028-12-25", "2028-12-26"),  # 26 December is a holiday of ECB only
])
def test_joint_calendars(opened: str, written: str, rolled: str):
    """A day is good where all of the lists are open, or any of them, as the contract says."""
    calendar = f"calendar: {{holidays: [ECB, XNYS], open: {opened}, roll: following}}"
    assert days(calendar, f"[{written}]")[0][0] == rolled


def test_holidays_of_the_contract():
    """Dates that the contract lists itself are bad, for observations and for the settlement lag alike."""
    calendar = "calendar: {holidays: none, extra_holidays: [2027-02-16, 2027-02-18], roll: following}"
    assert days(calendar, "[2027-02-16]") == [("2027-02-17", "2027-02-22")]


def test_payments_have_a_calendar_of_their_own():
    """Observations go by one calendar, the settlement lag and payment dates by the other."""
    calendar = "calendar: {holidays: none, roll: following}\npayment_calendar: {holidays: ECB, roll: preceding}"
    assert days(calendar, "[2027-03-25, 2027-03-29]") == [  # Good Friday and Easter Monday are 26 and 29 March
        ("2027-03-25", "2027-03-31"), ("2027-03-29", "2027-03-31")]
    found, _ = dated(contract=CONTRACT.replace(CALENDAR, calendar).replace(RULE, "[2027-03-24]"),
                     terms="  paid: {type: date}\n", events=PAY + "    due: paid\n", more="  paid: 2027-03-29\n")
    assert [str(*event.due.values()) for event in events_of(found)] == ["2027-03-25"]
    assert found.calendar_version == f"holidays {holidays.__version__} ECB for payments"


def test_dates_that_only_say_when_is_paid_are_good_for_payments():
    """Labour Day 2028-05-01 closes ECB and not XNYS, where payments are made: it stays. A term that is observed too
    rolls for that by the one calendar, and its payment by the other: Memorial Day 2028-05-29 closes XNYS only."""
    calendar = ("calendar: {holidays: ECB, roll: following}\n"
                "payment_calendar: {holidays: XNYS, roll: following}")
    contract = CONTRACT.replace(CALENDAR, calendar)
    found, faults = dated(contract=contract.replace(RULE, "[2027-03-24]"), terms="  paid: {type: date}\n",
                          events=PAY + "    due: paid\n", more="  paid: 2028-05-01\n")
    assert (faults, [str(*event.due.values()) for event in events_of(found)]) == ([], ["2028-05-01"])
    found, faults = dated(contract=contract.replace(RULE, "[2028-05-01, 2028-05-29]"), terms=(
        "  paid: {type: dates, per: observations}\n"), events=(
        "  - at: observations\n    pay: 1\n    due: paid\n  - at: paid\n    pay: 1\n    due: same day\n"),
        more="  paid: observations\n")
    assert faults == []
    due = [(str(event.occasion.day), str(*event.due.values())) for event in events_of(found)]
    assert ("2028-05-02", "2028-05-02") in due and ("2028-05-29", "2028-05-30") in due


def test_version_names_every_list():
    """The result's version names the lists of both calendars."""
    found, _ = with_calendar("calendar: {holidays: [ECB, XNYS], open: in all, roll: following}\n"
                             "payment_calendar: {holidays: XLON, roll: following}", "[2027-03-24]")
    version = f"holidays {holidays.__version__}"
    assert found.calendar_version == f"{version} ECB and XNYS; {version} XLON for payments"


def test_a_year_that_one_list_does_not_cover():
    """A date beyond any of the joined lists is a fault, though the other list covers it."""
    _, faults = with_calendar("calendar: {holidays: [ECB, none2], open: in any, roll: following}", "[2027-03-24]")
    assert "there are no holidays 'none2'" in faults[0]
    _, faults = with_calendar("calendar: {holidays: [XNYS, ECB], open: in any, roll: following}", "[2101-03-24]")
    assert "years ECB covers" in faults[0] or "years XNYS covers" in faults[0]


def test_end_of_month_rule():
    """With the end-of-month rule every date is its month's last day, rolled; a rule that begins on another day is
    refused."""
    rule = "{from: 2027-02-28, until: 2027-11-30, every: 3 months, end_of_month: true}"
    calendar = "calendar: {holidays: none, roll: preceding}"
    assert [day for day, _ in days(calendar, rule)] == ["2027-02-26", "2027-05-31", "2027-08-31", "2027-11-30"]
    _, faults = with_calendar(calendar, rule.replace("2027-02-28", "2027-02-25"))
    assert faults == ["'end_of_month' needs a rule from the last day of a month, not 2027-02-25"]
    found, _ = with_calendar(calendar, "{from: 2027-02-28, until: 2027-11-28, every: 3 months}")
    assert [str(event.occasion.day) for event in events_of(found)][1] == "2027-05-28"
    assert any("keep to day 28" in said for said in found.assumptions)


def test_icma_periods_are_regular_whatever_rolls():
    """The first period, from the start, is short: 2026-12-16 to 2027-02-16 of the regular one from 2026-11-16; the
    others are a quarter of a year though their dates roll."""
    contract = CONTRACT.replace("30/360", "Actual/Actual (ICMA)").replace("start: 2026-11-16", "start: 2026-12-16")
    found, _ = dated(contract=contract, events=PERIOD)
    periods = [event.occasion.period for event in events_of(found)]
    assert periods == pytest.approx([62 / 92 / 4, 0.25, 0.25, 0.25])
    parts, _ = dated(contract=contract, events=PERIOD.replace("observations", "observations.but_first"))
    assert [event.occasion.period for event in events_of(parts)] == [0.25, 0.25, 0.25]


def test_icma_needs_a_rule():
    """A list of dates has no regular periods: where a period is read that is a fault, elsewhere none."""
    contract = CONTRACT.replace("30/360", "Actual/Actual (ICMA)").replace(RULE, "[2027-02-16, 2027-06-16]")
    _, faults = dated(contract=contract, events=PERIOD)
    assert faults == ["Actual/Actual (ICMA) measures by regular periods; expected a date rule for 'observations' with "
                      "steps of months that divide a year"]
    assert dated(contract=contract)[1] == []


def test_the_last_period_keeps_the_end_of_february():
    """30E/360 (ISDA) takes the last date of the schedule for the termination date."""
    contract = CONTRACT.replace(CALENDAR, "calendar: {holidays: none, roll: preceding}")
    contract = contract.replace("30/360", "30E/360 (ISDA)").replace(RULE, "[2029-02-28, 2029-08-31, 2030-02-28]")
    contract = contract.replace("2026-11-16", "2028-08-31")
    found, _ = dated(contract=contract, events=PERIOD, valuation=date(2028, 9, 1))
    assert [event.occasion.period for event in events_of(found)] == [180 / 360, 180 / 360, 178 / 360]


@pytest.mark.parametrize(("calendar", "fault"), [
    ("{holidays: [ECB, XNYS], roll: following}",
     "8:22: the calendar names several lists; say when a day is good: 'open: in all' or 'open: in any' of them"),
    ("{holidays: ECB, open: in all, roll: following}", "8:27: the calendar names one list only; leave out 'open'"),
    ("{holidays: [ECB, none], open: in all, roll: following}",
     "8:28: 'none' cannot be joined with lists of holidays"),
    ("{holidays: [], roll: following}",
     "8:22: expected the name of a list of holidays, or several, found a list; the list is empty"),
    ("{holidays: ECB, extra_holidays: [2027-02-30], roll: following}",
     "8:44: expected a day of the calendar, found '2027-02-30'"),
])
def test_calendars_that_say_too_little_or_too_much(calendar: str, fault: str):
    """Each slip has its fault at its place."""
    text = CONTRACT.replace("{holidays: ECB, roll: modified following}", calendar)
    own = "payoff: own\nterms:\n  observations: {type: dates}\nevents:\n" + PAY
    documents, _ = parse_documents(f"{text}---\n{own}".encode(), "c.yaml")
    assert [str(each) for each in checked_request(documents)[1]] == [f"c.yaml:{fault}"]
