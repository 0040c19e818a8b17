"""Dated contracts: occasions and their numbers, payments and their days, and the faults that only dates
can show."""

from __future__ import annotations

import math
from datetime import date

import pytest
from dated_contracts import CONTRACT, HEAD, IN_YEARS, PAY, TODAY, dated, events_of, places

from mcx.dates.dated_contract import Day


def test_days_have_times_and_numbers():
    """Occasions count within their schedule; times count from the valuation date, `years` from the start,
    both Actual/365 (Fixed); `period` goes by the contract's day count between rolled dates."""
    found, _ = dated()
    occasions = [event.occasion for event in events_of(found)]
    assert [str(one.day) for one in occasions] == ["2027-02-16", "2027-05-17", "2027-08-16", "2027-11-16"]
    assert [one.day.time for one in occasions] == [77 / 365, 167 / 365, 258 / 365, 350 / 365]
    assert [one.years for one in occasions] == [92 / 365, 182 / 365, 273 / 365, 1.0]
    assert [one.period for one in occasions] == [90 / 360, 91 / 360, 89 / 360, 90 / 360]
    assert [(one.schedule, one.nth, one.n_dates) for one in occasions] == [
        ("observations", k, 4) for k in (1, 2, 3, 4)]
    assert [one.dates for one in occasions] == [{"observations": k} for k in range(4)]
    assert [one.earlier for one in occasions] == [None, *(one.day for one in occasions[:3])]
    assert (found.start, found.valuation) == (Day(-15 / 365, date(2026, 11, 16)), TODAY)
    assert found.calendar_version.endswith(" ECB")
    assert found.last == occasions[-1].day


@pytest.mark.parametrize(
    ("day_count", "periods"),
    [("Actual/360", [92 / 360, 90 / 360, 91 / 360, 92 / 360]),
     ("30E/360", [90 / 360, 91 / 360, 89 / 360, 90 / 360]),
     ("A/365F", [92 / 365, 90 / 365, 91 / 365, 92 / 365]),
     ("Act/Act", [92 / 365, 90 / 365, 91 / 365, 92 / 365])],
)
def test_day_counts(day_count: str, periods: list[float]):
    """`period` follows the contract's day count, under any of the names that the standard has for it."""
    found, _ = dated(contract=CONTRACT.replace("30/360", day_count))
    assert [event.occasion.period for event in events_of(found)] == pytest.approx(periods, abs=1e-15)


def test_no_day_count_no_period():
    """Where nothing is paid by the period, no day count is needed, and `period` is not a number."""
    found, _ = dated(contract=CONTRACT.replace("day_count: 30/360\n", ""))
    assert math.isnan(events_of(found)[0].occasion.period)


@pytest.mark.parametrize(
    ("part", "numbers"),
    [("", [1, 2, 3, 4]), (".first", [1]), (".last", [4]), (".but_first", [2, 3, 4]),
     (".but_last", [1, 2, 3])],
)
def test_parts_keep_the_numbers_of_the_whole(part: str, numbers: list[int]):
    """A part of a schedule keeps `nth`, `n_dates` and `period`; the first of the part has no earlier
    occasion."""
    found, _ = dated(events=PAY.replace("at: observations", f"at: observations{part}"))
    occasions = [event.occasion for event in events_of(found)]
    assert [one.nth for one in occasions] == numbers
    assert {one.n_dates for one in occasions} == {4}
    assert occasions[0].earlier is None
    assert occasions[0].period == {1: 90 / 360, 2: 91 / 360, 4: 90 / 360}[numbers[0]]


def test_from_and_until_narrow():
    """`from` and `until` keep what lies between two dates, both included, after rolling."""
    found, _ = dated(terms="  first: {type: date}\n  final: {type: date}\n",
                     events="  - at: observations\n    from: first\n    until: final\n    pay: 1\n",
                     more="  first: 2027-05-16\n  final: 2027-08-16\n")
    assert [event.occasion.nth for event in events_of(found)] == [2, 3]


def test_optional_dates_that_are_not_stated():
    """An optional date that is not stated narrows nothing, and nothing happens at it."""
    found, _ = dated(terms="  first: {type: date, optional: true}\n",
                     events="  - at: observations\n    from: first\n    pay: 1\n  - at: first\n    pay: 2\n")
    assert [event.occasion.nth for event in events_of(found)] == [1, 2, 3, 4]


def test_single_dates_have_no_schedule():
    """A date of its own is the first of one, its period counted from the start."""
    found, _ = dated(terms="  final: {type: date}\n", events="  - at: final\n    pay: spot\n",
                     more="  final: 2027-11-16\n")
    (event,) = events_of(found)
    assert (event.occasion.schedule, event.occasion.nth, event.occasion.n_dates) == ("", 1, 1)
    assert event.occasion.period == 1.0
    assert event.occasion.dates == {"observations": 3}


def test_file_order_within_a_day():
    """On one day running values come before events, both in file order."""
    found, _ = dated(
        parts="running:\n  count: {total: 1, at: observations.last}\n  high: {highest: spot, at: "
              "observations}\n",
        events="  - at: observations.last\n    pay: high\n  - at: observations\n    pay: 1\n"
               "  - at: observations.last\n    pay: count\n")
    last = found.moments[-1]
    assert [update.running.name for update in last.updates] == ["count", "high"]
    assert [update.first for update in last.updates] == [True, False]
    lines = [event.event.place.line for event in last.events]
    assert lines == sorted(lines)
    assert len(lines) == 3


# When amounts are paid


@pytest.mark.parametrize(
    ("observed", "paid"),
    [("2027-03-24", "2027-03-30"),  # over Easter: Good Friday 26 March, Easter Monday 29 March
     ("2027-12-23", "2027-12-27"),  # 24 December is good, 25 and 26 are a weekend
     ("2026-12-23", "2026-12-28"),  # Friday 25 December is not good
     ("2027-04-29", "2027-05-03")],  # 1 May is a Saturday
)
def test_settlement_lag(observed: str, paid: str):
    """An amount without `due` is paid after the contract's settlement lag, in its calendar's business
    days."""
    found, _ = dated(contract=CONTRACT.replace("{from: 2027-02-16, until: 2027-11-16, every: 3 months}",
                                               f"[{observed}]"))
    (event,) = events_of(found)
    assert [str(day) for day in event.due.values()] == [paid]


def test_other_due_dates():
    """`due` may be the same day, a date, or the date that stands at the same place of a list."""
    found, faults = dated(
        terms="  paid_on: {type: dates, per: observations}\n  maturity: {type: date}\n",
        events="  - at: observations\n    pay: 1\n    due: paid_on\n  - at: observations.last\n    pay: 1\n"
               "    due: maturity\n  - at: observations.first\n    pay: 1\n    due: same day\n",
        more="  paid_on: [2027-02-20, 2027-05-19, 2027-08-18, 2027-11-18]\n  maturity: 2027-12-01\n")
    assert faults == []
    due = {(event.occasion.nth,
            event.event.place.line): str(*event.due.values()) for event in events_of(found)}
    first, last, same = sorted({line for _, line in due})
    assert [due[k, first] for k in (1, 2, 3, 4)] == ["2027-02-22", "2027-05-19", "2027-08-18", "2027-11-18"]
    assert (due[4, last], due[1, same]) == ("2027-12-01", "2027-02-16")


def test_payment_before_its_observation():
    """A payment date before its observation is a fault at that date."""
    _, faults = dated(terms="  paid_on: {type: dates, per: observations}\n",
                      events="  - at: observations\n    pay: 1\n    due: paid_on\n",
                      more="  paid_on: [2027-02-18, 2027-05-14, 2027-08-18, 2027-11-18]\n")
    assert faults == ["the payment of what is observed on 2027-05-17 falls due before, on 2027-05-14"]


def test_payment_beyond_the_calendar():
    """A payment day that the list of holidays does not reach is a fault."""
    contract = CONTRACT.replace("{from: 2027-02-16, until: 2027-11-16, every: 3 months}", "[2100-12-30]")
    _, faults = dated(contract=contract)
    assert faults == ["the payment of 2100-12-30: 2101-01-01 lies outside 1999 to 2100, the years ECB covers"]


# Textbook contracts


def test_textbook_contracts_count_from_today():
    """Times are years from the valuation; start is 0y, payment on the spot, the period a difference of
    times."""
    found, _ = dated(contract=IN_YEARS, valuation=None)
    occasions = [event.occasion for event in events_of(found)]
    assert [one.day for one in occasions] == [Day(0.25), Day(0.5), Day(0.75), Day(1.0)]
    assert [one.years for one in occasions] == [0.25, 0.5, 0.75, 1.0]
    assert [one.period for one in occasions] == [0.25] * 4
    assert [*events_of(found)[1].due.values()] == [Day(0.5)]
    assert (found.start, found.calendar_version) == (Day(0.0), "")


def test_no_valuation_date():
    """Without a market, times count from the contract's start."""
    found, _ = dated(valuation=None)
    assert (found.start.time, found.moments[0].day.time) == (0.0, 92 / 365)


# Watches


def test_continuous_watches():
    """A stretch is a watch with both its ends, by a term or between two dates of the definition."""
    found, _ = dated(
        terms="  watched: {type: watch}\n",
        parts="running:\n  hit: {ever: spot < 80, at: watched}\n"
              "  low:\n    lowest: spot\n    at: {continuous: [observations.first, observations.last]}\n",
        events="  - at: observations.last\n    pay: (low / 100) if hit else 1\n",
        more="  watched: {continuous: [2026-12-01, observations.last]}\n")
    assert [(watch.running.name, str(watch.start), str(watch.end)) for watch in found.watches] == [
        ("hit", "2026-12-01", "2027-11-16"), ("low", "2027-02-16", "2027-11-16")]
    assert found.assumptions == ()


@pytest.mark.parametrize("at",
                         ["observations", "{from: 2026-12-02, until: 2027-11-16, every: 1 business day}"])
def test_dated_watches(at: str):
    """A watch term may as well give dates; then the running value is updated on them. Of the 250 weekdays
    here four are holidays of the ECB."""
    found, _ = dated(terms="  watched: {type: watch}\n",
                     parts="running:\n  hit: {ever: spot < 80, at: watched}\n",
                     events="  - at: observations.last\n    pay: 1 if hit else 0\n",
                     more=f"  watched: {at}\n")
    assert found.watches == ()
    assert sum(len(moment.updates) for moment in found.moments) == (4 if at == "observations" else 246)


def test_only_extremes_and_flags_are_watched_continuously():
    """An average needs dates."""
    _, faults = dated(terms="  watched: {type: watch}\n",
                      parts="running:\n  mean_level: {average: spot, at: watched}\n",
                      events="  - at: observations.last\n    pay: mean_level\n",
                      more="  watched: {continuous: [2026-12-01, observations.last]}\n")
    assert faults == ["'mean_level' is the average of what it observes and cannot be watched continuously; "
                      "lowest, highest, ever, always can"]


def test_watch_begun_before_today():
    """A watch that began before the valuation date is dated as it is: what has happened since is for the tape."""
    found, faults = dated(terms="  watched: {type: watch}\n",
                      parts="running:\n  hit: {ever: spot < 80, at: watched}\n",
                      events="  - at: observations.last\n    pay: 1 if hit else 0\n",
                      more="  watched: {continuous: [2026-11-16, observations.last]}\n")
    assert not faults
    assert (found.watches[0].start.time, found.watches[0].end.date) == (-15 / 365, date(2027, 11, 16))


# What dates show


def test_observation_before_the_valuation_date():
    """A past observation is a moment at a negative time."""
    found, faults = dated(valuation=date(2027, 3, 1))
    assert not faults
    assert found.moments[0].day == Day(-13 / 365, date(2027, 2, 16))
    assert found.begun


def test_past_dates_that_are_not_observed_do_no_harm():
    """A schedule may begin in the past where its events begin later."""
    found, faults = dated(events=PAY.replace("at: observations", "at: observations.last"),
                          valuation=date(2027, 3, 1))
    assert faults == []
    assert events_of(found)[0].occasion.nth == 4


def test_observation_today():
    """An observation on the valuation date takes the market's spot, which is said."""
    found, _ = dated(valuation=date(2027, 2, 16))
    assert found.moments[0].day.time == 0
    assert found.assumptions == ("the observation on 2027-02-16, the valuation date, uses the market's spot",)


def test_dates_before_the_start():
    """No date of a contract lies before its start."""
    _, faults = dated(contract=CONTRACT.replace("start: 2026-11-16", "start: 2027-03-01"))
    assert faults == ["2027-02-16 lies before the contract's start 2027-03-01"]
    late = CONTRACT.replace("start: 2026-11-16", "start: 2027-03-01")
    _, faults = dated(contract=late, valuation=date(2027, 2, 26))
    assert faults == ["2027-02-16 lies before the contract's start 2027-03-01"]


def test_unknown_holidays():
    """A list of holidays that nobody keeps is a fault with a near name."""
    _, faults = dated(contract=CONTRACT.replace("ECB", "XNYSE"))
    assert faults == ["there are no holidays 'XNYSE'; did you mean 'XNYS'?"]


def test_lists_for_each_date_have_its_length():
    """A list for each date of a schedule has as many entries as that; both counts are told, for every
    list."""
    _, faults = dated(
        terms="  barrier: {type: percent, per: observations}\n  paid_on: {type: dates, per: observations}\n",
        events="  - at: observations\n    pay: barrier\n    due: paid_on\n",
        more="  barrier: [100%, 95%, 90%]\n  paid_on: [2027-02-18, 2027-05-19]\n")
    assert faults == ["'barrier' has 3 numbers; 'observations' has 4 dates, 2027-02-16 to 2027-11-16",
                      "'paid_on' has 2 dates; 'observations' has 4 dates, 2027-02-16 to 2027-11-16"]


SEASONED = f"""\
{HEAD}  barrier: {{type: percent, per: observations}}
  early: {{type: dates}}
  late: {{type: date}}
events:
  - at: observations
    if: spot > barrier
    then: [pay: 1]
  - at: early
    until: late
    pay: 1
---
{CONTRACT}  barrier: 50%
  early: [2026-11-20, 2026-11-23, 2027-01-08]
  late: 2027-02-01
"""


@pytest.mark.parametrize(("old", "new", "place"), [
    ("barrier: 50%", "barrier: [50%, 40%]", "26:12"),  # a list that does not fit
    ("barrier: 50%", "barrier: 50", "26:12"),  # a term that cannot be read
    ("until: 2027-11-16", "until: 2027-11-20", "25:43"),  # a rule that does not end where it says
    ("\n  barrier: 50%", "", "25:3"),
])
def test_dates_are_judged_beside_other_faults(old: str, new: str, place: str):
    """What is wrong elsewhere in the contract is told, and past dates are no fault."""
    assert SEASONED.count(old) == 1
    assert places(SEASONED.replace(old, new)) == [place]


def test_dates_that_hang_on_what_cannot_be_read_are_not_judged():
    """Which dates are meant is not known while the term that narrows them is at fault."""
    assert places(SEASONED.replace("late: 2027-02-01", "late: soon")) == ["28:9"]
    assert places(SEASONED.replace("until: late", "from: late").replace("late: 2027-02-01", "late: x")) == ["28:9"]


def test_list_read_on_another_day():
    """A list for each date of a schedule cannot be read on a day that is none of them; one number can."""
    terms = "  barrier: {type: percent, per: observations}\n  final: {type: date}\n"
    events = "  - at: final\n    pay: barrier\n"
    _, faults = dated(terms=terms, events=events, more="  barrier: [1%, 2%, 3%, 4%]\n  final: 2027-11-17\n")
    assert faults == ["'barrier' has one value for each date of 'observations' and is read on 2027-11-17, "
                      "which is none of them (n.yaml:8:10)"]
    assert dated(terms=terms, events=events, more="  barrier: 4%\n  final: 2027-11-17\n")[1] == []
    assert dated(terms=terms, events=events,
                 more="  barrier: [1%, 2%, 3%, 4%]\n  final: observations.last\n")[1] == []


def test_events_that_never_happen_are_said():
    """An event whose `from` lies after its last date never happens, which is worth a warning."""
    found, faults = dated(terms="  first_call: {type: date}\n", more="  first_call: 2028-01-03\n",
                          events=PAY + "  - at: observations\n    from: first_call\n    name: called\n    "
                                       "if: spot > 1\n"
                                       "    then: [end]\n")
    assert faults == []
    assert found.warnings == ("'called' never happens: no date of 'observations' from 'first_call'",)


def test_nothing_ever_happens():
    """A contract none of whose events has a date is refused."""
    _, faults = dated(terms="  once_only: {type: date, optional: true}\n",
                      events="  - at: once_only\n    pay: 1\n")
    assert faults == ["nothing is ever observed or paid: no event has a date"]
