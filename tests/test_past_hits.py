"""Hits of the past: their day told by statements or fixings, or not told; what is owed of them, and what happens
between."""

from __future__ import annotations

from datetime import date
from math import exp
from pathlib import Path

import pytest
from front_door import written
from helpers import prepare
from seasoned import faults

import mcx as package

OWN = """payoff: own
assets: 1
terms: {barrier: {type: level}, watched: {type: watch}, seen: {type: dates}, maturity: {type: date}}
running:
  touched: {ever: spot >= barrier, at: watched}
  kept: {start: 0}
events:
EVENTS
---
contract: trade
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
settlement: 2 business days
calendar: {holidays: none, roll: following}
payoff: own
terms:
  barrier: 120
  watched: {continuous: [2026-12-01, 2027-06-01]}
  seen: [2027-02-01, 2027-02-15]
  maturity: 2027-06-15
happened: {touched: STATED}
---
market: 2027-03-03
rates: {EUR: 2%}
assets: {harbour: {spot: 100, currency: EUR, yield: 0%, vol: 20%}}
"""
WIDE = "{2027-01-20: false, 2027-02-18: true}"
COUPONS = """  - {at: seen, pay: 3, due: maturity}
  - {at: {once: touched}, if: barrier > 0, then: [{pay: 10}, end]}"""
MARKED = """  - {at: {once: touched}, set: {kept: 1}}
  - {at: seen, if: kept == 0, then: [{pay: 5, due: maturity}]}"""
TWO = """  - {at: {once: touched}, if: barrier > 0, then: [{pay: 10}, {pay: 7, due: maturity}]}"""
CALLED = """  - {at: seen, if: barrier > 150, then: [end]}
  - {at: {once: touched}, pay: 7, due: maturity}"""
YEARS = """  - {at: {once: touched}, if: years < 0.2, then: [{pay: 5, due: maturity}],
     else: [{pay: 2, due: maturity}, end]}"""


def on(day: str) -> str:
    """The statements that the hit came on a day of February 2027."""
    return f"{{2027-02-{int(day) - 1:02}: false, 2027-02-{day}: true}}"


def text(events: str, stated: str) -> str:
    return OWN.replace("EVENTS", events).replace("STATED", stated)


def test_what_is_sure_is_owed_where_the_day_is_not_known(tmp_path: Path):
    """Of two amounts of one hit the one is paid, on whichever day it came, and the other falls due at maturity."""
    for stated in (WIDE, on("18")):
        result = package.price(written(tmp_path, text(TWO, stated)), paths=64)
        assert [(each.date, each.amount) for each in result.owed] == [("2027-06-15", 7.0)]
        lag = (date(2027, 6, 15) - date(2027, 3, 3)).days
        assert result.price == pytest.approx(7.0 * exp(-0.02 * lag / 365), rel=1e-14)


@pytest.mark.parametrize(("events", "day", "owed"), [
    (COUPONS, "16", [3.0, 3.0]), (COUPONS, "15", [3.0]), (MARKED, "02", [5.0]), (MARKED, "16", [5.0, 5.0]),
    (YEARS, "02", [5.0]), (YEARS, "18", [2.0]), (CALLED, "02", [7.0]),
])
def test_a_day_that_decides_what_is_owed(tmp_path: Path, events: str, day: str, owed: list[float]):
    """It is asked for: coupons of dates before the hit that ends the contract are owed, an amount of a hit before a
    call is, and so on; on the day of the hit the hit is first."""
    result = package.price(written(tmp_path, text(events, on(day))), paths=64)
    assert [each.amount for each in result.owed] == owed
    (fault,) = faults(tmp_path, text(events, WIDE))
    assert "'touched' came true after 2027-01-20 and by 2027-02-18, and what is owed hangs on the day" in fault


def test_a_condition_of_terms_is_settled(tmp_path: Path):
    """The hit happened, and its end with it."""
    file = written(tmp_path, text(COUPONS, on("16")))
    assert package.price(file, paths=64).ended == "2027-02-16"
    assert ("2027-02-16", "yes") in [(each.date, each.happened) for each in package.readback(file).state.past]


@pytest.mark.parametrize(("last", "worth"), [("2027-06-02: true", 1.0), ("2027-06-02: false", 0.0)])
def test_what_is_stated_after_a_watch_holds_of_its_end(tmp_path: Path, last: str, worth: float):
    """Nothing changes after it: true on a later day says that it turned on the last day at the latest."""
    later = text("  - {at: {once: touched}, pay: 1}", f"{{2027-05-31: false, {last}}}")
    result = package.price(written(tmp_path, later.replace("market: 2027-03-03", "market: 2027-06-02")), paths=64)
    assert result.price == pytest.approx(worth * exp(-0.02 / 365), rel=1e-14)
    assert [each.observed for each in result.owed] == ["2027-06-01"] * int(worth)


TOUCH = """contract: touch
currency: EUR
units: 1
assets: [harbour]
start: 2026-12-01
settlement: 2 business days
calendar: {holidays: none, roll: following}
payoff: touch_at_hit
terms: {direction: up, barrier: 120, cash: 5, watched: WATCHED}
---
market: 2027-03-03
rates: {EUR: 2%}
assets: {harbour: {spot: 100, currency: EUR, yield: 0%, vol: 20%}}
"""
ALWAYS = TOUCH.replace("WATCHED", "{continuous: [2026-12-01, 2027-06-01]}")
NOT_YET = "happened: {touched: {2027-03-02: false}}\n---"
TODAY = "fixings: {harbour: {2027-03-03: LEVEL}}\n"


def test_a_touch_lives_until_its_cash_is_paid(tmp_path: Path):
    """As one watched at closes does: on the day after the hit the settlement is a day away."""
    watched = ALWAYS.replace("---", "happened: {touched: {2027-03-01: false, 2027-03-02: true}}\n---")
    closes = TOUCH.replace("WATCHED", "[2027-03-02, 2027-06-01]") + "fixings: {harbour: {2027-03-02: 121}}\n"
    for text in (watched, closes):
        result = package.price(written(tmp_path, text), paths=64)
        assert result.expected_life == pytest.approx(1 / 365, rel=1e-12)


def test_a_sure_touch_to_come_lives_until_its_cash_is_paid(tmp_path: Path):
    """A touch all but sure on the first day after the valuation date, a Wednesday: paid two business days later."""
    near = ALWAYS.replace("---", NOT_YET).replace("spot: 100", "spot: 119.9999999").replace("2027-06-01", "2027-03-04")
    assert package.price(written(tmp_path, near), paths=64).expected_life == pytest.approx(5 / 365, rel=1e-6)


@pytest.mark.parametrize(("happened", "more", "paid"), [
    (NOT_YET, "", [("until 2027-06-03", "payment (if it is due)")]),
    ("happened: {touched: {2027-03-01: false, 2027-03-02: true}}\n---", "", [("2027-03-04", "payment (owed)")]),
    (NOT_YET, TODAY.replace("LEVEL", "121"), [("2027-03-05", "payment (owed)")]),
])
def test_the_calendar_lists_what_a_hit_may_pay(tmp_path: Path, happened: str, more: str, paid: list[tuple[str, str]]):
    """Until the last day on which it may fall due; once it came, on its day."""
    found = package.readback(written(tmp_path, ALWAYS.replace("---", happened) + more), calendar=True)
    assert [(each.date, each.of) for each in found.lines if each.kind == "payment"] == paid


def test_the_calendar_lists_what_a_hit_may_pay_on_a_date(tmp_path: Path):
    """An amount with a date of its own is due on it; a second one of the same hit, long paid, is not listed again."""
    found = package.readback(written(tmp_path, text(TWO, "{2027-03-02: false}")), calendar=True)
    assert [(each.date, each.of) for each in found.lines if each.kind == "payment"] == [
        ("until 2027-06-03", "payment (if it is due)"), ("2027-06-15", "payment (if it is due)")]
    found = package.readback(written(tmp_path, text(TWO, WIDE)), calendar=True)
    (paid,) = (each for each in found.lines if each.kind == "payment")
    assert (paid.date, paid.of) == ("2027-06-15", "payment (owed)")


@pytest.mark.parametrize(("today", "factor", "paid"), [
    (110, 1, "2027-05-05"), (121, 1, "2027-03-05"), (55, 2, "2027-05-05")])
def test_given_levels_go_on_from_the_fixing_of_the_valuation_date(tmp_path: Path, today: int, factor: int, paid: str):
    """It is a level like those of the file, in which it need not stand; adjusted as those are."""
    levels = tmp_path / "levels.yaml"
    levels.write_text(f"harbour: {{2027-05-03: {122 // factor}, 2027-06-01: {90 // factor}}}\n")
    adjusted = f"adjustments: {{harbour: {{2027-03-01: {factor}}}}}\n" if factor > 1 else ""
    case = ALWAYS.replace("---", adjusted + NOT_YET) + TODAY.replace("LEVEL", str(today))
    found = package.readback(written(tmp_path, case), path=levels).path
    assert [(each.date, each.amount) for each in found.payments] == [(paid, 5.0)]


HIT = """contract: hit
currency: EUR
units: 1
assets: [harbour]
start: START
settlement: 2 business days
calendar: {holidays: none, roll: following}
payoff: barrier
terms:
  side: call
  direction: down
  knock: out
  strike: 100
  barrier: 80
  watched: {continuous: [START, 2027-12-01]}
  expiry: 2027-12-01
  rebate_at_hit: 5
---
market: 2027-06-01
rates: {EUR: 2%}
assets: {harbour: {spot: 100, currency: EUR, yield: 0%, vol: 20%}}
"""


def test_hits_of_a_watch_that_has_begun():
    """Not hit so far, it is worth what one is that begins today, to the last digit."""
    fresh = HIT.replace("START", "2027-06-01")
    begun = HIT.replace("START", "2026-12-01").replace("---", "happened: {touched: {2027-06-01: false}}\n---")
    one, other = (prepare(text).price(1 << 12, 7) for text in (fresh, begun))
    assert (one.mean, one.error) == (other.mean, other.error)


def hit(happened: str, more: str = "", today: str = "2027-06-01") -> str:
    text = HIT.replace("START", "2026-12-01").replace("market: 2027-06-01", f"market: {today}")
    return text.replace("---", f"happened: {{touched: {happened}}}\n---") + more


@pytest.mark.parametrize(("happened", "more", "day", "due"), [
    ("{2027-05-31: false, 2027-06-01: true}", "", "2027-06-01", "2027-06-03"),
    ("{2027-05-30: false, 2027-05-31: true}", "", "2027-05-31", "2027-06-02"),
    ("{2027-05-27: false, 2027-05-28: true}", "", "2027-05-28", "2027-06-01"),  # a Friday; paid today
    ("{2027-05-31: false}", "fixings: {harbour: {2027-06-01: 79}}\n", "2027-06-01", "2027-06-03"),
    ("{2027-05-28: false, 2027-05-31: true}", "fixings: {harbour: {2027-05-31: 79}}\n", None, None),  # or the weekend
])
def test_what_is_owed_after_a_hit_of_the_past(tmp_path: Path, happened: str, more: str, day: str | None, due: str):
    """The amount, discounted from its payment, while the settlement lag runs; the day must be told by statements or
    fixings, and nothing else is left of the knock-out."""
    if day is None:
        (fault,) = faults(tmp_path, hit(happened, more))
        assert "'touched' came true after 2027-05-28 and by 2027-05-31" in fault
        assert "'happened: {touched: {2027-05-30: false, 2027-05-31: true}}'" in fault
        return
    result = package.price(written(tmp_path, hit(happened, more)), paths=64)
    lag = (date.fromisoformat(due) - date(2027, 6, 1)).days
    assert result.price == pytest.approx(5.0 * exp(-0.02 * lag / 365), rel=1e-14) and result.standard_error == 0.0
    assert [(each.observed, each.date, each.amount) for each in result.owed] == [(day, due, 5.0)]
    past = package.readback(tmp_path / "case.yaml").state.past
    assert [(each.date, each.happened) for each in past] == [(day, "yes")]


def test_a_hit_of_long_ago_owes_nothing(tmp_path: Path):
    """On whichever day it came: all is paid, and of the contract nothing is left."""
    result = package.price(written(tmp_path, hit("{2027-02-27: false, 2027-03-31: true}")), paths=64)
    assert (result.price, result.standard_error, result.owed) == (0.0, 0.0, ())
    (past,) = package.readback(tmp_path / "case.yaml").state.past
    assert past.date == "2027-02-28 to 2027-03-31"


def test_a_touch_of_the_past_has_ended(tmp_path: Path):
    """Its cash is owed, and then it is worth nothing."""
    text = hit("{2027-05-30: false, 2027-05-31: true}").replace("payoff: barrier", "payoff: touch_at_hit")
    for line in ("  side: call\n", "  knock: out\n", "  strike: 100\n", "  expiry: 2027-12-01\n"):
        text = text.replace(line, "")
    text = text.replace("rebate_at_hit: 5", "cash: 5")
    result = package.price(written(tmp_path, text), paths=64)
    assert (result.ended, result.price) == ("2027-05-31", pytest.approx(5.0 * exp(-0.02 / 365), rel=1e-14))
    later = package.price(written(tmp_path, text.replace("market: 2027-06-01", "market: 2027-06-07")), paths=64)
    assert (later.ended, later.price) == ("2027-05-31", 0.0)
